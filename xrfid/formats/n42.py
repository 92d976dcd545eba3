"""ANSI/IEEE N42.42 spectra (XML, 2006 and 2012): several spectra, counted zeroes, calibration, durations."""

from __future__ import annotations

import re
from dataclasses import replace
from typing import Any
from xml.etree.ElementTree import Element, ParseError

import numpy as np
from numpy.typing import NDArray

from xrfid.errors import InputError
from xrfid.formats.decode import FEWEST_CHANNELS, MOST_CHANNELS, checked_counts
from xrfid.spectrum import EnergyScale, Spectrum

_DURATION = re.compile(r"^P(?:(\d+(?:\.\d+)?)D)?(?:T(?:(\d+(?:\.\d+)?)H)?(?:(\d+(?:\.\d+)?)M)?(?:(\d+(?:\.\d+)?)S)?)?$")


def looks_like(text: str) -> bool:
    """Whether a text is an N42 document."""
    head = text[:5000]
    return head.lstrip().startswith("<") and ("N42" in head or "RadInstrumentData" in head)


def read(name: str, data: bytes) -> tuple[Spectrum, ...]:
    """Read every spectrum of an N42 document.

    Raises
    ------
    InputError
        If the XML is broken, holds entities, or an element's content makes no sense.
    """
    from defusedxml.common import DefusedXmlException
    from defusedxml.ElementTree import fromstring

    try:
        root = fromstring(data, forbid_dtd=True)
    except DefusedXmlException:
        raise InputError(name, "declares a document type or entities", "an N42 file needs none; remove them") from None
    except (ParseError, ValueError, LookupError) as error:
        raise InputError(name, f"is not well-formed XML ({error})", "the file is damaged or cut short") from None
    scales = [(e.get("id") or e.get("ID") or "", _scale(name, e)) for e in root.iter() if _is_energy(e)]
    measurements = _all(root, "RadMeasurement") + _all(root, "Measurement")
    found: list[Spectrum] = []
    for measurement in measurements or [root]:
        for element in _all(measurement, "Spectrum"):
            found.append(_spectrum(name, measurement, element, scales, len(found) + 1))
    if not found:
        raise InputError(name, "holds no Spectrum element", "give an N42 file with at least one spectrum")
    return _apart(found)


def _spectrum(
    name: str, measurement: Element, element: Element, scales: list[tuple[str, EnergyScale | None]], number: int
) -> Spectrum:
    where = f"{name}, spectrum {element.get('id') or number}"
    channels = _first(element, "ChannelData")
    if channels is None or not (channels.text or "").strip():
        raise InputError(where, "has no ChannelData", "counts per channel are needed")
    compression = channels.get("compressionCode") or channels.get("Compression") or "None"
    counts, said = checked_counts(where, channel_data(where, channels.text or "", compression))
    scale, why = _scale_of(where, element, scales)
    metadata: dict[str, Any] = {}
    start = _text(measurement, "StartDateTime") or _text(element, "StartTime")
    if start:
        metadata["start_time"] = start
    live = _duration(where, _text(element, "LiveTimeDuration") or _text(element, "LiveTime"))
    real = _duration(where, _text(measurement, "RealTimeDuration") or _text(element, "RealTime"))
    own_name = element.get("id") or measurement.get("id") or f"spectrum {number}"
    title = _text(element, "Remark") or _text(measurement, "Remark") or own_name
    return Spectrum(counts, scale, live, real, title, name, own_name, metadata, (*said, *why))


def _scale_of(
    where: str, element: Element, scales: list[tuple[str, EnergyScale | None]]
) -> tuple[EnergyScale | None, list[str]]:
    """Energy scale inside a spectrum, the one it refers to, or the only one of the document."""
    own = [_scale(where, e) for e in element.iter() if _is_energy(e)]
    if own:
        return own[0], []
    referred = (element.get("energyCalibrationReference") or element.get("CalibrationIDs") or "").split()
    for called, scale in scales:
        if called in referred:
            return scale, []
    if len(scales) != 1:
        said = "which of the energy calibrations belongs to the spectrum is not said: none is taken"
        return None, [said] if scales else []
    if referred:
        return scales[0][1], [f'the calibration "{referred[0][:40]}" is not in the file: its only other one is taken']
    return scales[0][1], []


def channel_data(where: str, text: str, compression: str) -> NDArray[np.float64]:
    """Counts of a ChannelData element; after a zero, CountedZeroes gives how many zeros there are.

    Raises
    ------
    InputError
        If a value is no number, a zero count has no run length, the expansion is absurd, or the
        compression is none of the standard's.
    """
    most = 2 * MOST_CHANNELS
    pieces = text.replace(",", " ").split(None, most)
    if len(pieces) > most:
        found = f"ChannelData holds more than {most} numbers"
        raise InputError(where, found, f"at most {MOST_CHANNELS} channels are read")
    try:
        values = np.array([float(v) for v in pieces])
    except ValueError as error:
        raise InputError(where, f"ChannelData holds no number ({error})", "counts per channel are needed") from None
    code = re.sub(r"[\W_]", "", compression).lower()
    if code in ("", "none"):
        return values
    if code not in ("countedzeroes", "countedzeros"):
        raise InputError(where, f'ChannelData is compressed as "{compression[:40]}"', "use CountedZeroes or None")
    out: list[NDArray[np.float64]] = []
    i, size = 0, 0
    while i < values.size:
        if values[i] != 0:
            out.append(values[i : i + 1])
            i, size = i + 1, size + 1
            continue
        run = values[i + 1] if i + 1 < values.size else -1.0
        if not 1 <= run < np.inf or run != int(run):
            raise InputError(where, "a zero in CountedZeroes data has no run length", "the data are damaged")
        size += int(run)
        if size > MOST_CHANNELS:
            raise InputError(
                where, f"CountedZeroes expand to more than {MOST_CHANNELS} channels", "the data are damaged"
            )
        out.append(np.zeros(int(run)))
        i += 2
    return np.concatenate(out) if out else np.empty(0)


def _scale(name: str, element: Element) -> EnergyScale | None:
    """Energy scale from polynomial coefficients or channel boundaries; None if it is none (all zero, say)."""
    unit = element.get("EnergyUnits") or "keV"
    kev = {"kev": 1.0, "ev": 1e-3, "mev": 1e3}.get(unit.strip().lower())
    if kev is None:
        raise InputError(name, f'EnergyUnits is "{unit[:40]}"', "use keV")
    for tag in ("CoefficientValues", "Coefficients", "EnergyBoundaryValues"):
        written = _text(element, tag)
        if written is None:
            continue
        try:
            values = np.array([float(v) for v in written.replace(",", " ").split()])
        except ValueError as error:
            raise InputError(name, f"{tag} holds no number ({error})", "mend or remove it") from None
        if not np.all(np.isfinite(values)):
            raise InputError(name, f"{tag} holds a value that is not finite", "mend or remove it")
        c = kev * (_through_bounds(values) if tag == "EnergyBoundaryValues" else np.append(values, np.zeros(3)))
        return EnergyScale(float(c[0]), float(c[1]), float(c[2])) if c[1] > 0 else None
    return None


def _through_bounds(bounds: NDArray[np.float64]) -> NDArray[np.float64]:
    """Offset, gain and quadratic term of channel boundaries; zeros if they do not rise."""
    if bounds.size < FEWEST_CHANNELS or np.any(np.diff(bounds) <= 0):
        return np.zeros(3)
    edges = np.arange(bounds.size) - 0.5
    found = np.polynomial.Polynomial.fit(edges, bounds, 2).convert().coef
    return np.pad(np.asarray(found, dtype=np.float64), (0, 3 - found.size))


def _duration(where: str, text: str | None) -> float | None:
    """Seconds of an ISO 8601 duration such as PT1M30.5S."""
    if not text:
        return None
    match = _DURATION.match(text.strip())
    if match is None:
        raise InputError(where, f'the duration "{text[:40]}" is not ISO 8601', "write for example PT60.5S")
    days, hours, minutes, seconds = (float(g or 0.0) for g in match.groups())
    return ((days * 24 + hours) * 60 + minutes) * 60 + seconds or None


def _is_energy(element: Element) -> bool:
    """Whether it is an energy calibration: an element of its own in 2012, a kind of calibration in 2006."""
    if not isinstance(element.tag, str):
        return False
    kind = (element.get("Type") or "").lower()
    return _local(element) == "EnergyCalibration" or (_local(element) == "Calibration" and kind == "energy")


def _local(element: Element) -> str:
    return element.tag.rpartition("}")[2]


def _all(element: Element, tag: str) -> list[Element]:
    return [e for e in element.iter() if isinstance(e.tag, str) and _local(e) == tag]


def _first(element: Element, tag: str) -> Element | None:
    return next(iter(_all(element, tag)), None)


def _text(element: Element, tag: str) -> str | None:
    found = _first(element, tag)
    return (found.text or "").strip() or None if found is not None else None


def _apart(found: list[Spectrum]) -> tuple[Spectrum, ...]:
    """Give each spectrum a name of its own; the only one needs none."""
    if len(found) == 1:
        return (replace(found[0], dataset=None),)
    taken: set[str] = set()
    out = []
    for number, s in enumerate(found, start=1):
        name = s.dataset if s.dataset and s.dataset not in taken else f"{s.dataset} ({number})"
        taken.add(name)
        out.append(replace(s, dataset=name))
    return tuple(out)
