"""The maps of a batch result: choose a series, point at the map or drag a region, or type it."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from xrfid.errors import XrfidError
from xrfid.review import pieces
from xrfid.review.plot import map_figure
from xrfid.review.scan import Region, Scan
from xrfid.review.widgets import pn
from xrfid.spectrum import Spectrum


class MapView:
    """Controls and picture.

    `opened` is called with the summed spectrum of every region that is asked for; `safely` wraps what a
    widget does, as `View` wants it.
    """

    def __init__(self, scan: Scan, css: list[str], opened: Callable[[Spectrum], None],
                 safely: Callable[[Callable[[Any], None]], Callable[[Any], None]]) -> None:  # fmt: skip
        from bokeh.events import SelectionGeometry, Tap

        self._scan, self._opened = scan, opened
        self.figure, self._image, self._region, self._mapper = map_figure(scan.shape)
        self.picture = pn.pane.Bokeh(self.figure, sizing_mode="stretch_width", margin=0)
        wide = {"sizing_mode": "stretch_width", "margin": (2, 0), "stylesheets": css}
        self.series = pn.widgets.Select(label="Map of", options=list(scan.series), css_classes=["key-map"], **wide)
        self.series.param.watch(safely(lambda e: self._draw(e.new)), "value")
        rows, columns = scan.shape
        self._bounds = [
            pn.widgets.IntInput(
                label=name, value=0, start=0, end=n - 1, width=135, margin=(2, 8, 2, 0), stylesheets=css
            )
            for name, n in (
                ("first row", rows),
                ("last row", rows),
                ("first column", columns),
                ("last column", columns),
            )
        ]
        self._said = pn.pane.HTML(
            pieces.status("Tap a point or drag a region to identify its summed spectrum."), **wide
        )
        button = pn.widgets.Button(
            label="Identify this region", css_classes=["key-region"], stylesheets=css, margin=(2, 0)
        )
        button.on_click(safely(lambda _: self._typed()))
        fields = pn.FlexBox(*self._bounds, sizing_mode="stretch_width", margin=0)
        self.controls = pn.Column(self.series, fields, button, self._said, sizing_mode="stretch_width", margin=0)
        self.figure.on_event(Tap, lambda e: self._asked((e.y, e.y), (e.x, e.x)))
        self.figure.on_event(SelectionGeometry, self._dragged)
        self._draw(scan.series[0])

    def _draw(self, series: str) -> None:
        """Show one map; the brightest half per cent share the top colour."""
        picture = self._scan.map(series)
        good = picture[np.isfinite(picture)]
        self._mapper.high = max(float(np.quantile(good, 0.995)), 1e-6) if good.size else 1.0
        self._image.data = {"image": [picture], "dw": [self._scan.shape[1]], "dh": [self._scan.shape[0]]}

    def _dragged(self, event: Any) -> None:
        if event.final and event.geometry.get("type") == "rect":
            g = event.geometry
            self._asked((g["y0"], g["y1"]), (g["x0"], g["x1"]))

    def _asked(self, rows: tuple[Any, Any], columns: tuple[Any, Any]) -> None:
        """Take what the browser says of a place, if it is a place."""
        if all(isinstance(x, int | float) and np.isfinite(x) for x in (*rows, *columns)):
            self._open(Region.around(rows, columns, self._scan.shape))

    def _typed(self) -> None:
        first, last, left, right = (float(widget.value or 0) for widget in self._bounds)
        self._open(Region.around((first, last), (left, right), self._scan.shape))

    def _open(self, region: Region) -> None:
        values = (region.first_row, region.last_row, region.first_column, region.last_column)
        for widget, value in zip(self._bounds, values, strict=True):
            widget.value = value
        self._region.data = {
            "left": [values[2]],
            "right": [values[3] + 1],
            "top": [values[0]],
            "bottom": [values[1] + 1],
        }
        try:
            spectrum = self._scan.region(region)
        except XrfidError as error:
            self._said.object = pieces.status(str(error), "bad")
            return
        self._said.object = pieces.status(f"{region}: {spectrum.title}.")
        self._opened(spectrum)
