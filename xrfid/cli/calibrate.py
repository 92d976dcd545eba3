"""``xrfid calibrate``: from reference measurements to the scale and width in an instrument file."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from xrfid.cli.options import dataset_option, instrument_option, load_instrument, overwrite_option, split_symbols
from xrfid.errors import InputError, OutputError

if TYPE_CHECKING:
    from rich.console import Console

    from xrfid.prepare.calibrate import Calibrated, Reference


@click.command()
@click.argument("references", nargs=-1, required=True, metavar="INPUT=Fe,Zn...")
@instrument_option
@click.option(
    "--save", "save_path", type=click.Path(path_type=Path), required=True, metavar="FILE.toml",
    help="Write the instrument file with scale and width here.",
)  # fmt: skip
@click.option(
    "--figure", "figure_path", type=click.Path(path_type=Path), help="Draw the residuals (.png, .svg or .pdf)."
)
@dataset_option
@overwrite_option
def command(references: tuple[str, ...], instrument_path: Path | None, save_path: Path, figure_path: Path | None,
            dataset: str | None, overwrite: bool) -> None:  # fmt: skip
    """Fit energy scale and resolution to measurements of known elements.

    Each INPUT is followed by the elements in it: a.txt=Fe,Zn. Of a file with several spectra, name one:
    run.csv:sheet=Mo.
    """
    from rich.console import Console

    from xrfid.prepare.calibrate import calibrate

    instrument = load_instrument(instrument_path)
    found = [_reference(text, dataset) for text in references]
    inputs = [Path(r.spectrum.path) for r in found if r.spectrum.path]
    for path in (save_path, figure_path):
        if path is not None:
            _check_output(path, inputs, overwrite)
    made = calibrate(found, instrument)
    _save(made.applied_to(instrument).to_toml(), save_path, overwrite)
    if figure_path is not None:
        from xrfid.report.calibration import draw_calibration
        from xrfid.report.canvas import save_figure

        save_figure(draw_calibration(made), figure_path, overwrite=overwrite)
    _show(made, save_path, Console())


def _reference(text: str, dataset: str | None) -> Reference:
    """Read ``file=Fe,Zn`` or ``file:name=Fe,Zn``."""
    from xrfid.formats import read_spectrum
    from xrfid.prepare.calibrate import Reference

    path, equals, names = text.rpartition("=")
    elements = split_symbols(names)
    if not equals or not path or not elements:
        raise InputError(text, "names no elements", "write for example a.txt=Fe,Zn")
    if not Path(path).exists() and ":" in path:
        path, _, dataset = path.rpartition(":")
    spectrum = read_spectrum(path, dataset=dataset)
    name = Path(path).name if not spectrum.dataset else f"{Path(path).name}:{spectrum.dataset}"
    return Reference(spectrum, elements, name)


def _check_output(path: Path, inputs: list[Path], overwrite: bool) -> None:
    if any(path.exists() and source.exists() and path.samefile(source) for source in inputs):
        raise InputError(str(path), "is an input as well as an output", "choose another name")
    if path.exists() and not overwrite:
        raise OutputError(str(path), "exists", "give --overwrite to replace it, or another name")


def _save(text: str, path: Path, overwrite: bool) -> None:
    from xrfid.output import atomic_output

    with atomic_output(path, overwrite=overwrite) as beside:
        Path(beside).write_text(text, encoding="utf-8")


def _show(made: Calibrated, save_path: Path, console: Console) -> None:
    """Print scale, width, lines and drift."""
    from rich.markup import escape
    from rich.table import Table

    s = made.scale
    console.print(f"offset {s.offset_kev:+.5f} ± {made.offset_sigma_kev:.5f} keV")
    console.print(f"gain   {s.gain_kev * 1e3:.5f} ± {made.gain_sigma_kev * 1e3:.5f} eV a channel")
    console.print(f"width  {made.resolution.fwhm_mn_ka_ev:.1f} ± {made.fwhm_sigma_ev:.1f} eV at Mn K-alpha")
    table = Table("measurement", "line", "keV", "residual (eV)", "± (eV)", title="Lines used")
    for line in made.lines:
        table.add_row(escape(line.measurement), line.name, f"{line.energy_kev:.3f}", f"{line.residual_ev:+.1f}",
                      f"{line.sigma_ev:.1f}")  # fmt: skip
    console.print(table)
    for drift in made.drifts:
        if len(made.drifts) > 1:
            word = "drifted" if drift.clear else "no drift"
            console.print(f"{escape(drift.measurement)}: {drift.shift_ev:+.1f} ± {drift.sigma_ev:.1f} eV, {word}")
    console.print(f"written to {escape(str(save_path))}")
