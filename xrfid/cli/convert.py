"""``xrfid convert``: write spectra in another format."""

from __future__ import annotations

from pathlib import Path

import click

from xrfid.cli import complain
from xrfid.cli.options import dataset_option, overwrite_option
from xrfid.errors import OutputError


@click.command()
@click.argument("source", type=click.Path(path_type=Path), metavar="INPUT")
@click.argument("target", type=click.Path(path_type=Path), metavar="OUTPUT")
@dataset_option
@click.option("--layout", type=click.Path(path_type=Path), metavar="FILE.toml", help="How to read a text file.")
@overwrite_option
def command(source: Path, target: Path, dataset: str | None, layout: Path | None, overwrite: bool) -> None:
    """Write the spectra of INPUT as OUTPUT; its ending chooses the format (.msa, .emsa, .csv, .h5, .hdf5, .nxs)."""
    from xrfid.formats import read_spectra, write_spectrum

    spectra = read_spectra(source, dataset=dataset, layout=layout)
    if target.exists() and target.samefile(source):
        raise OutputError(str(target), "is the input as well as the output", "choose another name")
    write_spectrum(spectra, target, overwrite=overwrite)
    for spectrum in spectra:
        for said in spectrum.assumptions:
            complain(f"{spectrum.name}: {said}")
