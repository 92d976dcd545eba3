"""Pictures for screen and print: the spectrum, the proof of an element, the scale, overviews, maps.

Every ``draw_`` function takes axes of your own or makes a figure of its own, and returns the axes it
drew in; `save_figure` writes PNG, SVG or PDF. The library is matplotlib, its global state untouched.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from xrfid.errors import InputError
from xrfid.identify.result import Identification, Verdict
from xrfid.report import style, wording
from xrfid.report.canvas import drawable, look, new_figure, save_figure, single_axes
from xrfid.report.marks import Mark, marks, shown_range, spread, strongest
from xrfid.report.proof import ProofPanel, proof_panels

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["draw_maps", "draw_overview", "draw_proof", "draw_scale_residuals", "draw_spectrum", "save_figure"]

_LABEL_PT = 8.0
_KIND_FONT: Mapping[str, dict[str, Any]] = {
    "sample": {"fontweight": "bold", "color": style.INK},
    "open": {"fontweight": "bold", "color": style.ACCENT},
    "instrument": {"color": style.SOFT},
    "artefact": {"color": style.SOFT, "fontstyle": "italic"},
    "unexplained": {"color": style.ACCENT, "fontweight": "bold"},
}


def draw_spectrum(identification: Identification, axes: Sequence[Axes] | None = None) -> tuple[Axes, Axes]:
    """Draw counts (log scale), model, continuum and parts with named peaks, and the residuals below.

    Parameters
    ----------
    identification : Identification
        With its curves.
    axes : sequence of two Axes, optional
        For the spectrum and for the residuals; leave room above the first for the names (about 60 points).

    Returns
    -------
    tuple of two Axes
    """
    _need_curves(identification)
    with look():
        if axes is None:
            figure = new_figure(10.0, 6.0)
            grid = figure.add_gridspec(
                2, 1, height_ratios=(4, 1), hspace=0.06, left=0.075, right=0.985, top=0.765, bottom=0.085
            )
            upper = figure.add_subplot(grid[0])
            lower = figure.add_subplot(grid[1], sharex=upper)
            _headline(figure, identification)
        else:
            upper, lower = axes
        upper.set_xlim(*shown_range(identification.curves))
        _curves(identification, upper)
        _names(marks(identification), upper)
        _residuals(identification, lower)
        upper.tick_params(labelbottom=False)
    return upper, lower


def draw_proof(
    identification: Identification, element: str, axes: Sequence[Axes] | None = None
) -> tuple[Axes, ...]:
    """Draw, around each line group of `element`, the counts and the best models with and without it.

    Below each panel: what the two models leave of the counts, in standard deviations.

    Parameters
    ----------
    identification : Identification
        With its curves.
    element : str
        Symbol of an element among the findings.
    axes : sequence of Axes, optional
        One for each panel, left to right; panels beyond them are left out. The residuals hang below each:
        leave half of its height free there.

    Raises
    ------
    KeyError
        If `element` is not among the findings.
    InputError
        If there is no model without it to compare with.
    """
    finding = identification[element]
    panels = proof_panels(identification, element)
    if not panels:
        raise InputError(
            wording.subject(identification), f"nothing to draw for {element}: no model without it was kept"
        )
    with look():
        if axes is None:
            axes = _proof_axes(len(panels), f"{element}, {finding.verdict}", finding.evidence.significance)
        used = tuple(axes)[: len(panels)]
        for panel, ax in zip(panels, used, strict=False):
            _proof_panel(panel, ax)
        used[0].set_ylabel("counts per channel")
        used[0].child_axes[0].set_ylabel("σ")
        used[0].legend(
            loc="lower left", bbox_to_anchor=(0.0, 1.13), ncols=4, borderaxespad=0.0, borderpad=0.0,
            handlelength=2.6, columnspacing=1.4,
        )  # fmt: skip
    return used


def draw_scale_residuals(identification: Identification, axes: Axes | None = None) -> Axes:
    """Draw by how many eV each line group used for the energy scale lies off it."""
    used = identification.calibration
    with look():
        ax = axes or single_axes(7.0, 3.4, above_in=0.95)
        ax.axhline(0.0, color=style.SOFT, linewidth=0.8)
        named = []
        for name, energy, residual, sigma in used.residuals:
            ax.errorbar(energy, residual, sigma, fmt="o", markersize=3.5, color=style.INK, ecolor=style.SOFT,
                        elinewidth=0.9, capsize=2)  # fmt: skip
            element, _, group = name.partition(" ")
            named.append(
                Mark(f"{element} {wording.line_name(group)}", energy, residual + sigma, 1.0, "sample")
            )
        if not used.residuals:
            ax.text(0.5, 0.6, "no line was used for this scale", transform=ax.transAxes, ha="center")
            ax.set_xticks([])
        ax.set_xlabel("energy (keV)")
        ax.set_ylabel("line minus scale (eV)")
        ax.margins(x=0.08, y=0.15)
        ax.autoscale_view()
        _names(sorted(named, key=lambda m: m.energy_kev), ax)
        if axes is None:
            title = wording.scale_line(identification)
            ax.figure.text(0.012, 0.98, title, va="top", fontsize=9, parse_math=False)
    return ax


def draw_overview(identifications: Sequence[Identification], axes: Axes | None = None) -> Axes:
    """Draw which elements each of several spectra shows; one row a spectrum, one column an element.

    Full discs are identified elements, rings tentative or unresolved ones, small ticks come from the
    instrument; the area grows with the logarithm of the significance.
    """
    from xrfid.report.table import shown_elements

    elements = shown_elements(identifications)
    with look():
        ax = axes or single_axes(2.6 + 0.3 * max(len(elements), 6), 0.9 + 0.26 * max(len(identifications), 3))
        for row, identification in enumerate(identifications):
            for finding in identification.findings:
                _overview_mark(
                    ax, elements.index(finding.element), row, finding.verdict, finding.evidence.significance
                )
        ax.set_xticks(range(len(elements)), elements, fontweight="bold")
        names = [drawable(name) for name in wording.short_names(identifications)]
        ax.set_yticks(
            range(len(names)), [n if len(n) <= 32 else "…" + n[-31:] for n in names], parse_math=False
        )
        ax.set_xlim(-0.6, len(elements) - 0.4)
        ax.set_ylim(len(identifications) - 0.4, -0.6)
        ax.tick_params(length=0, labeltop=True, labelbottom=False)
        ax.grid(color=style.FAINT, linewidth=0.5)
        ax.set_axisbelow(True)
        for side in ax.spines.values():
            side.set_visible(False)
        ax.set_xlabel(
            "disc: identified    ring: tentative or unresolved    tick: from the instrument", fontsize=8
        )
        if axes is None:
            _fit_margins(ax)
    return ax


def draw_maps(
    maps: Mapping[str, NDArray[Any]], units: str = "counts", axes: Sequence[Axes] | None = None
) -> tuple[Axes, ...]:
    """Draw maps side by side, each with its own scale from its 1st to its 99.5th percentile.

    Parameters
    ----------
    maps : mapping of str to ndarray, shape (rows, columns)
        Title and values; NaN is left blank.
    units : str
        What the values are.
    axes : sequence of Axes, optional
        As many as there are maps.

    Raises
    ------
    InputError
        If there is no map, or one is not two-dimensional.
    """
    if not maps:
        raise InputError("maps", "there is none to draw")
    for name, values in maps.items():
        if np.ndim(values) != 2:
            raise InputError(f'map "{name}"', f"shape {np.shape(values)} is not (rows, columns)")
    with look():
        if axes is None:
            columns = min(len(maps), 4)
            rows = -(-len(maps) // columns)
            tallest = max(np.shape(v)[0] / max(np.shape(v)[1], 1) for v in maps.values())
            figure = new_figure(3.0 * columns, (0.5 + 2.2 * min(tallest, 3.0)) * rows, layout="compressed")
            everything = list(np.ravel(figure.subplots(rows, columns, squeeze=False)))
            for spare in everything[len(maps) :]:
                spare.remove()
            axes = everything[: len(maps)]
        for (name, values), ax in zip(maps.items(), axes, strict=True):
            _one_map(ax, name, np.asarray(values, dtype=float), units)
    return tuple(axes)


def _need_curves(identification: Identification) -> None:
    if identification.curves.counts.size == 0:
        raise InputError(
            wording.subject(identification),
            "the result holds no curves to draw",
            "identify the spectrum again",
        )


def _headline(figure: Figure, identification: Identification) -> None:
    source = identification.source
    name = wording.subject(identification)
    title = name if not source.title or source.title == name else f"{name} – {source.title}"
    title = title if len(title) <= 90 else title[:89] + "…"
    figure.text(0.012, 0.985, drawable(title), va="top", fontsize=11, fontweight="bold", parse_math=False)
    named = ", ".join(identification.identified) or "no element"
    below = f"{wording.source_line(identification)}.  Identified: {named}"
    figure.text(0.012, 0.942, below, va="top", fontsize=8.5, color=style.SOFT, parse_math=False, wrap=True)


def _curves(identification: Identification, ax: Axes) -> None:
    curves = identification.curves
    energy, first, last = curves.energy_kev, *_fitted(identification)
    low, high = ax.get_xlim()
    shown = (energy >= low) & (energy <= high)
    top = float(max(curves.counts[shown].max(initial=1.0), 10.0))
    floor = max(0.5, 0.3 * float(np.percentile(curves.model[first:last], 5)))
    ax.set_yscale("log")
    ax.set_ylim(floor, top * 1.6)
    ax.fill_between(
        energy, np.maximum(curves.counts, floor), floor, step="mid", color=style.WASH, linewidth=0
    )
    for name, part in curves.parts.items():
        if np.max(part, initial=0.0) > floor and name != "shape corrections":
            ax.plot(energy, np.where(part > floor / 2, part, np.nan), **style.PART.matplotlib())
    ax.plot([], [], **style.PART.matplotlib(), label="parts")
    ax.plot(
        energy,
        np.maximum(curves.counts, floor / 2),
        drawstyle="steps-mid",
        **style.COUNTS.matplotlib(),
        label="counts",
    )
    ax.plot(
        energy[first:last], curves.continuum[first:last], **style.CONTINUUM.matplotlib(), label="continuum"
    )
    ax.plot(
        energy[first:last],
        np.maximum(curves.model[first:last], floor / 2),
        **style.MODEL.matplotlib(),
        label="model",
    )
    ax.set_ylabel("counts per channel")
    handles, labels = ax.get_legend_handles_labels()
    order = [labels.index(x) for x in ("counts", "model", "continuum", "parts")]
    ax.legend([handles[i] for i in order], [labels[i] for i in order], loc="upper right", handlelength=2.8)


def _fitted(identification: Identification) -> tuple[int, int]:
    first, last = identification.curves.fitted
    return (first, last) if last > first else (0, identification.curves.counts.size)


def _names(named: Sequence[Mark], ax: Axes) -> None:
    """Write names above the axes, spread so that none covers another, each led to its peak."""
    low, high = ax.get_xlim()
    bottom, top = ax.get_ylim()
    figure = ax.get_figure(root=True)
    assert figure is not None
    gap = 1.45 * _LABEL_PT / (ax.get_window_extent().width / figure.dpi * 72.0)
    chosen = strongest([m for m in named if low < m.energy_kev < high], int(1.0 / gap))
    at = [(m.energy_kev - low) / (high - low) for m in chosen]
    for mark, x, moved in zip(chosen, at, spread(at, gap, 0.0, 1.0), strict=True):
        start = 1.25 * mark.height if ax.get_yscale() == "log" else mark.height
        ax.plot([mark.energy_kev] * 2, [min(start, top), top], **style.LEADER.matplotlib(), zorder=1)
        ax.plot([x, moved, moved], [1.0, 1.035, 1.045], transform=ax.transAxes, clip_on=False, zorder=1,
                **style.LEADER.matplotlib())  # fmt: skip
        ax.text(moved, 1.05, mark.text, transform=ax.transAxes, rotation=90, ha="center", va="bottom",
                fontsize=_LABEL_PT, gid="peak name", **_KIND_FONT[mark.kind])  # fmt: skip
    ax.set_xlim(low, high)
    ax.set_ylim(bottom, top)


def _residuals(identification: Identification, ax: Axes) -> None:
    curves = identification.curves
    first, last = _fitted(identification)
    energy, residual = curves.energy_kev[first:last], curves.residual[first:last]
    reach = float(np.clip(1.1 * np.percentile(np.abs(residual), 99.8), 4.5, 20.0))
    ax.axhspan(-3, 3, color=style.WASH, linewidth=0)
    ax.axhline(0, color=style.SOFT, linewidth=0.6)
    ax.plot(energy, np.clip(residual, -reach, reach), drawstyle="steps-mid", **style.COUNTS.matplotlib())
    ax.set_ylim(-reach, reach)
    ax.set_yticks([-3, 0, 3])
    ax.set_ylabel("residual (σ)")
    ax.set_xlabel("energy (keV)")


def _proof_axes(panels: int, title: str, significance: float) -> list[Axes]:
    width = 1.0 + 2.6 * max(panels, 2)
    figure = new_figure(width, 4.0)
    axes = list(np.ravel(figure.subplots(1, panels, squeeze=False)))
    figure.subplots_adjust(left=0.62 / width, right=0.985, top=0.77, bottom=0.35, wspace=0.3)
    said = f"{title}: {wording.significance(significance)} sigma"
    figure.text(0.12 / width, 0.97, said, va="top", fontsize=11, fontweight="bold")
    return axes


def _proof_panel(panel: ProofPanel, ax: Axes) -> None:
    energy = panel.energy_kev
    ax.fill_between(
        energy,
        panel.without,
        np.maximum(panel.model, panel.without),
        color=style.ACCENT_WASH,
        linewidth=0,
        label="what it explains",
    )
    ax.errorbar(energy, panel.counts, np.sqrt(np.maximum(panel.counts, 1.0)), fmt=".", markersize=3.2,
                color=style.INK, ecolor=style.SOFT, elinewidth=0.7, label="counts")  # fmt: skip
    ax.plot(energy, panel.without, **style.WITHOUT.matplotlib(), label="best without it")
    ax.plot(energy, panel.model, **style.MODEL.matplotlib(), label="model")
    ax.set_ylim(*panel.counts_range)
    ax.set_xlim(float(energy[0]), float(energy[-1]))
    ax.set_title(panel.title, loc="left", fontsize=9, fontweight="bold")
    if panel.net:
        ax.set_title(panel.net, loc="right", fontsize=7.5, color=style.SOFT)
    for at in panel.energies_kev:
        ax.axvline(at, **style.LEADER.matplotlib(), zorder=0)
    ax.locator_params(axis="x", nbins=4)
    ax.locator_params(axis="y", nbins=5)
    ax.tick_params(labelbottom=False)
    below = ax.inset_axes((0.0, -0.42, 1.0, 0.36), sharex=ax)
    with_it, without_it = panel.residuals
    below.axhspan(-3.0, 3.0, color=style.WASH, linewidth=0)
    below.plot(energy, without_it, **style.WITHOUT.matplotlib())
    below.plot(energy, with_it, **style.MODEL.matplotlib())
    below.set_ylim(-panel.residual_reach, panel.residual_reach)
    below.set_yticks([-3, 3])
    below.tick_params(labelbottom=True)
    below.set_xlabel("keV")


def _overview_mark(ax: Axes, column: int, row: int, verdict: Verdict, significance: float) -> None:
    size = 22.0 + 34.0 * float(np.log10(max(significance, 1.0)))
    if verdict is Verdict.IDENTIFIED:
        ax.scatter(column, row, s=size, color=style.INK, linewidths=0)
    elif verdict in (Verdict.TENTATIVE, Verdict.UNRESOLVED):
        ax.scatter(column, row, s=size, facecolors=style.PAPER, edgecolors=style.ACCENT, linewidths=1.4)
    elif verdict is Verdict.INSTRUMENT:
        ax.scatter(column, row, s=26.0, marker="|", color=style.SOFT, linewidths=1.2)


def _fit_margins(ax: Axes) -> None:
    """Give row names as much room as they need."""
    figure = ax.get_figure(root=True)
    assert figure is not None
    widths = [label.get_window_extent().width for label in ax.get_yticklabels()]
    left = (max(widths, default=0.0) + 14.0) / figure.dpi
    width, height = figure.get_size_inches()
    grown = width + left
    figure.set_size_inches(grown, height)
    ax.set_position((left / grown, 0.3 / height, (width - 0.15) / grown, 1.0 - 0.65 / height))


def _one_map(ax: Axes, name: str, values: NDArray[np.float64], units: str) -> None:
    from matplotlib.colors import Normalize

    finite = values[np.isfinite(values)]
    low, high = np.percentile(finite, [1.0, 99.5]) if finite.size else (0.0, 1.0)
    image = ax.imshow(values, cmap=style.map_colours(), norm=Normalize(low, max(high, low + 1e-9)),
                      interpolation="nearest", aspect="equal")  # fmt: skip
    ax.set_title(drawable(name), loc="left", fontsize=9, fontweight="bold", parse_math=False)
    ax.tick_params(labelsize=7)
    figure = ax.get_figure(root=True)
    assert figure is not None
    bar = figure.colorbar(image, ax=ax, fraction=0.046, pad=0.03)
    bar.ax.tick_params(labelsize=7)
    bar.set_label(units, fontsize=7)
    bar.outline.set_visible(False)
