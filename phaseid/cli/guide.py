"""`phaseid guide`: the manual, page by page, without a network."""

from __future__ import annotations

from difflib import get_close_matches
from importlib.resources import files
from typing import Annotated

import typer

from phaseid.cli.options import Json
from phaseid.errors import InputError

SCHEMA = "phaseid.guide/1"

PAGES = {
    "rings": "how to write down what was measured",
    "probes": "electrons, X-rays, neutrons: what each shows",
    "chemistry": "saying which elements can be there",
    "answer": "reading the answer, and how sure is sure",
    "report": "pictures, and a page to keep and send",
    "library": "the structures searched, and how to add your own",
    "tables": "the library file for plain SQL",
    "measure": "rings from an image, peaks from a profile",
    "series": "many patterns: what comes and goes",
    "calibrate": "scaling an instrument by a standard",
    "screen": "what should not be there; telling two phases apart",
    "python": "the same from a notebook, and records for data frames",
    "settings": "defaults, environment, completion",
}


def guide(
    topic: Annotated[
        str | None,
        typer.Argument(
            help=f"One of: {', '.join(PAGES)}.",
            autocompletion=lambda incomplete: [t for t in PAGES if t.startswith(incomplete)],
        ),
    ] = None,
    as_json: Json = False,
) -> None:
    """Show a page of the manual; without a topic, the list of pages.

    \b
    phaseid guide rings
    """
    if topic is not None and topic not in PAGES:
        close = get_close_matches(topic, PAGES, n=1)
        hint = f"Did you mean '{close[0]}'? " if close else ""
        raise InputError(
            f"no page of the manual is called '{topic}'",
            remedy=f"{hint}There are: {', '.join(PAGES)}",
        )
    if as_json:
        import json

        shown = PAGES if topic is None else {topic: PAGES[topic]}
        pages = [{"topic": name, "about": about} for name, about in shown.items()]
        if topic is not None:
            pages[0]["text"] = page(topic)
        print(json.dumps({"schema": SCHEMA, "pages": pages}, indent=2))
        return
    if topic is None:
        print("The manual. Show a page with `phaseid guide TOPIC`:\n")
        for name, about in PAGES.items():
            print(f"  {name:<10} {about}")
        return
    print(page(topic), end="")


def page(topic: str) -> str:
    """Return the Markdown text of one page."""
    return files("phaseid").joinpath("guide", f"{topic}.md").read_text(encoding="utf-8")
