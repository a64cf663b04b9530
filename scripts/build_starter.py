#!/usr/bin/env python3
"""Write data/starter/<class>/<Formula>-<name>.cif from the facts in scripts/starter/*.toml.

    build_starter.py            check the facts and write the CIFs
    build_starter.py --check    check the facts and that the CIFs are what the facts give
    build_starter.py --compare  first compare with second sources into data/starter/checks.csv

Comparing needs NCrystal and the folder ../shared beside the checkout; the other two need neither.
The format of the tables is told at the head of starter_facts.py.
"""

from __future__ import annotations

import argparse
import csv
import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent))

from starter_checks import contents, density_g_cm3, problems
from starter_facts import PhaseFact, atoms, read_tables

ROOT = Path(__file__).resolve().parent.parent
TABLES = ROOT / "scripts" / "starter"
STARTER = ROOT / "data" / "starter"
CHECKS = STARTER / "checks.csv"
CHECK_COLUMNS = (
    "phase",
    "formula",
    "compared_with",
    "cell_deviation_percent",
    "pattern_similarity",
    "result",
)
AGREES = "agrees"
RECALLED = "from memory ("


def quote(text: str) -> str:
    if not text or any(c in text for c in " '\"#$[];_") or text[0] in ".?":
        return f'"{text}"' if '"' not in text else f"'{text}'"
    return text


def hill(formula: str) -> str:
    counts = atoms(formula)
    first = [e for e in ("C", "H") if e in counts and "C" in counts]
    order = first + sorted(set(counts) - set(first))
    return " ".join(f"{e}{counts[e]:g}" if counts[e] != 1 else e for e in order)


def reference(source: str) -> str:
    """The source in a reader's words: what was recalled says so at its end."""
    text = source
    if text.startswith(RECALLED):
        depth, end = 1, len(RECALLED)
        while depth:
            depth += {"(": 1, ")": -1}.get(text[end], 0)
            end += 1
        text = text[len(RECALLED) : end - 1] + text[end:]
    text = text.removesuffix(", from memory")
    return text if text == source else f"{text}; recalled from memory, not checked in the original"


def status(rows: list[dict[str, str]]) -> list[str]:
    """Sentences on what the facts were compared with."""
    told = [
        f"{row['compared_with']} (cell within {float(row['cell_deviation_percent']):.2f} %)"
        for row in rows
        if row["result"] == AGREES
    ]
    measured = [t for t in told if not t.startswith("computed")]
    computed = [t for t in told if t.startswith("computed")]
    sentences = [f"second source: {'; '.join(measured)}" if measured else "no second source"]
    if computed:
        sentences.append(f"same structure as {'; '.join(computed)}")
    return sentences


def cif(phase: PhaseFact, rows: list[dict[str, str]]) -> str:
    """The CIF of one phase."""
    opt = phase.options
    a, b, c, alpha, beta, gamma = phase.cell
    counts, z = contents(phase)
    lines = [
        "#\\#CIF_1.1",
        "# Written by phaseid from published facts (numbers only); see _publ_section_references.",
        f"data_{phase.stem}",
        f"_chemical_name_common {quote(phase.name)}",
    ]
    if "mineral" in opt:
        lines.append(f"_chemical_name_mineral {quote(opt['mineral'])}")
    if "type" in opt:
        lines.append(f"_chemical_name_structure_type {quote(opt['type'])}")
    lines += [
        f"_chemical_formula_sum {quote(hill(phase.formula))}",
        f"_cell_formula_units_Z {z:g}",
        f"_cell_length_a {a!r}",
        f"_cell_length_b {b!r}",
        f"_cell_length_c {c!r}",
        f"_cell_angle_alpha {alpha!r}",
        f"_cell_angle_beta {beta!r}",
        f"_cell_angle_gamma {gamma!r}",
        f"_space_group_IT_number {phase.group.number}",
        f"_space_group_name_H-M_alt {quote(phase.group.xhm())}",
        f"_space_group_name_Hall {quote(phase.group.hall)}",
        f"_exptl_crystal_density_diffrn {density_g_cm3(phase, counts):.3f}",
    ]
    if "temperature_K" in opt:
        lines.append(f"_diffrn_ambient_temperature {opt['temperature_K']:g}")
    if "pressure_GPa" in opt:
        lines.append(f"_diffrn_ambient_pressure {opt['pressure_GPa'] * 1e6:g}")
    if "mark" in opt:
        lines.append(f"_phaseid_mark {opt['mark']}")
    if phase.cod:
        lines.append(f"_cod_database_code {phase.cod}")
    lines += [f"_publ_section_references {quote(reference(phase.source))}"]
    comment = ["Written by phaseid from published facts.", *status(rows)]
    if "note" in opt:
        comment.append(opt["note"])
    lines += ["_publ_section_comment", ";", *comment, ";"]
    lines += ["loop_", "_space_group_symop_operation_xyz"]
    lines += [f"'{op.triplet()}'" for op in phase.group.operations()]
    with_b = any(s.b_iso_A2 is not None for s in phase.sites)
    lines += ["loop_", "_atom_site_label", "_atom_site_type_symbol"]
    lines += [f"_atom_site_fract_{x}" for x in "xyz"]
    lines += ["_atom_site_occupancy"] + ["_atom_site_B_iso_or_equiv"] * with_b
    for s in phase.sites:
        words = [s.label, s.element, *(f"{x:.8g}" for x in s.xyz), f"{s.occupancy:.6g}"]
        if with_b:
            words.append("?" if s.b_iso_A2 is None else f"{s.b_iso_A2:g}")
        lines.append(" ".join(words))
    return "\n".join(lines) + "\n"


def read_checks() -> dict[str, list[dict[str, str]]]:
    """Rows of checks.csv by phase path."""
    found: dict[str, list[dict[str, str]]] = {}
    if CHECKS.is_file():
        with CHECKS.open(encoding="utf-8", newline="") as file:
            for row in csv.DictReader(file):
                found.setdefault(row["phase"], []).append(row)
    return found


def write_checks(rows: list[dict[str, str]]) -> None:
    with CHECKS.open("w", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, CHECK_COLUMNS, lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)


def build() -> tuple[dict[str, str], list[str]]:
    """CIF text by path below data/starter, and everything that is wrong with the facts."""
    phases, wrong = read_tables(TABLES)
    checks = read_checks()
    files: dict[str, str] = {}
    for phase in phases:
        found = problems(phase)
        wrong += [f"{phase.kind}.toml: {phase.name}: {p}" for p in found]
        if not found:
            files[phase.path] = cif(phase, checks.get(phase.path, []))
    return files, wrong


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    what = parser.add_mutually_exclusive_group()
    what.add_argument("--check", action="store_true", help="only check, write nothing")
    what.add_argument("--compare", action="store_true", help="compare with second sources first")
    args = parser.parse_args()
    if args.compare:
        from starter_compare import compare_all

        phases, _ = read_tables(TABLES)
        write_checks(compare_all([p for p in phases if not problems(p)], ROOT.parent / "shared"))
    files, wrong = build()
    present = {str(p.relative_to(STARTER).as_posix()): p for p in STARTER.glob("*/*.cif")}
    if args.check:
        wrong += [
            f"data/starter/{p} is missing: run build_starter.py" for p in files.keys() - present
        ]
        for path in files.keys() & present.keys():
            if present[path].read_text(encoding="utf-8") != files[path]:
                wrong.append(
                    f"data/starter/{path} is not what the facts give: run build_starter.py"
                )
        wrong += [f"data/starter/{p} has no facts: remove it" for p in present.keys() - files]
    else:
        for path, text in files.items():
            (STARTER / path).parent.mkdir(parents=True, exist_ok=True)
            (STARTER / path).write_text(text, encoding="utf-8")
        for path in present.keys() - files:
            present[path].unlink()
    for line in sorted(wrong):
        print(line, file=sys.stderr)
    print(f"{len(files)} phases, {len(wrong)} problems")
    return 1 if wrong else 0


if __name__ == "__main__":
    sys.exit(main())
