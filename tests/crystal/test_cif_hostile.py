"""No bytes make the reader raise; hostile ones end soon and in words."""

from __future__ import annotations

import time
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from phaseid.crystal.cif import CifReading, read_cif, read_cif_file
from phaseid.crystal.cif_text import MAX_BYTES

FILES = [
    path.read_bytes()
    for folder in ("cif", "bad")
    for path in sorted((Path(__file__).resolve().parent.parent / folder).glob("*.cif"))
]
HEAD = (
    b"data_x\n_cell_length_a 50\n_cell_length_b 50\n_cell_length_c 50\n_cell_angle_alpha 90\n"
    b"_cell_angle_beta 90\n_cell_angle_gamma 90\n_space_group_name_H-M_alt 'P 1'\n"
)
SMALL = HEAD.replace(b" 50\n", b" 5\n")
LOOP = b"loop_\n_atom_site_label\n_atom_site_fract_x\n_atom_site_fract_y\n_atom_site_fract_z\n"
RELAXED = settings(
    max_examples=150, deadline=None, suppress_health_check=[HealthCheck.too_slow], derandomize=True
)


def check(reading: CifReading) -> None:
    assert reading.crystals or reading.rejects
    assert all(reject.code and reject.reason for reject in reading.rejects)
    for crystal in reading.crystals:
        assert crystal.sites
        assert all(0 < site.occupancy < 1.5 for site in crystal.sites)


@RELAXED
@given(st.binary(max_size=400))
def test_any_bytes(data: bytes) -> None:
    check(read_cif(data, "any"))


@RELAXED
@given(st.text(max_size=300))
def test_any_text_after_a_header(text: str) -> None:
    check(read_cif(HEAD + text.encode("utf-8", "replace"), "any"))


@RELAXED
@given(st.sampled_from(FILES), st.data())
def test_any_damage_to_a_file(data: bytes, draw: st.DataObject) -> None:
    start = draw.draw(st.integers(0, len(data)))
    stop = draw.draw(st.integers(start, min(len(data), start + 30)))
    graft = draw.draw(st.one_of(st.binary(max_size=8), st.sampled_from(GRAFTS)))
    check(read_cif(data[:start] + graft + data[stop:], "damaged"))


GRAFTS = [
    b"?", b".", b"nan", b"inf", b"1e999", b"-1", b"0", b"9" * 400, b"3/0", b"\n;\n", b"'",
    b"loop_\n", b"data_y\n", b"_cell_length_a 0\n", b"-x,-y,-z\n", b"1e-300", b"\xff", b"\xc3\xa9",
    b"\x00",
]  # fmt: skip


@pytest.mark.parametrize(
    ("data", "code"),
    [
        (b"x" * (MAX_BYTES + 1), "too_large"),
        (b"data_" + b"x" * (MAX_BYTES - 10), "no_structure"),
        (b"data_a\n" * 200_000, "too_large"),
        (HEAD + LOOP + b"C1 .1 .2 .3\n" * 100_000, "too_many_sites"),
        (HEAD + LOOP + b"C1 .1 .2 .3\n" * 20_000, "overlapping_atoms"),
        (
            HEAD
            + b"loop_\n_symmetry_equiv_pos_as_xyz\n"
            + b"x,y,z\n" * 100_000
            + LOOP
            + b"C 0 0 0\n",
            "bad_symmetry",
        ),
        (
            HEAD + b"_chemical_formula_sum '" + b"(" * 100_000 + b"'\n" + LOOP + b"C 0 0 0\n",
            "absurd_cell",
        ),
        (b"\n" * 3_000_000, "not_cif"),
        (b"", "not_cif"),
    ],
    ids=[
        "size",
        "line",
        "blocks",
        "sites",
        "one place",
        "operations",
        "brackets",
        "blank",
        "empty",
    ],
)
def test_hostile_input_is_refused_soon(data: bytes, code: str) -> None:
    start = time.process_time()
    (reject,) = read_cif(data, "hostile").rejects
    assert reject.code == code
    assert time.process_time() - start < 5


def test_an_endless_file_is_not_read_to_its_end() -> None:
    if not Path("/dev/zero").exists():
        pytest.skip("no endless file on this system")
    (reject,) = read_cif_file("/dev/zero").rejects
    assert reject.code == "too_large"


@pytest.mark.parametrize(
    "part",
    [
        b"_publ_section_title 'T = " + b"1" * 200_000 + b"'\n",
        b"_publ_section_title 'P = " + b"1" * 200_000 + b"'\n",
        b"_cell_measurement_temperature " + b"1" * 200_000 + b"x\n",
        b"_chemical_name_mineral '" + b"<a" * 100_000 + b"'\n",
        b"_cell_formula_units_Z 1e300\n",
        b"_exptl_crystal_density_diffrn " + b"1" * 200_000 + b"(\n",
    ],
    ids=["title T", "title P", "temperature", "markup", "Z", "density"],
)
def test_a_long_value_takes_no_longer_than_it_is(part: bytes) -> None:
    """Each would take minutes if the time grew with the square of the length."""
    start = time.process_time()
    (crystal,) = read_cif(SMALL + part + LOOP + b"C1 .1 .2 .3\n", "hostile").crystals
    assert crystal.formula == "C"
    assert time.process_time() - start < 2


def test_what_is_kept_of_a_file_is_bounded() -> None:
    long = b"x" * 100_000
    text = (
        SMALL
        + b"_cod_database_code " + long + b"\n_journal_name_full " + long
        + b"\n_chemical_name_mineral " + long + b"\n_chemical_formula_sum 'C " + long + b"'\n"
        + LOOP + b"C" + long + b" .1 .2 .3\n"
    )  # fmt: skip
    (crystal,) = read_cif(text, "hostile").crystals
    assert len(repr(crystal)) < 5000
    (reject,) = read_cif(b"data_" + long + b"\n_a 1\n", "hostile").rejects
    assert len(reject.block) == 100
    (reject,) = read_cif(b"data_x\n_" + long + b"\n_" + long + b"\n", "hostile").rejects
    assert len(reject.reason) < 500


def test_utf16_with_null_characters_is_no_text() -> None:
    text = "data_x\n_chemical_name_mineral 'a\0b'\n".encode("utf-16")
    (reject,) = read_cif(text, "hostile").rejects
    assert reject.code == "not_text"
