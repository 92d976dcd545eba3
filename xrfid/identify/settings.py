"""What the user may decide beforehand; the defaults do for almost everybody."""

from __future__ import annotations

from dataclasses import dataclass

from scipy.special import ndtri

from xrfid.atoms.elements import ATOMIC_NUMBER, NOBLE_GASES, UNSTABLE
from xrfid.errors import InputError, did_you_mean
from xrfid.response.series import SeriesKey

RARE_HANDICAP = 3.0
"""An element that hardly any sample holds needs so many times the usual significance."""
FIRST_ELEMENT = 9


@dataclass(frozen=True, slots=True)
class Settings:
    """Settings of an identification.

    Attributes
    ----------
    false_identification_level : float
        Expected number of falsely identified elements per spectrum.
    present, absent : tuple of str
        Elements known to be in the sample (always fitted) or not (never offered).
    series : str
        Series to use, of "KLM".
    """

    false_identification_level: float = 0.01
    present: tuple[str, ...] = ()
    absent: tuple[str, ...] = ()
    series: str = "KLM"

    def __post_init__(self) -> None:
        if not 1e-9 <= self.false_identification_level <= 0.5:
            raise InputError("false-identification level", f"{self.false_identification_level:g} is out of range",
                             "give a number from 1e-9 to 0.5")  # fmt: skip
        for name in (*self.present, *self.absent):
            if name not in ATOMIC_NUMBER:
                raise InputError("elements", f'"{name}" is no element symbol', did_you_mean(name, ATOMIC_NUMBER))
        both = set(self.present) & set(self.absent)
        if both:
            raise InputError("elements", f"{sorted(both)[0]} is said to be present and absent", "choose one")
        if not self.series or set(self.series) - set("KLM"):
            raise InputError("series", f'"{self.series}" is not made of K, L and M', 'write for example "KL"')

    def threshold(self, n_candidates: int) -> float:
        """Significance at which one of `n_candidates` chance elements is named at the level asked for."""
        return float(-ndtri(self.false_identification_level / max(n_candidates, 1)))

    def allows(self, key: SeriesKey) -> bool:
        """Whether a series may be offered to the fit."""
        return key.z >= FIRST_ELEMENT and key.element not in self.absent and key.series in self.series

    @staticmethod
    def handicap(key: SeriesKey) -> float:
        """Factor on the significance asked for: more than 1 for elements that hardly ever occur."""
        return RARE_HANDICAP if key.element in UNSTABLE or key.element in NOBLE_GASES else 1.0
