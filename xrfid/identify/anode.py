"""The tube's own element: scattered lines of the tube are told from lines of the sample.

Scattered target lines and the sample's own lines have the same energies. What tells them apart is
their size: scattered lines stand in a known proportion to the scattered continuum around them,
which the same sample scatters just as well. Far more than that can only be fluorescence.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from xrfid.fit.design import scattered_continuum
from xrfid.fit.model import Fit, Ingredients
from xrfid.response.series import SeriesKey

_FAR_MORE = 20.0
"""Target lines this many times larger than expected are not scattered ones alone (models agree to a factor 3)."""
_WINDOW_KEV = 2.5


@dataclass(frozen=True)
class AnodeInSample:
    """Series of the tube's element that the sample itself must make, and what scatter is expected of the tube."""

    series: tuple[SeriesKey, ...] = ()
    expected: dict[int, tuple[float, float]] = field(default_factory=dict)
    excess: float = 0.0
    """How many times larger than the scattered lines the peaks are."""


def anode_in_sample(ingredients: Ingredients, fit: Fit) -> AnodeInSample:
    """Compare the target's coherently scattered lines with the continuum scattered around them."""
    columns = ingredients.columns
    prediction = columns.prediction
    anode = prediction.source.anode
    if anode is None or prediction.source.n_continuum == 0:
        return AnodeInSample()
    continuum = scattered_continuum(prediction, columns.fractions, columns.shape, columns.grouping)
    centres, fitted = columns.grouping.centres_kev, fit.part("continuum")
    series: list[SeriesKey] = []
    expected: dict[int, tuple[float, float]] = {}
    excess = 0.0
    for i, column in enumerate(ingredients.scatter):
        key = next((k for k in columns.keys if str(k) == column.of), None)
        if column.kind != "coherent scatter" or key is None:
            continue
        area = fit.coefficient("scatter", str(i)) + fit.areas.get(key, 0.0)
        near = np.abs(centres - column.energy_kev) < _WINDOW_KEV
        level = float(fitted[near].sum()) / max(float(continuum[near].sum()), 1e-300)
        usual = level * column.predicted
        noise = float(np.sqrt(np.sum(fit.variance * column.column**2) / np.sum(column.column**2) ** 2))
        if area > _FAR_MORE * usual and area > _FAR_MORE * noise:
            series.append(key)
            excess = max(excess, area / max(usual, 1e-9))
        if area > _FAR_MORE * usual or key in fit.areas:
            expected[i] = (usual, 1.5 * usual + 1.0)
    return AnodeInSample(tuple(series), expected if series else {}, excess)
