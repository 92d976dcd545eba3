"""Outputs appear whole or not at all: written beside their place, then moved there."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from xrfid.errors import OutputError


@contextmanager
def atomic_output(path: str | Path, *, overwrite: bool = False) -> Iterator[Path]:
    """Give a temporary path beside `path`; what is written there becomes `path` when the block ends well.

    Parameters
    ----------
    path : str or Path
        Where the output shall appear.
    overwrite : bool
        Replace what is there; otherwise an existing output is refused, also one that appears meanwhile.

    Yields
    ------
    Path
        An empty file in the same folder, with the same ending.

    Raises
    ------
    OutputError
        If the output exists, the folder is missing or read-only, or the disk is full. Nothing is
        left behind and what was there before is untouched.
    """
    target = Path(path)
    try:
        if target.is_dir():
            raise OutputError(str(path), "is a folder", "name a file")
        if target.exists() and not overwrite:
            raise _exists(path)
        handle, name = tempfile.mkstemp(prefix=f".{target.stem[:40]}.", suffix=target.suffix, dir=target.parent)
    except OutputError:
        raise
    except OSError as error:
        raise OutputError(str(path), _why(error), "name a file in a folder that exists and can be written") from None
    os.close(handle)
    beside = Path(name)
    try:
        yield beside
        _sync(beside)
        _publish(beside, target, overwrite)
    except OSError as error:
        if isinstance(error, OutputError):
            raise
        raise OutputError(str(path), f"could not be written ({_why(error)})") from None
    finally:
        beside.unlink(missing_ok=True)


def _publish(beside: Path, target: Path, overwrite: bool) -> None:
    """Move into place; without `overwrite` by a hard link, which fails if the name is taken meanwhile."""
    os.chmod(beside, 0o666 & ~_umask())
    if overwrite:
        os.replace(beside, target)
        return
    try:
        os.link(beside, target)
    except FileExistsError:
        raise _exists(target) from None
    except OSError:  # a file system without hard links
        if target.exists():
            raise _exists(target) from None
        os.rename(beside, target)


def _exists(path: str | Path) -> OutputError:
    return OutputError(str(path), "exists", "give --overwrite to replace it, or another name")


def _sync(path: Path) -> None:
    with open(path, "rb") as handle:
        os.fsync(handle.fileno())


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def _why(error: OSError) -> str:
    return (error.strerror or str(error)).lower()
