"""What a CIF block says about itself: phase name, database and number, citation, conditions."""

from __future__ import annotations

import re
import unicodedata

from phaseid.crystal.cif_text import Block
from phaseid.crystal.crystal import Finding, Source

HIGH_PRESSURE_GPA = 0.2
HIGH_TEMPERATURE_K = 373.15
SOURCE_DATABASE_TAG = "_phaseid_source_database"  # for databases without a tag of their own
SOURCE_ID_TAG = "_phaseid_source_id"
REFERENCE_TAG = "_citation_special_details"
_KPA_PER_GPA = 1e6
_MAX_NAME = 200
_MAX_ID = 100
_MAX_CITATION = 2000
_MAX_TITLE = 2000
NAME_TAGS = (
    "_chemical_name_mineral",
    "_chemical_name_common",
    "_chemical_name_systematic",
    "_pd_phase_name",
)
_DATABASES = (
    ("COD", ("_cod_database_code", "_database_code_cod", "_database.code_cod")),
    ("AMCSD", ("_database_code_amcsd", "_amcsd_database_code", "_database.code_amcsd")),
    ("ICSD", ("_database_code_icsd", "_database.code_icsd")),
    ("CSD", ("_database_code_csd", "_database_code_depnum_ccdc_archive")),
    ("MPOD", ("_mpod_database_code",)),
    ("AFLOW", ("_aflow_proto", "_aflow_entry")),
    ("OQMD", ("_oqmd_id",)),
)
_COD_NUMBER = re.compile(r"[1-9]\d{6}$")
_MP_NAME = re.compile(r"(?:^|[^a-z])(mp[-_]\d+)(?![a-z\d])", re.IGNORECASE)
_PRESSURE = re.compile(r"\bP\s*=\s*(\d+\.?\d*)\s*(GPa|kbars?|kb|MPa)\b", re.IGNORECASE)
_TEMPERATURE = re.compile(r"\bT\s*=\s*(-?\d+\.?\d*)\s*(?:deg\.?\s*|degrees?\s*|°\s*)?(C|K)\b")
_GPA = {"gpa": 1.0, "kbar": 0.1, "kbars": 0.1, "kb": 0.1, "mpa": 0.001}
_COMBINING = {
    "'": "\u0301", "`": "\u0300", '"': "\u0308", "^": "\u0302", "~": "\u0303", ",": "\u0327",
    ";": "\u0328", "<": "\u030c", "=": "\u0304", ".": "\u0307", "(": "\u0306", ">": "\u030b",
    "%": "\u030a",
}  # fmt: skip
_ACCENT = re.compile(r"\\(['`\"^~,;<=.(>%])([A-Za-z])")


def phase_names(block: Block) -> tuple[str, ...]:
    """Return the names of the phase, each once: mineral, common, systematic, as far as given."""
    found = (plain_text(block.text(tag))[:_MAX_NAME] for tag in NAME_TAGS)
    names: dict[str, str] = {}
    for name in found:
        if name and not name.startswith("?"):  # a template line left in place
            names.setdefault(name.casefold(), name)
    return tuple(names.values())


def source(block: Block, file: str) -> Source:
    """Return database and number as the block states them ("file" and "" if it does not)."""
    for database, tags in _DATABASES:
        number = block.text(*tags)[:_MAX_ID]
        if number:
            return Source(database, number, file, citation(block))
    if _COD_NUMBER.match(block.name) and block.has_prefix("_cod_", "_[local]_cod_"):
        return Source("COD", block.name, file, citation(block))
    number = block.text(SOURCE_ID_TAG)[:_MAX_ID]
    if number:
        database = block.text(SOURCE_DATABASE_TAG)[:_MAX_ID] or "file"
        return Source(database, number, file, citation(block))
    computed = _MP_NAME.search(block.name)
    if computed:
        return Source("Materials Project", computed.group(1), file, citation(block))
    return Source("file", "", file, citation(block))


def citation(block: Block) -> str:
    """Return "Authors, Journal volume (year) page, doi" from the journal or citation tags."""
    authors = "; ".join(block.strings("_publ_author_name")) or "; ".join(
        block.strings("_citation_author_name")
    )
    journal = block.text("_journal_name_full", "_citation_journal_full", "_citation_journal_abbrev")
    volume = block.text("_journal_volume", "_citation_journal_volume")
    year = block.text("_journal_year", "_citation_year")
    page = block.text("_journal_page_first", "_citation_page_first")
    doi = block.text("_journal_paper_doi", "_citation_doi")
    place = " ".join(part for part in (journal, volume, year and f"({year})", page) if part)
    parts = (" ".join(authors.split()), place, doi and f"doi:{doi}")
    stated = ", ".join(part for part in parts if part not in ("", "?", "."))
    return plain_text((stated or block.text(REFERENCE_TAG))[:_MAX_CITATION])


def conditions(block: Block) -> tuple[float | None, float | None, tuple[Finding, ...]]:
    """Return temperature in K, pressure in GPa (None where not stated), and marks that follow.

    The title is searched too: many mineral entries state "P = 5.4 GPa" or "T = 800 C" only there.
    """
    temperature = block.number("_diffrn_ambient_temperature", "_cell_measurement_temperature")
    kilopascal = block.number("_diffrn_ambient_pressure", "_cell_measurement_pressure")
    pressure = None if kilopascal is None else kilopascal / _KPA_PER_GPA
    title = block.text("_publ_section_title")[:_MAX_TITLE]
    stated = _PRESSURE.search(title) if "=" in title else None
    if pressure is None and stated:
        pressure = float(stated.group(1)) * _GPA[stated.group(2).lower()]
    stated = _TEMPERATURE.search(title) if "=" in title else None
    if temperature is None and stated:
        temperature = float(stated.group(1)) + (273.15 if stated.group(2) == "C" else 0.0)
    if temperature is not None and temperature < 0:
        temperature = None
    findings = []
    if pressure is not None and pressure >= HIGH_PRESSURE_GPA:
        findings.append(Finding("high_pressure", f"the source states {pressure:g} GPa"))
    if temperature is not None and temperature > HIGH_TEMPERATURE_K:
        findings.append(Finding("high_temperature", f"the source states {temperature:g} K"))
    if _theoretical(block):
        findings.append(Finding("theoretical", "the structure is calculated, not measured"))
    if block.has_prefix("_atom_site_moment", "_space_group_magn", "_space_group.magn"):
        findings.append(
            Finding("magnetic", "magnetic moments are given; only the nuclei are taken from it")
        )
    return temperature, pressure, tuple(findings)


def plain_text(text: str) -> str:
    r"""Return text with CIF accent codes (\'e, \"u, \<z) as letters, markup tags dropped."""
    if "\\" in text:
        text = _ACCENT.sub(
            lambda m: unicodedata.normalize("NFC", m.group(2) + _COMBINING[m.group(1)]), text
        )
    if "<" in text:
        text = re.sub(r"</?[a-z]+>", "", text)
    return text


def _theoretical(block: Block) -> bool:
    method = block.text("_cod_struct_determination_method", "_exptl_crystal_type_of_structure")
    return (
        "theor" in method.lower()
        or _MP_NAME.search(block.name) is not None
        or block.has_prefix("_tcod_", "_dft_", "_aflow_", "_oqmd_")
    )
