"""The report's colours: chosen by us, told apart by colour-blind readers, on light and on dark.

`tests/report/test_report_palette.py` measures contrast and distances for the three kinds of colour
blindness. Colour is never the only sign: markers, line styles and labels say the same.
"""

from __future__ import annotations

import re
from dataclasses import dataclass


@dataclass(frozen=True)
class Swatch:
    """One colour on the light and on the dark surface."""

    light: str
    dark: str


PALETTE: dict[str, Swatch] = {
    "surface": Swatch("#fffefc", "#181c22"),
    "ink": Swatch("#1d2329", "#e6e9ec"),
    "quiet": Swatch("#56606b", "#a3adb8"),
    "hair": Swatch("#d9dee3", "#353d47"),
    "data": Swatch("#1b5fab", "#5f9fea"),
    "measure": Swatch("#bb5a06", "#f2a33c"),
    "third": Swatch("#6d1250", "#e8c8f0"),
}
"""Surface, text, quiet text and axes, grid lines; data qubits (and state 0), measure qubits (and
state 1), and the third thing (state 2, the leakage-free curve, a highlighted entry)."""

LIGHT: dict[str, str] = {name: swatch.light for name, swatch in PALETTE.items()}

_HEX = re.compile(r"#[0-9a-fA-F]{6}\b")
_NAME_OF = {swatch.light: name for name, swatch in PALETTE.items()}


def themed(svg_part: str) -> str:
    """Return style text with each palette colour as a CSS variable that falls back to itself.

    A figure drawn once for the light surface then follows the page into the dark.
    """

    def variable(match: re.Match[str]) -> str:
        name = _NAME_OF.get(match.group().lower())
        return match.group() if name is None else f"var(--{name}, {match.group()})"

    return _HEX.sub(variable, svg_part)


def variables(*, dark: bool) -> str:
    """Return the CSS variables of the palette, one declaration after the other."""
    return " ".join(
        f"--{name}: {swatch.dark if dark else swatch.light};" for name, swatch in PALETTE.items()
    )
