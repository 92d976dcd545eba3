"""Numbers and names as a person reads them; terminal, figures and page say the same thing the same way."""

from __future__ import annotations

import math
from collections.abc import Sequence
from itertools import takewhile

from xrfid.atoms.lines import line_name as line_name
from xrfid.identify.result import Finding, Identification, Verdict

GROUP_SPACE = "\N{NARROW NO-BREAK SPACE}"

VERDICT_MARKS = {
    Verdict.IDENTIFIED: "●",
    Verdict.TENTATIVE: "?",
    Verdict.UNRESOLVED: "?",
    Verdict.INSTRUMENT: "i",
    Verdict.NOT_DETECTED: "",
    Verdict.OUT_OF_REACH: "",
}
"""One character per verdict, for tables of many spectra."""

def grouped(value: float, decimals: int = 0, space: str = " ") -> str:
    """Return a number with its digits in groups of three: ``812 340``; a dash if it is not finite."""
    if not math.isfinite(value):
        return "–"
    text = f"{round(value, decimals) + 0.0:,.{max(decimals, 0)}f}"
    return text.replace(",", space if abs(value) >= 1e4 else "")


def with_sigma(value: float, sigma: float, space: str = " ") -> str:
    """Return ``value ± sigma``, the uncertainty to two digits and the value to the same place."""
    if not (math.isfinite(value) and math.isfinite(sigma) and sigma > 0):
        return grouped(value, 0 if abs(value) >= 10 else 2, space)
    place = 1 - math.floor(math.log10(float(f"{sigma:.1e}")))
    return f"{grouped(value, place, space)} ± {grouped(sigma, place, space)}"


def two_digits(value: float | None, space: str = " ") -> str:
    """Return a number to two significant digits, for limits; a dash if there is none."""
    if value is None or not math.isfinite(value):
        return "–"
    if value == 0:
        return "0"
    place = 1 - math.floor(math.log10(abs(float(f"{value:.1e}"))))
    return grouped(value, place, space)


def significance(value: float) -> str:
    """Return a significance as a plain number: one decimal below 10, none above."""
    return grouped(value, 1 if abs(value) < 9.95 else 0)


def subject(identification: Identification) -> str:
    """Return what the spectrum is called: the file (and the data set in it), or its title."""
    source = identification.source
    if source.path:
        return f"{source.path}:{source.dataset}" if source.dataset else source.path
    return source.title or "spectrum"


def short_names(identifications: Sequence[Identification]) -> list[str]:
    """Return what to call each of several spectra: its name without the folders that all have in common."""
    names = [subject(i) for i in identifications]
    folders = [name.rpartition("/")[0].split("/") for name in names]
    common = [same[0] for same in takewhile(lambda x: len(set(x)) == 1, zip(*folders, strict=False))]
    if len(names) < 2 or common == [""]:
        return names
    return [name[sum(len(folder) + 1 for folder in common) :] for name in names]


def source_line(identification: Identification, space: str = " ") -> str:
    """Return counts, measuring time, channels and energy range in one line."""
    source, scale = identification.source, identification.calibration.scale
    live = f" in {source.live_time_s:g} s live" if source.live_time_s else ", measuring time not stated"
    first, last = scale.energy_kev([0, max(source.channels - 1, 0)])
    return (
        f"{grouped(source.total_counts, 0, space)} counts{live}, {source.channels} channels, "
        f"{first + 0.0:.2f} to {last:.2f} keV"
    )


_ORIGINS = {
    "file": "as the file states it",
    "found": "found from the spectrum's own lines",
    "instrument": "from the instrument file",
}


def scale_line(identification: Identification) -> str:
    """Return where the energy scale comes from and how well it holds, in one sentence."""
    used = identification.calibration
    checked = math.isfinite(used.rms_ev) and len(used.residuals) > 0
    agree = f"; lines agree within {used.rms_ev:.1f} eV" if checked else ""
    return (
        f"Energy scale {_ORIGINS.get(used.origin, used.origin)}{agree}. "
        f"Resolution {used.resolution.fwhm_mn_ka_ev:.0f} eV at 5.9 keV."
    )


def rivals_line(finding: Finding) -> str:
    """Return the rivals of a finding in words, nearest first; empty if there are none."""
    ranked = sorted(finding.rivals, key=lambda r: r.deviance_worse)
    said = [f"{r.explanation} ({_worse(r.deviance_worse)})" for r in ranked]
    return "Rivals: " + ", ".join(said) + "." if said else ""


def _worse(deviance: float) -> str:
    if not math.isfinite(deviance):
        return "far worse"
    if abs(deviance) < 1.0:
        return "fits as well"
    return f"fits {'worse' if deviance > 0 else 'better'} by {math.sqrt(abs(deviance)):.1f} sigma"
