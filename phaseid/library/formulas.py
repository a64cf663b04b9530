"""Formulas and names reduced to keys, so that one spelling finds every other."""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Iterator, Mapping

# IUPAC symbols, in the order of their atomic numbers
# fmt: off
SYMBOLS = (
    "H", "He", "Li", "Be", "B", "C", "N", "O", "F", "Ne", "Na", "Mg", "Al", "Si", "P",
    "S", "Cl", "Ar", "K", "Ca", "Sc", "Ti", "V", "Cr", "Mn", "Fe", "Co", "Ni", "Cu", "Zn",
    "Ga", "Ge", "As", "Se", "Br", "Kr", "Rb", "Sr", "Y", "Zr", "Nb", "Mo", "Tc", "Ru", "Rh",
    "Pd", "Ag", "Cd", "In", "Sn", "Sb", "Te", "I", "Xe", "Cs", "Ba", "La", "Ce", "Pr", "Nd",
    "Pm", "Sm", "Eu", "Gd", "Tb", "Dy", "Ho", "Er", "Tm", "Yb", "Lu", "Hf", "Ta", "W", "Re",
    "Os", "Ir", "Pt", "Au", "Hg", "Tl", "Pb", "Bi", "Po", "At", "Rn", "Fr", "Ra", "Ac", "Th",
    "Pa", "U", "Np", "Pu", "Am", "Cm", "Bk", "Cf", "Es", "Fm", "Md", "No", "Lr", "Rf", "Db",
    "Sg", "Bh", "Hs", "Mt", "Ds", "Rg", "Cn", "Nh", "Fl", "Mc", "Lv", "Ts", "Og",
)
# fmt: on
# IUPAC names, in the same order, as far as anybody has a specimen
# fmt: off
_NAMES = (
    "hydrogen", "helium", "lithium", "beryllium", "boron", "carbon", "nitrogen",
    "oxygen", "fluorine", "neon", "sodium", "magnesium", "aluminium", "silicon",
    "phosphorus", "sulfur", "chlorine", "argon", "potassium", "calcium", "scandium",
    "titanium", "vanadium", "chromium", "manganese", "iron", "cobalt", "nickel",
    "copper", "zinc", "gallium", "germanium", "arsenic", "selenium", "bromine",
    "krypton", "rubidium", "strontium", "yttrium", "zirconium", "niobium", "molybdenum",
    "technetium", "ruthenium", "rhodium", "palladium", "silver", "cadmium", "indium",
    "tin", "antimony", "tellurium", "iodine", "xenon", "caesium", "barium",
    "lanthanum", "cerium", "praseodymium", "neodymium", "promethium", "samarium", "europium",
    "gadolinium", "terbium", "dysprosium", "holmium", "erbium", "thulium", "ytterbium",
    "lutetium", "hafnium", "tantalum", "tungsten", "rhenium", "osmium", "iridium",
    "platinum", "gold", "mercury", "thallium", "lead", "bismuth", "polonium",
    "astatine", "radon", "francium", "radium", "actinium", "thorium", "protactinium",
    "uranium", "neptunium", "plutonium", "americium", "curium", "berkelium", "californium",
    "einsteinium",
)
# fmt: on
_OTHER_NAMES = {"aluminum": "Al", "sulphur": "S", "cesium": "Cs", "wolfram": "W"}
ELEMENT_NAMED = dict(zip(_NAMES, SYMBOLS, strict=False)) | _OTHER_NAMES
ATOMIC_NUMBER = {symbol: z for z, symbol in enumerate(SYMBOLS, start=1)} | {"D": 1, "T": 1}

_SUBSCRIPTS = str.maketrans("₀₁₂₃₄₅₆₇₈₉", "0123456789")
_UMLAUT = re.compile(r"([aou])e(?=\w)")
_APART = re.compile(r"[^\w.]|_")
_AMOUNT = re.compile(r"\d+(?:\.\d*)?|\.\d+")
_GREEK = {
    letter: unicodedata.name(letter).rsplit(" ", 1)[-1].lower()
    for letter in "αβγδεζηθικλμνξοπρστυφχψω"
}
_HYDRATE = re.compile(r"[·•*](\d+(?:\.\d+)?)?([^·•*]+)")
_KEY_PART = re.compile(r"([A-Z][a-z]?)([\d.]+)")
_NEAR = 0.02
_READINGS_MAX = 64
_FORMULA_MAX = 120
_CASELESS_MAX = 20  # characters: readings multiply with length where case is ignored


def element_key(symbol: str) -> str:
    """Return the symbol an element counts as: deuterium and tritium are hydrogen."""
    return "H" if symbol in {"D", "T"} else symbol


def composition_key(amounts: Mapping[str, float]) -> str:
    """Return a key equal for equal compositions, whatever the order and the common factor.

    Atomic fractions to four decimals, elements in alphabetical order.
    """
    merged: dict[str, float] = {}
    for symbol, amount in amounts.items():
        if amount > 0:
            merged[element_key(symbol)] = merged.get(element_key(symbol), 0.0) + amount
    total = sum(merged.values())
    return " ".join(f"{symbol}{merged[symbol] / total:.4f}" for symbol in sorted(merged))


def _readings(text: str, *, exact_case: bool) -> Iterator[dict[str, float]]:
    """Yield every way to read `text` as a formula."""

    def tokens(at: int) -> Iterator[tuple[str, int]]:
        for width in (2, 1):
            piece = text[at : at + width]
            symbol = piece if exact_case else piece.capitalize()
            if len(piece) == width and symbol in ATOMIC_NUMBER:
                yield symbol, at + width

    def amount(at: int) -> tuple[float, int]:
        match = _AMOUNT.match(text, at)
        return (float(match.group()), match.end()) if match else (1.0, at)

    def group(at: int) -> Iterator[tuple[dict[str, float], int]]:
        yield {}, at
        if at >= len(text):
            return
        heads: list[tuple[dict[str, float], int]] = []
        if text[at] in "([":
            for inner, end in group(at + 1):
                if inner and end < len(text) and text[end] in ")]":
                    heads.append((inner, end + 1))
        else:
            heads.extend(({symbol: 1.0}, end) for symbol, end in tokens(at))
        for head, end in heads:
            factor, after = amount(end)
            for tail, stop in group(after):
                sums = {symbol: factor * n for symbol, n in head.items()}
                for symbol, n in tail.items():
                    sums[symbol] = sums.get(symbol, 0.0) + n
                yield sums, stop

    for found, stop in group(0):
        if found and stop == len(text):
            yield found


def near_compositions(key: str, other: str) -> bool:
    """Whether two composition keys hold the same elements in nearly the same amounts.

    Within 0.02 of all atoms, as the FeO of a textbook and a real wüstite.
    """
    pairs = [_KEY_PART.findall(one) for one in (key, other)]
    return [symbol for symbol, _ in pairs[0]] == [symbol for symbol, _ in pairs[1]] and all(
        abs(float(a) - float(b)) <= _NEAR for (_, a), (_, b) in zip(*pairs, strict=True)
    )


def formula_keys(text: str, *, any_case: bool = False) -> list[str]:
    """Return the composition keys that `text` can mean as a formula, the likeliest reading first.

    Spaces, subscript digits, brackets and crystal water ("CaSO4·2H2O") are understood. With
    `any_case` capitals do not count ("al2o3"), which can mean several things ("co": Co, CO).
    An empty list: not a formula.
    """
    packed = re.sub(r"[\s_]+", "", text.translate(_SUBSCRIPTS))
    packed = _HYDRATE.sub(lambda found: f"({found[2]}){found[1] or ''}", packed)
    if len(packed) > (_CASELESS_MAX if any_case else _FORMULA_MAX):
        return []
    keys: dict[str, None] = {}
    for amounts in _readings(packed, exact_case=not any_case):
        key = composition_key(amounts)
        if key:
            keys[key] = None
        if len(keys) == _READINGS_MAX:
            break
    return list(keys)


def name_key(text: str) -> str:
    """Return a name without case, accents, punctuation: "α-Al₂O₃" → "alpha al2o3".

    A vowel and the e that writes its umlaut are one: wüstite, wuestite and wustite are the same.
    """
    plain = text.casefold()
    if not plain.isascii():
        spelled = "".join(f" {_GREEK[c]} " if c in _GREEK else c for c in plain)
        letters = unicodedata.normalize("NFKD", spelled)
        plain = "".join(c for c in letters if not unicodedata.combining(c))
    return " ".join(_UMLAUT.sub(r"\1", _APART.sub(" ", plain)).split())
