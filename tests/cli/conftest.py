"""`phaseid(...)` runs the command line in this process and returns its exit code and words."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any, NamedTuple

import jsonschema
import pytest

import phaseid as package
from phaseid.cli.main import run


class Outcome(NamedTuple):
    """What a command left behind."""

    code: int
    out: str
    err: str

    def json(self, schema: str) -> Any:
        """Return standard output as JSON, held against the published layout."""
        assert self.code == 0, self.err
        value = json.loads(self.out)
        layout = Path(package.__file__).parent / "schemas" / f"{schema}.json"
        jsonschema.Draft202012Validator(json.loads(layout.read_text("utf-8"))).validate(value)
        return value


Command = Callable[..., Outcome]


@pytest.fixture
def phaseid(
    capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
    starter_library_path: Path,
) -> Command:
    monkeypatch.setenv("PHASEID_LIBRARY", str(starter_library_path))
    monkeypatch.setenv("COLUMNS", "80")

    def command(*words: str) -> Outcome:
        capsys.readouterr()
        with pytest.raises(SystemExit) as end:
            run(list(words))
        out, err = capsys.readouterr()
        code = end.value.code
        assert code is None or isinstance(code, int)
        return Outcome(code or 0, out, err)

    return command
