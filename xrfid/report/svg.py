"""Small pictures as SVG text: the proof panels of the page, and its spectrum for print.

Written directly, because a page with thirty elements has to be ready within a second and a half.
"""

from __future__ import annotations

from collections.abc import Sequence
from html import escape

import numpy as np
from numpy.typing import ArrayLike, NDArray

from xrfid.identify.result import Identification
from xrfid.report import style
from xrfid.report.marks import marks, shown_range, spread, strongest
from xrfid.report.proof import ProofPanel

_TEXT = f'font-size="10" fill="{style.INK}"'
_KIND_FILL = {"sample": style.INK, "open": style.ACCENT, "unexplained": style.ACCENT}


class _Frame:
    """Maps energies and counts to a rectangle of the drawing; `log` for a logarithmic count axis."""

    def __init__(
        self,
        box: tuple[float, float, float, float],
        x: tuple[float, float],
        y: tuple[float, float],
        log: bool = False,
    ) -> None:
        self.left, self.top, self.right, self.bottom = box
        self.x_range, self.y_range, self.log = x, y, log

    def x(self, energy_kev: ArrayLike) -> NDArray[np.float64]:
        low, high = self.x_range
        return self.left + (np.asarray(energy_kev, dtype=float) - low) / (high - low) * (
            self.right - self.left
        )

    def y(self, counts: ArrayLike) -> NDArray[np.float64]:
        low, high = self.y_range
        value = np.asarray(counts, dtype=float)
        if self.log:
            value = np.log10(np.clip(value, low, high))
            low, high = float(np.log10(low)), float(np.log10(high))
        return np.asarray(self.bottom - (value - low) / (high - low) * (self.bottom - self.top))

    def path(self, energy_kev: ArrayLike, counts: ArrayLike) -> str:
        """Return the commands of a path through the points."""
        return "M" + "L".join(
            f"{x:.1f} {y:.1f}" for x, y in zip(self.x(energy_kev), self.y(counts), strict=True)
        )

    def clipped(self, drawing: str) -> str:
        """Return a drawing of which only what lies in the rectangle shows."""
        width, height = self.right - self.left, self.bottom - self.top
        at = f'x="{self.left}" y="{self.top}" width="{width}" height="{height}"'
        return f'<svg {at} viewBox="{self.left} {self.top} {width} {height}">{drawing}</svg>'

    def axes(self, x_ticks: Sequence[float], y_ticks: Sequence[float]) -> list[str]:
        """Return the two axes with ticks and numbers."""
        line = f'fill="none" stroke="{style.SOFT}" stroke-width="0.6"'
        out = [f'<path d="M{self.left} {self.top}V{self.bottom}H{self.right}" {line}/>']
        for tick, at in zip(x_ticks, self.x(x_ticks), strict=True):
            out.append(f'<path d="M{at:.1f} {self.bottom}v3" {line}/>')
            out.append(
                f'<text x="{at:.1f}" y="{self.bottom + 13:.1f}" text-anchor="middle" {_TEXT}>{tick:g}</text>'
            )
        for tick, at in zip(y_ticks, self.y(y_ticks), strict=True):
            out.append(f'<path d="M{self.left} {at:.1f}h-3" {line}/>')
            out.append(
                f'<text x="{self.left - 5}" y="{at + 3.5:.1f}" text-anchor="end" {_TEXT}>'
                f"{_count(tick)}</text>"
            )
        return out


def proof_svg(panel: ProofPanel, width: int = 300, height: int = 240) -> str:
    """Return one proof panel, counts above and residuals below, as an SVG element of this size."""
    ends = (float(panel.energy_kev[0]), float(panel.energy_kev[-1]))
    above = _Frame((44, 24, width - 8, height - 82), ends, panel.counts_range)
    reach = panel.residual_reach
    below = _Frame((44, height - 72, width - 8, height - 22), ends, (-reach, reach))
    bold = f'font-weight="bold" font-size="11" fill="{style.INK}"'
    out = [_open(width, height, f"{panel.title}: counts, model, and best model without the element")]
    out.append(f'<text x="2" y="12" {bold}>{escape(panel.title)}</text>')
    if panel.net:
        said = f"{panel.net} counts, expected {panel.expected}"
        grey = f'text-anchor="end" font-size="9.5" fill="{style.SOFT}"'
        out.append(f'<text x="{width - 8}" y="12" {grey}>{said}</text>')
    out.append(above.clipped(_proof_curves(above, panel)))
    out.append(below.clipped(_proof_residuals(below, panel)))
    out += above.axes((), _ticks(*above.y_range, 4))
    out += below.axes(_ticks(*below.x_range, 4), (-3.0, 3.0))
    out.append(f'<text x="2" y="{0.5 * (below.top + below.bottom) + 3.5:.1f}" {_TEXT}>σ</text>')
    return "".join([*out, "</svg>"])


def proof_key() -> str:
    """Return the key to the proof panels, as HTML list items."""
    bar = f'<path d="M15 1v12" stroke="{style.SOFT}" stroke-width="0.8"/>'
    dot = f'<path d="M15 7h0" stroke="{style.INK}" stroke-width="4" stroke-linecap="round"/>'
    wash = f'<rect x="2" y="2" width="26" height="10" fill="{style.ACCENT_WASH}"/>'
    strokes = ((style.MODEL, "model"), (style.WITHOUT, "best model without the element"))
    return _key(
        [*_lines(strokes), (wash, "what the element explains"), (bar + dot, "counts with their uncertainty")]
    )


def spectrum_key() -> str:
    """Return the key to the spectrum, as HTML list items."""
    kinds = (style.COUNTS, style.MODEL, style.CONTINUUM, style.PART)
    strokes = list(zip(kinds, ("counts", "model", "continuum", "single parts"), strict=True))
    return _key(_lines(strokes))


def _lines(strokes: Sequence[tuple[style.Stroke, str]]) -> list[tuple[str, str]]:
    return [(f'<path d="M2 7h26" {stroke.svg()}/>', name) for stroke, name in strokes]


def _key(items: Sequence[tuple[str, str]]) -> str:
    picture = '<svg viewBox="0 0 30 14" width="30" height="14" aria-hidden="true">{}</svg>'
    return "".join(f"<li>{picture.format(drawing)} {name}</li>" for drawing, name in items)


def spectrum_svg(identification: Identification, width: int = 1000, height: int = 430) -> str:
    """Return the whole spectrum on a log scale with named peaks, for print and without scripts."""
    curves = identification.curves
    low, high = shown_range(curves)
    shown = (curves.energy_kev >= low) & (curves.energy_kev <= high)
    energy, counts, model = curves.energy_kev[shown], curves.counts[shown], curves.model[shown]
    top = 1.6 * float(max(counts.max(initial=1.0), 10.0))
    frame = _Frame((50, 84, width - 10, height - 34), (low, high), (0.5, top), log=True)
    out = [_open(width, height, "the spectrum: counts per channel against energy in keV, peaks named")]
    out.append(f'<path d="{frame.path(energy, counts)}" {style.COUNTS.svg()}/>')
    out.append(f'<path d="{frame.path(energy, curves.continuum[shown])}" {style.CONTINUUM.svg()}/>')
    out.append(f'<path d="{frame.path(energy, model)}" {style.MODEL.svg()}/>')
    chosen = strongest([m for m in marks(identification) if low < m.energy_kev < high], (width - 60) // 13)
    at = frame.x([m.energy_kev for m in chosen])
    for mark, x, moved in zip(chosen, at, spread(list(at), 12.0, frame.left, frame.right), strict=True):
        peak = float(frame.y(1.25 * mark.height))
        out.append(f'<path d="M{x:.1f} {peak:.1f}V{frame.top}L{moved:.1f} 72v-4" {style.LEADER.svg()}/>')
        fill = _KIND_FILL.get(mark.kind, style.SOFT)
        out.append(
            f'<text transform="translate({moved + 3.5:.1f} 65) rotate(-90)" font-size="10" fill="{fill}">'
            f"{escape(mark.text)}</text>"
        )
    out += frame.axes(_ticks(low, high, 10), [10.0**k for k in range(int(np.log10(top)) + 1)])
    out.append(f'<text x="{width / 2}" y="{height - 4}" text-anchor="middle" {_TEXT}>energy (keV)</text>')
    return "".join([*out, "</svg>"])


def _open(width: int, height: int, label: str) -> str:
    return f'<svg viewBox="0 0 {width} {height}" role="img" aria-label="{escape(label)}">'


def _proof_curves(frame: _Frame, panel: ProofPanel) -> str:
    energy = panel.energy_kev
    guides = "".join(f"M{at:.1f} {frame.top}V{frame.bottom}" for at in frame.x(panel.energies_kev))
    gain = np.maximum(panel.model, panel.without)
    area = frame.path(np.r_[energy, energy[::-1]], np.r_[gain, panel.without[::-1]])
    dots = "".join(f"M{x:.1f} {y:.1f}h0" for x, y in zip(frame.x(energy), frame.y(panel.counts), strict=True))
    return (
        f'<path d="{guides}" {style.LEADER.svg()}/>'
        f'<path d="{area}Z" fill="{style.ACCENT_WASH}"/>'
        f'<path d="{_error_bars(frame, panel)}" fill="none" stroke="{style.SOFT}" stroke-width="0.7"/>'
        f'<path d="{frame.path(energy, panel.without)}" {style.WITHOUT.svg()}/>'
        f'<path d="{frame.path(energy, panel.model)}" {style.MODEL.svg()}/>'
        f'<path d="{dots}" stroke="{style.INK}" stroke-width="3" stroke-linecap="round"/>'
    )


def _proof_residuals(frame: _Frame, panel: ProofPanel) -> str:
    with_it, without_it = panel.residuals
    top, bottom = frame.y([3.0, -3.0])
    band = f'x="{frame.left}" y="{top:.1f}" width="{frame.right - frame.left}" height="{bottom - top:.1f}"'
    return (
        f'<rect {band} fill="{style.WASH}"/>'
        f'<path d="{frame.path(panel.energy_kev, without_it)}" {style.WITHOUT.svg()}/>'
        f'<path d="{frame.path(panel.energy_kev, with_it)}" {style.MODEL.svg()}/>'
    )


def _error_bars(frame: _Frame, panel: ProofPanel) -> str:
    spread_ = np.sqrt(np.maximum(panel.counts, 1.0))
    ends = zip(
        frame.x(panel.energy_kev),
        frame.y(panel.counts - spread_),
        frame.y(panel.counts + spread_),
        strict=True,
    )
    return "".join(f"M{x:.1f} {a:.1f}V{b:.1f}" for x, a, b in ends)


def _ticks(low: float, high: float, about: int) -> list[float]:
    """Return round numbers inside a range, 1, 2 or 5 times a power of ten apart."""
    raw = (high - low) / about
    power = 10.0 ** np.floor(np.log10(raw))
    step = next(m * power for m in (1.0, 2.0, 5.0, 10.0) if m * power >= raw)
    first = int(np.ceil(low / step - 1e-9))
    return [float(round(k * step, 10)) for k in range(first, int(np.floor(high / step + 1e-9)) + 1)]


def _count(value: float) -> str:
    return f"{value / 1e6:g}M" if value >= 1e6 else f"{value / 1e3:g}k" if value >= 1e4 else f"{value:g}"
