"""`phaseid guide`: the manual, page by page, without a network."""

from __future__ import annotations

from importlib.resources import files
from typing import Annotated

import typer

from phaseid.errors import InputError

PAGES = {
    "rings": "how to write down what was measured",
    "probes": "electrons, X-rays, neutrons: what each shows",
    "chemistry": "saying which elements can be there",
    "answer": "reading the answer, and how sure is sure",
    "report": "pictures, and a page to keep and send",
    "library": "the structures searched, and how to add your own",
    "measure": "rings from an image, peaks from a profile",
    "series": "many patterns: what comes and goes",
    "calibrate": "scaling an instrument by a standard",
    "screen": "what should not be there; telling two phases apart",
    "python": "the same from a notebook, and records for data frames",
    "settings": "defaults, environment, completion",
}


def guide(
    topic: Annotated[str | None, typer.Argument(help=f"One of: {', '.join(PAGES)}.")] = None,
) -> None:
    """Show a page of the manual; without a topic, the list of pages.

    \b
    phaseid guide rings
    """
    if topic is None:
        print("The manual. Show a page with `phaseid guide TOPIC`:\n")
        for name, about in PAGES.items():
            print(f"  {name:<10} {about}")
        return
    if topic not in PAGES:
        raise InputError(
            f"no page of the manual is called '{topic}'", remedy=f"There are: {', '.join(PAGES)}"
        )
    print(page(topic), end="")


def page(topic: str) -> str:
    """Return the Markdown text of one page."""
    return files("phaseid").joinpath("guide", f"{topic}.md").read_text(encoding="utf-8")
