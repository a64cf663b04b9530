"""Lines: what must hold for any crystal, and the plain sum over all atoms."""

from __future__ import annotations

import dataclasses
import math

import gemmi
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from known_crystals import all_atoms, crystal, examples, prototype

from phaseid.crystal.crystal import Crystal, Site
from phaseid.crystal.displacement import DEFAULT_U_A2
from phaseid.crystal.lines import Lines, compute_lines, trim
from phaseid.crystal.operations import read_operations
from phaseid.crystal.orbits import orbits
from phaseid.crystal.scattering import CU_KA1_EV, amplitudes, dispersion
from phaseid.errors import InputError

CUBE = (4.0, 4.0, 4.0, 90.0, 90.0, 90.0)


def strengths(lines: Lines) -> np.ndarray:
    return np.stack([lines.f2_xray, lines.f2_electron, lines.f2_neutron]) * lines.multiplicity


def same(a: Lines, b: Lines, scale: float = 1.0, rtol: float = 2e-5) -> None:
    """Same d, and same multiplicity × |F|² up to `scale`, to within `rtol` of the strongest."""
    np.testing.assert_allclose(a.d_A, b.d_A, rtol=1e-9)
    x, y = strengths(a), strengths(b) * scale
    tolerance = rtol * np.maximum(x.max(axis=1), 1e-30)[:, None]
    assert (np.abs(x - y) <= tolerance).all()


def plain_sum(crystal: Crystal, hkl: np.ndarray, energy_eV: float | None) -> np.ndarray:
    """|F|² for X-rays, electrons, neutrons: the textbook sum over all atoms, both Friedel mates."""
    atoms = all_atoms(crystal)
    kinds = sorted({atom.element for atom in atoms})
    mine = np.array([kinds.index(atom.element) for atom in atoms])
    cell = gemmi.UnitCell(*crystal.cell)
    s2 = cell.calculate_1_d2_array(hkl) / 4
    table = amplitudes(kinds, s2)
    assert table.neutron is not None
    f_x = table.xray.astype(complex)
    if energy_eV is not None:
        f_x += [complex(*dispersion(kind, energy_eV)) for kind in kinds]
    u = np.array([a.u_iso_A2 for a in atoms])
    swing = np.exp(-8 * math.pi**2 * u * s2[:, None])
    swing = swing * np.array([a.occupancy for a in atoms])
    fract = np.array([a.fract for a in atoms])
    out = np.zeros((3, len(hkl)))
    for sign in (1, -1):
        wave = np.exp(sign * 2j * math.pi * (hkl @ fract.T)) * swing
        for i, f in enumerate((f_x, table.electron, np.broadcast_to(table.neutron, f_x.shape))):
            out[i] += np.abs((wave * f[:, mine]).sum(axis=1)) ** 2 / 2
    return out


@pytest.mark.parametrize("energy_eV", [None, CU_KA1_EV])
@pytest.mark.parametrize("example", examples(0.006), ids=lambda c: c.name)
def test_f2_is_the_plain_sum_over_all_atoms(example: Crystal, energy_eV: float | None) -> None:
    """Within 1e-6 of the strongest; every reflection of the sphere by brute force, merged by d."""
    lines = compute_lines(example, d_min_A=0.9, xray_energy_eV=energy_eV)
    cell = gemmi.UnitCell(*example.cell)
    hkl = gemmi.make_miller_array(cell, gemmi.SpaceGroup("P 1"), 0.9, unique=False)
    d_A, f2 = cell.calculate_d_array(hkl), plain_sum(example, hkl, energy_eV)
    expected = np.zeros((3, len(lines.d_A)))
    multiplicity = np.zeros(len(lines.d_A), dtype=int)
    nearest = np.abs(np.log(d_A[:, None] / lines.d_A)).argmin(axis=1)
    hit = np.abs(np.log(d_A / lines.d_A[nearest])) < 2e-5
    for i in range(3):
        np.add.at(expected[i], nearest[hit], f2[i, hit])
    seen = hit & (f2 > 1e-9 * f2.max(axis=1)[:, None]).any(axis=0)
    np.add.at(multiplicity, nearest[seen], 1)
    highest = expected.max(axis=1)[:, None]
    assert np.abs(strengths(lines) - expected).max() <= 1e-6 * highest.max()
    assert (np.abs(strengths(lines) - expected) <= 1e-6 * highest).all()
    assert (f2[:, ~hit] < 1e-9 * f2.max(axis=1)[:, None]).all(), "a line is missing"
    assert np.array_equal(lines.multiplicity, multiplicity)


def test_lines_fall_in_d_and_stay_apart() -> None:
    for example in examples():
        lines = compute_lines(example)
        assert (np.diff(lines.d_A) < 0).all()
        assert (-np.diff(np.log(lines.d_A)) > 2e-5).all()
        assert lines.d_A[-1] >= lines.complete_to_A * (1 - 1e-9)
        assert lines.hkl.shape == (len(lines.d_A), 3)


def test_coincident_lines_are_one_line() -> None:
    """333 and 511 of a cubic cell: 8 + 24 reflections of one d; hkl of the stronger."""
    lines = compute_lines(prototype("fcc", ("Al",), CUBE))
    index = int(np.argmin(np.abs(lines.d_A - 4 / math.sqrt(27))))
    assert lines.multiplicity[index] == 32
    assert tuple(lines.hkl[index]) == (5, 1, 1)


def test_a_chain_of_near_lines_is_cut_where_it_outgrows_the_tolerance() -> None:
    """100, 010, 001 of a nearly cubic cell, 1.2e-5 apart: two are one line, all three are not."""
    cell = (4.0, 4.0 * (1 + 1.2e-5), 4.0 * (1 + 2.4e-5), 90.0, 90.0, 90.0)
    lines = compute_lines(crystal("P m m m", cell, [Site("a", "Po", 0, (0, 0, 0), 1.0)]))
    first = lines.d_A > 3.9
    assert first.sum() == 2
    assert lines.multiplicity[first].sum() == 6


def test_equal_spacings_of_unlike_indices_sum_their_intensity() -> None:
    """333 and 511 of silicon: the merged |F|² is the mean by multiplicity (arithmetic)."""
    silicon = prototype("diamond", ("Si",), (5.4309,) * 3 + (90.0,) * 3, 0.006)
    lines = compute_lines(silicon, xray_energy_eV=None)
    index = int(np.argmin(np.abs(lines.d_A - 5.4309 / math.sqrt(27))))
    f2 = plain_sum(silicon, np.array([[3, 3, 3], [5, 1, 1]]), None)
    found = lines.f2_xray[index], lines.f2_electron[index], lines.f2_neutron[index]
    np.testing.assert_allclose(found, (8 * f2[:, 0] + 24 * f2[:, 1]) / 32, rtol=1e-5)


@pytest.mark.parametrize("forbidden", [(2, 0, 0), (2, 2, 2), (4, 2, 0), (4, 4, 2)])
def test_diamond_has_neither_glide_nor_position_absences(forbidden: tuple[int, int, int]) -> None:
    """Int. Tables A, group 227, position 8a: h + k + l = 4n for even indices."""
    lines = compute_lines(prototype("diamond", ("C",), (3.567,) * 3 + (90.0,) * 3))
    d_A = 3.567 / math.sqrt(sum(i * i for i in forbidden))
    assert np.abs(lines.d_A / d_A - 1).min() > 1e-4


def shifted(crystal: Crystal, shift: np.ndarray) -> Crystal:
    """The same crystal described from another origin: x' = x + shift."""
    triplets = []
    for triplet in crystal.operations:
        op = gemmi.Op(triplet)
        rotation = np.array(op.rot) / gemmi.Op.DEN
        moved = np.array(op.tran) / gemmi.Op.DEN + shift - rotation @ shift
        op.tran = [round(t * gemmi.Op.DEN) % gemmi.Op.DEN for t in moved]
        triplets.append(op.triplet())
    sites = [
        dataclasses.replace(s, fract=tuple(float(x) for x in np.array(s.fract) + shift))
        for s in crystal.sites
    ]
    return dataclasses.replace(crystal, operations=tuple(triplets), sites=tuple(sites))


@settings(max_examples=25, deadline=None)
@given(
    example=st.sampled_from(examples()),
    shift=st.tuples(*[st.integers(0, 23)] * 3),
)
def test_a_shifted_origin_changes_nothing(example: Crystal, shift: tuple[int, int, int]) -> None:
    moved = shifted(example, np.array(shift) / 24)
    same(compute_lines(example, d_min_A=0.8), compute_lines(moved, d_min_A=0.8))


def in_other_axes(crystal: Crystal, basis: np.ndarray) -> Crystal:
    """The same crystal with other edges of the cell: (a', b', c') = (a, b, c) P, det P = ±1."""
    inverse = np.rint(np.linalg.inv(basis)).astype(int)
    triplets = []
    for triplet in crystal.operations:
        op = gemmi.Op(triplet)
        op.rot = (inverse @ np.array(op.rot) @ basis).tolist()
        op.tran = [int(t) % gemmi.Op.DEN for t in inverse @ np.array(op.tran)]
        triplets.append(op.triplet())
    sites = tuple(
        dataclasses.replace(s, fract=tuple(float(x) for x in inverse @ np.array(s.fract)))
        for s in crystal.sites
    )
    edges = np.array(gemmi.UnitCell(*crystal.cell).orth.mat) @ basis
    lengths = np.linalg.norm(edges, axis=0)
    angles = [
        math.degrees(math.acos(edges[:, i] @ edges[:, j] / (lengths[i] * lengths[j])))
        for i, j in ((1, 2), (0, 2), (0, 1))
    ]
    cell = (*map(float, lengths), *angles)
    return dataclasses.replace(crystal, cell=cell, operations=tuple(triplets), sites=sites)


@settings(max_examples=25, deadline=None)
@given(
    example=st.sampled_from(examples()),
    steps=st.lists(
        st.tuples(st.integers(0, 2), st.integers(1, 2), st.sampled_from([-1, 1])), max_size=3
    ),
    order=st.permutations(range(3)),
)
def test_any_setting_has_the_same_lines(
    example: Crystal, steps: list[tuple[int, int, int]], order: list[int]
) -> None:
    """Axes swapped and sheared (a' = a ± b and so on): hkl change, nothing else does."""
    basis = np.eye(3, dtype=int)[:, order]
    for i, further, sign in steps:
        basis[:, i] += sign * basis[:, (i + further) % 3]
    turned = in_other_axes(example, basis)
    same(compute_lines(example, d_min_A=0.9), compute_lines(turned, d_min_A=0.9))


@settings(max_examples=15, deadline=None)
@given(
    example=st.sampled_from(examples()),
    times=st.tuples(*[st.integers(1, 2)] * 3),
)
def test_a_supercell_without_symmetry_has_the_same_lines(
    example: Crystal, times: tuple[int, int, int]
) -> None:
    """|F|² per cell grows with the square of the number of cells."""
    offsets = [(i, j, k) for i in range(times[0]) for j in range(times[1]) for k in range(times[2])]
    sites = [
        dataclasses.replace(
            atom,
            fract=tuple((x + o) / n for x, o, n in zip(atom.fract, offset, times, strict=True)),
        )
        for atom in all_atoms(example)
        for offset in offsets
    ]
    lengths = [length * n for length, n in zip(example.cell[:3], times, strict=True)]
    large = crystal(["x,y,z"], (*lengths, *example.cell[3:]), sites)
    few, many = compute_lines(example, d_min_A=1.1), compute_lines(large, d_min_A=1.1)
    same(many, few, scale=math.prod(times) ** 2)
    assert many.volume_A3 == pytest.approx(few.volume_A3 * math.prod(times))


@pytest.mark.parametrize(("name", "elements", "points"), [("fcc", ("Al",), 4), ("bcc", ("W",), 2)])
def test_the_primitive_cell_has_the_same_lines(
    name: str, elements: tuple[str, ...], points: int
) -> None:
    """The primitive cell of fcc has 60° angles and a/√2, of bcc 109.47° and a√3/2 (arithmetic)."""
    edge = {4: 4.0 / math.sqrt(2), 2: 4.0 * math.sqrt(3) / 2}[points]
    angle = {4: 60.0, 2: math.degrees(math.acos(-1 / 3))}[points]
    small = crystal(
        ["x,y,z"], (edge,) * 3 + (angle,) * 3, [Site("a", elements[0], 0, (0, 0, 0), 1)]
    )
    same(
        compute_lines(prototype(name, elements, CUBE), d_min_A=0.7),
        compute_lines(small, d_min_A=0.7),
        scale=points**2,
    )


@settings(max_examples=20, deadline=None)
@given(
    fract=st.tuples(*[st.floats(0.02, 0.98)] * 3),
    symbol=st.sampled_from(["P -1", "P 1 21/c 1", "P n a 21", "P 41 3 2", "R 3 c:H", "I -4 2 d"]),
    u=st.tuples(*[st.floats(0.001, 0.05)] * 3),
)
def test_an_anisotropic_sphere_is_isotropic_and_turning_it_does_not_matter(
    fract: tuple[float, float, float], symbol: str, u: tuple[float, float, float]
) -> None:
    """U_ij = U cos(a*_i, a*_j) is a sphere (Trueblood et al. 1996, Acta Cryst. A52, 770)."""
    group = gemmi.SpaceGroup(symbol)
    hexagonal = group.crystal_system_str() in ("trigonal", "hexagonal")
    cell = (6.0, 6.0, 8.0, 90, 90, 120) if hexagonal else (6.0, 6.0, 6.0, 90, 90, 90)
    frac = np.array(gemmi.UnitCell(*cell).frac.mat)
    unit = frac / np.linalg.norm(frac, axis=1)[:, None]
    tensor = u[0] * unit @ unit.T
    sphere = tuple(float(tensor[i, j]) for i, j in ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2)))
    round_ = crystal(group, cell, [Site("a", "Fe", 0, fract, 1.0, u[0])])
    aniso = crystal(group, cell, [Site("a", "Fe", 0, fract, 1.0, None, sphere)])
    same(compute_lines(round_, d_min_A=0.9), compute_lines(aniso, d_min_A=0.9))
    # an ellipsoid: with symmetry, and with all atoms written out, their tensors turned by hand
    diagonal = np.diag(u)
    star = np.linalg.norm(frac, axis=1)
    atoms = []
    for op in group.operations():
        rotation = np.array(op.rot) / gemmi.Op.DEN
        beta = rotation @ (diagonal * np.outer(star, star)) @ rotation.T
        turned = beta / np.outer(star, star)
        place = tuple(float(x) for x in op.apply_to_xyz(list(fract)))
        six = tuple(
            float(turned[i, j]) for i, j in ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))
        )
        atoms.append(Site("a", "Fe", 0, place, 1.0, None, six))
    positions = orbits(
        cell, read_operations(tuple(o.triplet() for o in group.operations())), round_.sites
    ).multiplicity[0]
    if positions == len(atoms):  # a general position, which is where a free ellipsoid may sit
        one = crystal(group, cell, [Site("a", "Fe", 0, fract, 1.0, None, (*u, 0.0, 0.0, 0.0))])
        same(
            compute_lines(one, d_min_A=0.9),
            compute_lines(crystal(["x,y,z"], cell, atoms), d_min_A=0.9),
        )


def test_displacement_is_exp_minus_b_s2_on_amplitudes() -> None:
    """B = 8π²U; |F|² falls with exp(-2 B s²): copper 200 with B = 0.55 Å² by hand."""
    still = compute_lines(prototype("fcc", ("Cu",), (3.615,) * 3 + (90.0,) * 3, 0.0))
    u_A2 = 0.55 / (8 * math.pi**2)
    warm = compute_lines(prototype("fcc", ("Cu",), (3.615,) * 3 + (90.0,) * 3, u_A2))
    s = 1 / (2 * 3.615 / 2)
    for probe in ("f2_xray", "f2_electron", "f2_neutron"):
        ratio = getattr(warm, probe)[1] / getattr(still, probe)[1]
        assert ratio == pytest.approx(math.exp(-2 * 0.55 * s * s), rel=1e-9)


@pytest.mark.parametrize("u_iso_A2", [None, -0.01, math.nan])
def test_a_site_without_a_possible_displacement_gets_the_default(u_iso_A2: float | None) -> None:
    given_ = compute_lines(prototype("halite", ("Na", "Cl"), (5.64,) * 3 + (90.0,) * 3, u_iso_A2))
    stated = compute_lines(
        prototype("halite", ("Na", "Cl"), (5.64,) * 3 + (90.0,) * 3, DEFAULT_U_A2)
    )
    assert np.array_equal(given_.f2_xray, stated.f2_xray)
    assert pytest.approx(0.5, rel=1e-12) == DEFAULT_U_A2 * 8 * math.pi**2


def test_an_impossible_ellipsoid_counts_by_its_mean() -> None:
    """U11 < 0 cannot be; the mean of the diagonal is used (common practice, no source)."""
    bad = (-0.01, 0.02, 0.02, 0.0, 0.0, 0.0)
    one = crystal("P -1", CUBE, [Site("a", "Fe", 0, (0.1, 0.2, 0.3), 1.0, None, bad)])
    mean = crystal("P -1", CUBE, [Site("a", "Fe", 0, (0.1, 0.2, 0.3), 1.0, 0.01)])
    same(compute_lines(one), compute_lines(mean))


@pytest.mark.parametrize("digits", [3, 4, 6])
def test_rounded_special_positions_hold_one_atom(digits: int) -> None:
    """1/3 written 0.333 in a 9 Å cell is 0.003 Å off the threefold axis."""
    third, two = round(1 / 3, digits), round(2 / 3, digits)
    cell = (9.0, 9.0, 5.0, 90, 90, 120)
    rounded = crystal("P 63/m m c", cell, [Site("a", "Zn", 0, (third, two, 0.25), 1.0)])
    exact = crystal("P 63/m m c", cell, [Site("a", "Zn", 0, (1 / 3, 2 / 3, 0.25), 1.0)])
    found = orbits(cell, read_operations(rounded.operations), rounded.sites)
    assert found.multiplicity.tolist() == [2]
    assert found.weight.sum() == pytest.approx(2.0)
    same(compute_lines(rounded), compute_lines(exact))


def test_images_that_do_not_close_to_a_group_stay_apart() -> None:
    """0.08 Å from a mirror is one atom, two mirrors 0.08 Å off at a fourfold point need care."""
    cell = (8.0, 8.0, 8.0, 90, 90, 90)
    for offset_A in (0.02, 0.04, 0.06, 0.09, 0.12):
        site = Site("a", "Fe", 0, (offset_A / 8, 0.3 * offset_A / 8, 0.0), 1.0)
        found = orbits(cell, read_operations(crystal("P 4/m m m", cell, [site]).operations), [site])
        assert 16 % found.multiplicity[0] == 0
        assert found.weight.sum() == pytest.approx(found.multiplicity[0])


def test_occupancy_is_chemical_on_special_positions_too() -> None:
    full = prototype("halite", ("Na", "Cl"), (5.64,) * 3 + (90.0,) * 3)
    half = dataclasses.replace(
        full, sites=tuple(dataclasses.replace(s, occupancy=0.5) for s in full.sites)
    )
    same(compute_lines(half), compute_lines(full), scale=0.25)


def test_a_mixed_site_scatters_with_the_mean_amplitude() -> None:
    cell = (3.6, 3.6, 3.6, 90.0, 90.0, 90.0)
    mixed = crystal(
        "F m -3 m",
        cell,
        [Site("a", "Cu", 0, (0, 0, 0), 0.75), Site("b", "Au", 0, (0, 0, 0), 0.25)],
    )
    lines = compute_lines(mixed, xray_energy_eV=None)
    table = amplitudes(["Cu", "Au"], 1 / (4 * lines.d_A**2))
    swing = np.exp(-0.5 / (4 * lines.d_A**2))
    expected = (4 * swing * (table.electron @ [0.75, 0.25])) ** 2
    np.testing.assert_allclose(lines.f2_electron, expected, rtol=1e-6)


def test_unknown_neutron_lengths_leave_neutron_lines_dark() -> None:
    lines = compute_lines(prototype("fcc", ("At",), CUBE))
    assert not lines.f2_neutron.any()
    assert (lines.f2_xray > 0).all()


def test_dispersion_lowers_iron_at_copper_k_alpha() -> None:
    """f′ = -1.13, f″ = 3.20 (Int. Tables C Table 4.2.6.8, from memory): 110 of iron by hand."""
    iron = prototype("bcc", ("Fe",), (2.8665,) * 3 + (90.0,) * 3, 0.0)
    off = compute_lines(iron, xray_energy_eV=None)
    on = compute_lines(iron)
    f0 = math.sqrt(off.f2_xray[0]) / 2
    assert on.f2_xray[0] == pytest.approx(4 * ((f0 - 1.134) ** 2 + 3.197**2), rel=1e-3)
    assert np.array_equal(on.f2_electron, off.f2_electron)


def test_trim_keeps_what_any_probe_sees() -> None:
    lines = compute_lines(prototype("corundum", ("Al", "O"), (4.759, 4.759, 12.99, 90, 90, 120)))
    short = trim(lines, 1e-3)
    assert short.floor == 1e-3
    assert short.complete_to_A == lines.complete_to_A
    strength = strengths(lines) * lines.d_A**2
    relative = strength / strength.max(axis=1)[:, None]
    kept = (relative >= 1e-3).any(axis=0)
    assert 0 < kept.sum() < len(lines.d_A)
    assert np.array_equal(short.d_A, lines.d_A[kept])
    assert np.array_equal(short.f2_neutron, lines.f2_neutron[kept])
    again = trim(short, 1e-3)
    assert np.array_equal(again.d_A, short.d_A)


def test_trim_of_a_dark_probe_and_of_nothing() -> None:
    dark = compute_lines(prototype("fcc", ("At",), CUBE))
    strength = dark.multiplicity * dark.f2_xray * dark.d_A**2
    expected = dark.d_A[strength >= 0.3 * strength.max()]  # X-rays fall slower than electrons
    assert 0 < len(expected) < len(dark.d_A)
    assert np.array_equal(trim(dark, 0.3).d_A, expected)
    empty = compute_lines(prototype("fcc", ("At",), CUBE), d_min_A=50.0)
    assert len(trim(empty, 0.01).d_A) == 0
    assert len(empty.d_A) == 0


@pytest.mark.parametrize("floor", [-0.1, 1.0, math.nan])
def test_a_floor_outside_its_range_is_refused(floor: float) -> None:
    lines = compute_lines(prototype("fcc", ("Al",), CUBE))
    with pytest.raises(InputError, match="floor"):
        trim(lines, floor)


def test_a_structure_without_atoms_is_refused() -> None:
    with pytest.raises(InputError, match="no atoms"):
        compute_lines(crystal("F m -3 m", CUBE, []))


def test_computing_twice_gives_the_same_numbers() -> None:
    example = examples()[2]
    a, b = compute_lines(example), compute_lines(example)
    for field in dataclasses.fields(Lines):
        assert np.array_equal(getattr(a, field.name), getattr(b, field.name))


def test_a_large_cell_is_summed_in_chunks_within_memory() -> None:
    """3000 atoms without symmetry: 17000 reflections, 50 million phases, less than 200 MB."""
    import tracemalloc

    rng = np.random.default_rng(7)
    sites = [
        Site("a", "O", 0, (float(x), float(y), float(z)), 1.0) for x, y, z in rng.random((3000, 3))
    ]
    large = crystal(["x,y,z"], (24, 25, 26, 90, 90, 90), sites)
    tracemalloc.start()
    lines = compute_lines(large)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 200e6
    assert lines.complete_to_A == 1.2
    # random places: mean |F|² is the sum of squares of the amplitudes (Wilson 1942)
    s2 = 1 / (4 * lines.d_A**2)
    f = amplitudes(["O"], s2).electron[:, 0] * np.exp(-0.5 * s2)
    weight = lines.multiplicity
    mean = (weight * lines.f2_electron / (3000 * f**2)).sum() / weight.sum()
    assert mean == pytest.approx(1.0, abs=0.05)
