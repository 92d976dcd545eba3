"""The interactive spectrum (Bokeh): counts, model, continuum and parts, names above, residuals below.

The models carry names ("energy", "log", "linear", "parts of log",
"parts of linear", "channels", "names", "leaders", "guides"), by which
a page's script or an application finds them. No callback needs to evaluate code from text, so the
plots work under a content security policy without ``unsafe-eval``.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from xrfid.identify.result import Identification
from xrfid.report import style, wording
from xrfid.report.marks import marks, ranked, shown_range

if TYPE_CHECKING:
    from bokeh.models import Column, ColumnDataSource
    from bokeh.plotting import figure

NAMES_HEIGHT_PX = 92
_LEFT_BORDER_PX = 58
_FLOOR = 0.4
"""Counts below one are drawn here on the log scale."""
_KIND_COLOUR = {"sample": style.INK, "open": style.ACCENT, "unexplained": style.ACCENT}
_FONT = "system-ui, DejaVu Sans, sans-serif"
_TIP = f"""
<div style="font: 12px {_FONT}; color: {style.INK}; max-width: 240px">
<b>@energy{{0.000}} keV</b><br>@counts{{0}} counts, model @model{{0.0}}<br>@here<br>
<span style="color: {style.SOFT}">line: @line</span></div>
"""


def spectrum_plot(identification: Identification, height: int = 400) -> Column:
    """Return the plots of one spectrum as one Bokeh layout that takes the width it is given.

    Parameters
    ----------
    identification : Identification
        With its curves.
    height : int
        Height of the main plot in pixels; names and residuals come on top.
    """
    from bokeh.layouts import column
    from bokeh.models import ColumnDataSource, Range1d, VSpan

    low, high = shown_range(identification.curves)
    energy = Range1d(start=low, end=high, bounds=(low, high), min_interval=0.2, name="energy")
    channels = channel_source(identification)
    top = float(max(identification.curves.counts.max(initial=1.0), 10.0))
    logarithmic = _main("log", channels, energy, Range1d(start=_FLOOR, end=1.6 * top), height)
    linear = _main("linear", channels, energy, Range1d(start=0.0, end=1.05 * top), height)
    linear.visible = False
    guides = ColumnDataSource({"energy": []}, name="guides")
    for plot in (logarithmic, linear):
        _parts(plot, identification)
        guide = VSpan(x="energy", line_color=style.LEADER.colour, line_width=0.6)
        plot.add_glyph(guides, guide, level="underlay")
    plots = [_names(energy), logarithmic, linear, _residuals(channels, energy)]
    return column(plots, sizing_mode="stretch_width", spacing=0, name="spectrum")


def channel_source(identification: Identification) -> ColumnDataSource:
    """Return, per channel, all that is drawn and said: counts, model, continuum, residual, `hover_texts`."""
    from bokeh.models import ColumnDataSource

    curves = identification.curves
    here, line = hover_texts(identification)
    data = {
        "energy": curves.energy_kev.astype(np.float32),
        "counts": curves.counts.astype(np.float32),
        "drawn": np.maximum(curves.counts, _FLOOR).astype(np.float32),
        "model": curves.model.astype(np.float32),
        "continuum": curves.continuum.astype(np.float32),
        "residual": np.clip(curves.residual, -20, 20).astype(np.float32),
        "here": here,
        "line": line,
    }
    return ColumnDataSource(data, name="channels")


def hover_texts(identification: Identification) -> tuple[list[str], list[str]]:
    """Return per channel what the model's counts are made of, and the line nearest to it with its share.

    Returns
    -------
    here : list of str
        "Fe K 93 %, continuum 5 %": the two largest parts.
    line : list of str
        "Fe Kα1, 58 % of Fe K"; "none" away from lines.
    """
    curves = identification.curves
    names = ["continuum", *curves.parts]
    shares = np.stack([curves.continuum, *curves.parts.values()]) / np.maximum(curves.model, 1e-9)
    order = np.argsort(-shares, axis=0)[:2]
    largest = np.take_along_axis(shares, order, axis=0)
    here = [
        ", ".join(
            f"{names[i]} {100 * s:.0f} %"
            for i, s in zip(order[:, c], largest[:, c], strict=True)
            if s > 0.005
        )
        for c in range(curves.counts.size)
    ]
    return here, _nearest_lines(identification)


def _nearest_lines(identification: Identification) -> list[str]:
    curves = identification.curves
    lines = [x for x in curves.lines if x[0] in curves.parts]
    if not lines:
        return ["none"] * curves.counts.size
    sigma = identification.calibration.resolution.sigma_kev(np.array([x[2] for x in lines]))
    distance = (curves.energy_kev[None, :] - np.array([x[2] for x in lines])[:, None]) / sigma[:, None]
    strength = np.array([float(curves.parts[x[0]].sum()) * x[3] for x in lines])
    weight: NDArray[np.float64] = strength[:, None] * np.exp(-0.5 * distance**2) * (np.abs(distance) < 2.5)
    best = np.argmax(weight, axis=0)
    said = [f"{x[0].split()[0]} {wording.line_name(x[1])}, {100 * x[3]:.0f} % of {x[0]}" for x in lines]
    return [said[i] if weight[i, c] > 0.5 else "none" for c, i in enumerate(best)]


def mark_data(identification: Identification) -> list[dict[str, Any]]:
    """Return per mark: energy, text, colour, and its rank when there is not room for all (0 comes first)."""
    found = marks(identification)
    ranks = {id(m): i for i, m in enumerate(ranked(found))}
    return [
        {
            "energy": m.energy_kev,
            "text": m.text,
            "colour": _KIND_COLOUR.get(m.kind, style.SOFT),
            "rank": ranks[id(m)],
        }
        for m in found
    ]


def _main(kind: str, channels: ColumnDataSource, energy: Any, counts: Any, height: int) -> figure:
    plot = _plain_figure(energy, counts, height, y_axis_type=kind, name=kind)
    base = _FLOOR if kind == "log" else 0.0
    plot.varea_step(
        x="energy", y1=base, y2="drawn", source=channels, fill_color=style.WASH, step_mode="center"
    )
    plot.step(x="energy", y="drawn", source=channels, mode="center", **style.COUNTS.bokeh())
    plot.line(x="energy", y="continuum", source=channels, **style.CONTINUUM.bokeh())
    model = plot.line(x="energy", y="model", source=channels, **style.MODEL.bokeh())
    _tools(plot, model)
    plot.yaxis.axis_label = "counts per channel"
    plot.xaxis.visible = False
    return plot


def _plain_figure(energy: Any, counts: Any, height: int, **options: Any) -> figure:
    from bokeh.plotting import figure

    # a little border above, because the canvas is not cleared beyond the frame
    plot = figure(
        x_range=energy, y_range=counts, height=height, sizing_mode="stretch_width", tools="",
        toolbar_location=None, min_border_top=2, min_border_bottom=0, min_border_left=_LEFT_BORDER_PX,
        min_border_right=8, outline_line_color=None, background_fill_color=style.PAPER,
        border_fill_color=style.PAPER, **options,
    )  # fmt: skip
    plot.toolbar.logo = None
    plot.grid.grid_line_color = style.FAINT
    plot.grid.grid_line_alpha = 0.6
    plot.axis.axis_line_color = plot.axis.major_tick_line_color = style.SOFT
    plot.axis.minor_tick_line_color = None
    plot.axis.axis_label_text_font_style = "normal"
    plot.axis.axis_label_text_color = plot.axis.major_label_text_color = style.INK
    plot.axis.axis_label_text_font_size = plot.axis.major_label_text_font_size = "11px"
    plot.axis.axis_label_text_font = plot.axis.major_label_text_font = _FONT
    return plot


def _tools(plot: figure, model: Any) -> None:
    from bokeh.models import BoxZoomTool, HoverTool, ResetTool

    hover = HoverTool(
        renderers=[model], mode="vline", tooltips=_TIP, line_policy="nearest", point_policy="snap_to_data"
    )
    box = BoxZoomTool(dimensions="width")
    plot.add_tools(box, ResetTool(), hover)
    plot.toolbar.active_drag = box


def _parts(plot: figure, identification: Identification) -> None:
    """Draw every part as thin dotted lines, where it has counts to show."""
    curves = identification.curves
    xs, ys = [], []
    for name, part in curves.parts.items():
        above = np.flatnonzero(part > _FLOOR / 2)
        for run in np.split(above, np.flatnonzero(np.diff(above) > 1) + 1):
            if run.size > 1 and name != "shape corrections":
                xs.append(curves.energy_kev[run].astype(np.float32).tolist())
                ys.append(part[run].astype(np.float32).tolist())
    plot.multi_line(xs, ys, name=f"parts of {plot.name}", **style.PART.bokeh())


def _names(energy: Any) -> figure:
    from bokeh.core.properties import value
    from bokeh.models import ColumnDataSource, Range1d

    plot = _plain_figure(energy, Range1d(start=0, end=1), NAMES_HEIGHT_PX)
    plot.axis.visible = False
    plot.grid.visible = False
    leaders = ColumnDataSource({"xs": [], "ys": []}, name="leaders")
    names = ColumnDataSource({"x": [], "text": [], "colour": []}, name="names")
    plot.multi_line("xs", "ys", source=leaders, line_color=style.LEADER.colour, line_width=0.8)
    plot.text("x", 0.2, "text", source=names, angle=90, angle_units="deg", text_color="colour",
              text_font_size="11px", text_font=value(_FONT), text_baseline="middle")  # fmt: skip
    return plot


def _residuals(channels: ColumnDataSource, energy: Any) -> figure:
    from bokeh.models import Range1d

    plot = _plain_figure(energy, Range1d(start=-6, end=6), 120)
    plot.step(x="energy", y="residual", source=channels, mode="center", **style.COUNTS.bokeh())
    plot.yaxis.ticker = [-3, 0, 3]
    plot.yaxis.axis_label = "residual (σ)"
    plot.xaxis.axis_label = "energy (keV)"
    return plot
