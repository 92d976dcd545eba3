"""ANSI/IEEE N42.42 spectra (XML, 2006 and 2012): several spectra, counted zeroes, calibration, durations."""

from __future__ import annotations

import re
from typing import Any
from xml.etree.ElementTree import Element, ParseError

import numpy as np
from numpy.typing import NDArray

from xrfid.errors import InputError
from xrfid.formats.decode import MOST_CHANNELS, checked_counts
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
    scales = {e.get("id", ""): _scale(name, e) for e in _all(root, "EnergyCalibration")}
    only = next(iter(scales.values())) if len(scales) == 1 else None
    measurements = _all(root, "RadMeasurement") + _all(root, "Measurement")
    found: list[Spectrum] = []
    for measurement in measurements or [root]:
        for element in _all(measurement, "Spectrum"):
            found.append(_spectrum(name, measurement, element, scales, only, len(found) + 1))
    if not found:
        raise InputError(name, "holds no Spectrum element", "give an N42 file with at least one spectrum")
    return _apart(found)


def _spectrum(name: str, measurement: Element, element: Element, scales: dict[str, EnergyScale | None],
              only: EnergyScale | None, number: int) -> Spectrum:  # fmt: skip
    where = f"{name}, spectrum {element.get('id') or number}"
    channels = _first(element, "ChannelData")
    if channels is None or not (channels.text or "").strip():
        raise InputError(where, "has no ChannelData", "counts per channel are needed")
    compression = channels.get("compressionCode") or channels.get("Compression") or "None"
    counts, said = checked_counts(where, channel_data(where, channels.text or "", compression))
    own = [_scale(name, c) for c in _all(element, "Calibration") if (c.get("Type") or "").lower() == "energy"]
    reference = element.get("energyCalibrationReference")
    scale = own[0] if own else scales.get(reference, only) if reference else only
    metadata: dict[str, Any] = {}
    start = _text(measurement, "StartDateTime") or _text(element, "StartTime")
    if start:
        metadata["start_time"] = start
    live = _duration(where, _text(element, "LiveTimeDuration") or _text(element, "LiveTime"))
    real = _duration(where, _text(measurement, "RealTimeDuration") or _text(element, "RealTime"))
    title = _text(measurement, "Remark") or element.get("id") or measurement.get("id") or ""
    return Spectrum(counts, scale, live, real, title, name, element.get("id") or f"spectrum {number}", metadata,
                    tuple(said))  # fmt: skip


def channel_data(where: str, text: str, compression: str) -> NDArray[np.float64]:
    """Counts of a ChannelData element; after a zero, CountedZeroes gives how many zeros there are.

    Raises
    ------
    InputError
        If a value is no number, a zero count has no run length, or the expansion is absurd.
    """
    try:
        values = np.array([float(v) for v in text.replace(",", " ").split()])
    except ValueError as error:
        raise InputError(where, f"ChannelData holds no number ({error})", "counts per channel are needed") from None
    if compression.replace(" ", "").lower() not in ("countedzeroes", "countedzeros"):
        return values
    out: list[NDArray[np.float64]] = []
    i, size = 0, 0
    while i < values.size:
        if values[i] != 0:
            out.append(values[i : i + 1])
            i, size = i + 1, size + 1
            continue
        run = values[i + 1] if i + 1 < values.size else -1.0
        if run < 1 or run != int(run):
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
    """Energy scale from polynomial coefficients or channel boundaries."""
    written = _text(element, "CoefficientValues") or _text(element, "Coefficients")
    try:
        if written:
            c = [float(v) for v in written.split()] + [0.0, 0.0, 0.0]
            return EnergyScale(c[0], c[1], c[2]) if c[1] > 0 else None
        bounds = np.array([float(v) for v in (_text(element, "EnergyBoundaryValues") or "").split()])
    except ValueError as error:
        raise InputError(name, f"the energy calibration holds no number ({error})", "mend or remove it") from None
    if bounds.size < 3:
        return None
    gain, edge = np.polyfit(np.arange(bounds.size), bounds, 1)
    return EnergyScale(float(edge + 0.5 * gain), float(gain)) if gain > 0 else None


def _duration(where: str, text: str | None) -> float | None:
    """Seconds of an ISO 8601 duration such as PT1M30.5S."""
    if not text:
        return None
    match = _DURATION.match(text.strip())
    if match is None:
        raise InputError(where, f'the duration "{text[:40]}" is not ISO 8601', "write for example PT60.5S")
    days, hours, minutes, seconds = (float(g or 0.0) for g in match.groups())
    return ((days * 24 + hours) * 60 + minutes) * 60 + seconds or None


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
    from dataclasses import replace

    return tuple(replace(s, dataset=None) for s in found) if len(found) == 1 else tuple(found)
