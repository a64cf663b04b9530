"""What was measured on an image or a profile, and the ring list it makes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from phaseid.errors import InputError
from phaseid.probes.numbers import plain_number
from phaseid.rings.measuring.disc import Disc
from phaseid.rings.measuring.geometry import Floats, Geometry
from phaseid.rings.reading import rings_from_table
from phaseid.rings.ringlist import RingList
from phaseid.rings.table import RingTable, parse_table


@dataclass(frozen=True, slots=True)
class MeasuredRing:
    """A ring or a peak of a profile; all sigmas are one standard deviation.

    `position` is in the unit of the measurement's column; `width` is the full width at half
    maximum in that unit; `intensity` the area of the azimuthal mean (counts per unit length of ring
    × unit of position), `total` that of the whole ring (None for a profile). `spottiness` is the
    relative standard deviation of the intensity along the ring beyond counting noise, `arcs` that
    of its part that changes smoothly, `coverage` the share of the circle seen (None for a profile).
    `along` is the intensity in equal sectors from the direction of x towards y, its mean 1, NaN
    where the ring is not seen. `note` says what is unusual.
    """

    position: float
    sigma: float
    width: float
    width_sigma: float
    intensity: float
    intensity_sigma: float
    total: float | None = None
    spottiness: float | None = None
    arcs: float | None = None
    coverage: float | None = None
    note: str = ""
    along: tuple[float, ...] = ()


@dataclass(frozen=True, slots=True, eq=False)
class Measurement:
    """Rings found, by rising position, with what they were found on.

    `column` is the position column of the ring list. `curve` (n, 4) holds position, mean, median
    (equal to the mean for a profile) and fitted background. `limit` is the smallest intensity that
    would have been found at the median background. `halos` are positions of broad rings of
    amorphous matter. `masked` is the share of the image left out. `metadata` goes to the list.
    `disc` is the image about its centre, None for a profile.
    """

    source: str
    column: str
    rings: tuple[MeasuredRing, ...]
    curve: Floats
    limit: float
    halos: tuple[float, ...] = ()
    geometry: Geometry | None = None
    shape: tuple[int, int] | None = None
    masked: float = 0.0
    remarks: tuple[str, ...] = ()
    metadata: Mapping[str, str] = field(default_factory=dict)
    disc: Disc | None = None

    def ring_list_text(self) -> str:
        """The text of the ring list file, whole even where a probe or a constant is missing."""
        lines = [f"# {key}: {value}" for key, value in self.metadata.items()]
        lines.append(f"# measured from: {' '.join(self.source.split())}")
        if self.geometry is not None:
            g = self.geometry
            spread = np.sqrt(np.diag(g.covariance))
            lines.append(
                f"# centre px: x = {g.x:.3f} +- {spread[0]:.3f}, y = {g.y:.3f} +- {spread[1]:.3f}"
            )
            if g.ellipse_known:
                lines.append(
                    f"# ellipse corrected: axes ratio {g.ratio:.5f} +- {g.ratio_sigma:.5f}, "
                    f"long axis at {g.angle_deg:.1f} +- {g.angle_sigma_deg:.1f} degrees"
                )
        strongest = max((ring.intensity for ring in self.rings), default=0.0)
        if strongest > 0:
            share = 100.0 * self.limit / strongest
            lines.append(f"# detection limit: {plain_number(round(share, 4))}")
        lines += [f"# amorphous halo: about {halo:.4g}" for halo in self.halos]
        uneven = any(ring.spottiness is not None for ring in self.rings)
        lines.append(f"{self.column},sigma,intensity,{'spottiness,arcs,' * uneven}note")
        for ring in self.rings:
            level = 100.0 * ring.intensity / strongest
            note = f'"{ring.note}"' if "," in ring.note else ring.note
            scatter = f"{ring.spottiness or 0:.3f},{ring.arcs or 0:.3f}," if uneven else ""
            lines.append(f"{ring.position:.5f},{ring.sigma:.5f},{level:.3f},{scatter}{note}")
        return "\n".join(lines) + "\n"

    def ring_table(self) -> RingTable:
        """The cells of the ring list, with the picture of the image and the curve."""
        table = parse_table(self.ring_list_text(), self.source)
        table.disc = self.disc
        position, mean, _, background = self.curve.T
        table.curve = np.stack([position, mean - background], axis=1)
        return table

    def ring_list(
        self,
        *,
        probe: str | None = None,
        scale_uncertainty: str | None = None,
        camera_constant: str | None = None,
    ) -> RingList:
        """The ring list; raises InputError where no probe or camera constant is known."""
        return rings_from_table(
            self.ring_table(),
            probe=probe,
            scale_uncertainty=scale_uncertainty,
            camera_constant=camera_constant,
        )


def no_rings(source: str, why: str) -> InputError:
    """The error for a file on which no ring was found."""
    return InputError(
        f"no rings were found: {why}",
        path=source,
        remedy="Rings need a longer exposure or a finer-grained area; rings that are seen by eye "
        "can be typed into a ring list ('phaseid guide rings').",
    )
