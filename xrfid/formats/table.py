"""CSV tables: one energy column where there is a scale, one column of counts a spectrum."""

from __future__ import annotations

import csv
from collections.abc import Sequence
from pathlib import Path

from xrfid.errors import OutputError
from xrfid.spectrum import Spectrum


def write(spectra: Sequence[Spectrum], path: Path) -> None:
    """Write spectra side by side.

    Raises
    ------
    OutputError
        If they differ in length or energy scale.
    """
    first = spectra[0]
    if any(s.n_channels != first.n_channels or s.scale != first.scale for s in spectra):
        raise OutputError(str(path), "spectra of different length or energy scale do not fit one table", "use .h5")
    with open(path, "w", newline="", encoding="utf-8") as handle:
        if len(spectra) == 1:
            for name, value in (("Title", first.title), ("Live time (s)", first.live_time_s),
                                ("Real time (s)", first.real_time_s)):  # fmt: skip
                if value:
                    handle.write(f"# {name}: {' '.join(value.split()) if isinstance(value, str) else repr(value)}\n")
        writer = csv.writer(handle, lineterminator="\n")
        axis = "channel" if first.scale is None else "energy (keV)"
        names = [s.dataset or s.title or f"spectrum {i}" for i, s in enumerate(spectra, start=1)]
        writer.writerow([axis, *(["counts"] if len(spectra) == 1 else names)])
        x = range(first.n_channels) if first.scale is None else map(float, first.energy_kev)
        for value, *counts in zip(x, *(s.counts for s in spectra), strict=True):
            writer.writerow([repr(value), *(_count(c) for c in counts)])


def _count(value: float) -> str:
    return str(int(value)) if value == int(value) else repr(float(value))
