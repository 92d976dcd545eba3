"""Symbols and atomic numbers, and what is known beforehand about an element's presence."""

from __future__ import annotations

SYMBOLS = (
    "H He Li Be B C N O F Ne Na Mg Al Si P S Cl Ar K Ca Sc Ti V Cr Mn Fe Co Ni Cu Zn Ga Ge As Se Br Kr "
    "Rb Sr Y Zr Nb Mo Tc Ru Rh Pd Ag Cd In Sn Sb Te I Xe Cs Ba La Ce Pr Nd Pm Sm Eu Gd Tb Dy Ho Er Tm Yb "
    "Lu Hf Ta W Re Os Ir Pt Au Hg Tl Pb Bi Po At Rn Fr Ra Ac Th Pa U"
).split()
"""Symbols of Z = 1 to 92; ``SYMBOLS[z - 1]``."""

ATOMIC_NUMBER = {symbol: z for z, symbol in enumerate(SYMBOLS, start=1)}

CANDIDATE_Z = tuple(range(9, 93))
"""Elements whose K, L or M lines a detector with a window can show."""

UNSTABLE = frozenset("Tc Pm Po At Rn Fr Ra Ac Pa".split())
"""No stable isotope and no primordial stock (Th and U have one)."""

NOBLE_GASES = frozenset("Ne Ar Kr Xe".split())
"""Gases that no solid sample holds in bulk; argon is in the air of the path."""


def symbol(z: int) -> str:
    """Return the symbol of atomic number `z` (1 to 92)."""
    return SYMBOLS[z - 1]
