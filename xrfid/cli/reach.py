"""``xrfid reach``: which elements an instrument can show at all."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING

import click

from xrfid.cli.options import instrument_option, load_instrument, overwrite_option

if TYPE_CHECKING:
    from xrfid.identify.reach import ReachReport


@click.command()
@instrument_option
@click.option("--json", "json_path", type=click.Path(path_type=Path), help="Write the JSON document here.")
@overwrite_option
def command(instrument_path: Path | None, json_path: Path | None, overwrite: bool) -> None:
    """Tell which series of which elements an instrument shows well, weakly or not, and what it cannot separate."""
    from xrfid.identify.reach import reach
    from xrfid.output import atomic_output

    report = reach(load_instrument(instrument_path))
    if json_path is not None:
        with atomic_output(json_path, overwrite=overwrite) as beside:
            beside.write_text(json.dumps(report.to_document(), indent=2) + "\n", encoding="utf-8")
    _show(report)


def _show(report: ReachReport) -> None:
    from rich.console import Console
    from rich.table import Table

    from xrfid.identify.reach import GOOD, HARD, INSEPARABLE, WEAK

    console = Console()
    counts = f"{report.counts:.0e} counts"
    console.print(f"Detection limits in a spectrum of {counts}, per cent by mass; best series of each element.\n")
    table = Table("Element", "Series", "Line / keV", "in light matter", "in steel", "", box=None, pad_edge=False)
    for r in report.best():
        limits = dict(r.limits)
        shown = [_percent(limits[m]) for m in ("light", "steel")]
        table.add_row(r.element, r.series, f"{r.main_line_kev:.2f}", *shown, r.grade)
    console.print(table)
    console.print(f"\nwithin reach: below {100 * GOOD:g} %; weak: below {100 * WEAK:g} %; hardly: above.")
    console.print(f"Out of reach: {' '.join(report.beyond)}")
    for title, chosen in (
        (f"Cannot be separated (uncertainty more than {INSEPARABLE:g} times larger)", True),
        (f"Hard to separate (more than {HARD:g} times)", False),
    ):
        pairs = [f"{p.a} and {p.b}" for p in report.pairs if p.inseparable == chosen]
        if pairs:
            console.print(f"\n{title}: {', '.join(pairs)}.")
    for said in report.assumptions:
        console.print(f"Assumed: {said}")


def _percent(fraction: float) -> str:
    return "-" if fraction >= 1.0 else f"{100 * fraction:.2g}"
