"""Maps for looking at, read from a finished result."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import h5py
import numpy as np
from numpy.typing import NDArray

_MOST_PIXELS = 2000
"""Larger maps are thinned for drawing."""


def read_maps(result: Path, series: Sequence[str]) -> dict[str, NDArray[np.float32]]:
    """Read area maps as pictures.

    A run along a line becomes a picture of one row; of a run with more than two axes the first ones
    are averaged.

    Parameters
    ----------
    result : Path
        A file written by `xrfid.batch.run`.
    series : sequence of str
        ``"Fe K"``, ...

    Returns
    -------
    dict of str to ndarray, shape (rows, columns)
    """
    with h5py.File(result, "r") as file:
        return {name: _picture(file[f"entry/series/{name.replace(' ', '_')}/area"]) for name in series}


def _picture(area: h5py.Dataset) -> NDArray[np.float32]:
    steps = tuple(slice(None, None, -(-n // _MOST_PIXELS)) for n in area.shape[-2:])
    values = np.asarray(area[(..., *steps)])
    if values.ndim == 1:
        return values[None]
    while values.ndim > 2:
        good = np.isfinite(values)
        values = np.where(good, values, 0).sum(axis=0) / np.maximum(good.sum(axis=0), 1)
    return values
