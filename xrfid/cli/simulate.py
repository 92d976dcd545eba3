"""``xrfid simulate``: from a recipe to a spectrum with known truth."""

from __future__ import annotations

import json
from pathlib import Path

import click

from xrfid.cli.options import instrument_option, load_instrument, overwrite_option


@click.command()
@click.argument("recipe_path", type=click.Path(path_type=Path), metavar="RECIPE.toml")
@click.option("--out", required=True, type=click.Path(path_type=Path), help="Spectrum to write (.msa, .csv or .h5).")
@instrument_option
@overwrite_option
def command(recipe_path: Path, out: Path, instrument_path: Path | None, overwrite: bool) -> None:
    """Simulate the spectrum of a recipe; what is in it is written beside, as OUT.truth.json."""
    from xrfid.fit.simulate import load_recipe, recipe_instrument, simulate
    from xrfid.formats import write_spectrum
    from xrfid.output import atomic_output

    recipe = load_recipe(recipe_path)
    own = recipe_instrument(recipe, recipe_path.parent, str(recipe_path))
    made = simulate(recipe, own if instrument_path is None else load_instrument(instrument_path))
    truth = out.with_name(out.name + ".truth.json")
    with atomic_output(truth, overwrite=overwrite) as beside:
        document = {"schema": "xrfid.truth/1", "title": recipe.title, "sample": recipe.sample, "areas": made.areas,
                    "seed": recipe.seed}  # fmt: skip
        beside.write_text(json.dumps(document, indent=2) + "\n", encoding="utf-8")
        write_spectrum(made.spectrum, out, overwrite=overwrite)
    click.echo(f"{out}: {made.spectrum.total_counts:.0f} counts; {truth}: the areas expected of each series", err=True)
