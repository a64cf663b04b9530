"""Small structure files, and an empty library to put them in."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from phaseid.library import Library
from tests.library.rock_salts import rock_salt


@pytest.fixture
def write_cif(tmp_path: Path) -> Callable[..., Path]:
    """Write rock_salt(...) to a file in tmp_path and return its path."""

    def write(file: str, formula: str, a_A: float | None = None, **facts: str) -> Path:
        path = tmp_path / file
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(rock_salt(formula, a_A, **facts), encoding="utf-8")
        return path

    return write


@pytest.fixture
def library(tmp_path: Path) -> Iterator[Library]:
    """An empty library."""
    with Library.create(tmp_path / "mine.sqlite") as made:
        yield made
