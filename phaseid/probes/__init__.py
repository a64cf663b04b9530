"""What made the pattern: electrons, X-rays or neutrons, and the intensity each shows."""

from phaseid.probes.numbers import parse_relative
from phaseid.probes.parsing import parse_probe
from phaseid.probes.probe import Geometry, Kind, Probe, Quantity, ghost_d_A
from phaseid.probes.two_beam import blackman_ratio, two_beam_weights

__all__ = [
    "Geometry",
    "Kind",
    "Probe",
    "Quantity",
    "blackman_ratio",
    "ghost_d_A",
    "parse_probe",
    "parse_relative",
    "two_beam_weights",
]
