"""The spectrum under review: the page's plot, its names placed by the server, and the curve of a what-if."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from xrfid.identify.result import Identification
from xrfid.report import style
from xrfid.report.marks import marks, ranked, spread
from xrfid.report.plots import spectrum_plot

NAME_GAP_PX = 14.0
_USUAL_WIDTH_PX = 700.0
_COLOURS = {"sample": style.INK, "open": style.ACCENT, "unexplained": style.ACCENT}


class SpectrumPlot:
    """The Bokeh plots of one identification; `layout` is what to show.

    Parameters
    ----------
    identification : Identification
        With its curves.
    height : int
        Of the main plot, pixels.
    """

    def __init__(self, identification: Identification, height: int = 270) -> None:
        from bokeh.events import RangesUpdate
        from bokeh.models import ColumnDataSource

        self.layout: Any = spectrum_plot(identification, height)
        self._identification = identification
        self._marks, self._width = marks(identification), _USUAL_WIDTH_PX
        self._order = {id(m): rank for rank, m in enumerate(ranked(self._marks))}
        self.log, self.linear, self.range = (self._model(name) for name in ("log", "linear", "energy"))
        self._sources: dict[str, Any] = {n: self._model(n) for n in ("names", "leaders", "guides")}
        self._trial = ColumnDataSource({"energy": [], "model": []}, name="trial")
        self.whole = (float(self.range.start), float(self.range.end))
        for plot in (self.log, self.linear):
            plot.line("energy", "model", source=self._trial, **style.WITHOUT.bokeh())
            plot.on_event(RangesUpdate, lambda _: self.refresh())
            plot.on_change("inner_width", self._resized)
        self.refresh()

    def _model(self, name: str) -> Any:
        return self.layout.select_one({"name": name})

    def _resized(self, attr: str, old: Any, new: Any) -> None:
        """Place the names anew when the browser says how wide the plot is."""
        if isinstance(new, int | float) and new > 50:
            self._width = float(new)
            self.refresh()

    def refresh(self) -> None:
        """Place the names and fit the counts axis to what is in view."""
        low, high = float(self.range.start), float(self.range.end)
        width = self._width
        room = max(1, int(width / (1.6 * NAME_GAP_PX)))
        inside = [m for m in self._marks if low < m.energy_kev < high]
        chosen = sorted(sorted(inside, key=lambda m: self._order[id(m)])[:room], key=lambda m: m.energy_kev)
        wanted = [m.energy_kev for m in chosen]
        gap = NAME_GAP_PX * (high - low) / width
        at = spread(wanted, gap, low + gap / 2, high - gap / 2)
        colours = [_COLOURS.get(m.kind, style.SOFT) for m in chosen]
        self._sources["names"].data = {"x": at, "text": [m.text for m in chosen], "colour": colours}
        self._sources["guides"].data = {"energy": wanted}
        bends = [[e, float(x), float(x)] for e, x in zip(wanted, at, strict=True)]
        self._sources["leaders"].data = {"xs": bends, "ys": [[0, 0.13, 0.17]] * len(bends)}
        curves = self._identification.curves
        view = (curves.energy_kev >= low) & (curves.energy_kev <= high)
        top = float(max(curves.counts[view].max(initial=1.0), 1.0))
        self.log.y_range.end, self.linear.y_range.end = max(10.0, 1.8 * top), 1.08 * top

    def show(self, low: float, high: float) -> None:
        """Show these energies (keV), kept inside the whole range and 0.2 keV apart at least."""
        width = float(np.clip(high - low, 0.2, self.whole[1] - self.whole[0]))
        start = float(np.clip((low + high - width) / 2, self.whole[0], self.whole[1] - width))
        self.range.update(start=start, end=start + width)
        self.refresh()

    def zoom(self, factor: float) -> None:
        """Widen (factor > 1) or narrow the view about its middle."""
        middle, half = (self.range.start + self.range.end) / 2, (self.range.end - self.range.start) / 2 * factor
        self.show(middle - half, middle + half)

    def move(self, share: float) -> None:
        """Move the view by a share of its width."""
        step = (self.range.end - self.range.start) * share
        self.show(self.range.start + step, self.range.end + step)

    def scale(self, kind: str) -> None:
        """Show counts on a "log" or "linear" scale."""
        self.log.visible, self.linear.visible = kind == "log", kind == "linear"

    def overlay(self, model: NDArray[np.float64] | None) -> None:
        """Draw the model of a what-if over the spectrum; None takes it away."""
        curves = self._identification.curves
        if model is None:
            self._trial.data = {"energy": [], "model": []}
        else:
            drawn = np.maximum(model, 0.4).astype(np.float32)
            self._trial.data = {"energy": curves.energy_kev.astype(np.float32), "model": drawn}


def map_figure(shape: tuple[int, int]) -> tuple[Any, Any, Any, Any]:
    """Return a figure for maps: figure, image source, region source, colour mapper."""
    from bokeh.models import (
        BoxSelectTool,
        ColumnDataSource,
        DataRange1d,
        LinearColorMapper,
        PanTool,
        TapTool,
        WheelZoomTool,
    )
    from bokeh.models.annotations import ColorBar
    from bokeh.plotting import figure
    from matplotlib.colors import to_hex

    rows, columns = shape
    plot: Any = figure(
        x_range=DataRange1d(range_padding=0), y_range=DataRange1d(range_padding=0, flipped=True),
        tools="", toolbar_location="above", match_aspect=True,
        sizing_mode="stretch_width", height=360, min_border=4, outline_line_color=style.FAINT, name="scan",
    )  # fmt: skip
    plot.toolbar.logo = None
    plot.grid.visible = False
    plot.xaxis.axis_label, plot.yaxis.axis_label = "column", "row"
    plot.axis.axis_label_text_font_style = "normal"
    colours = style.map_colours()
    mapper = LinearColorMapper(palette=[to_hex(colours(i)) for i in range(256)], low=0, high=1, nan_color=style.FAINT)
    image = ColumnDataSource({"image": [np.zeros((1, 1), np.float32)], "dw": [columns], "dh": [rows]})
    plot.image("image", x=0, y=0, dw="dw", dh="dh", source=image, color_mapper=mapper)
    region = ColumnDataSource({"left": [], "right": [], "top": [], "bottom": []})
    plot.quad("left", "right", "top", "bottom", source=region, fill_alpha=0, line_color=style.PAPER, line_width=3)
    plot.quad("left", "right", "top", "bottom", source=region, fill_alpha=0, line_color=style.INK, line_width=1.2)
    bar = ColorBar(color_mapper=mapper, width=10, padding=4, title="net counts", title_text_font_style="normal")
    plot.add_layout(bar, "right")
    box = BoxSelectTool(persistent=False)
    plot.add_tools(box, TapTool(), PanTool(), WheelZoomTool())
    plot.toolbar.active_drag = box
    return plot, image, region, mapper
