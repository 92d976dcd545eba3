"""``xrfid batch``: every spectrum of a scanning run fitted, with maps of every series."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
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
from xrfid.errors import InputError, OutputError

if TYPE_CHECKING:
    from xrfid.batch import Summary

_MOST_MAPS = 24


@click.command()
@click.argument("source", type=click.Path(path_type=Path), metavar="INPUT.h5")
@click.option("--out", required=True, type=click.Path(path_type=Path), metavar="RESULT.h5", help="The result file.")
@instrument_option
@dataset_option
@click.option(
    "--detectors",
    metavar="all|0,2,...",
    help="The first axis counts detectors: sum these (default: it counts points).",
)
@click.option("--elements", metavar="Fe,Cu,...", help="Fit exactly these elements (default: found in the run).")
@click.option("--workers", type=click.IntRange(min=1), help="Threads (default: all cores).")
@click.option("--scheduler", metavar="ADDRESS", help="Let the workers of a Dask scheduler do it.")
@click.option("--maps", type=click.Path(path_type=Path), metavar="PATH", help="Draw all maps (.png, .svg or .pdf).")
@click.option("--compress", is_flag=True, help="Compress the result.")
@overwrite_option
def command(source: Path, out: Path, instrument_path: Path | None, dataset: str | None, detectors: str | None,
            elements: str | None, workers: int | None, scheduler: str | None, maps: Path | None, compress: bool,
            overwrite: bool) -> None:  # fmt: skip
    """Fit every spectrum of an HDF5 run; areas and uncertainties go to RESULT.h5.

    What to fit is found in the run itself. A run that was interrupted goes on where it stood when the
    same command is given again.
    """
    from rich.console import Console

    from xrfid.batch import run
    from xrfid.report.document import to_json

    if maps is not None and maps.exists() and not overwrite:
        raise OutputError(str(maps), "exists", "give --overwrite to replace it, or another name")
    with _progress() as progress:
        summary = run(
            source, out, document=to_json, instrument=load_instrument(instrument_path), dataset=dataset,
            detectors=_detectors(detectors), elements=split_symbols(elements), workers=workers, scheduler=scheduler,
            compress=compress, overwrite=overwrite, progress=progress,
        )  # fmt: skip
    _say(summary, out, Console())
    if maps is not None:
        _draw(summary, out, maps, overwrite)


def _detectors(text: str | None) -> tuple[int, ...] | str:
    """Read ``all`` or a list of indices."""
    if text is None or text == "all":
        return text or ()
    try:
        return tuple(int(part) for part in text.split(","))
    except ValueError:
        raise InputError("--detectors", f'"{text}" is no list of numbers', 'write "all" or "0,2"') from None


@contextmanager
def _progress() -> Iterator[Callable[[str, int, int], None]]:
    """Show a bar with spectra per second and the time left; nothing if nobody watches."""
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeRemainingColumn

    console = Console(stderr=True)
    if not console.is_terminal:
        yield lambda what, done, of: None
        return
    columns = (
        TextColumn("{task.description}"), BarColumn(), TaskProgressColumn(),
        TextColumn("{task.fields[rate]}"), TimeRemainingColumn(),
    )  # fmt: skip
    with Progress(*columns, console=console, transient=True) as bar:
        task = bar.add_task("starting", total=None, rate="")
        doing = ""

        def show(what: str, done: int, of: int) -> None:
            nonlocal doing
            if what != doing:
                doing = what
                bar.reset(task, total=of, completed=done, description=what, rate="")
            speed = bar.tasks[0].speed if what == "fitting" else None
            bar.update(task, completed=done, total=of, rate=f"{speed:,.0f} spectra/s" if speed else "")

        yield show


def _say(summary: Summary, out: Path, console: object) -> None:
    """Print what was found, and where each series is strongest."""
    from rich.console import Console
    from rich.table import Table

    assert isinstance(console, Console)
    table = Table("series", "strongest at", "area", "±", box=None, header_style="bold", padding=(0, 2, 0, 0))
    for s in summary.strongest:
        table.add_row(s.series, ", ".join(map(str, s.index)), f"{s.area:,.0f}", f"{s.sigma:,.0f}")
    console.print(table)
    for hidden in summary.hidden:
        console.print(f"{hidden.element} is not in the sum but in {hidden.where}")
    if abs(summary.drift_ev) > 2.0:
        console.print(f"the energy scale drifted by up to {summary.drift_ev:.1f} eV; corrected block by block")
    if summary.badly_fitted:
        console.print(f"{summary.badly_fitted} points fit badly; the worst were fitted singly")
    for what, count in summary.bad_points.items():
        complain(f"{count} points have no result: {what}")
    console.print(f"{len(summary.series)} maps in {out}", soft_wrap=True)


def _draw(summary: Summary, out: Path, path: Path, overwrite: bool) -> None:
    """Draw the maps of the strongest series, bounded in number."""
    from xrfid.batch.maps import read_maps
    from xrfid.report.figures import draw_maps, save_figure

    names = [s.series for s in summary.strongest[:_MOST_MAPS]]
    save_figure(draw_maps(read_maps(out, names)), path, overwrite=overwrite)
