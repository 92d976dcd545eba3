"""The JSON document of an identification: a faithful copy of the result records, curves left out.

The published schema is `identification.schema.json` beside this file. NaN and infinity, which JSON
does not know, are written as null and read back as NaN.
"""

from __future__ import annotations

import json
import math
import types
import typing
from collections.abc import Mapping
from dataclasses import fields, is_dataclass
from enum import Enum
from importlib.resources import files
from typing import Any

import numpy as np

from xrfid.errors import InputError
from xrfid.identify.result import (
    Artefact,
    Curves,
    Finding,
    Identification,
    Limit,
    Source,
    Unexplained,
)
from xrfid.prepare.calibration import Calibration
from xrfid.spectrum import EnergyScale, Resolution

SCHEMA = "xrfid.identification/1"


def schema() -> dict[str, Any]:
    """Return the published JSON Schema (draft 2020-12) of the document."""
    text = files("xrfid.report").joinpath("identification.schema.json").read_text("utf-8")
    return typing.cast("dict[str, Any]", json.loads(text))


def to_document(identification: Identification) -> dict[str, Any]:
    """Return the identification as plain dictionaries, lists, strings, numbers and None."""
    result = identification
    findings = [{**_plain(f), "significance": _plain(f.evidence.significance)} for f in result.findings]
    return {
        "schema": SCHEMA,
        "source": _plain(result.source),
        "calibration": _calibration(result.calibration),
        "identified": list(result.identified),
        "findings": findings,
        "limits": _plain(result.limits),
        "artefacts": _plain(result.artefacts),
        "unexplained": _plain(result.unexplained),
        "assumptions": list(result.assumptions),
        "cautions": list(result.cautions),
        "composition": _plain(result.composition),
        "reduced_deviance": _plain(result.reduced_deviance),
        "false_identification_level": _plain(result.false_identification_level),
        "provenance": _plain(result.provenance),
    }


def to_json(identification: Identification) -> str:
    """Return the document as JSON text, two spaces deep, ending in a newline."""
    return json.dumps(to_document(identification), indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def from_document(document: Mapping[str, Any], source: str = "document") -> Identification:
    """Rebuild an identification from its document; its curves are empty.

    Parameters
    ----------
    document : mapping
        As `to_document` returns it.
    source : str
        What to call it in an error message, say the file it was read from.

    Raises
    ------
    InputError
        If it is no such document; the message says where.
    """
    found = document.get("schema") if isinstance(document, Mapping) else None
    if found != SCHEMA:
        raise InputError(source, f"its schema is {found!r}", f'a document of schema "{SCHEMA}" would do')
    read = _Reader(document, source)
    return Identification(
        source=read("source", Source),
        calibration=_calibration_back(read("calibration", dict[str, Any]), source),
        findings=read("findings", tuple[Finding, ...]),
        limits=read("limits", tuple[Limit, ...]),
        artefacts=read("artefacts", tuple[Artefact, ...]),
        unexplained=read("unexplained", tuple[Unexplained, ...]),
        assumptions=read("assumptions", tuple[str, ...]),
        cautions=read("cautions", tuple[str, ...]),
        provenance=read("provenance", dict[str, Any]),
        curves=no_curves(),
        reduced_deviance=read("reduced_deviance", float),
        false_identification_level=read("false_identification_level", float),
        composition=read("composition", dict[str, float]),
    )


def no_curves() -> Curves:
    """Return curves of zero channels, for an identification read back from its document."""
    nothing = np.zeros(0)
    return Curves(nothing, nothing, nothing, nothing, {})


def _plain(value: Any) -> Any:
    """Turn records, tuples, mappings and numpy numbers into what JSON knows."""
    if isinstance(value, Enum):
        return value.value
    if is_dataclass(value) and not isinstance(value, type):
        return {f.name: _plain(getattr(value, f.name)) for f in fields(value)}
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, np.ndarray | list | tuple):
        return [_plain(v) for v in value]
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if value is None or isinstance(value, str | int):
        return value
    return str(value)


def _calibration(used: Calibration) -> dict[str, Any]:
    """Lay the coefficients of the calibration flat, as scripts outside rely on them."""
    names = ("line", "energy_kev", "residual_ev", "sigma_ev")
    return {
        **_plain(used.scale),
        "fwhm_mn_ka_ev": _plain(used.resolution.fwhm_mn_ka_ev),
        "resolution": _plain(used.resolution),
        "origin": used.origin,
        "rms_ev": _plain(used.rms_ev),
        "note": used.note,
        "offset_sigma_kev": _plain(used.offset_sigma_kev),
        "gain_sigma_kev": _plain(used.gain_sigma_kev),
        "residuals": [dict(zip(names, _plain(row), strict=True)) for row in used.residuals],
        "stated": _plain(used.stated),
        "runner_up": _plain(used.runner_up),
        "lead": _plain(used.lead),
    }


def _calibration_back(plain: Mapping[str, Any], source: str) -> Calibration:
    read = _Reader(plain, f"{source}, calibration")
    rows, row_type = read("residuals", tuple[dict[str, Any], ...]), tuple[str, float, float, float]
    return Calibration(
        scale=_build(EnergyScale, plain, read.where),
        resolution=read("resolution", Resolution),
        origin=read("origin", str),
        rms_ev=read("rms_ev", float),
        note=read("note", str),
        offset_sigma_kev=read("offset_sigma_kev", float),
        gain_sigma_kev=read("gain_sigma_kev", float),
        residuals=tuple(_build(row_type, list(row.values()), read.where) for row in rows),
        stated=read("stated", EnergyScale | None),
        runner_up=read("runner_up", EnergyScale | None),
        lead=read("lead", float | None),
    )


class _Reader:
    """Values of a mapping, each built as the type asked for; errors say which key."""

    def __init__(self, plain: Mapping[str, Any], where: str) -> None:
        self.plain, self.where = plain, where

    def __call__(self, key: str, kind: Any) -> Any:
        if key not in self.plain:
            raise InputError(self.where, f'"{key}" is missing')
        return _build(kind, self.plain[key], f"{self.where}, {key}")


def _build(kind: Any, value: Any, where: str) -> Any:
    """Build a value of type `kind` (records, tuples, enumerations, numbers) from plain JSON."""
    origin, arguments = typing.get_origin(kind), typing.get_args(kind)
    if origin in (typing.Union, types.UnionType):
        inner = next(a for a in arguments if a is not type(None))
        return None if value is None else _build(inner, value, where)
    if is_dataclass(kind):
        hints = typing.get_type_hints(kind)
        read = _Reader(_expect(value, Mapping, where), where)
        values = {f.name: read(f.name, hints[f.name]) for f in fields(kind)}
        try:
            return typing.cast("type[Any]", kind)(**values)
        except ValueError as error:
            raise InputError(where, str(error)) from error
    if origin is tuple:
        items = _expect(value, list, where)
        each = [arguments[0]] * len(items) if arguments[-1] is Ellipsis else list(arguments)
        if len(each) != len(items):
            raise InputError(where, f"{len(items)} values where {len(each)} belong")
        return tuple(_build(k, v, f"{where}[{i}]") for i, (k, v) in enumerate(zip(each, items, strict=True)))
    if origin is dict:
        items = _expect(value, Mapping, where).items()
        return {key: _build(arguments[1], item, f"{where}, {key}") for key, item in items}
    if isinstance(kind, type) and issubclass(kind, Enum):
        if value not in [member.value for member in kind]:
            raise InputError(where, f"{value!r} is none of {', '.join(m.value for m in kind)}")
        return kind(value)
    if kind is float:
        return math.nan if value is None else float(_expect(value, float | int, where))
    return value if kind is Any else _expect(value, kind, where)


def _expect(value: Any, kind: Any, where: str) -> Any:
    """Return `value` if it is of `kind`."""
    if not isinstance(value, kind) or isinstance(value, bool):
        names = {Mapping: "a table", list: "a list", str: "text", int: "a whole number"}
        raise InputError(where, f"{value!r} is not {names.get(kind, 'a number')}")
    return value
