"""An identification as one self-contained page: look at it, keep it, send it.

No network, no script but its own, readable with scripts off; names from files are text, never run.
"""

from __future__ import annotations

import base64
import hashlib
import json
import platform
from collections.abc import Sequence
from dataclasses import dataclass
from importlib.metadata import version
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING

from phaseid import __version__
from phaseid.matching.identification import Identification
from phaseid.reports.headline import doubts, headline, next_steps
from phaseid.reports.json import dumps, identification_dict
from phaseid.reports.page_answer import Drawing, answer_section
from phaseid.reports.page_choice import choice
from phaseid.reports.page_compare import side_by_side
from phaseid.reports.page_html import facts, items, prose, words
from phaseid.reports.picture_axis import AxisName, common_axis
from phaseid.reports.picture_style import DARK, LIGHT, palette_css, picture_css
from phaseid.reports.picture_svg import Store
from phaseid.reports.text import STANDING, TYPES_FIT, VERDICTS, cautions, remarks, types_that_fit

if TYPE_CHECKING:
    from phaseid.library import Library

LARGEST_BYTES = 900_000
"""Answers beyond the first are drawn as long as the page stays below this."""
MACHINE_BYTES = 400_000
SHOWN_RINGS, FEWEST_RINGS = 200, 20
"""Rings drawn and listed of all patterns together, and at least of each: the strongest."""


@dataclass(frozen=True, slots=True)
class Provenance:
    """How the answer came about: the command that gives it again, its settings, the time."""

    command: str
    made: str
    settings: tuple[tuple[str, str], ...] = ()


def page(
    answer: Identification,
    provenance: Provenance,
    *,
    axis: AxisName | None = None,
    library: Library | None = None,
) -> str:
    """Return the page as HTML text.

    `axis` is that of the sticks; without one, the axis nearest to how a pattern was measured. With
    the answer's `library`, lines of the answers that are too weak to be seen are drawn faintly.
    Raises InputError for an axis that a pattern does not have.
    """
    machine, held = _machine_copy(answer)
    store = Store()
    drawing = Drawing(
        axis=common_axis(answer.patterns, axis),
        library=library,
        store=store,
        rings=max(SHOWN_RINGS // len(answer.patterns), FEWEST_RINGS),
    )
    sections, drawn = _sections(answer, drawing, LARGEST_BYTES - len(machine))
    style, script = _style(), _resource("page.js")
    policy = (
        f"default-src 'none'; img-src data:; style-src '{_hash(style)}'; "
        f"script-src '{_hash(script)}'; base-uri 'none'; form-action 'none'"
    )
    title = words(f"{headline(answer).split('. ')[0]} · phaseid")
    return (
        '<!DOCTYPE html>\n<html lang="en"><head><meta charset="utf-8">'
        f'<meta http-equiv="Content-Security-Policy" content="{policy}">'
        '<meta name="viewport" content="width=device-width,initial-scale=1">'
        f'<meta name="generator" content="phaseid {__version__}">'
        f"<title>{title}</title><style>{style}</style></head><body>"
        f"{_images(store)}<header>{_head(answer)}</header><main>{choice(answer, drawn)}{sections}"
        f"{side_by_side(answer)}{_notes(answer)}</main>"
        f"<footer>{_origin(answer, provenance, held)}</footer>{machine}"
        f"<script>{script}</script></body></html>\n"
    )


def _images(store: Store) -> str:
    """What several pictures show, in an element of no size."""
    held = store.definitions()
    return f'<svg class="store" aria-hidden="true">{held}</svg>' if held else ""


def _resource(name: str) -> str:
    return files("phaseid").joinpath("reports", name).read_text(encoding="utf-8")


def _style() -> str:
    dark = f"@media (prefers-color-scheme:dark){{:root{{{palette_css(DARK)}}}}}"
    paper = f"@media print{{:root{{color-scheme:light;{palette_css(LIGHT)}}}}}"
    grounds = f":root{{{palette_css(LIGHT)}}}\n{dark}\n"
    return f"{grounds}{picture_css()}\n{_resource('page.css')}{paper}"


def _hash(text: str) -> str:
    digest = hashlib.sha256(text.encode()).digest()
    return f"sha256-{base64.b64encode(digest).decode()}"


def _machine_copy(answer: Identification) -> tuple[str, int]:
    """The JSON of the answer in its element, and how many hypotheses it holds.

    As many of these as there is room for; no element where not even one fits. No letter in it can
    end the element.
    """
    whole = json.loads(dumps(identification_dict(answer)))
    sizes = [len(_compact(one)) + 1 for one in whole["hypotheses"]]
    room = MACHINE_BYTES - len(_compact({**whole, "hypotheses": []}))
    held = next((k for k in range(len(sizes), -1, -1) if sum(sizes[:k]) <= room), 0)
    if room < 0 or (sizes and not held):
        return "", 0
    inner = _compact({**whole, "hypotheses": whole["hypotheses"][:held]})
    return f'<script type="application/json" id="identification">{inner}</script>', held


def _compact(value: object) -> str:
    text = json.dumps(value, separators=(",", ":"), allow_nan=False)
    return text.replace("&", "\\u0026").replace("<", "\\u003c").replace(">", "\\u003e")


def _head(answer: Identification) -> str:
    parts = [
        f"<h1>{words(headline(answer))}</h1>",
        f"<p>Verdict: {words(VERDICTS[answer.verdict])}.</p>",
        *(f'<p class="doubt">{words(doubt)}</p>' for doubt in doubts(answer)),
        *(
            f'<p class="care"><strong>Safety</strong> {prose(caution)}</p>'
            for caution in _first_cautions(answer)
        ),
        items("What to do next", next_steps(answer)),
    ]
    if answer.verdict == "no-match":
        parts.append(items(TYPES_FIT, types_that_fit(answer)))
    return "".join(parts)


def _sections(answer: Identification, drawing: Drawing, room: int) -> tuple[str, int]:
    """The answers in full while there is room, the first always; and how many these are."""
    if not answer.hypotheses:
        return answer_section(answer, None, drawing), 0
    parts: list[str] = []
    for hypothesis in answer.hypotheses:
        section = answer_section(answer, hypothesis, drawing)
        room -= len(section.encode())
        if parts and room < len(drawing.store.definitions()):
            break
        parts.append(section)
    return "".join(parts), len(parts)


def _notes(answer: Identification) -> str:
    told = cautions(answer)
    return (
        ("" if answer.verdict == "no-match" else items(TYPES_FIT, types_that_fit(answer)))
        + items("Remarks", remarks(answer))
        + ("" if told == _first_cautions(answer) else items("Safety", told))
    )


def _first_cautions(answer: Identification) -> list[str]:
    """What is dangerous about the first answer, unless it is none."""
    return [] if answer.verdict == "no-match" else cautions(answer, answers=1)


def _origin(answer: Identification, provenance: Provenance, held: int) -> str:
    library = answer.library
    pairs: Sequence[tuple[str, str]] = [
        ("made", provenance.made),
        ("phaseid", __version__),
        ("Python", platform.python_version()),
        *((name, version(name)) for name in ("numpy", "gemmi")),
        ("library", f"{library.phases} phases, {Path(library.path).name}"),
        ("library digest", library.digest),
        *provenance.settings,
    ]
    command = words(provenance.command)
    return (
        f"<h2>Where this comes from</h2>{facts(pairs)}"
        f"<p>The same answer again: <code>{command}</code></p>"
        f'<p class="quiet">{_held(len(answer.hypotheses), held)}</p>'
        f"<p>{words(STANDING)}</p>"
    )


def _held(answers: int, held: int) -> str:
    where = "in the script element “identification” (JSON, phaseid.identification/1)"
    if held == answers:
        return f"The whole answer for machines is inside this page, {where}."
    if held:
        return (
            f"The first {held} of {answers} answers for machines are inside this page, {where}; "
            "<code>phaseid identify --json</code> gives all."
        )
    return (
        "For machines this answer is too long to be kept in a page: "
        "<code>phaseid identify --json</code> gives it."
    )
