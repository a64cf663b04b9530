"""Rock-salt structures as CIF text."""

from __future__ import annotations

# Cubic cells at room temperature, Å: R. W. G. Wyckoff, Crystal Structures 1 (1963), from memory
ROCK_SALT_A = {"MgO": 4.211, "NaCl": 5.640, "KCl": 6.293, "NaF": 4.634, "LiF": 4.027, "CaO": 4.811}


def rock_salt(formula: str, a_A: float | None = None, *, cod: str = "", name: str = "") -> str:
    """Return CIF text of a rock-salt structure such as "MgO"."""
    cation = formula[:-1] if formula[-1].isupper() else formula[:-2]
    anion = formula[len(cation) :]
    edge = ROCK_SALT_A[formula] if a_A is None else a_A
    lines = [
        f"data_{cod or formula}",
        f"_cell_length_a {edge}",
        f"_cell_length_b {edge}",
        f"_cell_length_c {edge}",
        "_cell_angle_alpha 90",
        "_cell_angle_beta 90",
        "_cell_angle_gamma 90",
        "_space_group_name_H-M_alt 'F m -3 m'",
        "_space_group_IT_number 225",
        f"_chemical_formula_sum '{cation} {anion}'",
        "_cell_formula_units_Z 4",
    ]
    if cod:
        lines.append(f"_cod_database_code {cod}")
    if name:
        lines.append(f"_chemical_name_mineral '{name}'")
    lines += [
        "loop_",
        "_atom_site_label",
        "_atom_site_type_symbol",
        "_atom_site_fract_x",
        "_atom_site_fract_y",
        "_atom_site_fract_z",
        f"{cation}1 {cation} 0 0 0",
        f"{anion}1 {anion} 0.5 0.5 0.5",
        "",
    ]
    return "\n".join(lines)
