"""``xrfid convert``: write spectra in another format."""

from __future__ import annotations

from pathlib import Path

import click

from xrfid.cli.options import dataset_option, overwrite_option


@click.command()
@click.argument("source", type=click.Path(path_type=Path), metavar="INPUT")
@click.argument("target", type=click.Path(path_type=Path), metavar="OUTPUT")
@dataset_option
@overwrite_option
def command(source: Path, target: Path, dataset: str | None, overwrite: bool) -> None:
    """Write the spectra of INPUT as OUTPUT; its ending chooses the format (.msa, .emsa, .csv, .h5, .hdf5, .nxs)."""
    from xrfid.formats import read_spectra, write_spectrum

    spectra = read_spectra(source, dataset=dataset)
    for spectrum in spectra:
        for said in spectrum.assumptions:
            click.echo(f"xrfid: {spectrum.name}: {said}", err=True)
    write_spectrum(spectra, target, overwrite=overwrite)
