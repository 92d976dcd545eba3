"""The instrument's few important facts, as a form shows them and takes them back."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from xrfid.atoms.elements import ATOMIC_NUMBER
from xrfid.errors import InputError, did_you_mean
from xrfid.instrument import Instrument

ATMOSPHERES = ("", "air", "helium", "vacuum")
MEANINGS = {
    "anode": "Element of the tube's target, as Rh or Mo. Its own lines scatter into every spectrum. Empty: not known.",
    "voltage": "Highest photon energy: no line above it can be excited. Empty: read off the spectrum's end.",
    "filters": "Sheets in the tube's beam, as \"Al 50\" or \"Al 50, Cu 10\" (µm). They take away low energies.",
    "atmosphere": "What lies between sample and detector: air hides light elements and shows its argon.",
    "width": "Width of a line at Mn Kα (5.9 keV): decides which neighbours can be told apart. Empty: a usual one.",
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class Facts:
    """The form: all texts as typed, empty where nothing is known."""

    anode: str = ""
    voltage_kv: str = ""
    filters: str = ""
    atmosphere: str = ""
    fwhm_ev: str = ""


def facts_of(instrument: Instrument) -> Facts:
    """Return what an instrument states, as the form shows it."""
    tube, width = instrument.tube, instrument.detector.fwhm_mn_ka_ev
    sheets = () if tube is None else tube.filters
    return Facts(
        anode="" if tube is None else tube.anode,
        voltage_kv="" if tube is None else f"{tube.voltage_kv:g}",
        filters=", ".join(f"{f.material} {f.thickness_um:g}" for f in sheets),
        atmosphere=instrument.path.atmosphere if "atmosphere" in instrument.path.model_fields_set else "",
        fwhm_ev="" if width is None else f"{width:g}",
    )


def with_facts(instrument: Instrument, facts: Facts) -> Instrument:
    """Return the instrument with the form's facts in place of its own; all else stays.

    Raises
    ------
    InputError
        If a fact makes no sense; the message says which.
    """
    table: dict[str, Any] = instrument.model_dump(exclude_unset=True, exclude_none=True)
    _set_tube(table, facts)
    path, detector = dict(table.get("path", {})), dict(table.get("detector", {}))
    _put(path, "atmosphere", facts.atmosphere or None)
    _put(detector, "fwhm_mn_ka_ev", _number("detector width", facts.fwhm_ev))
    for name, values in (("path", path), ("detector", detector)):
        _put(table, name, values or None)
    return Instrument.from_table(table, "instrument form")


def _set_tube(table: dict[str, Any], facts: Facts) -> None:
    if not (facts.anode.strip() or facts.voltage_kv.strip() or facts.filters.strip()):
        table.pop("tube", None)
        return
    anode = facts.anode.strip()
    if anode and anode not in ATOMIC_NUMBER:
        found = f'anode: "{anode}" is no element symbol'
        raise InputError("instrument form", found, did_you_mean(anode, ATOMIC_NUMBER))
    tube = dict(table.get("tube", {}))
    _put(tube, "anode", anode or None)
    _put(tube, "voltage_kv", _number("voltage", facts.voltage_kv))
    sheets = _filters(facts.filters)
    known = {(f["material"], f["thickness_um"]): f for f in tube.get("filters", ())}
    if sheets or "filters" in tube:
        tube["filters"] = [known.get((s["material"], s["thickness_um"]), s) for s in sheets]
    table["tube"] = tube


def _put(table: dict[str, Any], key: str, value: Any) -> None:
    """Set a key, or drop it for None."""
    if value is None:
        table.pop(key, None)
    else:
        table[key] = value


def _number(what: str, text: str) -> float | None:
    if not text.strip():
        return None
    try:
        return float(text.strip().replace(",", "."))
    except ValueError:
        raise InputError("instrument form", f'{what}: "{text}" is no number', "write for example 40") from None


def _filters(text: str) -> list[dict[str, Any]]:
    """Read ``Al 50, Cu 10``: materials with thicknesses in micrometres."""
    if text.strip().lower() in ("", "none"):
        return []
    found = []
    for sheet in text.replace(";", ",").split(","):
        words = sheet.replace("µm", " ").replace("um", " ").split()
        thickness = _number("filter", words[1]) if len(words) == 2 else None
        if thickness is None:
            raise InputError("instrument form", f'filter: "{sheet.strip()}" is no material with a thickness',
                             'write for example "Al 50" for 50 µm of aluminium')  # fmt: skip
        found.append({"material": words[0], "thickness_um": thickness})
    return found
