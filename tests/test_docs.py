"""Every example in README.md and the guide is replayed against the starter library.

An example is a fenced block whose lines begin `$ phaseid …`, each followed by what it prints on
standard output. A line `…` stands for any lines left out, `…` within a line for any characters, and
the last digit of a decimal may differ by two: machines round differently.
`python tests/test_docs.py --rewrite` writes what is printed today into the pages.
"""

from __future__ import annotations

import contextlib
import io
import os
import re
import shlex
import shutil
import sys
import tempfile
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
PAGES = [ROOT / "README.md", *sorted((ROOT / "phaseid" / "guide").glob("*.md"))]
BLOCK = re.compile(r"^```\w*\n(\$ phaseid .*?)^```$", re.MULTILINE | re.DOTALL)
DECIMAL = re.compile(r"\d+\.\d+")
LAST_DIGIT = 2
PROMPT, LEFT_OUT = "$ ", "…"


def _examples(block: str) -> list[tuple[str, list[str]]]:
    """Split a block into (command, printed lines)."""
    found: list[tuple[str, list[str]]] = []
    for line in block.splitlines():
        if line.startswith(PROMPT):
            found.append((line.removeprefix(PROMPT), []))
        else:
            found[-1][1].append(line)
    return [(command, _trimmed(printed)) for command, printed in found]


def _trimmed(lines: list[str]) -> list[str]:
    return "\n".join(lines).rstrip().splitlines()


@contextlib.contextmanager
def _place(library: Path) -> Iterator[None]:
    """Work in a folder of its own that sees data/, on a copy of the library."""
    before = Path.cwd()
    kept = {name: os.environ.get(name) for name in ("PHASEID_LIBRARY", "PHASEID_CONFIG", "COLUMNS")}
    with tempfile.TemporaryDirectory() as folder:
        shutil.copy(library, Path(folder) / "library.sqlite")
        shutil.copytree(ROOT / "data" / "demo", Path(folder) / "data" / "demo")
        shutil.copytree(ROOT / "data" / "starter", Path(folder) / "data" / "starter")
        os.environ |= {
            "PHASEID_LIBRARY": "library.sqlite",
            "PHASEID_CONFIG": "config.toml",
            "COLUMNS": "80",
        }
        os.chdir(folder)
        try:
            yield
        finally:
            os.chdir(before)
            for name, value in kept.items():
                if value is None:
                    del os.environ[name]
                else:
                    os.environ[name] = value


def _replay(command: str) -> list[str]:
    from phaseid.cli.main import run

    program, *words = shlex.split(command)
    assert program == "phaseid"
    out, err = io.StringIO(), io.StringIO()
    with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
        try:
            run(words)
        except SystemExit as end:
            code = end.code
    assert not code, f"{command}: exit code {code}\n{err.getvalue()}"
    return _trimmed(out.getvalue().splitlines())


def _agrees(expected: list[str], printed: list[str]) -> bool:
    if not expected:
        return not printed
    if expected[0] == LEFT_OUT:
        return any(_agrees(expected[1:], printed[start:]) for start in range(len(printed) + 1))
    return bool(printed) and _alike(expected[0], printed[0]) and _agrees(expected[1:], printed[1:])


def _alike(expected: str, printed: str) -> bool:
    if LEFT_OUT in expected:
        pattern = ".*".join(re.escape(part) for part in expected.split(LEFT_OUT))
        return re.fullmatch(pattern, printed) is not None
    if DECIMAL.sub("#", expected) != DECIMAL.sub("#", printed):
        return False
    pairs = zip(DECIMAL.findall(expected), DECIMAL.findall(printed), strict=True)
    return all(_near(one, other) for one, other in pairs)


def _near(one: str, other: str) -> bool:
    digits = len(one.split(".")[1])
    return len(other.split(".")[1]) == digits and (
        abs(round((float(one) - float(other)) * 10**digits)) <= LAST_DIGIT
    )


def _number_of_examples(page: Path) -> int:
    return page.read_text(encoding="utf-8").count(f"\n{PROMPT}phaseid ")


@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.name)
def test_the_examples_print_what_the_page_says(page: Path, starter_library_path: Path) -> None:
    blocks = BLOCK.findall(page.read_text(encoding="utf-8"))
    examples = [example for block in blocks for example in _examples(block)]
    assert len(examples) == _number_of_examples(page), "an example stands outside a fenced block"
    with _place(starter_library_path):
        for command, expected in examples:
            printed = _replay(command)
            assert _agrees(expected, printed), f"$ {command}\n" + "\n".join(printed)


def test_the_readme_shows_every_command() -> None:
    from phaseid.cli.main import app

    text = PAGES[0].read_text(encoding="utf-8")
    names = [c.name for c in app.registered_commands] + [g.name for g in app.registered_groups]
    assert [name for name in names if f"\n{PROMPT}phaseid {name}" not in text] == []


@pytest.mark.parametrize(
    ("expected", "printed", "agrees"),
    [
        (["a", "b"], ["a", "b"], True),
        (["a", "b"], ["a"], False),
        (["a", LEFT_OUT, "d"], ["a", "b", "c", "d"], True),
        (["a", LEFT_OUT, "d"], ["a", "d"], True),
        (["a", LEFT_OUT, "d"], ["a", "b", "c"], False),
        (["a", LEFT_OUT], ["b", "c"], False),
        ([LEFT_OUT, "b", LEFT_OUT, "d"], ["a", "b", "c", "d"], True),
        (["digest …"], ["digest 12ab"], True),
        (["digest …"], ["phases 12"], False),
        (["p 0.77"], ["p 0.75"], True),
        (["p 0.77"], ["p 0.74"], False),
        (["d 2.3380"], ["d 2.3383"], False),
        (["d 2.338"], ["d 2.3380"], False),
        (["1 1 1"], ["1 1 2"], False),
    ],
)
def test_a_page_agrees_with_what_is_printed(
    expected: list[str], printed: list[str], agrees: bool
) -> None:
    assert _agrees(expected, printed) is agrees


def _rewritten(expected: list[str], printed: list[str]) -> list[str]:
    """Return what a page should say now: the same where that still agrees.

    Gaps stay, with as many lines before and after them.
    """
    if _agrees(expected, printed):
        return expected
    if LEFT_OUT in expected:
        before = expected.index(LEFT_OUT)
        after = len(expected) - 1 - before
        tail = printed[len(printed) - after :] if after else []
        return [
            *_rewritten(expected[:before], printed[:before]),
            LEFT_OUT,
            *_rewritten(expected[before + 1 :], tail),
        ]
    gaps = {line for line in expected if LEFT_OUT in line}
    return [next((gap for gap in gaps if _alike(gap, line)), line) for line in printed]


def _rewrite(page: Path, library: Path) -> None:
    def fresh(match: re.Match[str]) -> str:
        parts = []
        for command, expected in _examples(match[1]):
            shown = _rewritten(expected, _replay(command))
            parts.append("\n".join([PROMPT + command, *shown]))
        return "```\n" + "\n\n".join(parts) + "\n```"

    text = page.read_text(encoding="utf-8")
    with _place(library):
        page.write_text(BLOCK.sub(fresh, text), encoding="utf-8")


if __name__ == "__main__":
    if sys.argv[1:] != ["--rewrite"]:
        sys.exit("usage: python tests/test_docs.py --rewrite")
    from phaseid.library import build_starter

    with tempfile.TemporaryDirectory() as place:
        starter = Path(place) / "starter.sqlite"
        build_starter(starter)
        for each in PAGES:
            _rewrite(each, starter)
