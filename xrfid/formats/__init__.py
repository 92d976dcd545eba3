"""One file a format; each turns a file into `Spectrum` and back. What a reader assumed is in the result."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from xrfid.errors import InputError, OutputError, did_you_mean
from xrfid.spectrum import Spectrum

LARGEST_TEXT_BYTES = 64 * 2**20
_HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"


def read_spectra(
    path: str | Path, *, dataset: str | None = None, layout: str | Path | None = None
) -> tuple[Spectrum, ...]:
    """Read every spectrum of a file.

    Parameters
    ----------
    path : str or Path
    dataset : str, optional
        Only the spectrum of this name; in HDF5 the path of a dataset, with an index for one point of a
        stack (``/entry/data/counts[3,7]``). A stack without an index is summed.
    layout : str or Path, optional
        A TOML file that says how to read a text file whose shape cannot be guessed.

    Raises
    ------
    InputError
        If the file cannot be read or makes no sense.
    """
    source = Path(path)
    if source.is_dir():
        raise InputError(str(path), "is a folder", "name a file")
    try:
        with open(source, "rb") as handle:
            head = handle.read(8)
            if head == _HDF5_SIGNATURE:
                from xrfid.formats import hdf5

                return hdf5.read(source, dataset)
            data = head + handle.read(LARGEST_TEXT_BYTES + 1)
    except OSError as error:
        why = (error.strerror or "").lower()
        raise InputError(str(path), f"cannot be read ({why})", "name a file that exists") from None
    return _chosen(read_bytes(str(path), data, layout=layout), str(path), dataset)


def read_bytes(name: str, data: bytes, *, layout: str | Path | None = None) -> tuple[Spectrum, ...]:
    """Read every spectrum of a file held in memory; see `read_spectra`."""
    if data.startswith(_HDF5_SIGNATURE):
        import io

        from xrfid.formats import hdf5

        return hdf5.read(io.BytesIO(data), None, name)
    if len(data) > LARGEST_TEXT_BYTES:
        raise InputError(name, f"holds more than {LARGEST_TEXT_BYTES // 2**20} MB of text", "split it")
    if not data.strip():
        raise InputError(name, "is empty", "give a file of counts per channel")
    from xrfid.formats import emsa, n42, text
    from xrfid.formats.decode import decoded

    written = decoded(name, data)
    if layout is not None:
        from xrfid.formats.layout import read_with_layout

        return read_with_layout(name, written, layout)
    if emsa.looks_like(written):
        return emsa.read(name, written)
    if n42.looks_like(written):
        return n42.read(name, data)
    return text.read(name, written)


def read_spectrum(path: str | Path, *, dataset: str | None = None, layout: str | Path | None = None) -> Spectrum:
    """Read the one spectrum of a file; see `read_spectra`.

    Raises
    ------
    InputError
        Also if the file holds several spectra and `dataset` does not choose one.
    """
    found = read_spectra(path, dataset=dataset, layout=layout)
    if len(found) > 1:
        names = ", ".join(s.dataset or s.title for s in found[:20])
        raise InputError(str(path), f"holds {len(found)} spectra ({names})", "choose one with dataset")
    return found[0]


def write_spectrum(spectra: Spectrum | Sequence[Spectrum], path: str | Path, *, overwrite: bool = False) -> None:
    """Write spectra; the ending chooses the format: .msa/.emsa, .csv, .h5/.hdf5/.nxs.

    Raises
    ------
    OutputError
        If the ending is unknown, the format holds one spectrum only, or the file cannot be written.
    """
    from importlib import import_module

    from xrfid.output import atomic_output

    several = (spectra,) if isinstance(spectra, Spectrum) else tuple(spectra)
    ending = Path(path).suffix.lower()
    home = {".msa": "emsa", ".emsa": "emsa", ".csv": "table", ".h5": "hdf5", ".hdf5": "hdf5", ".nxs": "hdf5"}
    if ending not in home:
        raise OutputError(str(path), f'no format has the ending "{ending}"', "use " + ", ".join(home))
    with atomic_output(path, overwrite=overwrite) as beside:
        import_module(f"xrfid.formats.{home[ending]}").write(several, beside)


def _chosen(found: tuple[Spectrum, ...], path: str, dataset: str | None) -> tuple[Spectrum, ...]:
    """The spectrum named `dataset`, or all."""
    if dataset is None:
        return found
    chosen = tuple(s for s in found if dataset in (s.dataset, s.title))
    if not chosen:
        names = [s.dataset or s.title or "(unnamed)" for s in found]
        raise InputError(path, f'holds no spectrum named "{dataset}"', did_you_mean(dataset, names))
    return chosen
