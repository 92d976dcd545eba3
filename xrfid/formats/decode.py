"""From bytes to text, whatever the encoding; and the checks that every reader shares."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from xrfid.errors import InputError

FEWEST_CHANNELS = 64
MOST_CHANNELS = 65_536
LONGEST_LINE = 2_000_000
"""Characters; a whole spectrum of the most channels fits into one line several times over."""


def decoded(name: str, data: bytes) -> str:
    r"""Decode UTF-8, UTF-16 (with a mark or recognisable) or Latin-1; line ends become ``\n``.

    Raises
    ------
    InputError
        If the bytes are no text, or a line has no end.
    """
    if data[:2] in (b"\xff\xfe", b"\xfe\xff"):
        text = data.decode("utf-16", errors="replace")
    elif len(data) > 3 and data[1:200:2].count(0) > 0.8 * len(data[1:200:2]):
        text = data.decode("utf-16-le", errors="replace")
    else:
        if b"\x00" in data[:4096]:
            raise InputError(name, "is a binary file of no known format", "give EMSA, N42, text or HDF5")
        try:
            text = data.decode("utf-8-sig")
        except UnicodeDecodeError:
            text = data.decode("latin-1")
    sample = text[:4096]
    strange = sum(not (c.isprintable() or c in "\r\n\t\x0c") for c in sample)
    if strange > 0.02 * len(sample) + 2:
        raise InputError(name, "is a binary file of no known format", "give EMSA, N42, text or HDF5")
    text = text.replace("\r\n", "\n").replace("\r", "\n")
    longest = max(map(len, text.split("\n")))
    if longest > LONGEST_LINE:
        raise InputError(name, f"holds a line of {longest} characters", "write one row of numbers a line")
    return text


def checked_counts(
    name: str, values: NDArray[np.float64], where: str = "channel"
) -> tuple[NDArray[np.float64], list[str]]:
    """Return counts fit for a `Spectrum`, and what had to be assumed of them.

    Raises
    ------
    InputError
        If there are too few or too many, or one is negative or not finite.
    """
    n = values.size
    if n < FEWEST_CHANNELS:
        raise InputError(name, f"holds {n} channels", f"a spectrum needs at least {FEWEST_CHANNELS}")
    if n > MOST_CHANNELS:
        raise InputError(name, f"holds {n} channels", f"at most {MOST_CHANNELS} are read")
    bad = np.flatnonzero(~np.isfinite(values))
    if bad.size:
        raise InputError(f"{name}, {where} {bad[0]}", f"the count is {values[bad[0]]}", "counts must be finite")
    bad = np.flatnonzero(values < 0)
    if bad.size:
        raise InputError(
            f"{name}, {where} {bad[0]}", f"the count is {values[bad[0]]:g}", "counts must be >= 0; give raw counts"
        )
    said = []
    if values.max(initial=0.0) > 1e15:
        raise InputError(name, f"a channel holds {values.max():g} counts", "give raw counts")
    if np.mean(values != np.round(values)) > 0.01:
        said.append("the counts are not whole numbers: taken as they are, Poisson statistics may not hold")
    return values, said
