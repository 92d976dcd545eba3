"""What a file that came from the browser must not do: lead to other files of this machine."""

from __future__ import annotations

import io
from typing import Any

from xrfid.errors import InputError

LARGEST_UPLOAD_BYTES = 64 * 2**20
_REMEDY = "give it on the command line: xrfid review FILE"
_HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"


def refuse_links(name: str, data: bytes) -> None:
    """Refuse an HDF5 file that refers to another one: external links, external storage, virtual datasets.

    Raises
    ------
    InputError
        If it does, is too large, or cannot be read.
    """
    if len(data) > LARGEST_UPLOAD_BYTES:
        raise InputError(name, f"is larger than {LARGEST_UPLOAD_BYTES // 2**20} MB",
                         _REMEDY)  # fmt: skip
    if not data.startswith(_HDF5_SIGNATURE):
        return
    import h5py

    try:
        with h5py.File(io.BytesIO(data), "r") as file:
            outside = _leads_outside(file)
    except (OSError, RuntimeError, KeyError) as error:
        raise InputError(name, f"is damaged ({error})", "copy the file again") from None
    if outside:
        raise InputError(name, f'refers to another file at "{outside}"', _REMEDY)


def _leads_outside(file: Any) -> str:
    """Return where a file refers to another one; empty if nowhere. No link is followed."""
    import h5py

    found: list[str] = []

    def link(name: bytes, info: Any) -> None:
        if info.type not in (h5py.h5l.TYPE_HARD, h5py.h5l.TYPE_SOFT):
            found.append(name.decode("utf-8", "replace"))

    def item(name: str, thing: Any) -> None:
        if isinstance(thing, h5py.Dataset) and (thing.external or thing.is_virtual):
            found.append(name)

    file.id.links.visit(link, info=True)
    file.visititems(item)
    return found[0] if found else ""
