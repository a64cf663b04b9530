"""The guide's page on the library file: its SQL gives what it shows, its columns are there."""

from __future__ import annotations

import re
import sqlite3
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path

import pytest

from phaseid.cli.guide import page

PAGE = page("tables")
QUERY = re.compile(r"```sql\n(.*?)```\n\n```\n(.*?)```", re.DOTALL)
QUERIES = QUERY.findall(PAGE)


@pytest.fixture
def file(starter_library_path: Path) -> Iterator[sqlite3.Connection]:
    with closing(sqlite3.connect(f"{starter_library_path.as_uri()}?mode=ro", uri=True)) as conn:
        yield conn


def test_three_questions_are_answered() -> None:
    assert len(QUERIES) == 3


@pytest.mark.parametrize(("query", "printed"), QUERIES)
def test_the_answers_are_those_shown(file: sqlite3.Connection, query: str, printed: str) -> None:
    rows = file.execute(query).fetchall()
    assert ["|".join(map(str, row)) for row in rows] == printed.splitlines()


def test_every_column_of_a_phase_is_told(file: sqlite3.Connection) -> None:
    columns = {row[1] for row in file.execute("PRAGMA table_info(phase)")}
    section = PAGE.partition("## phase")[2].partition("## The others")[0]
    assert set(re.findall(r"`([a-zA-Z_0-9]+)`", section)) & columns == columns


def test_every_table_is_told(file: sqlite3.Connection) -> None:
    names = file.execute(
        "SELECT name FROM sqlite_master WHERE type IN ('table', 'view') "
        "AND name NOT LIKE 'sqlite%' AND name NOT LIKE 'label_fts%' AND name <> 'ungrouped'"
    )
    told = set(re.findall(r"`(\w+)`", PAGE)) | {"phase"}
    assert {name for (name,) in names} <= told
