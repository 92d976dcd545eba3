"""Energy scale and resolution in force: from the file, from the instrument file, or found."""

from __future__ import annotations

from xrfid.errors import Untrustworthy
from xrfid.instrument import Instrument
from xrfid.spectrum import Spectrum
from xrfid.prepare.calibration import Calibration


def establish(spectrum: Spectrum, instrument: Instrument) -> tuple[Calibration, float | None]:
    """Return the calibration to start from, and the source's end point if nobody stated one, keV."""
    resolution = instrument.detector.resolution
    end = instrument.voltage_kv or _stated_voltage(spectrum)
    if spectrum.scale is not None:
        return Calibration(spectrum.scale, resolution, "file", 0.0), end
    if instrument.energy_scale is not None:
        return Calibration(instrument.energy_scale, resolution, "instrument", 0.0), end
    raise Untrustworthy("no energy scale")


def _stated_voltage(spectrum: Spectrum) -> float | None:
    voltage = spectrum.metadata.get("voltage_kv")
    return float(voltage) if isinstance(voltage, (int, float)) and voltage > 2 else None
