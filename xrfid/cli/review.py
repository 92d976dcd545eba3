"""``xrfid review``: look at the evidence in the browser, ask what if, decide."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from xrfid.cli.options import instrument_option, load_instrument
from xrfid.errors import InputError

if TYPE_CHECKING:
    from xrfid.review.scan import Scan
    from xrfid.review.session import Desk


@click.command()
@click.argument("inputs", nargs=-1, type=click.Path(path_type=Path), metavar="[INPUT...]")
@instrument_option
@click.option(
    "--folder",
    type=click.Path(path_type=Path),
    default=Path(),
    show_default="this folder",
    help="Where journals and saved results go.",
)
@click.option("--port", type=click.IntRange(0, 65535), default=0, help="Port on this machine (default: a free one).")
@click.option("--reviewer", metavar="NAME", help="Who decides (default: your login name).")
@click.option("--no-browser", is_flag=True, help="Only print the address.")
def command(inputs: tuple[Path, ...], instrument_path: Path | None, folder: Path, port: int, reviewer: str | None,
            no_browser: bool) -> None:  # fmt: skip
    """Look at spectra or at one batch result in the browser, and decide what is there.

    The page is served to this machine only, at an address with a secret in it. Ctrl-C ends it.
    """
    try:
        from xrfid.review.app import Room
        from xrfid.review.server import Review
    except ModuleNotFoundError as error:
        raise InputError(
            "xrfid review", f"needs {error.name}", "install it with: pip install 'xrfid[review]'"
        ) from None
    from xrfid.review.session import Desk

    desk = Desk(folder, load_instrument(instrument_path))
    scan = _open(desk, inputs, instrument_stated=instrument_path is not None)
    room = Room(desk, scan, _login_name() if reviewer is None else reviewer)
    server = Review(room.page, room.accept, room.opened, port)
    click.echo(server.url)
    server.start()
    if not no_browser:
        server.io_loop.add_callback(click.launch, server.url)
    try:
        server.io_loop.start()
    except KeyboardInterrupt:
        click.echo("ended", err=True)


def _open(desk: Desk, inputs: tuple[Path, ...], *, instrument_stated: bool) -> Scan | None:
    """Put every input on the desk; a batch result comes alone."""
    from xrfid.formats import read_spectra
    from xrfid.review.scan import Scan, is_batch_result

    results = [path for path in inputs if is_batch_result(path)]
    if results and len(inputs) > 1:
        raise InputError(str(results[0]), "is a batch result, and there are other inputs", "review it alone")
    if results:
        scan = Scan(results[0])
        desk.add(scan.whole(), None if instrument_stated else scan.instrument)
        return scan
    for path in inputs:
        for spectrum in read_spectra(path):
            desk.add(spectrum)
    return None


def _login_name() -> str:
    import getpass

    try:
        return getpass.getuser()
    except (OSError, KeyError, ImportError):
        return ""
