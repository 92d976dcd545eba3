"""The record of an energy calibration: what was used, where it comes from, how well the lines agree."""

from __future__ import annotations

from dataclasses import dataclass

from xrfid.spectrum import EnergyScale, Resolution


@dataclass(frozen=True, slots=True)
class Calibration:
    """The energy scale and resolution used, where they come from, and how well the lines agree."""

    scale: EnergyScale
    resolution: Resolution
    origin: str
    rms_ev: float
    note: str = ""
    offset_sigma_kev: float = 0.0
    gain_sigma_kev: float = 0.0
    residuals: tuple[tuple[str, float, float, float], ...] = ()
    """Per line group used: its name, energy (keV), residual (eV), its standard uncertainty (eV)."""
    stated: EnergyScale | None = None
    """The scale that the file stated, when it was not used as it stands."""
    runner_up: EnergyScale | None = None
    lead: float | None = None
    """How far ahead of the runner-up, in deviance, when the scale was found."""
