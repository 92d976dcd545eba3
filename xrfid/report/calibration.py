"""The picture of a calibration: how far each reference line lies off the fitted scale."""

from __future__ import annotations

from typing import TYPE_CHECKING

from xrfid.report import style
from xrfid.report.canvas import look, single_axes

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from xrfid.prepare.calibrate import Calibrated

_MARKERS = "osD^v<>Ph*"


def draw_calibration(calibrated: Calibrated) -> Axes:
    """Draw the residuals of all reference lines with their uncertainties, one marker a measurement.

    Parameters
    ----------
    calibrated : Calibrated

    Returns
    -------
    Axes
    """
    with look():
        ax = single_axes(7.0, 3.6, above_in=0.95)
        ax.axhline(0.0, color=style.SOFT, linewidth=0.8)
        measurements = list(dict.fromkeys(line.measurement for line in calibrated.lines))
        for i, name in enumerate(measurements):
            own = [line for line in calibrated.lines if line.measurement == name]
            ax.errorbar(
                [line.energy_kev for line in own], [line.residual_ev for line in own],
                [line.sigma_ev for line in own], fmt=_MARKERS[i % len(_MARKERS)], markersize=4, color=style.INK,
                ecolor=style.SOFT, elinewidth=0.9, capsize=2, label=name,
            )  # fmt: skip
            for line in own:
                ax.annotate(line.name, (line.energy_kev, line.residual_ev), xytext=(4, 4),
                            textcoords="offset points", fontsize=8, parse_math=False)  # fmt: skip
        ax.set_xlabel("energy (keV)")
        ax.set_ylabel("line minus scale (eV)")
        ax.margins(x=0.1, y=0.2)
        ax.legend(loc="lower left", bbox_to_anchor=(0.0, 1.02), ncols=min(len(measurements), 3))
        s = calibrated.scale
        title = (
            f"{s.gain_kev * 1e3:.4f} eV a channel from {s.offset_kev:+.4f} keV, "
            f"{calibrated.resolution.fwhm_mn_ka_ev:.0f} eV wide at Mn K-alpha"
        )
        ax.figure.text(0.012, 0.98, title, va="top", fontsize=9, parse_math=False)
    return ax
