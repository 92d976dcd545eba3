"""Is a column an axis? Channel numbers and energies, rounded or not, and the straight line through them."""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.spectrum import EnergyScale

_ENERGY_WORD = re.compile(r"^e|energ|kev|\bev\b", re.I)
_CHANNEL_WORD = re.compile(r"chan|^ch\b|^n$|^i$|index|kanal|bin", re.I)
_EV_WORD = re.compile(r"(?<![km])ev\b", re.I)


_LARGEST = 1e9


@dataclass(frozen=True)
class Axis:
    """What a column of rising numbers is: channel numbers, or energies with their scale."""

    scale: EnergyScale | None
    is_channel: bool
    certain: bool
    said: tuple[str, ...]


def axis_of(values: NDArray[np.float64], name: str = "") -> Axis | None:
    """Return what the column is if it is an axis; None for counts.

    Parameters
    ----------
    values : ndarray, shape (n,)
    name : str
        The column's heading, if it has one.
    """
    finite = np.flatnonzero(np.isfinite(values))
    clean = values[: finite[-1] + 1] if finite.size else values[:0]
    # a gap or an absurd value within is no axis; a shorter column may end in NaN
    if clean.size < 8 or not np.all(np.abs(clean) < _LARGEST) or np.any(np.diff(clean) < 0) or clean[-1] <= clean[0]:
        return None
    index = np.arange(clean.size)
    gain, offset = np.polyfit(index, clean, 1)
    off = float(np.max(np.abs(clean - offset - gain * index)))
    step = np.diff(clean)
    grid = float(np.min(step[step > 0])) if np.any(step > 0) else 0.0
    # a straight line up to rounding; a slight bend is a quadratic term
    if off > max(1.01 * grid, 0.02 * (clean[-1] - clean[0])):
        return None
    whole = bool(np.all(clean == np.round(clean)))
    if whole and np.all(step == 1) and not _ENERGY_WORD.search(name):
        return Axis(None, True, True, ())
    if whole and clean[-1] - clean[0] < 0.5 * clean.size and not _ENERGY_WORD.search(name):
        return None
    return _energy_axis(clean, name)


def _energy_axis(values: NDArray[np.float64], name: str) -> Axis:
    index = np.arange(values.size)
    quadratic, gain, offset = np.polyfit(index, values, 2)
    straight_gain, straight_offset = np.polyfit(index, values, 1)
    bent = np.max(np.abs(np.polyval([quadratic, gain, offset], index) - (straight_offset + straight_gain * index)))
    said: list[str] = []
    grid = _rounding(values)
    off = np.max(np.abs(values - straight_offset - straight_gain * index))
    if off > 0.02 * straight_gain and bent < grid:
        said.append(
            f"the energies are rounded to {grid:g}: the straight line through them is the scale "
            f"({straight_gain:.6g} per channel)"
        )
    if bent < max(0.6 * grid, 1e-6 * abs(values[-1])):
        quadratic, gain, offset = 0.0, straight_gain, straight_offset
    top = float(values[-1])
    factor = 1.0
    if top > 1000.0 or (_EV_WORD.search(name) and top > 400.0):
        factor = 1e-3
        if not _EV_WORD.search(name):
            said.append("the energy axis can only be in eV: taken as eV")
    elif _EV_WORD.search(name):
        said.append("the energy axis is headed eV, but can only be in keV: taken as keV")
    scale = EnergyScale(float(offset * factor), float(gain * factor), float(quadratic * factor))
    return Axis(scale, False, bool(_ENERGY_WORD.search(name)) or not np.all(values == np.round(values)), tuple(said))


def _rounding(values: NDArray[np.float64]) -> float:
    """The decimal place to which all values are rounded, such as 0.01; 0 if they are not."""
    for digits in range(7):
        if np.all(np.abs(values - np.round(values, digits)) < 1e-9):
            return float(10.0**-digits)
    return 0.0


def fitted_scale(points: NDArray[np.float64]) -> EnergyScale | None:
    """Straight line through (channel, energy) pairs, shape (n, 2); energies in keV or eV by size."""
    channel, energy = points[:, 0], points[:, 1]
    if not np.all(np.abs(points) < _LARGEST) or np.ptp(channel) <= 0 or np.ptp(energy) <= 0:
        return None
    gain, offset = np.polyfit(channel, energy, 1)
    factor = 1e-3 if energy.max() > 1000.0 else 1.0
    if gain <= 0:
        return None
    return EnergyScale(float(offset * factor), float(gain * factor))
