"""A spectrum with known truth, from a recipe: composition, instrument, time and counts, seed.

The same prediction as in identification, put together the other way round. It tests instruments and
procedures; it does not test the prediction (`tests/benchmarks/honesty` has a generator with other
atomic data for that). Enhancement is included for thick samples, not for coated ones; the argon of
an air path is, as if the beam lit all of it.
"""

from __future__ import annotations

import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any

import numpy as np
from numpy.typing import NDArray
from pydantic import BaseModel, ConfigDict, Field, ValidationError

from xrfid.atoms.absorption import AIR, GAS_DENSITY_G_CM3
from xrfid.atoms.elements import symbol
from xrfid.errors import InputError, did_you_mean
from xrfid.fit.design import scatter_columns, scattered_continuum
from xrfid.fit.grouping import Grouping
from xrfid.instrument import Instrument
from xrfid.response.detector import DrawnLines, LineShape, draw
from xrfid.response.pileup import pair_spectrum
from xrfid.response.sample import Layer, mass_fractions
from xrfid.response.series import Prediction
from xrfid.spectrum import EnergyScale, Spectrum

Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]


class Coating(BaseModel):
    """One layer on the sample: mass fractions and mass per area, or thickness and density."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    composition: dict[str, float]
    g_cm2: Positive | None = None
    thickness_um: Positive | None = None
    density_g_cm3: Positive | None = None

    @property
    def mass_per_area(self) -> float | None:
        """Mass per area, g/cm2; None if it does not follow from what is given."""
        if self.g_cm2 is not None:
            return self.g_cm2
        if self.thickness_um is None or self.density_g_cm3 is None:
            return None
        return self.thickness_um * 1e-4 * self.density_g_cm3


class Recipe(BaseModel):
    """What to simulate; composition in any unit of weight."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    title: str = "simulated spectrum"
    sample: dict[str, float]
    coating: Coating | None = None
    instrument: dict[str, Any] | str | None = None
    channels: Annotated[int, Field(ge=64, le=65_536)] = 2048
    offset_kev: Annotated[float, Field(ge=-5, le=5)] = 0.0
    gain_kev: Positive = 0.02
    total_counts: Annotated[float, Field(gt=0, le=1e12)] = 1e6
    live_time_s: Positive = 60.0
    pulse_pair_ns: Annotated[float, Field(ge=0, le=1e5)] = 0.0
    seed: Annotated[int, Field(ge=0)] = 1


@dataclass(frozen=True, eq=False)
class Simulated:
    """A simulated spectrum, the expected counts per channel, and each series' expected area."""

    spectrum: Spectrum
    expected: NDArray[np.float64]
    areas: dict[str, float]


def load_recipe(path: str | Path) -> Recipe:
    """Read a recipe.

    Raises
    ------
    InputError
        If it cannot be read or a key or value in it is wrong.
    """
    try:
        return Recipe.model_validate(tomllib.loads(Path(path).read_text(encoding="utf-8")))
    except OSError as error:
        raise InputError(str(path), f"cannot be read ({error.strerror})", "give a recipe (TOML)") from None
    except UnicodeDecodeError:
        raise InputError(str(path), "is not a text file", "give a recipe (TOML)") from None
    except tomllib.TOMLDecodeError as error:
        raise InputError(str(path), f"is not valid TOML ({error})", "mend the line named") from None
    except ValidationError as error:
        raise _explained(error, str(path)) from None


def _explained(error: ValidationError, source: str) -> InputError:
    """Turn the first validation error into one line that names the key and what would do."""
    first = error.errors()[0]
    key = ".".join(str(part) for part in first["loc"])
    if first["type"] == "extra_forbidden":
        known = (Coating if len(first["loc"]) > 1 else Recipe).model_fields
        return InputError(source, f'unknown key "{key}"', did_you_mean(str(first["loc"][-1]), known))
    if first["type"] == "missing":
        return InputError(source, f'"{key}" is missing', "add it")
    got = first.get("input")
    shown = "" if isinstance(got, dict) else f" (got {got!r})"
    return InputError(source, f"{key}: {first['msg']}{shown}", "correct this value")


def recipe_instrument(recipe: Recipe, folder: Path, source: str) -> Instrument:
    """Return the instrument of a recipe: its own tables, a file beside it, or the defaults."""
    if isinstance(recipe.instrument, str):
        return Instrument.load(folder / recipe.instrument)
    return Instrument.from_table(recipe.instrument or {"tube": {}}, f"{source}, [instrument]")


def simulate(recipe: Recipe, instrument: Instrument) -> Simulated:
    """Simulate a spectrum.

    Raises
    ------
    InputError
        If a composition or the coating makes no sense.
    """
    prediction = Prediction(instrument)
    scale = EnergyScale(recipe.offset_kev, recipe.gain_kev)
    edges = scale.edges_kev(recipe.channels)
    grouping = Grouping(np.arange(recipe.channels + 1), edges)
    shape = LineShape.of(instrument.detector)
    below = _fractions(recipe.sample, "sample")
    weight = _line_weights(recipe, prediction, below) + _air_of_the_path(prediction)
    inside = (prediction.line_energy_kev > max(edges[0], 0.3)) & (prediction.line_energy_kev < edges[-1]) & (weight > 0)
    lines = DrawnLines(prediction.line_energy_kev[inside], weight[inside], prediction.line_series[inside])
    series = draw(lines.with_escapes(instrument.detector.material), shape, edges, len(prediction.keys))
    raw = series.sum(axis=0) + _scattered(prediction, below, shape, grouping)
    if not raw.sum() > 0:
        raise InputError(
            "recipe", "this instrument and range show nothing of the sample", "check gain_kev and voltage_kv"
        )
    per_unit = recipe.total_counts / float(raw.sum())
    expected, kept = _piled_up(raw * per_unit, scale, recipe.pulse_pair_ns * 1e-9 / recipe.live_time_s)
    counts = np.random.default_rng(recipe.seed).poisson(expected).astype(float)
    total = np.bincount(lines.column, lines.weight, minlength=len(prediction.keys)) * per_unit * kept
    areas = {str(k): float(a) for k, a in zip(prediction.keys, total, strict=True) if a > 0.01}
    facts = {} if instrument.tube is None else {"voltage_kv": instrument.tube.voltage_kv}
    spectrum = Spectrum(counts, scale, recipe.live_time_s, None, recipe.title, metadata=facts)
    return Simulated(spectrum, expected, areas)


def _fractions(composition: dict[str, float], where: str) -> NDArray[np.float64]:
    try:
        return mass_fractions(composition)
    except ValueError as error:
        raise InputError(f"recipe, [{where}]", str(error), "give weights by element symbol") from None


def _line_weights(recipe: Recipe, prediction: Prediction, below: NDArray[np.float64]) -> NDArray[np.float64]:
    """Counts of each line in relative units, coating and substrate together."""
    of_element = prediction.line_z - 1
    if recipe.coating is None:
        return prediction.line_intensities(below) * below[of_element]
    mass = recipe.coating.mass_per_area
    if mass is None:
        raise InputError(
            "recipe, [coating]", "its mass per area is not stated", "give g_cm2, or thickness_um and density_g_cm3"
        )
    above = _fractions(recipe.coating.composition, "coating")
    coated, veiled = prediction.layered_intensities(Layer(above, mass), Layer(below))
    return coated * above[of_element] + veiled * below[of_element]


def _air_of_the_path(prediction: Prediction) -> NDArray[np.float64]:
    """Counts of each line of the gas between sample and detector, in the same units."""
    path = prediction.instrument.path
    if path.atmosphere != "air" or path.length_mm == 0:
        return np.zeros(prediction.line_z.size)
    air = mass_fractions({symbol(z): w for z, w in AIR.items()})
    layer = Layer(air, GAS_DENSITY_G_CM3["air"] * 0.1 * path.length_mm)
    return prediction.layered_intensities(layer, None)[0] * air[prediction.line_z - 1]


def _scattered(prediction: Prediction, fractions: NDArray[np.float64], shape: LineShape, grouping: Grouping
               ) -> NDArray[np.float64]:  # fmt: skip
    out = scattered_continuum(prediction, fractions, shape, grouping)
    for column in scatter_columns(prediction, fractions, shape, grouping):
        out = out + column.predicted * column.column
    return out


def _piled_up(raw: NDArray[np.float64], scale: EnergyScale, per_pair: float) -> tuple[NDArray[np.float64], float]:
    """Expected counts after pile-up, and the share of single events that stays single."""
    kept = max(1.0 - 2.0 * per_pair * float(raw.sum()), 0.0)
    return (raw * kept + per_pair * pair_spectrum(raw, scale), kept) if per_pair > 0 else (raw, 1.0)
