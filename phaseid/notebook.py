"""What the commands do, as functions for a notebook.

Rings may be given as the path of a ring list, image or profile, as a `RingList`, or as numbers;
a phase by its id, formula, name, source number or CIF file; a library as it is open, by its path,
or not at all: then the default in force. Options are those of the commands; library, probe and
calibration have the same defaults from the environment and the configuration file, chemistry is
only what is given. Results are `Tidy`: they show themselves as a table, and `records()` are rows
for a data frame.
"""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from phaseid.notebook_input import (
    chemistry_of,
    found_phase,
    opened,
    ring_lists_of,
    words_of,
)

if TYPE_CHECKING:
    from phaseid.crystal.crystal import Crystal
    from phaseid.library import Phase
    from phaseid.matching.calibrate import Calibration
    from phaseid.matching.chemistry import Chemistry
    from phaseid.matching.compare import Comparison
    from phaseid.matching.identification import Identification
    from phaseid.matching.near import NearLine
    from phaseid.matching.ratio import RatioMatch
    from phaseid.matching.records import Rows
    from phaseid.matching.screen import Screening
    from phaseid.matching.series_answer import Series
    from phaseid.matching.series_axis import Along
    from phaseid.notebook_input import Given, Shelf, Typed
    from phaseid.reports.lines import LineList
    from phaseid.rings import RingTable
    from phaseid.rings.measuring import Measurement


def identify(
    patterns: Given,
    library: Shelf = None,
    *,
    chemistry: Chemistry | None = None,
    must: str | None = None,
    only: str | None = None,
    exclude: str | None = None,
    max_phases: int = 3,
    top: int = 5,
    **reading: Any,
) -> Identification:
    """Rank phases and mixtures for one or several patterns of the same specimen.

    `must`, `only`, `exclude` are element lists such as "Al,O", or `chemistry` holds all three.
    `reading` (probe, scale_uncertainty, camera_constant, calibration, unit, sigma, intensities)
    says how to read rings, over what a file states. Raises InputError and LibraryError as the
    command would.
    """
    from phaseid.matching.identify import identify as rank

    lists = ring_lists_of(patterns, reading)
    known = chemistry_of(chemistry, must, only, exclude)
    with opened(library) as shelf:
        return rank(lists, shelf, chemistry=known, max_phases=max_phases, top=top)


def series(
    patterns: str | os.PathLike[str] | Sequence[Any],
    library: Shelf = None,
    *,
    chemistry: Chemistry | None = None,
    must: str | None = None,
    only: str | None = None,
    exclude: str | None = None,
    max_phases: int = 3,
    along: Along = "auto",
    persistence: float | None = None,
    workers: int = 1,
    **reading: Any,
) -> Series:
    """Identify a series: a folder, or the patterns in their order, each as `identify` takes one.

    See `phaseid.matching.series.identify_series`; a pattern that cannot be read raises InputError.
    """
    from phaseid.cli.series import files_of
    from phaseid.matching.series import identify_series

    several = files_of([Path(patterns)]) if isinstance(patterns, str | os.PathLike) else patterns
    lists = [rings for one in several for rings in ring_lists_of(one, reading)]
    known = chemistry_of(chemistry, must, only, exclude)
    with opened(library) as shelf:
        return identify_series(
            lists,
            shelf,
            chemistry=known,
            max_phases=max_phases,
            along=along,
            persistence=persistence,
            workers=workers,
        )


def calibrate(
    rings: Typed,
    standard: str,
    library: Shelf = None,
    *,
    across: Typed | None = None,
    camera_length_mm: float | None = None,
    temperature_C: float | None = None,
    probe: str | None = None,
    camera_constant: str | None = None,
    scale_uncertainty: str | float | None = None,
    unit: str = "d_A",
    sigma: str | float | None = None,
    save: str | None = None,
) -> Calibration:
    """Find an instrument's constant from the rings of a standard; `save` keeps it under a name.

    Rings are numbers or a path: radii need no camera constant here.
    """
    from phaseid.cli.phases import find_standard
    from phaseid.cli.ring_input import ring_table
    from phaseid.cli.settings import calibration_folder
    from phaseid.matching.calibrate import calibrate as fit
    from phaseid.matching.calibrate import record
    from phaseid.rings.calibration_record import save_calibration

    def table(given: Typed) -> RingTable:
        return ring_table(words_of(given), unit=unit, sigma=None if sigma is None else str(sigma))

    result = fit(
        table(rings),
        find_standard(standard, temperature_C, lambda text: found_phase(text, library)),
        probe=probe,
        camera_constant=camera_constant,
        scale_uncertainty=scale_uncertainty,
        across=None if across is None else table(across),
        camera_length_mm=camera_length_mm,
        temperature_C=temperature_C,
    )
    if save is not None:
        save_calibration(record(result, save), calibration_folder())
    return result


def lines(
    phase: str,
    library: Shelf = None,
    *,
    probe: str = "x-ray Cu Ka",
    d_min_A: float | None = None,
    thickness_nm: float | None = None,
) -> LineList:
    """The lines of a phase as a probe shows them; `thickness_nm` corrects electron intensities."""
    from phaseid.crystal.lines import compute_lines
    from phaseid.probes import parse_probe
    from phaseid.reports.lines import LineList
    from phaseid.units import A_PER_NM

    beam = parse_probe(probe)
    entry, crystal = found_phase(phase, library)
    return LineList(
        phase=entry,
        probe=beam,
        lines=compute_lines(crystal, d_min_A=d_min_A, xray_energy_eV=beam.xray_energy_eV),
        thickness_A=None if thickness_nm is None else thickness_nm * A_PER_NM,
    )


def near(
    spacings_A: Sequence[float] | float,
    library: Shelf = None,
    *,
    tolerance: str | float = "1%",
    probe: str = "x-ray Cu Ka",
    min_intensity: float = 10.0,
    must: str | None = None,
    only: str | None = None,
    exclude: str | None = None,
) -> Rows[NearLine]:
    """The lines near given spacings (Å), of the phases that meet most of them first."""
    from phaseid.matching.near import near_lines
    from phaseid.matching.records import Rows
    from phaseid.probes import parse_probe, parse_relative

    wanted = [spacings_A] if isinstance(spacings_A, int | float) else list(spacings_A)
    with opened(library) as shelf:
        return Rows(
            near_lines(
                [float(d) for d in wanted],
                shelf,
                parse_probe(probe),
                tolerance=parse_relative(str(tolerance), "tolerance"),
                min_intensity=min_intensity,
                chemistry=chemistry_of(None, must, only, exclude),
            )
        )


def ratio(
    values: Sequence[float], *, tolerance: str | float = "1%", spacings: bool | None = None
) -> Rows[RatioMatch]:
    """The structure types whose rings stand in these ratios; falling numbers are spacings."""
    from phaseid.matching.ratio import as_radii, match_types
    from phaseid.matching.records import Rows
    from phaseid.probes import parse_relative

    radii, are_spacings = as_radii([float(value) for value in values], spacings)
    allowed = parse_relative(str(tolerance), "tolerance")
    return Rows(match_types(radii, tolerance=allowed, spacings=are_spacings))


def compare(
    first: str,
    second: str,
    library: Shelf = None,
    *,
    probe: str = "electron 200 kV",
    scale_uncertainty: str | float | None = None,
    sigma: str | float | None = None,
    d_range_A: tuple[float | None, float | None] = (None, None),
) -> Comparison:
    """Whether two phases can be told apart by rings; `sigma` of reading a ring, relative to d."""
    from phaseid.matching.compare import compare as judge
    from phaseid.probes import parse_probe, parse_relative

    scale = None if scale_uncertainty is None else parse_relative(str(scale_uncertainty))
    reading = None if sigma is None else f"{100 * parse_relative(str(sigma), 'sigma')!r}%"
    return judge(
        found_phase(first, library),
        found_phase(second, library),
        parse_probe(probe, scale_sigma=scale),
        sigma=reading,
        d_range_A=d_range_A,
    )


def screen(
    patterns: Given,
    expect: str | Sequence[str],
    library: Shelf = None,
    *,
    watch: Sequence[str | os.PathLike[str]] = (),
    only_mine: bool = False,
    weakest: str | float | None = None,
    **reading: Any,
) -> Screening:
    """Hold one or several patterns of a specimen against the phases that should be there.

    `watch` are files of phases to look for besides the shipped lists, `only_mine` instead of them;
    `weakest` the weakest ring that would have been listed, of the strongest. `reading` as for
    `identify`.
    """
    from phaseid.cli.phases import find_in
    from phaseid.matching.screen import screen as hold
    from phaseid.matching.watch import watch_lists
    from phaseid.probes import parse_relative

    lists = ring_lists_of(patterns, reading)
    watched = watch_lists([Path(path) for path in watch], shipped=not only_mine)
    limit = None if weakest is None else parse_relative(str(weakest), "weakest")
    with opened(library) as shelf:

        def find(text: str) -> tuple[Phase, Crystal]:
            return find_in(shelf, text)

        expected = [find(text) for text in ([expect] if isinstance(expect, str) else expect)]
        return hold(lists, shelf, expected, watched, find, weakest=limit)


def measure(
    path: str | os.PathLike[str], *, probe: str | None = None, unit: str | None = None
) -> Measurement:
    """Find the rings of an image or the peaks of a profile; `ring_list()` of it goes on."""
    from phaseid.cli.measure import find_rings

    return find_rings(Path(path), probe=probe, unit=unit)


def find(text: str, library: Shelf = None) -> list[Phase]:
    """The phases of the library that a name, formula or number may mean, the nearest first."""
    with opened(library) as shelf:
        return list(shelf.find(text))
