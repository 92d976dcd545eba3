"""The state of one identification: what it started from and what it has found."""

from __future__ import annotations

from dataclasses import dataclass

from xrfid.fit.composition import Composition
from xrfid.fit.model import Fit, Ingredients
from xrfid.fit.setup import Setting
from xrfid.identify.anode import AnodeInSample
from xrfid.identify.settings import Settings
from xrfid.instrument import Instrument
from xrfid.prepare.calibration import Calibration
from xrfid.response.series import Prediction, SeriesKey
from xrfid.spectrum import Spectrum


@dataclass(frozen=True, eq=False)
class Work:
    """Everything that one identification has found so far; each step returns a new one."""

    spectrum: Spectrum
    instrument: Instrument
    settings: Settings
    calibration: Calibration
    prediction: Prediction
    setting: Setting
    composition: Composition
    ingredients: Ingredients
    fit: Fit
    anode: AnodeInSample
    candidates: tuple[SeriesKey, ...]
    threshold: float

    @property
    def fixed(self) -> tuple[SeriesKey, ...]:
        """Series that are in the model whatever the counts say."""
        return fixed_series(self.ingredients, self.instrument, self.settings)


def fixed_series(drawn: Ingredients, instrument: Instrument, settings: Settings) -> tuple[SeriesKey, ...]:
    """Argon of the air, stray elements and elements known to be present."""
    names = set(settings.present) | set(instrument.stray.elements)
    air = instrument.path.atmosphere == "air" and "Ar" not in settings.absent
    return tuple(
        k for k in drawn.columns.keys if (k.element in names or (air and k.element == "Ar" and k.series == "K"))
    )
