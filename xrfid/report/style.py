"""The look of every picture: ink on paper, one accent, and meaning in line style and weight before colour.

Data are ink, what the model says is the accent (a burnt orange that prints as a mid grey and stays
apart from ink for every kind of colour vision), the continuum is dashed, a model without an element
is dash-dotted, single parts are thin and dotted. Nothing is told by hue alone.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.colors import LinearSegmentedColormap

INK = "#1d2126"
PAPER = "#ffffff"
ACCENT = "#b8480c"
SOFT = "#6a7079"
"""Secondary text and thin lines; 4.5:1 or more on paper."""
FAINT = "#d9dbde"
WASH = "#eef0f1"
"""Filled area under the counts."""
ACCENT_WASH = "#f2d5c3"
"""What an element accounts for: the area between the models with and without it."""


@dataclass(frozen=True, slots=True)
class Stroke:
    """How one kind of curve is drawn: colour, width in points, dash pattern in points (empty is solid)."""

    colour: str
    width: float
    dash: tuple[float, ...] = ()

    def matplotlib(self) -> dict[str, Any]:
        """Return it as keywords of matplotlib's ``plot``."""
        style: Any = (0, self.dash) if self.dash else "-"
        return {"color": self.colour, "linewidth": self.width, "linestyle": style}

    def bokeh(self) -> dict[str, Any]:
        """Return it as keywords of a Bokeh line glyph."""
        return {
            "line_color": self.colour,
            "line_width": 1.25 * self.width,
            "line_dash": " ".join(str(round(1.3 * d)) for d in self.dash),
        }

    def svg(self) -> str:
        """Return it as attributes of an SVG path."""
        dash = f' stroke-dasharray="{" ".join(f"{d:g}" for d in self.dash)}"' if self.dash else ""
        return f'fill="none" stroke="{self.colour}" stroke-width="{self.width:g}"{dash}'


COUNTS = Stroke(INK, 0.7)
MODEL = Stroke(ACCENT, 1.5)
CONTINUUM = Stroke(SOFT, 1.1, (5.0, 2.5))
WITHOUT = Stroke(INK, 1.3, (6.0, 2.0, 1.2, 2.0))
PART = Stroke(SOFT, 0.8, (1.2, 1.6))
LEADER = Stroke("#a4a9b0", 0.5)

MATPLOTLIB: Mapping[str, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 9.0,
    "text.color": INK,
    "axes.edgecolor": SOFT,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.6,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.color": SOFT,
    "ytick.color": SOFT,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "legend.frameon": False,
    "legend.fontsize": 8.0,
    "figure.facecolor": PAPER,
    "savefig.facecolor": PAPER,
    "hatch.linewidth": 0.5,
}


def map_colours() -> LinearSegmentedColormap:
    """Return the colour scale of maps: ink to accent to paper, lightness rising all the way."""
    from matplotlib.colors import LinearSegmentedColormap

    stops = ["#14171b", "#4a2c22", ACCENT, "#e8a57a", "#fff6ee"]
    return LinearSegmentedColormap.from_list("xrfid", stops)
