"""Options that several commands share."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import click

F = TypeVar("F", bound=Callable[..., Any])

instrument_option = click.option(
    "--instrument", "instrument_path", type=click.Path(path_type=Path), metavar="FILE.toml",
    help="Instrument file: source, filters, geometry, path, detector.",
)  # fmt: skip
overwrite_option = click.option("--overwrite", is_flag=True, help="Replace outputs that exist.")
dataset_option = click.option(
    "--dataset", metavar="NAME", help="Which spectrum of the file: its name, or an HDF5 path."
)


def split_symbols(text: str | None) -> tuple[str, ...]:
    """Turn ``Fe,Cu`` into ``("Fe", "Cu")``."""
    return tuple(part.strip() for part in (text or "").split(",") if part.strip())


def load_instrument(path: Path | None) -> Any:
    """Return the instrument of a file, or the documented defaults."""
    from xrfid.instrument import Instrument

    return Instrument() if path is None else Instrument.load(path)
