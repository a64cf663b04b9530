"""The JSON answer keeps the published layout and contradicts itself nowhere."""

from __future__ import annotations

import copy
import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import jsonschema
import numpy as np
import pytest

import phaseid
from phaseid.matching.identification import Identification
from phaseid.reports.json import dumps, identification_dict

SCHEMAS = Path(phaseid.__file__).parent / "schemas"


def _check(name: str, value: Any) -> None:
    schema = json.loads((SCHEMAS / f"{name}.json").read_text(encoding="utf-8"))
    jsonschema.Draft202012Validator(schema).validate(value)


@pytest.mark.parametrize("path", sorted(SCHEMAS.glob("*.json")), ids=lambda path: path.stem)
def test_a_published_layout_is_a_valid_schema(path: Path) -> None:
    schema = json.loads(path.read_text(encoding="utf-8"))
    jsonschema.Draft202012Validator.check_schema(schema)
    assert schema["$id"] == f"urn:phaseid:{path.stem}"


def test_the_answer_validates(answer: Identification) -> None:
    _check("identification-1", json.loads(dumps(identification_dict(answer))))


def test_the_answer_keeps_its_numbers(answer: Identification) -> None:
    value = json.loads(dumps(identification_dict(answer)))
    best = value["hypotheses"][0]
    assert value["schema"] == "phaseid.identification/1"
    assert best["probability"] == 0.94
    assert best["assignments"][1]["hkl"] == [1, 1, 1]
    assert best["phases"][0]["indistinguishable"][0]["phase_id"] == "Ag-cccc"
    assert best["phases"][0]["space_group"] == {"number": 225, "symbol": "Fm-3m"}
    assert best["phases"][0]["source"]["file"] == "al.cif"
    assert best["phases"][1]["share"] is None
    assert value["patterns"][0]["rings"][4]["intensity"] is None
    assert value["library"] == {
        "path": "/data/starter.sqlite",
        "phases": 120,
        "digest": "0123456789abcdef",
    }


def _drop(*path: str | int) -> Callable[[Any], None]:
    def spoil(value: Any) -> None:
        for key in path[:-1]:
            value = value[key]
        del value[path[-1]]

    return spoil


def _set(new: Any, *path: str | int) -> Callable[[Any], None]:
    def spoil(value: Any) -> None:
        for key in path[:-1]:
            value = value[key]
        value[path[-1]] = new

    return spoil


@pytest.mark.parametrize(
    "spoil",
    [
        _drop("verdict"),
        _drop("hypotheses", 0, "phases", 0, "source"),
        _drop("hypotheses", 0, "assignments", 0, "hkl"),
        _set("maybe", "verdict"),
        _set(1.2, "hypotheses", 0, "probability"),
        _set([1, 1], "hypotheses", 0, "assignments", 0, "hkl"),
        _set(None, "patterns", 0, "rings", 0, "d_A"),
        _set(231, "hypotheses", 0, "phases", 0, "space_group", "number"),
        _set("x", "hypotheses", 0, "phases", 0, "unheard_of"),
        _set([], "hypotheses", 0, "phases"),
    ],
)
def test_the_layout_catches_mistakes(answer: Identification, spoil: Callable[[Any], None]) -> None:
    value = copy.deepcopy(json.loads(dumps(identification_dict(answer))))
    spoil(value)
    with pytest.raises(jsonschema.ValidationError):
        _check("identification-1", value)


def test_json_holds_no_nan_and_no_infinity(answer: Identification) -> None:
    certain = replace(answer.hypotheses[0], probability=0.97, log_odds=float("inf"))
    sure = replace(answer, hypotheses=(certain,))
    text = dumps(identification_dict(sure))
    assert "NaN" not in text
    assert "Infinity" not in text
    assert isinstance(json.loads(text)["hypotheses"][0]["log_odds"], float)
    numbers = {"a": np.float64("nan"), "b": np.arange(2), "c": (1, np.int64(2))}
    assert json.loads(dumps(numbers)) == {"a": None, "b": [0, 1], "c": [1, 2]}


def test_probabilities_above_one_are_refused(answer: Identification) -> None:
    with pytest.raises(RuntimeError, match="sum to"):
        identification_dict(replace(answer, unlisted_probability=0.5))


def test_a_lost_ring_is_refused(answer: Identification) -> None:
    best = replace(answer.hypotheses[0], unexplained=())
    with pytest.raises(RuntimeError, match="loses or invents"):
        identification_dict(replace(answer, hypotheses=(best,)))


def test_a_ring_explained_and_denied_is_refused(answer: Identification) -> None:
    best = answer.hypotheses[0]
    twice = replace(best, unexplained=(*best.unexplained, replace(best.unexplained[0], ring=0)))
    with pytest.raises(RuntimeError, match="denies"):
        identification_dict(replace(answer, hypotheses=(twice,)))


def test_an_index_that_points_nowhere_is_refused(answer: Identification) -> None:
    best = answer.hypotheses[0]
    lost = replace(best, missing=(replace(best.missing[0], phase=2),))
    with pytest.raises(RuntimeError, match="no such phase"):
        identification_dict(replace(answer, hypotheses=(lost,)))
