"""Crystals as stored bytes and back, exactly; rows of the library as phases."""

from __future__ import annotations

import json
import sqlite3
import zlib
from dataclasses import fields
from typing import Any

from phaseid.crystal.crystal import Crystal, Finding, Site, Source

_SITE_FIELDS = tuple(field.name for field in fields(Site))
_OWN_FIELDS = tuple(
    field.name
    for field in fields(Crystal)
    if field.name not in {"operations", "sites", "source", "findings"}
)
SEPARATOR = ";"

# What nearly every structure repeats, for the compression. Stored structures are read with these
# very bytes: they must never change, or no library can be read any more.
_USUAL = (
    b'[["theoretical","the structure is calculated, not measured"]]}'
    b'["Pb1","Pb",["Ca1","Ca",["Ba1","Ba",["Sr1","Sr",["Na1","Na",["K1","K",["Al1","Al",'
    b'["Mg1","Mg",["Fe1","Fe",["Ti1","Ti",["Cu1","Cu",["Zn1","Zn",["C1","C",["H1","H",["N1","N",'
    b'["F1","F",["Cl1","Cl",["P1","P",["Si1","Si",["S1","S",["O2","O",0,[0.25,0.75,0.5],1.0,null,'
    b"0.333333,0.666667,0.166667,0.833333,0.125,0.375,0.625,0.875,[0.0,0.0,0.5],1.0,null,null],"
    b'["O1","O",0,[0.0,0.0,0.0],1.0,null,null]],"source":["COD","Materials Project",'
    b'"phaseid starter",".cif",""],"findings":[]}{"cell":[5.0,90.0,90.0,120.0],'
    b'"space_group_number":1,"space_group_symbol":"P21/c","Pnma","C2/m","P63/mmc","R-3m","I4/mmm",'
    b'"Fm-3m","name":"","formula":"O2","z":4.0,"temperature_K":null,"pressure_GPa":null,'
    b'"other_names":[],"site_fields":["label","element","charge","fract","occupancy","u_iso_A2",'
    b'"u_aniso_A2"],"sites":[["'
)


def _tuples(value: Any) -> Any:
    return tuple(map(_tuples, value)) if isinstance(value, list) else value


def findings_json(findings: tuple[Finding, ...]) -> str:
    """Return findings as JSON text."""
    return json.dumps([[f.code, f.message] for f in findings], ensure_ascii=False)


def findings_from_json(text: str) -> tuple[Finding, ...]:
    """Return the findings that `findings_json` wrote."""
    return tuple(Finding(code, message) for code, message in json.loads(text))


def pack_crystal(crystal: Crystal) -> tuple[str, bytes]:
    """Return the symmetry operations as one text, the rest of the crystal as compressed JSON.

    Numbers are written so that they come back exactly.
    """
    source = crystal.source
    held = {name: getattr(crystal, name) for name in _OWN_FIELDS} | {
        "site_fields": _SITE_FIELDS,
        "sites": [[getattr(site, name) for name in _SITE_FIELDS] for site in crystal.sites],
        "source": [source.database, source.id, source.file, source.reference],
        "findings": [[f.code, f.message] for f in crystal.findings],
    }
    return SEPARATOR.join(crystal.operations), compressed(held)


def compressed(held: dict[str, Any]) -> bytes:
    """Return the JSON of a structure without its operations, compressed with the usual words."""
    press = zlib.compressobj(level=6, zdict=_USUAL)
    return press.compress(json.dumps(held, separators=(",", ":")).encode()) + press.flush()


def decompressed(data: bytes) -> dict[str, Any]:
    """Return what `compressed` was given."""
    held: dict[str, Any] = json.loads(zlib.decompressobj(zdict=_USUAL).decompress(data))
    return held


def unpack_crystal(operations: str, data: bytes) -> Crystal:
    """Rebuild the crystal that `pack_crystal` made two pieces of."""
    held = decompressed(data)
    names = held.pop("site_fields")
    sites = tuple(Site(**dict(zip(names, _tuples(row), strict=True))) for row in held.pop("sites"))
    source = Source(*held.pop("source"))
    findings = tuple(Finding(*pair) for pair in held.pop("findings"))
    own = {name: _tuples(value) for name, value in held.items()}
    triplets = tuple(operations.split(SEPARATOR)) if operations else ()
    return Crystal(**own, operations=triplets, sites=sites, source=source, findings=findings)


def stored_crystal(conn: sqlite3.Connection, row: int) -> Crystal | None:
    """Return the structure of the phase with that row number, None where there is none."""
    found = conn.execute(
        "SELECT operations, data FROM structure JOIN symmetry ON symmetry.id = symmetry "
        "WHERE phase = ?",
        (row,),
    ).fetchone()
    return None if found is None else unpack_crystal(*found)


def symmetry_row(conn: sqlite3.Connection, operations: str) -> int:
    """Return the row of table `symmetry` with these operations, made where there is none."""
    found = conn.execute("SELECT id FROM symmetry WHERE operations = ?", (operations,)).fetchone()
    if found is None:
        made = conn.execute("INSERT INTO symmetry (operations) VALUES (?)", (operations,))
        return int(made.lastrowid or 0)
    return int(found[0])
