"""Draws an instrument as it truly is, and what its file and the spectrum's header say of it.

The two differ as they do in a laboratory: the scale has drifted by up to 5 eV and 0.05 per cent, the
resolution was measured on another day, angles and distances are good to a few per cent.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from .detector import Channels, SiliconDetector
from .sample import Geometry
from .tube import Tube

MN_KA_KEV = 5.895
TUBES: tuple[tuple[str, float, float, tuple[tuple[str, float], ...]], ...] = (
    # anode, kV, beryllium window in um, filters
    ("Rh", 50.0, 125.0, ()),
    ("Rh", 40.0, 100.0, (("Al", 200.0),)),
    ("Rh", 15.0, 75.0, ()),
    ("Rh", 50.0, 125.0, (("Cu", 75.0),)),
    ("Ag", 50.0, 150.0, ()),
    ("Ag", 35.0, 100.0, (("Al", 50.0),)),
    ("Ag", 45.0, 150.0, (("Ti", 25.0), ("Al", 100.0))),
    ("W", 50.0, 200.0, (("Al", 500.0),)),
    ("W", 40.0, 150.0, ()),
    ("Mo", 45.0, 100.0, ()),
    ("Mo", 30.0, 100.0, (("Al", 100.0),)),
    ("Cr", 30.0, 125.0, ()),
    ("Cr", 20.0, 75.0, ()),
    ("Au", 50.0, 125.0, (("Al", 300.0),)),
    ("Au", 40.0, 125.0, ()),
    ("Pd", 40.0, 125.0, ()),
    ("Pd", 48.0, 125.0, (("Zr", 20.0),)),
)


@dataclass(frozen=True)
class Setup:
    """The true instrument and, in `stated_*`, what is written about it.

    `multiple_share` is the number of photons scattered twice per scattered one and unit albedo,
    `multiple_kev` the mean energy that this takes from 20 keV.
    """

    tube: Tube
    geometry: Geometry
    air_mm: float
    detector: SiliconDetector
    channels: Channels
    kind: str
    pulse_pair_s: float
    scatter_scale: float
    multiple_share: float
    multiple_kev: float
    stated_channels: Channels
    stated_geometry: Geometry
    stated_tube: Tube
    stated_air_mm: float
    stated_fwhm_ev: float
    stated_pulse_pair: bool

    @property
    def true_fwhm_ev(self) -> float:
        """True full width at half maximum at Mn K-alpha, eV."""
        return 2354.82 * float(self.detector.sigma_kev(np.array(MN_KA_KEV)))

    def to_toml(self) -> str:
        """Return the instrument file's text."""
        t, g, d = self.stated_tube, self.stated_geometry, self.detector
        filters = ", ".join(f'{{ material = "{m}", thickness_um = {um:g} }}' for m, um in t.filters)
        pair = f"pulse_pair_ns = {self.pulse_pair_s * 1e9:.0f}\n" if self.stated_pulse_pair else ""
        return (
            f'[tube]\nanode = "{t.anode}"\nvoltage_kv = {t.voltage_kv:g}\n'
            f'window = {{ material = "Be", thickness_um = {t.window_um:g} }}\nfilters = [{filters}]\n\n'
            f"[geometry]\nincidence_deg = {g.incidence_deg:g}\ntakeoff_deg = {g.takeoff_deg:g}\n"
            f"scatter_deg = {g.scatter_deg:g}\n\n"
            f'[path]\natmosphere = "air"\nlength_mm = {self.stated_air_mm:g}\n\n'
            f'[detector]\nmaterial = "Si"\nthickness_um = {d.thickness_um:g}\n'
            f'window = {{ material = "Be", thickness_um = {d.window_um:g} }}\n'
            f"fwhm_mn_ka_ev = {self.stated_fwhm_ev:.0f}\n{pair}"
        )


def draw_setup(rng: np.random.Generator, detector_kind: str | None = None) -> Setup:
    """Draw an instrument; `detector_kind` is "drift" or "PIN", by default three drift diodes to one PIN."""
    kind = detector_kind or ("PIN" if rng.random() < 0.25 else "drift")
    anode, kv, window, filters = TUBES[rng.integers(len(TUBES))]
    stated = Tube(anode, kv, window, filters)
    thicker = tuple((m, um * math.exp(rng.normal(0.0, 0.05))) for m, um in filters)
    tube = Tube(
        anode,
        kv * (1.0 + rng.normal(0.0, 0.003)),
        window,
        thicker,
        float(rng.uniform(12.0, 30.0)),
        math.exp(rng.normal(0.0, 0.15)),
    )
    geometry = Geometry(
        *(
            (45.0, 45.0, 90.0),
            (45.0, 45.0, 135.0),
            (60.0, 50.0, 120.0),
            (90.0, 45.0, 135.0),
            (67.5, 45.0, 112.5),
        )[rng.integers(5)]
    )
    tilted = Geometry(
        min(geometry.incidence_deg + rng.normal(0.0, 1.5), 90.0),
        geometry.takeoff_deg + rng.normal(0.0, 1.5),
        geometry.scatter_deg + rng.normal(0.0, 2.5),
    )
    air_mm = float(rng.choice([4.0, 8.0, 15.0, 25.0]))
    detector = draw_detector(rng, kind)
    channels, header = _draw_scale(rng, kv)
    fwhm = 2354.82 * float(detector.sigma_kev(np.array(MN_KA_KEV)))
    return Setup(
        tube,
        tilted,
        air_mm * math.exp(rng.normal(0.0, 0.08)),
        detector,
        channels,
        kind,
        float(rng.uniform(0.6e-7, 4e-7)),
        math.exp(rng.normal(0.0, 0.2)),
        float(rng.uniform(0.3, 0.8)),
        float(rng.uniform(0.25, 0.6)),
        header,
        geometry,
        stated,
        air_mm,
        round(fwhm * (1.0 + rng.normal(0.0, 0.025))),
        bool(rng.random() < 0.5),
    )


def draw_detector(rng: np.random.Generator, kind: str) -> SiliconDetector:
    """Draw a drift diode (124 to 150 eV at Mn K-alpha) or a PIN diode (150 to 220 eV, more tail)."""
    drift = kind == "drift"
    fwhm_kev = rng.uniform(0.124, 0.150) if drift else rng.uniform(0.150, 0.220)
    fano = float(rng.uniform(0.112, 0.121))
    noise = math.sqrt((fwhm_kev / 2.35482) ** 2 - 3.64e-3 * fano * MN_KA_KEV)
    return SiliconDetector(
        noise_kev=noise,
        fano=fano,
        thickness_um=float(rng.choice([450.0, 500.0, 1000.0] if drift else [300.0, 500.0])),
        window_um=float(rng.choice([8.0, 12.5, 25.0])),
        dead_um=float(rng.uniform(0.03, 0.15)),
        shallow_um=float(rng.uniform(0.02, 0.12) * (1.0 if drift else 1.6)),
        tail_kev=float(rng.uniform(0.08, 0.25)),
        tail_floor=float(rng.uniform(0.001, 0.004)),
        shelf=float(rng.uniform(0.001, 0.004) * (1.0 if drift else 2.5)),
        escape_scale=math.exp(rng.normal(0.0, 0.08)),
        cut_kev=float(rng.uniform(0.25, 0.55)),
    )


def _draw_scale(rng: np.random.Generator, kv: float) -> tuple[Channels, Channels]:
    """Return the true scale and the header's, which is up to 5 eV and 0.05 per cent away from it."""
    n = int(rng.choice([1024, 2048, 4096], p=[0.2, 0.6, 0.2]))
    reach = 1.06 * kv if rng.random() < 0.8 else max(20.48, 0.5 * kv)
    gain = round(reach / n, 5)
    offset = round(float(rng.normal(0.0, 0.03)), 4)
    true = Channels(offset + rng.uniform(-0.005, 0.005), gain * (1.0 + rng.uniform(-5e-4, 5e-4)), n)
    return true, Channels(offset, gain, n)
