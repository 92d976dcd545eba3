"""The whole job on one screen: from a spectrum and an instrument to an `Identification`."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from xrfid.fit.composition import Composition, estimate
from xrfid.fit.model import Fit, Ingredients, fit_series
from xrfid.fit.nuisance import Tolerances
from xrfid.fit.refine import refined
from xrfid.fit.setup import Setting, ingredients
from xrfid.fit.threads import one_blas_thread
from xrfid.identify.anode import AnodeInSample, anode_in_sample
from xrfid.identify.assemble import assemble
from xrfid.identify.challenge import exchange, unmask_peaks
from xrfid.identify.result import Identification
from xrfid.identify.select import backward, forward, free_peaks
from xrfid.identify.settings import Settings
from xrfid.identify.work import Work, fixed_series
from xrfid.instrument import Instrument
from xrfid.prepare.calibration import Calibration
from xrfid.prepare.establish import establish
from xrfid.response.detector import LineShape
from xrfid.response.series import Prediction, SeriesKey
from xrfid.spectrum import Spectrum

_FIRST_PASS = 12.0
"""Significance for the first pass, which only has to find what shapes the spectrum."""
_PEAK_SIGNIFICANCE = 6.0
_SCATTER_FROM_KEV = 5.0


def identify(
    spectrum: Spectrum, instrument: Instrument | None = None, settings: Settings | None = None
) -> Identification:
    """Say which elements a spectrum shows, how strongly, how sure that is, and why.

    Parameters
    ----------
    spectrum : Spectrum
    instrument : Instrument, optional
        What is known of the instrument; documented defaults otherwise.
    settings : Settings, optional

    Returns
    -------
    Identification

    Raises
    ------
    Untrustworthy
        If the spectrum does not allow a trustworthy answer, e.g. because its energy scale is unknown.
    InputError
        If the instrument's description makes no sense.
    """
    with one_blas_thread():
        return assemble(search(spectrum, instrument or Instrument(), settings or Settings()))


def search(spectrum: Spectrum, instrument: Instrument, settings: Settings) -> Work:
    """Find the series that belong in the model: strong ones, composition, all, composition, all again."""
    calibration, end_kev = establish(spectrum, instrument)
    prediction = Prediction(instrument, end_kev)
    shape = LineShape.of(instrument.detector).with_resolution(calibration.resolution)
    setting = Setting(calibration.scale, shape)
    candidates = tuple(k for k in prediction.keys if settings.allows(k) and k.element != prediction.source.anode)
    threshold = settings.threshold(len({k.z for k in candidates}))
    fractions = prediction.light_matrix_only()
    kept: tuple[SeriesKey, ...] = ()
    anode = AnodeInSample()
    fit: Fit | None = None
    for enter, known in ((_FIRST_PASS, False), (threshold, True), (threshold, True)):
        if fit is not None:
            setting = refined(setting, fit)
        tolerances = _tolerances(calibration, known)
        drawn = ingredients(spectrum, prediction, fractions, setting, tolerances, anode.expected)
        drawn, fit = _select(drawn, kept, candidates, instrument, settings, enter, thorough=known)
        anode = anode_in_sample(drawn, fit)
        kept = (*fit.keys, *(k for k in anode.series if k not in fit.areas))
        composition = _composition(prediction, drawn, fit, anode)
        fractions = composition.fractions
    assert fit is not None
    return Work(spectrum, instrument, settings, calibration, prediction, setting, composition, drawn, fit, anode,
                candidates, threshold)  # fmt: skip


def _tolerances(calibration: Calibration, matrix_known: bool) -> Tolerances:
    """The usual tolerances, wider where the energy scale is known less well."""
    usual = Tolerances(matrix_known=matrix_known)
    return replace(
        usual,
        offset_kev=max(usual.offset_kev, calibration.offset_sigma_kev),
        gain=max(usual.gain, calibration.gain_sigma_kev / calibration.scale.gain_kev),
    )


def _select(
    drawn: Ingredients, kept: tuple[SeriesKey, ...], candidates: tuple[SeriesKey, ...], instrument: Instrument,
    settings: Settings, enter: float, thorough: bool,
) -> tuple[Ingredients, Fit]:  # fmt: skip
    """One pass of selection; a thorough one also looks for peaks that no line explains."""
    fixed = fixed_series(drawn, instrument, settings)
    start = (*fixed, *(k for k in kept if k in drawn.columns and k not in fixed))
    fit = forward(drawn, start, candidates, enter, handicap=settings.handicap)
    fit = backward(drawn, fit, fixed, enter)
    if thorough:
        fit = exchange(drawn, fit, fixed, candidates)
        drawn, fit = unmask_peaks(drawn, fit, fixed)
        peaks = free_peaks(drawn, fit, _PEAK_SIGNIFICANCE)
        if peaks:
            drawn = drawn.with_peaks(peaks)
            fit = backward(drawn, fit_series(drawn, fit.keys, fit, rounds=1), fixed, enter)
        drawn, fit = unmask_peaks(drawn, fit, fixed)
    return drawn, fit


def _composition(prediction: Prediction, drawn: Ingredients, fit: Fit, anode: AnodeInSample) -> Composition:
    """Rough composition from the areas and the scattered radiation."""
    window = (_SCATTER_FROM_KEV, 0.95 * prediction.source.end_kev)
    centres = drawn.columns.grouping.centres_kev
    inside: NDArray[np.bool_] = (centres > window[0]) & (centres < window[1])
    scattered = float(fit.part("scatter", "continuum")[inside].sum())
    areas = {k: fit.areas[k] for k in fit.keys if k.element != "Ar"}
    sigmas = dict(fit.sigmas)
    for i, column in enumerate(drawn.scatter):
        key = next((k for k in anode.series if str(k) == column.of), None)
        if column.kind == "coherent scatter" and key is not None and key not in areas:
            # found only now: until the next pass the sample's own lines hide in the scattered ones
            hidden = fit.coefficient("scatter", str(i))
            areas[key], sigmas[key] = hidden, 0.1 * hidden
            scattered -= hidden
    return estimate(prediction, areas, sigmas, max(scattered, 0.0), window)
