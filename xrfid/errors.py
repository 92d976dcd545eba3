"""What can go wrong, in the user's words.

XrfidError                 catch this to catch all of ours
├── InputError             a file could not be read or makes no sense   (exit status 3)
├── OutputError            a result could not be written                (exit status 3)
└── Untrustworthy          the work ran, its result must not be trusted (exit status 4)
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class XrfidError(Exception):
    """Catch this to catch all of ours."""

    exit_status = 1


class InputError(XrfidError, ValueError):
    """An input could not be read or makes no sense.

    Parameters
    ----------
    source : str
        Which file, and where in it: ``"coupon.msa"`` or ``"coupon.msa, line 12"``.
    found : str
        What was found there.
    remedy : str, optional
        What would do instead.
    """

    exit_status = 3

    def __init__(self, source: str, found: str, remedy: str = "") -> None:
        self.source, self.found, self.remedy = source, found, remedy
        text = f"{source}: {found}"
        super().__init__(one_line(f"{text}; {remedy}" if remedy else text))


class OutputError(XrfidError, OSError):
    """A result could not be written; what was there before is untouched."""

    exit_status = 3

    def __init__(self, path: str, found: str, remedy: str = "") -> None:
        self.path = path
        text = f"{path}: {found}"
        super().__init__(one_line(f"{text}; {remedy}" if remedy else text))


class Untrustworthy(XrfidError, RuntimeError):
    """The work ran, but its result must not be trusted; the message says why."""

    exit_status = 4


def one_line(text: str, limit: int = 400) -> str:
    """Return `text` as one printable line of at most `limit` characters."""
    flat = " ".join("".join(c if c.isprintable() else " " for c in text).split())
    return flat if len(flat) <= limit else flat[: limit - 1] + "…"


def did_you_mean(word: str, known: Iterable[str]) -> str:
    """Return ``'did you mean "x"?'``, or the list of what is known if nothing is near."""
    names = list(known)
    near = difflib.get_close_matches(word, names, n=1, cutoff=0.6)
    return f'did you mean "{near[0]}"?' if near else "known here: " + ", ".join(names)
