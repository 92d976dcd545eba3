"""CSV tables: one energy column where there is a scale, one column of counts a spectrum."""

from __future__ import annotations

import csv
from collections.abc import Sequence
from pathlib import Path

from xrfid.errors import OutputError
from xrfid.spectrum import Spectrum


def write(spectra: Sequence[Spectrum], path: Path) -> None:
    """Write spectra side by side; title and times go into lines that begin with ``#``.

    Raises
    ------
    OutputError
        If they differ in length or energy scale, or in their measuring times.
    """
    first = spectra[0]
    if any(s.n_channels != first.n_channels or s.scale != first.scale for s in spectra):
        raise OutputError(str(path), "spectra of different length or energy scale do not fit one table", "use .h5")
    if any((s.live_time_s, s.real_time_s) != (first.live_time_s, first.real_time_s) for s in spectra):
        raise OutputError(str(path), "spectra of different measuring times do not fit one table", "use .h5")
    with open(path, "w", newline="", encoding="utf-8") as handle:
        if len(spectra) == 1 and first.title.strip():
            handle.write(f"# Title: {_flat(first.title)}\n")
        for name, seconds in (("Live time (s)", first.live_time_s), ("Real time (s)", first.real_time_s)):
            if seconds is not None:
                handle.write(f"# {name}: {float(seconds)!r}\n")
        axis = "channel" if first.scale is None else "energy (keV)"
        names = [_flat(s.dataset or s.title) or f"spectrum {i}" for i, s in enumerate(spectra, start=1)]
        # a semicolon within a name must not pass for the separator
        plain = not any(";" in name for name in names)
        heading = csv.writer(handle, lineterminator="\n", quoting=csv.QUOTE_MINIMAL if plain else csv.QUOTE_ALL)
        heading.writerow([axis, *(["counts"] if len(spectra) == 1 else names)])
        writer = csv.writer(handle, lineterminator="\n")
        x = range(first.n_channels) if first.scale is None else map(float, first.energy_kev)
        for value, *counts in zip(x, *(s.counts for s in spectra), strict=True):
            writer.writerow([repr(value), *(_count(c) for c in counts)])


def _flat(text: str) -> str:
    return " ".join(text.split())


def _count(value: float) -> str:
    return str(int(value)) if value == int(value) else repr(float(value))
