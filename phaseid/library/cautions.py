"""Safety sentences for a material, from the rules in data/cautions.toml."""

from __future__ import annotations

import tomllib
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache

from phaseid.library.formulas import element_key, formula_keys, name_key
from phaseid.resources import data_path


@dataclass(frozen=True, slots=True)
class _Rule:
    caution: str
    elements: frozenset[str]
    with_all: frozenset[str]
    formulas: frozenset[str]
    space_groups: frozenset[int]
    names: tuple[str, ...]

    def fits(self, words: str, formula: str, elements: frozenset[str], space_group: int) -> bool:
        return (
            (not self.elements or bool(self.elements & elements))
            and self.with_all <= elements
            and (not self.formulas or formula in self.formulas)
            and (not self.space_groups or space_group in self.space_groups)
            and (not self.names or any(name in words for name in self.names))
        )


@cache
def _rules() -> tuple[_Rule, ...]:
    with data_path("cautions.toml").open("rb") as file:
        held = tomllib.load(file)["rule"]
    return tuple(
        _Rule(
            caution=rule["caution"],
            elements=frozenset(rule.get("elements", ())),
            with_all=frozenset(rule.get("with", ())),
            formulas=frozenset(formula_keys(f)[0] for f in rule.get("formula", ())),
            space_groups=frozenset(rule.get("space_group", ())),
            names=tuple(name_key(name) for name in rule.get("name", ())),
        )
        for rule in held
    )


def cautions_for(
    name: str, formula_key: str, elements: Sequence[str], space_group_number: int
) -> tuple[str, ...]:
    """Return the safety sentences for a phase, each once, in the order of the rules.

    `formula_key` is its `composition_key`. The sentences remind of usual practice and never replace
    local codes.
    """
    words, held = name_key(name), frozenset(map(element_key, elements))
    fitting = (
        rule.caution for rule in _rules() if rule.fits(words, formula_key, held, space_group_number)
    )
    return tuple(dict.fromkeys(fitting))
