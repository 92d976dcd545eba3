"""What a person decided of an element, when and why, beside what the program said at that time."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from enum import StrEnum
from typing import Any

from xrfid.atoms.elements import ATOMIC_NUMBER
from xrfid.errors import InputError

LONGEST_REMARK = 2000
LONGEST_NAME = 80


class Choice(StrEnum):
    """What can be decided of an element; `OPEN` takes an earlier decision back."""

    ACCEPTED = "accepted"
    QUESTIONED = "questioned"
    OPEN = "open"


@dataclass(frozen=True, slots=True)
class Decision:
    """One decision. `automatic` is the program's verdict when it was taken, `significance` its strength."""

    element: str
    choice: Choice
    remark: str
    by: str
    at: str
    automatic: str
    significance: float

    def __post_init__(self) -> None:
        if self.element not in ATOMIC_NUMBER:
            raise InputError("decision", f'"{self.element}" is no element symbol', "choose one from the list")
        if not self.by.strip():
            raise InputError("decision", "nobody signs it", "write your name first")
        if len(self.by) > LONGEST_NAME or len(self.remark) > LONGEST_REMARK:
            raise InputError("decision", "the name or the remark is too long",
                             f"use at most {LONGEST_NAME} and {LONGEST_REMARK} characters")  # fmt: skip
        if self.choice is Choice.QUESTIONED and not self.remark.strip():
            raise InputError("decision", "it is questioned without a reason", "say why in the remark")


def now() -> str:
    """Return the present time, UTC, to the second."""
    return datetime.now(UTC).isoformat(timespec="seconds")


def in_force(history: list[Decision]) -> dict[str, Decision]:
    """Return the last decision on each element; those taken back are left out."""
    last = {d.element: d for d in history}
    return {element: d for element, d in last.items() if d.choice is not Choice.OPEN}


def to_plain(decision: Decision) -> dict[str, Any]:
    """Return a decision as JSON knows it."""
    return asdict(decision) | {"choice": str(decision.choice)}


def from_plain(plain: Any, source: str) -> Decision:
    """Rebuild a decision.

    Raises
    ------
    InputError
        If it is none.
    """
    texts = ("element", "choice", "remark", "by", "at", "automatic")
    if not isinstance(plain, Mapping) or not all(isinstance(plain.get(k), str) for k in texts):
        raise InputError(source, "holds something that is no decision", "it was changed by hand; mend or remove it")
    strength = plain.get("significance")
    if plain["choice"] not in list(Choice) or not isinstance(strength, int | float) or isinstance(strength, bool):
        raise InputError(source, "holds a decision that makes no sense", "it was changed by hand; mend or remove it")
    return Decision(**{k: plain[k] for k in texts} | {"choice": Choice(plain["choice"])}, significance=float(strength))
