"""The way in: help, version, exit codes, and how errors end."""

from __future__ import annotations

import os
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest

import phaseid as package
from phaseid.__main__ import start
from phaseid.cli import lines, options
from phaseid.cli.guide import PAGES, page

COMMANDS = [
    *("identify", "lines", "near", "ratio", "screen", "compare", "calibrate"),
    *("library", "config", "guide"),
]


def _shell(*words: str, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "phaseid", *words],
        capture_output=True,
        text=True,
        env={**os.environ, **environment},
        check=False,
    )


def test_version_answers_at_once() -> None:
    start = time.perf_counter()
    done = _shell("--version")
    assert time.perf_counter() - start < 2.0  # 0.2 s on a quiet machine
    assert (done.returncode, done.stdout) == (0, f"phaseid {package.__version__}\n")


def test_alone_it_gives_three_examples(phaseid) -> None:
    done = phaseid()
    assert done.code == 0
    assert done.out.count("\n  phaseid ") == 3
    assert "phaseid guide" in done.out
    assert max(len(line) for line in done.out.splitlines()) <= 60


@pytest.mark.parametrize("flag", ["-h", "--help"])
def test_help_lists_the_commands(phaseid, flag: str) -> None:
    done = phaseid(flag)
    assert done.code == 0
    assert all(f"\n  {command} " in done.out for command in COMMANDS)


@pytest.mark.parametrize(
    "command", [*(c for c in COMMANDS if c != "library"), "library add", "library info"]
)
def test_help_of_a_command_has_an_example(phaseid, command: str) -> None:
    done = phaseid(*command.split(), "--help")
    assert done.code == 0
    assert f"phaseid {command}" in done.out.split("Usage:")[1].split("\n", 1)[1]


@pytest.mark.parametrize("words", [("frobnicate",), ("identify",), ("lines", "Al", "--d-min", "x")])
def test_wrong_usage_is_exit_code_2(phaseid, words: tuple[str, ...]) -> None:
    done = phaseid(*words)
    assert done.code == 2
    assert done.out == ""
    assert "Usage: phaseid" in done.err


def test_an_error_on_purpose_is_one_message(phaseid) -> None:
    done = phaseid("lines", "unobtainium")
    assert done.code == 2
    assert done.out == ""
    assert "unobtainium" in done.err
    assert "Traceback" not in done.err


@pytest.mark.parametrize("command", [["lines", "Al"], ["near", "2.3"], ["library", "info"]])
def test_a_missing_library_is_exit_code_3(phaseid, tmp_path: Path, command: list[str]) -> None:
    done = phaseid(*command, "--library", str(tmp_path / "none.sqlite"))
    assert done.code == 3
    assert "none.sqlite" in done.err


def test_a_library_that_may_not_be_read_is_exit_code_3(
    phaseid, tmp_path: Path, starter_library_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    mine = tmp_path / "mine.sqlite"
    mine.write_bytes(starter_library_path.read_bytes())
    opened = Path.open

    def refuse(self: Path, *args: Any, **kwargs: Any) -> Any:
        if self == mine:  # permissions do not stop an administrator, who may run these tests
            raise PermissionError(13, "Permission denied")
        return opened(self, *args, **kwargs)

    monkeypatch.setattr(Path, "open", refuse)
    monkeypatch.setattr("os.access", lambda *_args, **_kwargs: False)
    done = phaseid("near", "2", "--library", str(mine))
    assert done.code == 3
    assert "permission denied" in done.err


def test_a_message_cannot_steer_the_terminal(phaseid, tmp_path: Path) -> None:
    done = phaseid("identify", str(tmp_path / "a\x1b[2J\u202eb.csv"))
    assert done.code == 2
    assert "a?[2J?b.csv: cannot be read" in done.err


def test_a_file_that_is_no_library_is_exit_code_3(phaseid, tmp_path: Path) -> None:
    other = tmp_path / "notes.txt"
    other.write_text("not a database, only words\n" * 100)
    assert phaseid("lines", "Al", "--library", str(other)).code == 3


def test_interruption_is_exit_code_130(phaseid, monkeypatch: pytest.MonkeyPatch) -> None:
    def interrupt(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(lines, "find_crystal", interrupt)
    assert phaseid("lines", "Al").code == 130


def test_interruption_while_loading_is_exit_code_130(monkeypatch: pytest.MonkeyPatch) -> None:
    class Interrupting:
        def find_spec(self, name: str, *_: Any) -> None:
            if name == "phaseid.cli.main":
                raise KeyboardInterrupt

    monkeypatch.delitem(sys.modules, "phaseid.cli.main")
    monkeypatch.setattr(sys, "meta_path", [Interrupting(), *sys.meta_path])
    with pytest.raises(SystemExit) as end:
        start()
    assert end.value.code == 130


def test_a_slip_of_ours_is_one_line(phaseid, monkeypatch: pytest.MonkeyPatch) -> None:
    def break_down(*_: object) -> None:
        raise ZeroDivisionError("a\nb")

    monkeypatch.setattr(lines, "find_crystal", break_down)
    done = phaseid("lines", "Al")
    assert done.code == 1
    assert done.err.count("\n") == 1
    assert "--debug" in done.err


@pytest.mark.parametrize(
    "words", [("--debug", "lines", "nowhere"), ("lines", "nowhere", "--debug")]
)
def test_debug_shows_the_way_to_an_error(
    words: tuple[str, ...], starter_library_path: Path
) -> None:
    done = _shell(*words, PHASEID_LIBRARY=str(starter_library_path))
    assert done.returncode != 0
    assert "Traceback" in done.stderr
    assert "InputError" in done.stderr


def test_a_closed_pipe_is_a_quiet_end(starter_library_path: Path) -> None:
    with subprocess.Popen(
        [sys.executable, "-m", "phaseid", "guide", "rings"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        env={**os.environ, "PHASEID_LIBRARY": str(starter_library_path)},
    ) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        assert process.stderr.read() == b""
        assert process.wait() == 0


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="this system has no /dev/full")
def test_an_answer_that_cannot_be_written_is_told() -> None:
    with Path("/dev/full").open("w") as full:
        done = subprocess.run(
            [sys.executable, "-m", "phaseid", "guide", "rings"],
            stdout=full,
            stderr=subprocess.PIPE,
            text=True,
            check=False,
        )
    assert done.returncode == 1
    assert done.stderr == (
        "phaseid: the answer could not be written, the disk is full. Free some space.\n"
    )


def test_closed_standard_output_is_a_quiet_end() -> None:
    command = f"exec {sys.executable} -m phaseid guide rings >&-"
    done = subprocess.run(["sh", "-c", command], capture_output=True, text=True, check=False)
    assert (done.returncode, done.stderr) == (0, "")


def test_a_terminal_without_our_letters_still_gets_an_answer(starter_library_path: Path) -> None:
    done = _shell(
        "lines", "Al", PHASEID_LIBRARY=str(starter_library_path), PYTHONIOENCODING="ascii"
    )
    assert done.returncode == 0
    assert "2.338" in done.stdout


def test_bold_only_where_it_is_welcome(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys.stdout, "isatty", lambda: True, raising=False)
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.delenv("NO_COLOR", raising=False)
    assert options.bold()
    monkeypatch.setenv("NO_COLOR", "1")
    assert not options.bold()
    monkeypatch.delenv("NO_COLOR")
    monkeypatch.setenv("TERM", "dumb")
    assert not options.bold()
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.setattr(sys.stdout, "isatty", lambda: False, raising=False)
    assert not options.bold()


def test_the_guide_lists_its_pages(phaseid) -> None:
    done = phaseid("guide")
    assert done.code == 0
    assert all(f"\n  {topic} " in done.out for topic in PAGES)


@pytest.mark.parametrize("topic", PAGES)
def test_a_page_of_the_guide_fits_a_narrow_terminal(phaseid, topic: str) -> None:
    done = phaseid("guide", topic)
    assert (done.code, done.out) == (0, page(topic))
    prose = done.out.split("```")[::2]
    assert max(len(line) for part in prose for line in part.splitlines()) <= 72


def test_every_page_that_exists_is_listed() -> None:
    folder = Path(package.__file__).parent / "guide"
    assert {path.stem for path in folder.glob("*.md")} == set(PAGES)


def test_the_guide_as_json(phaseid) -> None:
    value = phaseid("guide", "--json").json("guide-1")
    assert "series" in [page["topic"] for page in value["pages"]]
    (page,) = phaseid("guide", "series", "--json").json("guide-1")["pages"]
    assert page["text"].startswith("# Series")


def test_words_fit_a_narrow_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    for columns, expected in ((20, 40), (40, 40), (72, 72), (200, 100)):
        monkeypatch.setenv("COLUMNS", str(columns))
        assert options.width() == expected


def test_an_unknown_page_is_told_the_others(phaseid) -> None:
    done = phaseid("guide", "astrology")
    assert done.code == 2
    assert "rings, probes" in done.err
