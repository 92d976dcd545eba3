"""An invented spectrum that the format tests write down in many ways."""

from __future__ import annotations

import numpy as np

from xrfid.spectrum import EnergyScale, Spectrum

N = 256
SCALE = EnergyScale(-0.12, 0.08)


def _counts(seed: int) -> np.ndarray:
    channel = np.arange(N)
    mean = 4.0 * np.exp(-(((channel - 150) / 60.0) ** 2))
    for centre, height in ((48, 200.0), (81, 900.0 + 40 * seed), (90, 130.0), (110, 35.0)):
        mean = mean + height * np.exp(-0.5 * ((channel - centre) / 1.3) ** 2)
    mean[:8] = 0.0
    return np.random.default_rng(seed).poisson(mean)


COUNTS = _counts(1)
OTHER = _counts(2)
THIRD = _counts(3)
ENERGY = SCALE.energy_kev(np.arange(N))


def spectrum(**changed: object) -> Spectrum:
    """A spectrum as a reader would make it."""
    facts: dict = {"counts": COUNTS, "scale": SCALE, "live_time_s": 30.5, "real_time_s": 33.25, "title": "bench coupon"}
    return Spectrum(**(facts | changed))


def lines(*rows: object, end: str = "\n") -> str:
    """Rows joined as lines of a file."""
    return end.join(str(row) for row in rows) + end


def columns(*values: object, by: str = " ") -> list[str]:
    """Rows of columns side by side."""
    return [by.join(str(v) for v in row) for row in zip(*values, strict=True)]


def fixed(values: object, digits: int = 3, point: str = ".") -> list[str]:
    """Numbers with fixed digits and a chosen decimal sign."""
    return [f"{v:.{digits}f}".replace(".", point) for v in np.asarray(values)]
