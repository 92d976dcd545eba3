"""A small TOML file that says how to read a text file whose shape cannot be guessed."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Annotated, Literal

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, ValidationError

from xrfid.errors import InputError, did_you_mean
from xrfid.formats.axis import axis_of
from xrfid.formats.decode import checked_counts
from xrfid.spectrum import EnergyScale, Spectrum


class Layout(BaseModel):
    """Where the counts are. Lines and columns are counted from 1."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    first_line: Annotated[int, Field(ge=1)] = 1
    last_line: Annotated[int, Field(ge=1)] | None = None
    separator: str | None = None
    decimal: Literal[".", ","] = "."
    counts_column: Annotated[int, Field(ge=1)] = 1
    energy_column: Annotated[int, Field(ge=1)] | None = None
    energy_unit: Literal["keV", "eV"] = "keV"
    offset_kev: float | None = None
    gain_kev: Annotated[float, Field(gt=0)] | None = None
    live_time_s: Annotated[float, Field(gt=0)] | None = None
    real_time_s: Annotated[float, Field(gt=0)] | None = None
    title: str = ""


def load_layout(path: str | Path) -> Layout:
    """Read a layout file.

    Raises
    ------
    InputError
        If it cannot be read or a key or value in it is wrong.
    """
    try:
        return Layout.model_validate(tomllib.loads(Path(path).read_text(encoding="utf-8")))
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(str(path), f"cannot be read ({error})", "give a layout file (TOML)") from None
    except tomllib.TOMLDecodeError as error:
        raise InputError(str(path), f"is not valid TOML ({error})", "mend the line named") from None
    except ValidationError as error:
        first = error.errors()[0]
        key = ".".join(str(part) for part in first["loc"])
        if first["type"] == "extra_forbidden":
            raise InputError(str(path), f'unknown key "{key}"', did_you_mean(key, Layout.model_fields)) from None
        raise InputError(str(path), f"{key}: {first['msg']}", "correct this value or leave it out") from None


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
    scale = None
    if energies:
        factor = 1e-3 if layout.energy_unit == "eV" else 1.0
        axis = axis_of(np.array(energies) * factor, "energy (keV)")
        if axis is None or axis.scale is None:
            raise InputError(
                name, f"column {layout.energy_column} does not rise like an energy axis", "check the layout"
            )
        scale, said = axis.scale, [*said, *axis.said]
    elif layout.gain_kev is not None:
        scale = EnergyScale(layout.offset_kev or 0.0, layout.gain_kev)
    return (
        Spectrum(checked, scale, layout.live_time_s, layout.real_time_s, layout.title, name, None, {}, tuple(said)),
    )


def _cell(name: str, number: int, cells: list[str], column: int, decimal: str) -> float:
    try:
        return float(cells[column - 1].replace(decimal, "."))
    except (IndexError, ValueError):
        found = cells[column - 1][:40] if column <= len(cells) else "nothing"
        raise InputError(
            f"{name}, line {number}", f'column {column} holds "{found}"', "a number is needed; check the layout"
        ) from None
