"""Reading the words people use for a probe: "electron 200 kV", "X-ray CuKα", "neutron 1.54 Å"."""

from __future__ import annotations

import re
import unicodedata
from dataclasses import dataclass, field
from difflib import get_close_matches
from math import asin, degrees
from typing import NoReturn

from phaseid import units
from phaseid.errors import InputError
from phaseid.probes.numbers import NUMBER, check_relative, plain_number, read_number
from phaseid.probes.probe import Geometry, Kind, Probe
from phaseid.probes.tubes import ANODES, MONOCHROMATORS, ghosts

EXAMPLES = (
    "'electron 200 kV', 'x-ray Cu Ka', 'x-ray Cu Ka1', 'x-ray 20 keV', "
    "'x-ray 0.7107 A' or 'neutron 1.54 A'"
)

# relative one-sigma of the common scale where none is stated: common practice, no source
_DEFAULT_SCALE = {
    "electron": 0.015,  # a camera constant without an internal standard is good to 1 to 3 %
    "tube": 0.0005,  # the line is known far better; this is the diffractometer's alignment
    "x-ray": 0.001,  # energy of a monochromator
    "neutron": 0.002,  # monochromator or flight path
}
_USUAL: dict[Kind, str] = {"electron": "200 kV", "x-ray": "Cu Ka", "neutron": "1.54 A"}
_RANGE_A: dict[Kind, tuple[float, float]] = {
    "electron": (0.002, 0.4),  # 1 kV to 6 MV
    "x-ray": (0.05, 10.0),
    "neutron": (0.1, 20.0),
}
_TOF_NOMINAL_A = 1.798  # 2200 m/s, the reference of tabulated neutron cross-sections

_PHRASES = (
    (r"\btime[\s-]*of[\s-]*flight\b", "tof"),
    (r"\bbragg[\s-]*brentano\b", "bragg-brentano"),
    (r"\bdebye[\s-]*scherrer\b", "debye-scherrer"),
    (r"\b(flat[\s-]*(plate|film)|area[\s-]*detector)\b", "transmission"),
    (r"\b(x|roentgen|röntgen)[\s-]*rays?\b", "x-ray"),
    (r"(?<![a-z])e-(?![a-z])", "electron "),
)
_KINDS: dict[str, Kind] = {
    "electron": "electron",
    "electrons": "electron",
    "tem": "electron",
    "saed": "electron",
    "x-ray": "x-ray",
    "xrd": "x-ray",
    "x": "x-ray",
    "synchrotron": "x-ray",
    "neutron": "neutron",
    "neutrons": "neutron",
}
_GEOMETRIES: dict[str, Geometry] = {
    "bragg-brentano": "bragg-brentano",
    "debye-scherrer": "debye-scherrer",
    "capillary": "debye-scherrer",
    "transmission": "transmission",
    "tof": "time-of-flight",
}
_DEFAULT_GEOMETRY: dict[Kind, Geometry] = {
    "electron": "ring",
    "x-ray": "debye-scherrer",
    "neutron": "debye-scherrer",
}
_FILLERS = frozenset(
    (
        "radiation",
        "tube",
        "source",
        "beam",
        "wavelength",
        "lambda",
        "λ",
        "energy",
        "diffraction",
        "powder",
        "with",
        "and",
        "at",
        "of",
        "the",
        "in",
        "ring",
        "rings",
        "pattern",
        "geometry",
        "detector",
        "unpolarised",
        "unpolarized",
    )
)
_LINES = {"1": "Kα1", "2": "Kα2", "": "Kα", "12": "Kα"}

_QUANTITY = re.compile(
    rf"{NUMBER}\s*-?\s*(kv|kev|mv|mev|ev|volts?|v|angstroms?|å|a|nm|pm)\b(?!\w)", re.IGNORECASE
)
_MONOCHROMATOR = re.compile(
    rf"(?:(\w+)[\s-]+)?monochromat(?:or|ed|ised|ized)(?:\s*(?:2θ|2theta)?\s*{NUMBER}\s*(?:°|deg\w*))?"
)
_POLARISATION = re.compile(rf"polari[sz](?:ation|ed)\s*(?:fraction)?\s*{NUMBER}\s*(%)?")
_ANODE = re.compile(
    r"\b([a-z]{1,2})[\s-]*k[\s_-]*(alpha|beta|a|b|α|β)[\s-]*_?([123](?:\s*[,+/&]\s*[123])?)?(?!\w)"
)
_FILTER = re.compile(r"\b(ni|fe|mn|v|zr|pd|rh)[\s-]*filter(?:ed)?\b")
_TUBE_SETTING = re.compile(rf"{NUMBER}\s*(?:kv|ma|kw)\b")


def parse_probe(text: str, *, scale_sigma: float | None = None) -> Probe:
    """Read a probe from words, whatever the case, spacing and letters (Å or A, α or a or alpha).

    Radiation: electron, x-ray, neutron; then a voltage, energy, wavelength or anode line. Optional
    words: bragg-brentano, debye-scherrer, transmission, time of flight, "graphite monochromator",
    "monochromator 26.6 deg", "polarisation 0.95". Without a geometry electrons make plate rings,
    tubes are read in Bragg-Brentano geometry, other X-rays and neutrons as Debye-Scherrer.

    `scale_sigma` is the relative one-sigma of the scale; None takes a default of that radiation.
    Raises InputError, with the nearest spelling, when the text cannot be understood.
    """
    words = _Words.read(text)
    kind = words.kind or words.kind_from_unit()
    if kind is None:
        words.complain("no radiation is named")
    return _assemble(words, kind, scale_sigma)


@dataclass(slots=True)
class _Words:
    """A probe's text taken apart."""

    text: str
    kind: Kind | None = None
    synchrotron: bool = False
    anode: str = ""
    line: str = ""
    number: float | None = None
    unit: str = ""
    geometry: Geometry | None = None
    monochromator: tuple[str, float | None] | None = None
    polarisation: float | None = None
    rest: list[str] = field(default_factory=list)

    @classmethod
    def read(cls, text: str) -> _Words:
        words = cls(text=text.strip())
        if not words.text:
            raise InputError("the probe is empty", remedy=f"Write {EXAMPLES}.")
        if len(words.text) > 200:
            raise InputError("the probe is too long to be one", remedy=f"Write {EXAMPLES}.")
        plain = unicodedata.normalize("NFKC", words.text).lower().replace("−", "-")
        for pattern, word in _PHRASES:
            plain = re.sub(pattern, word, plain)
        plain = words._take_options(re.sub(r"[=:;()]", " ", plain))
        plain = words._take_anode(plain)
        plain = words._take_quantity(plain)
        for word in re.split(r"[\s,/]+", plain):
            words._take_word(word)
        if words.rest:
            words.complain(f"'{words.rest[0]}' is not understood")
        return words

    def _take_options(self, plain: str) -> str:
        if match := _POLARISATION.search(plain):
            value = read_number(match[1], match[2]) * (0.01 if match[3] else 1.0)
            if not 0.0 < value <= 1.0:
                self.complain(f"a polarisation fraction of {value:g} is not between 0 and 1")
            self.polarisation = value
            plain = plain.replace(match[0], " ")
        if match := _MONOCHROMATOR.search(plain):
            name = match[1] or ""
            angle = read_number(match[2], match[3]) if match[2] else None
            if angle is not None and not 0.0 < angle < 180.0:
                self.complain(f"a monochromator angle of {angle:g}° is not between 0 and 180°")
            crystal = next((c for c in MONOCHROMATORS if name and c.startswith(name)), "")
            self.monochromator = (crystal, angle)
            plain = plain.replace(match[0], " " if crystal else f" {name} ")
        return plain

    def _take_anode(self, plain: str) -> str:
        match = _ANODE.search(plain)
        if match is not None:
            element = match[1].capitalize()
            index = re.sub(r"\D", "", match[3] or "")
            if match[2] in ("b", "beta", "β"):
                self.line = "Kβ"
            elif index in _LINES:
                self.line = _LINES[index]
            else:
                self.complain(f"there is no line Kα{index}")
        else:
            names = "|".join(name.lower() for name in ANODES)
            match = re.search(rf"\b({names})\b(?=\s*(?:tube|anode|radiation|target|$|,))", plain)
            if match is None:
                return plain
            element, self.line = match[1].capitalize(), "Kα"
        if element not in ANODES:
            self.complain(
                f"no wavelengths are kept for an anode of {element}; known are {', '.join(ANODES)}"
            )
        self.anode = element
        plain = _FILTER.sub(" ", plain.replace(match[0], " ", 1))
        return re.sub(r"\b(anode|target)\b", " ", _TUBE_SETTING.sub(" ", plain))

    def _take_quantity(self, plain: str) -> str:
        found = list(_QUANTITY.finditer(plain))
        if len(found) > 1 or (found and self.anode):
            self.complain("more than one wavelength, energy or voltage is given")
        if not found:
            return plain
        self.number, self.unit = read_number(found[0][1], found[0][2]), found[0][3].lower()
        return plain.replace(found[0][0], " ")

    def _take_word(self, word: str) -> None:
        if word in _KINDS:
            if self.kind not in (None, _KINDS[word]):
                self.complain(f"both {self.kind} and {_KINDS[word]} are named")
            self.kind = _KINDS[word]
            self.synchrotron |= word == "synchrotron"
        elif word in _GEOMETRIES:
            if self.geometry not in (None, _GEOMETRIES[word]):
                self.complain(f"both {self.geometry} and {_GEOMETRIES[word]} are named")
            self.geometry = _GEOMETRIES[word]
        elif word and word not in _FILLERS:
            self.rest.append(word)

    def kind_from_unit(self) -> Kind | None:
        if self.anode:
            return "x-ray"
        if self.unit in ("kv", "mv"):
            return "electron"
        return "neutron" if self.geometry == "time-of-flight" else None

    def complain(self, what: str) -> NoReturn:
        known = [
            *(word for word in _KINDS if len(word) > 1),
            *_GEOMETRIES,
            *MONOCHROMATORS,
            "monochromator",
            "polarisation",
            "kV",
            "keV",
        ]
        close = next(
            (found[0] for word in self.rest if (found := get_close_matches(word, known, n=1))), None
        )
        nearest = "" if close is None else f"Did you mean '{close}'? "
        numbers = [word for word in self.rest if re.fullmatch(NUMBER, word)]
        if numbers and self.kind:
            unit = {"electron": "kV", "x-ray": "keV", "neutron": "A"}[self.kind]
            if self.kind == "x-ray" and float(numbers[0].replace(",", ".")) < 3.0:
                unit = "A"
            nearest = f"The number needs its unit: '{self.kind} {numbers[0]} {unit}'. "
        raise InputError(
            f"cannot read the probe '{self.text}': {what}", remedy=f"{nearest}Write {EXAMPLES}."
        )


def _assemble(words: _Words, kind: Kind, scale_sigma: float | None) -> Probe:
    remarks: list[str] = []
    stated = bool(words.anode) or words.number is not None
    tof = words.geometry == "time-of-flight"
    if tof and kind != "neutron":
        words.complain("time of flight is a way to measure with neutrons")
    if words.anode and kind != "x-ray":
        words.complain(f"{words.anode} {words.line} is an X-ray line")
    if not stated and not tof:
        usual = _Words.read(f"{kind} {_USUAL[kind]}")
        words.anode, words.line = usual.anode, usual.line
        words.number, words.unit = usual.number, usual.unit
        shown = f"{usual.anode} Kα" if usual.anode else _USUAL[kind].replace("A", "Å")
        remarks.append(f"Wavelength not stated: {shown} assumed; write '{kind} {_USUAL[kind]}'.")
    wavelength, shown = (_TOF_NOMINAL_A, "time of flight") if tof else _wavelength(words, kind)
    low, high = _RANGE_A[kind]
    if not low <= wavelength <= high:
        words.complain(f"a wavelength of {wavelength:.3g} Å is outside {low:g} to {high:g} Å")
    usual_geometry = "bragg-brentano" if words.anode else _DEFAULT_GEOMETRY[kind]
    geometry = words.geometry or usual_geometry
    if kind == "electron" and geometry != "ring":
        geometry = (
            "ring"  # transmission is how electron rings are made; a reflection shows the same
        )
    label = [kind if not stated and not tof else f"{kind} {shown}"]
    if geometry not in (usual_geometry, "time-of-flight"):
        label.append(geometry)
    polarisation = words.polarisation
    if polarisation is None and words.synchrotron and geometry != "transmission":
        polarisation = 0.95
        remarks.append("Polarisation not stated: 0.95 normal to the plane of diffraction assumed.")
    if polarisation is not None and kind == "x-ray":
        label.append(f"polarisation {plain_number(polarisation)}")
    angle = _monochromator_angle(words, wavelength)
    if angle:
        label.append(f"monochromator {plain_number(angle)}°")
    scale = _DEFAULT_SCALE["tube" if words.anode else kind]
    if scale_sigma is not None:
        scale = check_relative(scale_sigma)
    return Probe(
        kind=kind,
        wavelength_A=wavelength,
        scale_sigma=scale,
        label=", ".join(label),
        geometry=geometry,
        polarisation=polarisation if polarisation is not None and kind == "x-ray" else 0.5,
        monochromator_two_theta_deg=angle,
        ghosts=ghosts(words.anode, words.line) if words.anode and not angle else (),
        wavelength_stated=stated,
        scale_stated=scale_sigma is not None,
        assumed=tuple(remarks),
    )


def _wavelength(words: _Words, kind: Kind) -> tuple[float, str]:
    """Wavelength (Å) and how to write it."""
    if words.anode:
        k = ANODES[words.anode]
        value = {"Kα": k.Ka_A, "Kα1": k.Ka1_A, "Kα2": k.Ka2_A, "Kβ": k.Kb1_A}[words.line]
        return value, f"{words.anode} {words.line}"
    assert words.number is not None
    number, unit = words.number, words.unit
    if number <= 0:
        words.complain("a wavelength, energy or voltage must be above zero")
    if unit in ("nm", "pm", "a", "å") or unit.startswith("angstrom"):
        number *= {"nm": units.A_PER_NM, "pm": units.A_PER_PM}.get(unit, 1.0)
        number = float(f"{number:.12g}")  # 0.154 nm is 1.54 Å, not 1.5399999999999998
        return number, f"{plain_number(number)} Å"
    volts = unit in ("kv", "mv", "v") or unit.startswith("volt")
    if kind == "neutron":
        if unit not in ("mev", "ev"):
            words.complain("a neutron is told by its wavelength in Å or its energy in meV")
        energy_meV = number * (1e3 if unit == "ev" else 1.0)
        return units.neutron_wavelength_A(energy_meV), f"{plain_number(energy_meV)} meV"
    if kind == "x-ray" and volts:
        words.complain("kV is the tube's voltage; X-rays are told by anode, keV or Å")
    kilo = number * {"m": 1e3, "k": 1.0}.get(unit[0], 1e-3)
    if kind == "electron":
        return units.electron_wavelength_A(kilo), f"{plain_number(kilo)} kV"
    return units.xray_wavelength_A(kilo), f"{plain_number(kilo)} keV"


def _monochromator_angle(words: _Words, wavelength_A: float) -> float:
    if words.monochromator is None or words.geometry == "time-of-flight":
        return 0.0
    crystal, angle = words.monochromator
    if angle is not None:
        return angle
    if not crystal:
        words.complain("the monochromator's crystal or angle is missing")
    sine = wavelength_A / (2.0 * MONOCHROMATORS[crystal])
    if sine >= 1.0:
        words.complain(f"{crystal} cannot reflect {wavelength_A:.3g} Å")
    return round(2.0 * degrees(asin(sine)), 2)
