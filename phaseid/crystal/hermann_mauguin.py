"""Space-group symbols as people write them -> the groups of the table that they can mean."""

from __future__ import annotations

import re
from functools import lru_cache

import gemmi

from phaseid.crystal.spglib_questions import full_symbols

_MAX_LENGTH = 80
_ORIGIN_WORDS = re.compile(r"origin\s*(?:choice|no\.?)?\s*([12])", re.IGNORECASE)
_REMARK = re.compile(r"\{[^}]*\}|\([^)]*[^)\d][^)]*\)")
_RING_DIGITS = re.compile(r"\((\d+)\)")
_SUFFIX = re.compile(r"^(.*\S)(?:\s*:\s*|\s+)([12]|[HR]|[SZ]|HR)$", re.IGNORECASE)
# S and Z mark the two origin choices, H and HR hexagonal axes in older files (common practice)
_SUFFIX_MEANING = {"1": "1", "2": "2", "S": "1", "Z": "2", "H": "H", "HR": "H", "R": "R"}


def short_symbol(group: gemmi.SpaceGroup) -> str:
    """Return the short symbol, with the setting where it is not the standard one ("R-3m:R")."""
    name = str(group.short_name())
    if group.hm.startswith("R") and name.startswith("H"):
        name = "R" + name[1:]
    extension = group.ext.strip("\0 ")
    return f"{name}:{extension}" if extension and not group.is_reference_setting() else name


def groups_named(symbol: str, setting: str = "") -> tuple[list[gemmi.SpaceGroup], bool]:
    """Return the groups a Hermann-Mauguin symbol can mean, likeliest first; is the symbol exact?

    A symbol of a group with two origin choices or two kinds of axes means both, unless the symbol
    (":2", "origin choice 1", "H") or `setting` ("1", "2", "h", "r") says which. Monoclinic symbols
    such as "P 2/m" mean every axis choice that they fit. Exact means found without respelling.
    """
    plain = " ".join(symbol.split())[:_MAX_LENGTH]
    extension = setting.strip().upper()
    words = _ORIGIN_WORDS.search(plain)
    if words:
        extension = words.group(1)
    bare = _REMARK.sub(" ", plain).strip()
    found = [] if ":" in bare else _lookup(bare)
    suffix = None if found else _SUFFIX.match(bare)
    if suffix:
        extension = _SUFFIX_MEANING[suffix.group(2).upper()]
        found = _lookup(suffix.group(1))
    if extension:
        found = [g for g in found if g.ext.strip("\0 ") in ("", extension)] or found
    known = _squeeze(plain.replace(":", "")) in _spellings(found)
    exact = known or gemmi.find_spacegroup_by_name(plain) is not None
    return found, exact


def _lookup(symbol: str) -> list[gemmi.SpaceGroup]:
    spelled = _RING_DIGITS.sub(r"\1", symbol).replace("_", "").replace("~", "")
    key = _squeeze(spelled)
    found = _table().get(key)
    if found is None:
        group = gemmi.find_spacegroup_by_name(spelled)  # old spellings such as "F d 3 m"
        if group is not None:
            found = _table().get(_squeeze(group.hm))
    if found is None:
        found = _full_symbols().get(key)
    return list(found or [])


def _spellings(groups: list[gemmi.SpaceGroup]) -> set[str]:
    return {
        _squeeze(name.replace(":", ""))
        for g in groups
        for name in (g.hm, g.xhm(), g.short_name(), short_symbol(g))
    }


def _squeeze(symbol: str) -> str:
    return "".join(symbol.split()).lower()


@lru_cache(maxsize=1)
def _table() -> dict[str, list[gemmi.SpaceGroup]]:
    """Every spelling of every tabulated setting: unique axis b, origin 2, axes H come first."""
    table: dict[str, list[gemmi.SpaceGroup]] = {}
    rows = sorted(
        gemmi.spacegroup_table(),
        key=lambda g: (
            g.monoclinic_unique_axis() in ("a", "c"),
            not g.is_reference_setting(),
            g.number,
        ),
    )
    for group in rows:
        names = {group.hm, group.xhm(), group.xhm().replace(":", ""), short_symbol(group)}
        names.add(str(group.short_name()))
        if group.crystal_system() == gemmi.CrystalSystem.Monoclinic:
            names.add(" ".join(part for part in group.hm.split() if part != "1"))
        for name in {_squeeze(name) for name in names}:
            groups = table.setdefault(name, [])
            if group not in groups:
                groups.append(group)
    return table


@lru_cache(maxsize=1)
def _full_symbols() -> dict[str, list[gemmi.SpaceGroup]]:
    """Full symbols such as "F 41/d -3 2/m", by way of spglib's list of Hall symbols."""
    table: dict[str, list[gemmi.SpaceGroup]] = {}
    for hall, symbol in full_symbols():
        group = gemmi.find_spacegroup_by_ops(gemmi.symops_from_hall(hall))
        if group:
            table.setdefault(_squeeze(symbol.replace("_", "")), []).append(group)
    for groups in table.values():
        groups.sort(key=lambda g: not g.is_reference_setting())
    return table
