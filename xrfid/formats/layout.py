"""A small TOML file that says how to read a text file whose shape cannot be guessed."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Annotated, Literal

import numpy as np
from numpy.typing import NDArray
from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from xrfid.errors import InputError, did_you_mean
from xrfid.formats.axis import axis_of
from xrfid.formats.decode import checked_counts
from xrfid.spectrum import EnergyScale, Spectrum

Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
Finite = Annotated[float, Field(allow_inf_nan=False)]
Ordinal = Annotated[int, Field(ge=1)]


class Layout(BaseModel):
    """Where the counts are. Lines and columns are counted from 1; without `separator` blanks separate."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    first_line: Ordinal = 1
    last_line: Ordinal | None = None
    separator: Annotated[str, Field(min_length=1)] | None = None
    decimal: Literal[".", ","] = "."
    counts_column: Ordinal = 1
    energy_column: Ordinal | None = None
    energy_unit: Literal["keV", "eV"] = "keV"
    offset_kev: Finite | None = None
    gain_kev: Positive | None = None
    live_time_s: Positive | None = None
    real_time_s: Positive | None = None
    title: str = ""

    @model_validator(mode="after")
    def _fits_together(self) -> Layout:
        if self.separator == self.decimal:
            raise ValueError(f'separator and decimal are both "{self.decimal}"')
        if self.last_line is not None and self.last_line < self.first_line:
            raise ValueError(f"last_line {self.last_line} lies before first_line {self.first_line}")
        if self.gain_kev is None and self.offset_kev is not None:
            raise ValueError("offset_kev is given without gain_kev")
        if self.gain_kev is not None and self.energy_column is not None:
            raise ValueError("give either energy_column or gain_kev, not both")
        return self


def load_layout(path: str | Path) -> Layout:
    """Read a layout file.

    Raises
    ------
    InputError
        If it cannot be read or a key or value in it is wrong.
    """
    source = str(path)
    try:
        return Layout.model_validate(tomllib.loads(Path(path).read_text(encoding="utf-8")))
    except OSError as error:
        why = (error.strerror or str(error)).lower()
        raise InputError(source, f"cannot be read ({why})", "give a layout file (TOML)") from None
    except UnicodeDecodeError:
        raise InputError(source, "is not a text file", "give a layout file (TOML)") from None
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise InputError(source, f"is not valid TOML ({error})", "mend the line named") from None
    except ValidationError as error:
        raise _explain(source, error) from None


def _explain(source: str, error: ValidationError) -> InputError:
    first = error.errors()[0]
    key = ".".join(str(part) for part in first["loc"])
    if first["type"] == "extra_forbidden":
        return InputError(source, f'unknown key "{key}"', did_you_mean(key, Layout.model_fields))
    said = first["msg"].removeprefix("Value error, ")
    if not key:
        return InputError(source, said, "correct one of them")
    return InputError(source, f"{key}: {said} (got {first['input']!r})", "correct this value or leave it out")


def read_with_layout(name: str, text: str, layout_path: str | Path) -> tuple[Spectrum, ...]:
    """Read one spectrum the way a layout file says.

    Raises
    ------
    InputError
        If a line in its range does not hold the numbers it should.
    """
    layout = load_layout(layout_path)
    counts, energies = [], []
    lines = text.split("\n")[layout.first_line - 1 : layout.last_line]
    for number, line in enumerate(lines, start=layout.first_line):
        if not line.strip():
            continue
        cells = [c.strip() for c in (line.split(layout.separator) if layout.separator else line.split())]
        counts.append(_cell(name, number, cells, layout.counts_column, layout.decimal))
        if layout.energy_column is not None:
            energies.append(_cell(name, number, cells, layout.energy_column, layout.decimal))
    checked, said = checked_counts(name, np.array(counts, dtype=float))
    scale, why = _scale(name, layout, np.array(energies, dtype=float))
    live, real = layout.live_time_s, layout.real_time_s
    return (Spectrum(checked, scale, live, real, layout.title, name, None, {}, (*said, *why)),)


def _scale(name: str, layout: Layout, energies: NDArray[np.float64]) -> tuple[EnergyScale | None, tuple[str, ...]]:
    if layout.gain_kev is not None:
        return EnergyScale(layout.offset_kev or 0.0, layout.gain_kev), ()
    if layout.energy_column is None:
        return None, ()
    axis = axis_of(energies * (1e-3 if layout.energy_unit == "eV" else 1.0), "energy (keV)")
    if axis is None or axis.scale is None:
        found = f"column {layout.energy_column} does not rise like an energy axis"
        raise InputError(name, found, "check the layout")
    return axis.scale, axis.said


def _cell(name: str, number: int, cells: list[str], column: int, decimal: str) -> float:
    try:
        return float(cells[column - 1].replace(decimal, "."))
    except (IndexError, ValueError):
        found = f'"{cells[column - 1][:40]}"' if column <= len(cells) else "nothing"
        remedy = "a number is needed; check the layout"
        raise InputError(f"{name}, line {number}", f"column {column} holds {found}", remedy) from None
