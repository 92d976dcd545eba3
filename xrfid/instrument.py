"""The instrument: source, filters, geometry, path and detector, read from and written to TOML.

Every table and key is optional. What is missing takes the documented default below, and
`Instrument.assumed` names the physically important ones, so that a result can list them.
"""

from __future__ import annotations

import math
import tomllib
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from xrfid.errors import InputError, did_you_mean
from xrfid.spectrum import EnergyScale, Resolution

Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
NotNegative = Annotated[float, Field(ge=0, allow_inf_nan=False)]
Angle = Annotated[float, Field(gt=0, le=90)]


class _Table(BaseModel):
    """A table of the instrument file: frozen, and unknown keys are refused."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class Layer(_Table):
    """A sheet of an element, compound formula or named material."""

    material: str
    thickness_um: NotNegative
    density_g_cm3: Positive | None = None


class Tube(_Table):
    """An X-ray tube. `takeoff_deg` is the angle between target surface and beam."""

    anode: str = "Rh"
    voltage_kv: Annotated[float, Field(ge=2, le=450)] = 40.0
    current_ma: Positive = 0.1
    takeoff_deg: Angle = 20.0
    window: Layer = Layer(material="Be", thickness_um=125.0)
    filters: tuple[Layer, ...] = ()


class Source(_Table):
    """An isotope or a monochromatic beam: lines in keV with relative weights."""

    lines_kev: Annotated[tuple[Positive, ...], Field(min_length=1)]
    weights: tuple[NotNegative, ...] | None = None

    @model_validator(mode="after")
    def _same_length(self) -> Source:
        if self.weights is not None and len(self.weights) != len(self.lines_kev):
            raise ValueError(f"weights has {len(self.weights)} values, lines_kev {len(self.lines_kev)}")
        if self.weights is not None and not sum(self.weights) > 0:
            raise ValueError("at least one weight must be > 0")
        return self


class Geometry(_Table):
    """Angles in degrees: beam to surface, surface to detector, and the turn of detected scatter."""

    incidence_deg: Angle = 45.0
    takeoff_deg: Angle = 45.0
    scatter_deg: Annotated[float, Field(gt=0, le=180)] = 90.0


class AirPath(_Table):
    """What lies between sample and detector."""

    atmosphere: Literal["air", "helium", "vacuum"] = "air"
    length_mm: NotNegative = 10.0


class Detector(_Table):
    """The detector. `fwhm_mn_ka_ev` is its resolution at Mn K-alpha after ISO 15632."""

    material: Literal["Si", "Ge", "CdTe"] = "Si"
    thickness_um: Positive = 500.0
    window: Layer = Layer(material="Be", thickness_um=12.5)
    dead_layer_um: NotNegative = 0.1
    fwhm_mn_ka_ev: Annotated[float, Field(gt=20, lt=2000)] | None = None
    pulse_pair_ns: Positive | None = None

    @property
    def resolution(self) -> Resolution:
        """The resolution stated, or a usual one for the material."""
        usual = {"Si": 145.0, "Ge": 150.0, "CdTe": 350.0}[self.material]
        return Resolution.from_mn_ka(self.fwhm_mn_ka_ev or usual, self.material)


class Scale(_Table):
    """The energy scale that `xrfid calibrate` wrote; used when the file has none."""

    offset_kev: Annotated[float, Field(allow_inf_nan=False)] = 0.0
    gain_kev: Positive
    quadratic_kev: Annotated[float, Field(allow_inf_nan=False)] = 0.0


class Stray(_Table):
    """Elements whose lines the chamber or collimator itself adds."""

    elements: tuple[str, ...] = ()


class Instrument(_Table):
    """Everything about the instrument that the prediction of a spectrum needs."""

    name: str = ""
    tube: Tube | None = None
    source: Source | None = None
    geometry: Geometry = Geometry()
    path: AirPath = AirPath()
    detector: Detector = Detector()
    scale: Scale | None = None
    stray: Stray = Stray()

    @model_validator(mode="after")
    def _one_source(self) -> Instrument:
        if self.tube is not None and self.source is not None:
            raise ValueError("give either [tube] or [source], not both")
        return self

    @classmethod
    def load(cls, path: str | Path) -> Instrument:
        """Read an instrument file.

        Raises
        ------
        InputError
            If it cannot be read, is no TOML, or a key or value in it is wrong.
        """
        try:
            text = Path(path).read_text(encoding="utf-8")
        except OSError as error:
            raise InputError(
                str(path), f"cannot be read ({error.strerror})", "give an instrument file (TOML)"
            ) from None
        except UnicodeDecodeError:
            raise InputError(str(path), "is not a text file", "give an instrument file (TOML)") from None
        try:
            return cls.from_table(tomllib.loads(text), str(path))
        except (tomllib.TOMLDecodeError, RecursionError) as error:
            raise InputError(str(path), f"is not valid TOML ({error})", "mend the line named") from None

    @classmethod
    def from_table(cls, table: dict[str, Any], source: str = "instrument") -> Instrument:
        """Build an instrument from the tables of its file.

        Raises
        ------
        InputError
            If a key or value is wrong; the message names the key and what would do.
        """
        try:
            made = cls.model_validate(table)
        except ValidationError as error:
            raise _explain(cls, error, source) from None
        return made

    @property
    def voltage_kv(self) -> float | None:
        """The highest photon energy that the source sends out, keV; None if no source is stated."""
        if self.source is not None:
            return max(self.source.lines_kev)
        return None if self.tube is None else self.tube.voltage_kv

    @property
    def energy_scale(self) -> EnergyScale | None:
        """The energy scale of the file, if it has one."""
        s = self.scale
        return None if s is None else EnergyScale(s.offset_kev, s.gain_kev, s.quadratic_kev)

    @property
    def assumed(self) -> tuple[str, ...]:
        """The physically important facts that nobody stated, each as a sentence."""
        said: list[str] = []
        if self.tube is None and self.source is None:
            said.append("no source is stated: excitation as by a Rh tube, its voltage read off the spectrum's end")
        if self.tube is not None and "window" not in self.tube.model_fields_set:
            said.append("the tube window is not stated: 125 um Be")
        if self.tube is not None and "filters" not in self.tube.model_fields_set:
            said.append("no tube filter is stated: none")
        if "geometry" not in self.model_fields_set:
            said.append("the geometry is not stated: 45 degrees in, 45 degrees out, scatter turned by 90 degrees")
        if "path" not in self.model_fields_set:
            said.append("the path to the detector is not stated: 10 mm of air")
        if "detector" not in self.model_fields_set:
            said.append("the detector is not stated: 500 um Si behind 12.5 um Be, 145 eV at Mn K-alpha")
        elif self.detector.fwhm_mn_ka_ev is None:
            said.append("the detector's resolution is not stated: a usual one is the starting value")
        return tuple(said)

    def to_toml(self) -> str:
        """Return the instrument file's text; only what was stated is written."""
        return _toml(self.model_dump(exclude_unset=True, exclude_none=True))


def _explain(model: type[BaseModel], error: ValidationError, source: str) -> InputError:
    """Turn the first validation error into one line that names the key and what would do."""
    first = error.errors()[0]
    where = ".".join(str(p) for p in first["loc"]) or "the file"
    if first["type"] == "extra_forbidden":
        known = _keys_at(model, first["loc"][:-1])
        return InputError(source, f'unknown key "{where}"', did_you_mean(str(first["loc"][-1]), known))
    said = first["msg"].removeprefix("Value error, ")
    got = first.get("input")
    shown = "" if isinstance(got, dict) else f" (got {got!r})"
    return InputError(source, f"{where}: {said}{shown}", "correct this value or leave it out")


def _keys_at(model: type[BaseModel], loc: tuple[int | str, ...]) -> list[str]:
    """Return the keys allowed in the table at `loc`."""
    for part in loc:
        if isinstance(part, int):
            continue
        annotation = model.model_fields[part].annotation
        candidates = [annotation, *getattr(annotation, "__args__", ())]
        model = next(c for c in candidates if isinstance(c, type) and issubclass(c, BaseModel))
    return list(model.model_fields)


def _toml(table: dict[str, Any], prefix: str = "") -> str:
    """Write nested tables as TOML: plain values first, then each sub-table under its header."""
    plain = {k: v for k, v in table.items() if not isinstance(v, dict) or set(v) & {"material"}}
    text = f"[{prefix}]\n" if prefix and plain else ""
    text += "".join(f"{k} = {_toml_value(v)}\n" for k, v in plain.items())
    for key, value in table.items():
        if key not in plain:
            text += ("\n" if text else "") + _toml(value, f"{prefix}.{key}" if prefix else key)
    return text


def _toml_value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        escaped = value.replace("\\", "\\\\").replace('"', '\\"')
        return '"' + "".join(c if c.isprintable() else f"\\u{ord(c):04x}" for c in escaped) + '"'
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(_toml_value(v) for v in value) + "]"
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{k} = {_toml_value(v)}" for k, v in value.items()) + " }"
    if isinstance(value, float) and math.isfinite(value):
        return repr(value)
    return str(value)
