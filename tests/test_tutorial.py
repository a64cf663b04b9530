"""The tutorial of the manual is executed, statement by statement, against the starter library."""

from __future__ import annotations

import doctest
import shutil
from pathlib import Path

import pytest

import phaseid

PAGE = Path(phaseid.__file__).parent / "guide" / "python.md"
DATA = Path(__file__).resolve().parent.parent / "data" / "demo"
SAME = doctest.ELLIPSIS | doctest.NORMALIZE_WHITESPACE


def test_the_tutorial_prints_what_it_says(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, starter_library_path: Path
) -> None:
    shutil.copytree(DATA, tmp_path / "data" / "demo")
    monkeypatch.chdir(tmp_path)
    monkeypatch.setenv("PHASEID_LIBRARY", str(starter_library_path))
    result = doctest.testfile(str(PAGE), module_relative=False, optionflags=SAME)
    assert result.attempted > 20
    assert result.failed == 0
