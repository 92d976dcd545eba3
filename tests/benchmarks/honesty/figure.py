"""The benchmark's plot: what is found, what is invented, and whether stated uncertainties can be believed."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from .score import Outcome, Scores, Share, Trial, pulls

_INK, _TRUTH, _MARK = "#333333", "#9a9a9a", "#1f6f8b"


def save(path: Path, scores: Scores, outcomes: Sequence[Outcome]) -> None:
    """Draw the four panels and save them as PNG, PDF or SVG by the path's ending."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(10, 7.4), layout="constrained")
    FigureCanvasAgg(figure)
    axes = figure.subplots(2, 2)
    _recall(axes[0, 0], scores)
    _levels(axes[0, 1], scores)
    _pulls(axes[1, 0], scores, pulls(outcomes))
    _limit(axes[1, 1], scores, [t for o in outcomes for t in o.trials])
    for ax in axes.flat:
        ax.spines[["top", "right"]].set_visible(False)
        ax.tick_params(colors=_INK)
    figure.suptitle(f"{scores.spectra} simulated spectra with known truth", color=_INK)
    figure.savefig(path, dpi=160)


def _bars(ax: Any, x: Sequence[float], shares: Sequence[Share]) -> None:
    """Shares as points with their 68 per cent intervals."""
    y = np.array([s.value for s in shares])
    low, high = np.array([s.interval for s in shares]).T
    spread = np.maximum([y - low, high - y], 0.0)
    ax.errorbar(x, y, yerr=spread, fmt="o", color=_MARK, ms=5, lw=1.2, capsize=0)


def _recall(ax: Any, scores: Scores) -> None:
    rows = [(lo, hi, s) for lo, hi, s in scores.by_significance if s.of]
    top = max((lo for lo, _, _ in rows), default=1.0) * 3.0
    x = [math.sqrt(lo * min(hi, top)) for lo, hi, _ in rows]
    _bars(ax, x, [s for _, _, s in rows])
    ax.axvline(6, color=_TRUTH, lw=0.8, ls=":")
    ax.set(xscale="log", ylim=(-0.03, 1.03), xlabel="true significance (area / smallest possible uncertainty)",
           ylabel="share identified", title=f"Found: {scores.recall.value:.1%} above 6")  # fmt: skip


def _levels(ax: Any, scores: Scores) -> None:
    asked = np.array([level for level, _, _ in scores.false_by_level])
    seen = np.array([f / n for _, f, n in scores.false_by_level])
    # Poisson interval of about 68 per cent, after Gehrels, Astrophys. J. 303 (1986) 336
    high = np.array([(f + 1 + math.sqrt(f + 0.75)) / n for _, f, n in scores.false_by_level])
    low = np.array([max(f - math.sqrt(f), 0.0) / n for _, f, n in scores.false_by_level])
    ends = np.array([asked.min() / 3, asked.max() * 3])
    ax.plot(ends, ends, color=_TRUTH, lw=0.8, ls=":", label="as asked")
    floor = 0.2 / max(n for _, _, n in scores.false_by_level)
    ax.vlines(asked, np.maximum(low, floor), high, color=_MARK, lw=1.2)
    some = seen > 0
    ax.plot(asked[some], seen[some], "o", color=_MARK, ms=5)
    if not np.all(some):
        ax.plot(asked[~some], high[~some], "v", color=_MARK, ms=5, label="none seen: upper end")
    title = f"Invented: {scores.false_per_spectrum:.3f} per spectrum"
    ax.set(xscale="log", yscale="log", title=title)
    ax.set(xlabel="false-identification level asked for", ylabel="false elements per spectrum")
    ax.legend(frameon=False, fontsize=8)


def _pulls(ax: Any, scores: Scores, values: Sequence[float]) -> None:
    edges = np.linspace(-5, 5, 41)
    ax.hist(np.clip(values, -5, 5), edges, color=_MARK, alpha=0.55)
    x = np.linspace(-5, 5, 300)
    expected = len(values) * (edges[1] - edges[0]) * np.exp(-0.5 * x**2) / math.sqrt(2 * math.pi)
    ax.plot(x, expected, color=_INK, lw=1, label="if the stated sigma were exact")
    inside = f"within 1 sigma {scores.within_1.value:.0%} (68), within 2 sigma {scores.within_2.value:.0%} (95)"
    ax.set(xlabel="(stated - true area) / stated sigma", ylabel="series", title=inside)
    ax.legend(frameon=False, fontsize=8)


def _limit(ax: Any, scores: Scores, trials: Sequence[Trial]) -> None:
    found = np.clip([t.area / t.limit for t in trials], -0.5, 3.0)
    ax.hist(found, np.linspace(-0.5, 3.0, 36), color=_MARK, alpha=0.55)
    threshold = float(np.median([t.threshold / t.limit for t in trials])) if trials else 0.5
    ax.axvline(threshold, color=_INK, lw=1, label="decision threshold (median)")
    ax.axvline(1.0, color=_TRUTH, lw=0.8, ls=":", label="added: the stated limit")
    share = f"Detected at the stated limit: {scores.at_limit.value:.0%} (95 expected)"
    ax.set(xlabel="area found / area added", ylabel="elements", title=share)
    ax.legend(frameon=False, fontsize=8)
