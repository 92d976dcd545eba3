"""``xrfid reach``: which elements an instrument can show at all."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING

import click

from xrfid.cli.options import instrument_option, load_instrument, overwrite_option

if TYPE_CHECKING:
    from xrfid.identify.reach import Reach, ReachReport


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

    from xrfid.identify.reach import COUNTS, GOOD, WEAK

    console = Console()
    console.print(
        f"Detection limits in a spectrum of {COUNTS:.0e} counts, per cent by mass; best series of each element.\n"
    )
    best: dict[str, tuple[float, Reach]] = {}
    for r in report.series:
        limit = min(v for _, v in r.limits)
        if r.element not in best or limit < best[r.element][0]:
            best[r.element] = (limit, r)
    table = Table("Element", "Series", "Line / keV", "in light matter", "in steel", "", box=None, pad_edge=False)
    for _, r in best.values():
        limits = dict(r.limits)
        shown = [_percent(limits[m]) for m in ("light", "steel")]
        table.add_row(r.element, r.series, f"{r.main_line_kev:.2f}", *shown, r.grade)
    console.print(table)
    console.print(f"\nwithin reach: below {100 * GOOD:g} %; weak: below {100 * WEAK:g} %; hardly: above.")
    if report.inseparable:
        pairs = ", ".join(f"{a} and {b}" for a, b, _ in report.inseparable[:12])
        console.print(f"\nLines that all but coincide ({len(report.inseparable)} pairs): {pairs}")
    for said in report.assumptions:
        console.print(f"Assumed: {said}")


def _percent(fraction: float) -> str:
    return "-" if fraction >= 1.0 else f"{100 * fraction:.2g}"
