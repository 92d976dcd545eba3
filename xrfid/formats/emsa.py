"""EMSA/MAS spectral data files (ISO 22029): keywords ``#NAME : value``, then X, Y or XY data."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xrfid.errors import InputError, OutputError
from xrfid.formats.decode import checked_counts
from xrfid.spectrum import EnergyScale, Spectrum

_KEY = re.compile(r"^\s*#{1,2}\s*([A-Za-z_]+)[^:]*?:(.*)$")
_NUMBER = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:\s?[eE][+-]?\d+)?")
_KEV_PER_UNIT = {"kev": 1.0, "ev": 1e-3, "mev": 1e3}
_FACTS = {
    "BEAMKV": "voltage_kv", "FWHMMNKA": "fwhm_mn_ka_ev", "ELEVANGLE": "takeoff_deg", "DATE": "date", "TIME": "time",
    "OWNER": "owner", "SIGNALTYPE": "signal_type", "TBEWIND": "be_window_cm", "TACTLYR": "active_layer_cm",
    "TDEADLYR": "dead_layer_cm", "EDSDET": "detector_window", "PROBECUR": "probe_current", "COMMENT": "comment",
}  # fmt: skip


def looks_like(text: str) -> bool:
    """Whether a text begins as an EMSA file does."""
    head = text[:3000].upper()
    return bool(re.search(r"^\s*#\s*FORMAT\b.*EMSA", head, re.M)) or (
        "#SPECTRUM" in head.replace(" ", "") and "#NPOINTS" in head.replace(" ", "")
    )


def read(name: str, text: str) -> tuple[Spectrum, ...]:
    """Read the spectrum of an EMSA file.

    Raises
    ------
    InputError
        If a required value is missing or wrong, or the data end before NPOINTS.
    """
    keys, rows, complete = _split(name, text)
    points = _points(name, keys)
    columns = int(_number(name, keys, "NCOLUMNS", 1.0))
    if not 1 <= columns <= 64:
        raise InputError(name, f"NCOLUMNS is {columns}", "it must be 1 to 5")
    kind = keys.get("DATATYPE", "Y").strip().upper() or "Y"
    if kind not in ("Y", "XY", "X"):
        raise InputError(name, f'DATATYPE is "{kind}"', "it must be Y or XY")
    values = _values(name, rows, kind)
    x, counts, said = _arrange(name, values, kind, points, complete)
    counts, more = checked_counts(name, counts)
    scale, why = _scale(name, keys, x, counts.size)
    metadata: dict[str, Any] = {}
    for key, fact in _FACTS.items():
        if key in keys and keys[key].strip():
            metadata[fact] = _as_number(keys[key])
    title = keys.get("TITLE", "").strip()
    spectrum = Spectrum(counts, scale, _time(keys, "LIVETIME"), _time(keys, "REALTIME"), title, name, None, metadata,
                        (*said, *more, *why))  # fmt: skip
    return (spectrum,)


def _split(name: str, text: str) -> tuple[dict[str, str], list[tuple[int, str]], bool]:
    """Return keywords, numbered data lines, and whether the end mark was seen."""
    keys: dict[str, str] = {}
    rows: list[tuple[int, str]] = []
    in_data = False
    for number, line in enumerate(text.split("\n"), start=1):
        if line.lstrip().startswith("#"):
            match = _KEY.match(line)
            bare = line.strip().lstrip("#").strip().upper()
            if bare.startswith("ENDOFDATA") and in_data:
                return keys, rows, True
            if match is None:
                if bare.startswith("SPECTRUM"):
                    in_data = True
                continue
            key = match.group(1).upper()
            if key == "SPECTRUM":
                in_data = True
            elif key == "COMMENT" and key in keys:
                keys[key] += " " + match.group(2).strip()
            else:
                keys.setdefault(key, match.group(2).strip())
        elif in_data and line.strip():
            rows.append((number, line))
    if not in_data:
        raise InputError(name, "has no #SPECTRUM line", "the data of an EMSA file follow #SPECTRUM")
    return keys, rows, False


def _values(name: str, rows: list[tuple[int, str]], kind: str) -> NDArray[np.float64]:
    """All numbers of the data lines; decimal commas are understood where blanks or semicolons separate."""
    out: list[float] = []
    for number, line in rows:
        body = re.sub(r"(\d)\s+([eE][+-]?\d)", r"\1\2", line)
        if re.search(r"\d,\d", body) and not re.search(r"\d\.\d", body) and not re.search(r",\s", body):
            pieces = re.split(r"[;\s]+", body.strip())
            if all(re.fullmatch(r"[+-]?\d+(,\d+)?([eE][+-]?\d+)?", p) for p in pieces if p) and (
                len(pieces) > 1 or kind == "Y"
            ):
                body = body.replace(",", ".")
        for piece in re.split(r"[,;\s]+", body.strip().strip(",;")):
            if not piece:
                continue
            try:
                out.append(float(piece))
            except ValueError:
                raise InputError(
                    f"{name}, line {number}", f'found "{piece[:40]}" among the data', "a number is needed"
                ) from None
    return np.array(out, dtype=float)


def _arrange(name: str, values: NDArray[np.float64], kind: str, points: int | None, complete: bool
             ) -> tuple[NDArray[np.float64] | None, NDArray[np.float64], list[str]]:  # fmt: skip
    said: list[str] = []
    x = None
    if kind == "XY":
        if values.size % 2:
            raise InputError(name, f"XY data hold {values.size} numbers", "pairs are needed")
        x, values = values[0::2], values[1::2]
    if points is None:
        said.append("NPOINTS is not stated: as many points as there are")
    elif values.size < points:
        if not complete:
            raise InputError(
                name, f"NPOINTS says {points}, but the data end after {values.size}", "the file is cut short"
            )
        said.append(f"NPOINTS says {points}, but the file holds {values.size}: all are taken")
    elif values.size > points:
        said.append(f"NPOINTS says {points}, but the file holds {values.size}: the first {points} are taken")
        values, x = values[:points], None if x is None else x[:points]
    return x, values, said


def _scale(name: str, keys: dict[str, str], x: NDArray[np.float64] | None, n: int
           ) -> tuple[EnergyScale | None, list[str]]:  # fmt: skip
    """Energy scale from the x column or from OFFSET and XPERCHAN."""
    unit = re.sub(r"[^a-z]", "", keys.get("XUNITS", "eV").lower())
    said: list[str] = []
    quadratic = 0.0
    if unit not in _KEV_PER_UNIT:
        if unit and not unit.startswith("chan"):
            said.append(f'XUNITS is "{keys["XUNITS"]}", no energy: no energy scale is taken from the file')
        return None, said
    factor = _KEV_PER_UNIT[unit]
    if x is not None and n > 2 and np.ptp(x) > 0 and np.all(np.abs(x) < 1e9):
        offset, gain, quadratic = _through(x)
    else:
        gain, offset = _number(name, keys, "XPERCHAN", math.nan), _number(name, keys, "OFFSET", 0.0)
    if not gain > 0:
        said.append("XPERCHAN is missing or not above 0: the file states no energy scale")
        return None, said
    span = gain * factor * n
    if unit == "ev" and span < 0.5 and gain < 1.0:
        said.append("XUNITS says eV, but the values can only be keV: taken as keV")
        factor = 1.0
    elif unit == "kev" and span > 2000:
        said.append("XUNITS says keV, but the values can only be eV: taken as eV")
        factor = 1e-3
    return EnergyScale(offset * factor, gain * factor, quadratic * factor), said


def _through(x: NDArray[np.float64]) -> tuple[float, float, float]:
    """Offset, gain and quadratic term of an x column; a bend counts if it is no rounding or wavering."""
    index = np.arange(x.size)
    straight, curved = np.polyfit(index, x, 1), np.polyfit(index, x, 2)
    off, left = (np.max(np.abs(np.polyval(c, index) - x)) for c in (straight, curved))
    if off > 0.02 * abs(straight[0]) and left < 0.25 * off and curved[1] > 0:
        return float(curved[2]), float(curved[1]), float(curved[0])
    return float(straight[1]), float(straight[0]), 0.0


def _points(name: str, keys: dict[str, str]) -> int | None:
    if not keys.get("NPOINTS", "").strip():
        return None
    points = _number(name, keys, "NPOINTS", 0.0)
    if not 1 <= points <= 1e7 or points != int(points):
        raise InputError(name, f'NPOINTS is "{keys["NPOINTS"]}"', "it must be a whole number of points")
    return int(points)


def _number(name: str, keys: dict[str, str], key: str, default: float) -> float:
    text = keys.get(key, "").strip()
    if not text:
        return default
    value = _as_number(text)
    if not isinstance(value, float) or not math.isfinite(value):
        raise InputError(name, f'{key} is "{text[:40]}"', "a number is needed")
    return value


def _as_number(text: str) -> float | str:
    plain = text.strip().rstrip(",")
    candidate = plain.replace(",", ".") if re.fullmatch(r"[+-]?\d+,\d+", plain) else plain
    match = _NUMBER.fullmatch(candidate)
    return float(candidate.replace(" ", "")) if match else plain


def _time(keys: dict[str, str], key: str) -> float | None:
    value = _as_number(keys.get(key, ""))
    return value if isinstance(value, float) and value > 0 and math.isfinite(value) else None


def write(spectra: Sequence[Spectrum], path: Path) -> None:
    """Write one spectrum as an EMSA/MAS file with Y data.

    Raises
    ------
    OutputError
        If there are several; the format holds one.
    """
    if len(spectra) != 1:
        raise OutputError(str(path), f"an EMSA file holds one spectrum, not {len(spectra)}", "use .csv or .h5")
    s = spectra[0]
    scale = s.scale
    head: list[tuple[str, str]] = [
        ("FORMAT", "EMSA/MAS Spectral Data File"), ("VERSION", "1.0"),
        ("TITLE", " ".join(s.title.split())[:64]), ("DATE", str(s.metadata.get("date", ""))),
        ("TIME", str(s.metadata.get("time", ""))), ("OWNER", str(s.metadata.get("owner", ""))),
        ("NPOINTS", f"{s.n_channels}."), ("NCOLUMNS", "1."),
        ("XUNITS", "keV" if scale else "channel"), ("YUNITS", "counts"), ("DATATYPE", "XY" if _curved(scale) else "Y"),
        ("XPERCHAN", repr(scale.gain_kev) if scale else "1."), ("OFFSET", repr(scale.offset_kev) if scale else "0."),
        ("SIGNALTYPE", "XRF"),
    ]  # fmt: skip
    for key, value in (("LIVETIME  -s", s.live_time_s), ("REALTIME  -s", s.real_time_s),
                       ("BEAMKV   -kV", s.metadata.get("voltage_kv"))):  # fmt: skip
        if value is not None:
            head.append((key, repr(float(value))))
    text = "".join(f"#{key:<12s}: {value}\r\n" for key, value in head) + "#SPECTRUM    : \r\n"
    if _curved(scale):
        text += "".join(f"{e!r}, {float(c)!r}\r\n" for e, c in zip(map(float, s.energy_kev), s.counts, strict=True))
    else:
        text += "".join(f"{float(c)!r},\r\n" for c in s.counts)
    path.write_bytes((text + "#ENDOFDATA   : \r\n").encode("latin-1", errors="replace"))


def _curved(scale: EnergyScale | None) -> bool:
    return scale is not None and scale.quadratic_kev != 0.0
