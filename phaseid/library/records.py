"""Crystals as stored bytes and back, exactly; rows of the library as phases."""

from __future__ import annotations

import json
import zlib
from dataclasses import fields
from typing import Any

from phaseid.crystal.crystal import Crystal, Finding, Site, Source

_SITE_FIELDS = tuple(field.name for field in fields(Site))
_OWN_FIELDS = tuple(
    field.name for field in fields(Crystal) if field.name not in {"sites", "source", "findings"}
)


def _tuples(value: Any) -> Any:
    return tuple(map(_tuples, value)) if isinstance(value, list) else value


def findings_json(findings: tuple[Finding, ...]) -> str:
    """Return findings as JSON text."""
    return json.dumps([[f.code, f.message] for f in findings], ensure_ascii=False)


def findings_from_json(text: str) -> tuple[Finding, ...]:
    """Return the findings that `findings_json` wrote."""
    return tuple(Finding(code, message) for code, message in json.loads(text))


def pack_crystal(crystal: Crystal) -> bytes:
    """Return the crystal as compressed JSON; numbers are written so that they come back exactly."""
    source = crystal.source
    held = {name: getattr(crystal, name) for name in _OWN_FIELDS} | {
        "site_fields": _SITE_FIELDS,
        "sites": [[getattr(site, name) for name in _SITE_FIELDS] for site in crystal.sites],
        "source": [source.database, source.id, source.file, source.reference],
        "findings": [[f.code, f.message] for f in crystal.findings],
    }
    return zlib.compress(json.dumps(held, separators=(",", ":")).encode())


def unpack_crystal(data: bytes) -> Crystal:
    """Rebuild the crystal that `pack_crystal` stored."""
    held = json.loads(zlib.decompress(data))
    names = held.pop("site_fields")
    sites = tuple(Site(**dict(zip(names, _tuples(row), strict=True))) for row in held.pop("sites"))
    source = Source(*held.pop("source"))
    findings = tuple(Finding(*pair) for pair in held.pop("findings"))
    own = {name: _tuples(value) for name, value in held.items()}
    return Crystal(**own, sites=sites, source=source, findings=findings)
