"""Where pictures are drawn and how they are written: one style, no global state of matplotlib."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

from xrfid.errors import InputError
from xrfid.report import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

FORMATS = (".png", ".svg", ".pdf")


@contextmanager
def look() -> Iterator[None]:
    """Draw inside in our style; matplotlib's own settings are back afterwards."""
    import matplotlib

    with matplotlib.rc_context(style.MATPLOTLIB):  # type: ignore[arg-type]
        yield


def new_figure(width_in: float, height_in: float, **options: Any) -> Figure:
    """Return a figure with a canvas of its own, in inches; nothing global knows of it."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width_in, height_in), dpi=100, **options)
    FigureCanvasAgg(figure)
    return figure


def single_axes(width_in: float, height_in: float, above_in: float = 0.4) -> Axes:
    """Return the only axes of a new figure, margins in inches."""
    figure = new_figure(width_in, height_in)
    return figure.add_axes(
        (0.75 / width_in, 0.5 / height_in, 1 - 0.93 / width_in, 1 - (0.5 + above_in) / height_in)
    )


def drawable(text: str) -> str:
    """Replace what the font cannot show, so that a title in another script neither warns nor fails."""
    from matplotlib.font_manager import findfont, get_font

    known = get_font(findfont(style.MATPLOTLIB["font.family"])).get_charmap()
    return "".join(c if ord(c) in known and c.isprintable() else "□" for c in text)


def save_figure(
    drawn: Figure | Axes | Sequence[Axes], path: str | Path, overwrite: bool = False, dpi: float = 160.0
) -> None:
    """Write a figure as PNG, SVG or PDF, by the ending of `path`; it appears whole or not at all.

    Parameters
    ----------
    drawn : Figure, Axes or sequence of Axes
        A figure, or what a ``draw_`` function returned: the figure that holds these axes.
    path : str or Path
    overwrite : bool
        Replace what is there.
    dpi : float
        Dots per inch of a PNG.

    Raises
    ------
    InputError
        If the ending is none of these.
    OutputError
        If the file exists and may not be overwritten, or cannot be written.
    """
    from xrfid.output import atomic_output

    ending = Path(path).suffix.lower()
    if ending not in FORMATS:
        raise InputError(str(path), f'figures are not written as "{ending}"', "use .png, .svg or .pdf")
    first = drawn[0] if isinstance(drawn, Sequence) else drawn
    figure = first.get_figure(root=True)
    assert figure is not None, "these axes belong to no figure"
    undated: dict[str, Any] = {".svg": {"Date": None}, ".pdf": {"CreationDate": None}, ".png": {}}[ending]
    with atomic_output(path, overwrite=overwrite) as unfinished, look():
        figure.savefig(unfinished, format=ending[1:], dpi=dpi, metadata=undated)
