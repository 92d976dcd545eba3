"""``xrfid identify``: from files of counts to named elements."""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING

import click

from xrfid.cli import complain
from xrfid.cli.options import (
    dataset_option,
    instrument_option,
    load_instrument,
    overwrite_option,
    split_symbols,
)
from xrfid.errors import InputError, OutputError, XrfidError

if TYPE_CHECKING:
    from xrfid.identify.result import Identification
    from xrfid.spectrum import Spectrum


@click.command()
@click.argument("inputs", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="INPUT...")
@instrument_option
@click.option(
    "--json", "json_path", type=click.Path(path_type=Path), help="Write the JSON document here ('-': standard output)."
)
@click.option("--page", "page_path", type=click.Path(path_type=Path), help="Write a self-contained HTML page here.")
@click.option(
    "--figure", "figure_path", type=click.Path(path_type=Path), help="Draw the spectrum (.png, .svg or .pdf)."
)
@dataset_option
@click.option(
    "--layout",
    type=click.Path(path_type=Path),
    metavar="FILE.toml",
    help="How to read a text file whose shape cannot be guessed.",
)
@click.option("--present", metavar="Fe,Cu,...", help="Elements known to be in the sample.")
@click.option("--absent", metavar="Fe,Cu,...", help="Elements known not to be in the sample.")
@click.option("--series", default="KLM", show_default=True, help="Line series to use.")
@click.option(
    "--false-level",
    default=0.01,
    show_default=True,
    type=float,
    help="Falsely identified elements to accept per spectrum, on average.",
)
@overwrite_option
def command(inputs: tuple[Path, ...], instrument_path: Path | None, json_path: Path | None, page_path: Path | None,
            figure_path: Path | None, dataset: str | None, layout: Path | None, present: str | None,
            absent: str | None, series: str, false_level: float, overwrite: bool) -> None:  # fmt: skip
    """Say which elements spectra show, how strongly, how sure that is, and why.

    With several spectra, --json, --page and --figure name folders that receive one file each.
    """
    from rich.console import Console

    from xrfid.identify.pipeline import identify
    from xrfid.identify.settings import Settings
    from xrfid.report.table import render_comparison, render_table

    instrument = load_instrument(instrument_path)
    settings = Settings(false_level, split_symbols(present), split_symbols(absent), series)
    quiet = str(json_path) == "-"
    console = Console(stderr=quiet, width=None)
    worst, done = 0, []
    spectra, failed = _read_all(inputs, dataset, layout)
    worst = max((error.exit_status for error in failed), default=0)
    several = len(inputs) > 1 or len(spectra) > 1
    outputs = _Outputs(json_path, page_path, figure_path, overwrite, several)
    outputs.check([s for s, _ in spectra])
    for spectrum, name in spectra:
        try:
            found = identify(spectrum, instrument, settings)
            outputs.write(found, name)
        except XrfidError as error:
            complain(str(error) if spectrum.name in str(error) else f"{spectrum.name}: {error}")
            worst = max(worst, error.exit_status)
            continue
        done.append(found)
        if len(spectra) == 1:
            render_table(found, console)
    if len(spectra) > 1 and done:
        render_comparison(done, console)
    raise SystemExit(worst)


def _read_all(
    inputs: tuple[Path, ...], dataset: str | None, layout: Path | None
) -> tuple[list[tuple[Spectrum, str]], list[XrfidError]]:
    """Read every spectrum of every input, with a distinct name each for its outputs."""
    from xrfid.formats import read_spectra

    found: list[tuple[Spectrum, str]] = []
    failed: list[XrfidError] = []
    taken: set[str] = set()
    for path in inputs:
        try:
            spectra = read_spectra(path, dataset=dataset, layout=layout)
        except XrfidError as error:
            complain(str(error))
            failed.append(error)
            continue
        for spectrum in spectra:
            stem = path.stem if len(spectra) == 1 else f"{path.stem}-{spectrum.dataset or spectrum.title}"
            name = _distinct(re.sub(r"[^\w.-]+", "_", stem).strip("._") or "spectrum", taken)
            found.append((spectrum, name))
    return found, failed


def _distinct(name: str, taken: set[str]) -> str:
    """Return `name`, numbered if it was given out before."""
    made, count = name, 1
    while made in taken:
        count += 1
        made = f"{name}-{count}"
    taken.add(made)
    return made


class _Outputs:
    """Where the results of a call go."""

    def __init__(self, json_path: Path | None, page: Path | None, figure: Path | None, overwrite: bool,
                 several: bool) -> None:  # fmt: skip
        self._json, self._page, self._figure = json_path, page, figure
        self._overwrite, self._several = overwrite, several

    def check(self, spectra: list[Spectrum]) -> None:
        """Refuse before any work if an output stands in the way or would replace an input."""
        for path in (self._json, self._page, self._figure):
            if path is None or str(path) == "-":
                continue
            if self._several:
                if path.exists() and not path.is_dir():
                    raise OutputError(str(path), "is a file, but several spectra need a folder", "name a folder")
            elif path.exists() and not self._overwrite:
                raise OutputError(str(path), "exists", "give --overwrite to replace it, or another name")
            if any(s.path and path.exists() and path.samefile(s.path) for s in spectra):
                raise InputError(str(path), "is an input as well as an output", "choose another name")

    def write(self, found: Identification, name: str) -> None:
        """Write what was asked for; each file appears whole or not at all."""
        for path, ending, kind in self._targets():
            target = path
            if self._several:
                path.mkdir(parents=True, exist_ok=True)
                target = path / f"{name}{ending}"
            _WRITERS[kind](found, target, self._overwrite)

    def _targets(self) -> Iterator[tuple[Path, str, str]]:
        if self._json is not None:
            yield self._json, ".json", "json"
        if self._page is not None:
            yield self._page, ".html", "page"
        if self._figure is not None:
            yield self._figure, ".png", "figure"


def _write_json(found: Identification, path: Path, overwrite: bool) -> None:
    from xrfid.output import atomic_output
    from xrfid.report.document import to_json

    if str(path) == "-":
        click.echo(to_json(found), nl=False)
        return
    with atomic_output(path, overwrite=overwrite) as beside:
        Path(beside).write_text(to_json(found), encoding="utf-8")


def _write_page(found: Identification, path: Path, overwrite: bool) -> None:
    from xrfid.report.page import save_page

    save_page(found, path, overwrite=overwrite)


def _write_figure(found: Identification, path: Path, overwrite: bool) -> None:
    from xrfid.report.figures import draw_spectrum, save_figure

    save_figure(draw_spectrum(found), path, overwrite=overwrite)


_WRITERS = {"json": _write_json, "page": _write_page, "figure": _write_figure}
