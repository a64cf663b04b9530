"""How the roles of a picture look, on light and on dark ground, in colour and without.

The hues of the phases are those of Okabe & Ito (2008, Color Universal Design), chosen to stay
apart for colour-blind people, darkened or lightened to a contrast of at least 3:1 on the ground.
Each phase also has a line style, a marker and a letter, so that nothing hangs on colour alone.
"""

from __future__ import annotations

from dataclasses import dataclass

PHASE_STYLES = 4


@dataclass(frozen=True, slots=True)
class Palette:
    """Colours of one ground."""

    ground: str
    ink: str
    soft: str
    faint: str
    phases: tuple[str, str, str, str]


LIGHT = Palette(
    "#ffffff", "#1c1e21", "#5a5f66", "#d9dce0", ("#0067a3", "#c04e00", "#00795a", "#a3447c")
)
DARK = Palette(
    "#15181c", "#eceef0", "#a9b0b8", "#3a4048", ("#6cb8ee", "#f0a04b", "#3fc79b", "#e49ac4")
)
DASHES: tuple[tuple[float, ...], ...] = (
    (),
    (10.0, 4.0),
    (10.0, 3.0, 3.0, 3.0),
    (10.0, 3.0, 3.0, 3.0, 3.0, 3.0),
)
MISSING_DASH = (1.5, 4.5)
WEAK_OPACITY = 0.5


def phase_letter(index: int) -> str:
    """A, B, C, … for the phases of an answer."""
    return "ABCDEFGHIJKLMNOPQRSTUVWXYZ"[index % 26]


def phase_role(index: int) -> str:
    """The role of what belongs to phase `index`."""
    return f"phase{index % PHASE_STYLES + 1}"


def colour(role: str, palette: Palette = LIGHT) -> str:
    """The colour of a role: "missing phase2" is that of phase 2, "weak phase2" half as strong."""
    named = {
        "ground": palette.ground,
        "soft": palette.soft,
        "faint": palette.faint,
        "ink": palette.ink,
    }
    words = role.split()
    found = palette.ink
    for word in words:
        if word.startswith("phase"):
            found = palette.phases[int(word[5:]) - 1]
            break
        if word in named:
            found = named[word]
            break
    return _mixed(found, palette.ground, WEAK_OPACITY) if "weak" in words else found


def _mixed(colour: str, ground: str, opacity: float) -> str:
    parts = (
        round(opacity * int(colour[k : k + 2], 16) + (1 - opacity) * int(ground[k : k + 2], 16))
        for k in (1, 3, 5)
    )
    return "#" + "".join(f"{part:02x}" for part in parts)


def dashes(role: str) -> tuple[float, ...]:
    """Lengths of dash and gap along a line of that role; empty for a line drawn through."""
    words = role.split()
    if "missing" in words:
        return MISSING_DASH
    if "ring" in words:
        for word in words:
            if word.startswith("phase"):
                return DASHES[int(word[5:]) - 1]
    return ()


def palette_css(palette: Palette) -> str:
    """The colours of a ground as CSS custom properties."""
    named = {
        "ground": palette.ground,
        "ink": palette.ink,
        "soft": palette.soft,
        "faint": palette.faint,
        **{f"phase{k}": hue for k, hue in enumerate(palette.phases, start=1)},
    }
    return "".join(f"--{name}:{value};" for name, value in named.items())


def picture_css() -> str:
    """The rules that colour the shapes of an SVG picture by their role."""
    rules = [
        ".picture{font-family:system-ui,-apple-system,'Segoe UI',Roboto,'Noto Sans',sans-serif}",
        ".picture polyline,.picture path{fill:none;stroke:var(--ink)}",
        ".picture text{fill:var(--ink);stroke:var(--ground);stroke-width:3px;"
        "paint-order:stroke;stroke-linejoin:round}",
        ".picture polygon{fill:var(--ink);stroke:none}",
        ".picture text.bold{font-weight:600}",
        f".picture polyline.weak,.picture path.weak{{stroke-opacity:{WEAK_OPACITY}}}",
    ]
    names = ["ground", "soft", "faint", *(f"phase{k + 1}" for k in range(PHASE_STYLES))]
    for name in names:
        rules += [
            f".picture polyline.{name},.picture path.{name}{{stroke:var(--{name})}}",
            f".picture polygon.{name},.picture text.{name}{{fill:var(--{name})}}",
        ]
    return "\n".join(rules)
