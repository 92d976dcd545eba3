"""Scale, width, tail and shelf brought to where the fit wants them.

The fit's tolerances are the derivatives of the model with respect to these few non-linear
quantities; taking their fitted values over and drawing the columns anew is one Gauss-Newton step of
the outer problem, at no cost beyond the redrawing.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from xrfid.fit.model import Fit
from xrfid.fit.nuisance import GAIN_PIVOT_KEV
from xrfid.fit.setup import Setting
from xrfid.response.detector import LineShape
from xrfid.spectrum import FWHM_PER_SIGMA, EnergyScale, Resolution


def refined(setting: Setting, fit: Fit) -> Setting:
    """Return scale, line shape and pulse-pair time after taking over what the fit found for them."""
    offset, gain = fit.coefficient("offset"), fit.coefficient("gain")
    old = setting.scale
    scale = EnergyScale(
        old.offset_kev * (1.0 - gain) - offset + GAIN_PIVOT_KEV * gain,
        old.gain_kev * (1.0 - gain),
        old.quadratic_kev * (1.0 - gain),
    )
    return Setting(scale, refined_shape(setting.shape, fit), fit.coefficient("sum"))


def refined_shape(shape: LineShape, fit: Fit) -> LineShape:
    """Return the line shape after taking over the fitted width, tail and shelf, within physical bounds."""
    tail = shape.tail + [fit.coefficient("tail", str(i)) for i in range(shape.tail.size)]
    shelf = shape.shelf + [fit.coefficient("shelf", str(i)) for i in range(shape.shelf.size)]
    slope = float(np.clip(shape.tail_slope + fit.coefficient("slope"), 0.8, 8.0))
    return LineShape(
        refined_resolution(shape.resolution, fit.coefficient("noise"), fit.coefficient("fano")),
        np.clip(tail, 0.0, 0.3),
        np.clip(shelf, 0.0, 0.1),
        slope,
    )


def refined_resolution(resolution: Resolution, noise_ev2: float, fano_ev2: float) -> Resolution:
    """Add to the squared FWHM, eV^2: a constant part and one that grows with energy (its value at 5.9 keV)."""
    noise = max(resolution.noise_ev**2 + noise_ev2, 15.0**2)
    per_fano = FWHM_PER_SIGMA**2 * resolution.pair_energy_ev * 5900.0
    fano = float(np.clip(resolution.fano + fano_ev2 / per_fano, 0.5 * resolution.fano, 1.6 * resolution.fano))
    return replace(resolution, noise_ev=float(np.sqrt(noise)), fano=fano)
