"""The structures that come with phaseid, and the library built from them."""

from __future__ import annotations

import gzip
import json
import shutil
from collections import Counter
from collections.abc import Iterator
from dataclasses import replace
from itertools import islice
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from phaseid.crystal.composition import cell_contents
from phaseid.crystal.crystal import Crystal, Finding, Site, Source
from phaseid.crystal.lines import compute_lines
from phaseid.crystal.metric import volume_A3
from phaseid.library import Library, build_starter, default_library_path, open_default
from phaseid.library.prototypes import (
    MARKS,
    plain_name,
    plain_reference,
    prototype_crystals,
    prototype_file,
    read_reviews,
)
from phaseid.library.quality import FACTORS, quality
from phaseid.library.starter import starter_crystals
from phaseid.resources import data_path


@pytest.fixture(scope="module")
def given() -> list[dict[str, Any]]:
    """pymatgen's file of prototypes, as it stands."""
    entries: list[dict[str, Any]] = json.loads(gzip.decompress(prototype_file().read_bytes()))
    return entries


@pytest.fixture(scope="module")
def unreviewed() -> list[Crystal]:
    """Every prototype, whatever the review says of it."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("phaseid.library.prototypes.read_reviews", lambda _: {})
        return list(prototype_crystals())


def test_every_prototype_keeps_its_composition_and_density(
    given: list[dict[str, Any]], unreviewed: list[Crystal]
) -> None:
    assert len(unreviewed) == len(given) == 288
    for entry, crystal in zip(given, unreviewed, strict=True):
        symbols = Counter(site["species"][0]["element"] for site in entry["snl"]["sites"])
        contents = cell_contents(crystal)
        cells = sum(contents.values()) / sum(symbols.values())
        assert cells == pytest.approx(round(cells)), crystal.source.id  # 1, 2, 3 or 4 primitive
        assert contents == pytest.approx({el: n * cells for el, n in symbols.items()})
        volume = abs(np.linalg.det(entry["snl"]["lattice"]["matrix"]))
        assert volume_A3(crystal.cell) == pytest.approx(volume * cells, rel=1e-6)


@pytest.mark.parametrize("start", range(0, 288, 24))
def test_the_conventional_cell_diffracts_like_the_bare_atoms(
    given: list[dict[str, Any]], unreviewed: list[Crystal], start: int
) -> None:
    # the same atoms, listed one by one in the cell of the file and without any symmetry
    crystal, entry = unreviewed[start], given[start]
    lattice = np.array(entry["snl"]["lattice"]["matrix"])
    bare = Crystal(
        cell=_cell(lattice),
        space_group_number=1,
        space_group_symbol="P1",
        operations=("x,y,z",),
        sites=tuple(
            Site(f"{i}", site["species"][0]["element"], 0, tuple(site["abc"]), 1.0)
            for i, site in enumerate(entry["snl"]["sites"])
        ),
        name="",
        formula="",
        z=1.0,
        source=Source("", "", ""),
    )
    got, wanted = (compute_lines(c, d_min_A=1.2) for c in (crystal, bare))
    cells = got.volume_A3 / wanted.volume_A3
    bins = np.append(np.arange(1.2, 12, 0.004), 1e9)
    for name in ("f2_xray", "f2_neutron"):
        seen = [
            np.histogram(lines.d_A, bins, weights=lines.multiplicity * getattr(lines, name) / n)[0]
            for lines, n in ((got, cells**2), (wanted, 1.0))
        ]
        # a line may fall on either side of an edge of the bins: compare running sums at gaps
        sums = [np.cumsum(one) for one in seen]
        empty = (seen[0] == 0) & (seen[1] == 0)
        assert empty.sum() > 50
        np.testing.assert_allclose(
            sums[0][empty], sums[1][empty], rtol=2e-3, atol=2e-3 * sums[1][-1]
        )


def _cell(lattice: np.ndarray[Any, Any]) -> tuple[float, float, float, float, float, float]:
    lengths = np.linalg.norm(lattice, axis=1)
    angles = [
        float(np.degrees(np.arccos(lattice[i] @ lattice[j] / lengths[i] / lengths[j])))
        for i, j in ((1, 2), (2, 0), (0, 1))
    ]
    a, b, c = map(float, lengths)
    return (a, b, c, angles[0], angles[1], angles[2])


def test_names_and_references_are_plain_text() -> None:
    assert plain_name("Lavarevi\\'{c}ite") == "Lavarevicite"
    assert plain_name("None") == ""
    bibtex = (
        '@article{reference0,\n    author = "P. Auvray and F. Genet",\n'
        '    title = "  Affinement ... $\\alpha$-HgS",\n    journal = " Bulletin",\n'
        '    volume = "96",\n    year = "1973",\n    page_first = "218"\n}\n\n@article{Mehl2017,\n'
        '  year = "2017"\n}'
    )
    assert plain_reference(bibtex) == "P. Auvray; F. Genet, Bulletin 96, 218 (1973)"


def test_a_review_leaves_out_renames_and_marks(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, unreviewed: list[Crystal]
) -> None:
    path = tmp_path / "aflow_review.toml"
    path.write_text(
        '[[entry]]\nindex = 0\ntag = "AB_hP6_154_a_b"\nformula = "HgS"\nname = "cinnabar"\n'
        'use = false\nreason = "y"\n'
        '[[entry]]\nindex = 1\ntag = "AB2_tI6_139_a_e"\nformula = "MoSi2"\nname = "Mine"\n'
        'use = true\nmark = "high_pressure"\n',
        encoding="utf-8",
    )
    reviews = read_reviews(path)
    monkeypatch.setattr("phaseid.library.prototypes.read_reviews", lambda _: reviews)
    kept = list(prototype_crystals())
    assert len(kept) == 287
    (mine,) = (crystal for crystal in kept if crystal.name == "Mine")
    assert mine.formula == "MoSi2"
    assert [finding.code for finding in mine.findings] == ["high_pressure"]
    changed = {"AB_hP6_154_a_b", "AB2_tI6_139_a_e"}
    assert [crystal for crystal in kept if crystal is not mine] == [
        crystal for crystal in unreviewed if crystal.source.id not in changed
    ]


def test_every_prototype_is_reviewed(given: list[dict[str, Any]]) -> None:
    reviews = read_reviews(data_path("starter", "aflow_review.toml"))
    tags = Counter(entry["tags"]["aflow"] for entry in given)
    assert Counter(tag for tag, _ in reviews) == tags
    assert all(review.mark in {"", *MARKS} for review in reviews.values())
    assert all(review.name for review in reviews.values() if review.use)


@pytest.fixture(scope="module")
def crystals() -> list[Crystal]:
    return list(starter_crystals())


def test_every_starter_structure_says_where_it_comes_from(crystals: list[Crystal]) -> None:
    assert all(crystal.source.database and crystal.source.id for crystal in crystals)
    assert all(crystal.source.reference for crystal in crystals)
    numbers = Counter((crystal.source.database, crystal.source.id) for crystal in crystals)
    assert [number for number, times in numbers.items() if times > 1] == []


def test_the_starter_library_holds_every_starter_structure(
    starter_library: Library, crystals: list[Crystal]
) -> None:
    facts = starter_library.info()
    assert facts["phases"] == len(crystals) == len(starter_library)
    assert facts["rejects"] == 0
    assert facts["digest"] == starter_library.digest
    databases = Counter(crystal.source.database for crystal in crystals)
    assert facts["sources"] == dict(databases)


def test_no_prototype_repeats_a_structure_of_ours(starter_library: Library) -> None:
    by_kind: dict[tuple[str, int], list[Any]] = {}
    for phase in starter_library.phases():
        by_kind.setdefault((phase.formula, phase.space_group_number), []).append(phase)
    for phases in by_kind.values():
        ours = [p for p in phases if p.source.database == "phaseid starter"]
        for other in (p for p in phases if p not in ours):
            for phase in ours:
                edges = np.array(sorted(phase.cell[:3])) / sorted(other.cell[:3])
                assert (abs(edges - 1) > 0.0099).any(), (phase, other)


def test_what_doubts_an_entry_lowers_its_quality(crystals: list[Crystal]) -> None:
    crystal = crystals[0]
    plain = quality(_with(crystal))
    assert plain == 1.0
    for code, factor in FACTORS.items():
        assert quality(_with(crystal, code)) == pytest.approx(max(factor, 0.05))
    assert quality(_with(crystal, "something_else")) == 1.0
    assert quality(_with(crystal, "hypothetical", "high_pressure", "theoretical")) == 0.05


def _with(crystal: Crystal, *codes: str) -> Crystal:
    return replace(crystal, findings=tuple(Finding(code, code) for code in codes))


def test_who_comes_second_uses_what_the_first_has_built(
    tmp_path: Path, starter_library_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "new" / "folder" / "lib.sqlite"
    monkeypatch.setenv("PHASEID_LIBRARY", str(path))

    def meanwhile() -> Iterator[Crystal]:
        shutil.copy(starter_library_path, path)  # another process ends its build first
        yield from islice(starter_crystals(), 3)

    monkeypatch.setattr("phaseid.library.starter.starter_crystals", meanwhile)
    said: list[str] = []
    with open_default(said.append) as library, Library.open(starter_library_path) as first:
        assert library.digest == first.digest
    assert path.read_bytes() == starter_library_path.read_bytes()
    # SQLite's own files beside a library that others read are no leftovers of the build
    names = {p.name.removesuffix("-wal").removesuffix("-shm") for p in path.parent.iterdir()}
    assert names == {"lib.sqlite"}
    assert str(path) in said[0]


def test_a_build_that_fails_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken() -> Iterator[Crystal]:
        yield next(starter_crystals())
        raise KeyboardInterrupt

    monkeypatch.setattr("phaseid.library.starter.starter_crystals", broken)
    with pytest.raises(KeyboardInterrupt):
        build_starter(tmp_path / "lib.sqlite")
    assert list(tmp_path.iterdir()) == []


def test_the_default_library_is_where_the_variable_says(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("PHASEID_LIBRARY", str(tmp_path / "here.sqlite"))
    assert default_library_path() == tmp_path / "here.sqlite"
    monkeypatch.delenv("PHASEID_LIBRARY")
    monkeypatch.setenv("XDG_DATA_HOME", str(tmp_path))
    assert default_library_path().name == "library.sqlite"
    assert "phaseid" in default_library_path().parts


def test_an_existing_default_library_is_left_alone(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "mine.sqlite"
    Library.create(path).close()
    monkeypatch.setenv("PHASEID_LIBRARY", str(path))
    said: list[str] = []
    with open_default(said.append) as library:
        assert (len(library), said) == (0, [])
