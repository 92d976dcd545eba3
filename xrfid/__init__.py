"""xrfid reads X-ray fluorescence spectra and says which elements are there, and why."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"
__all__ = ["Identification", "Instrument", "Settings", "Spectrum", "identify", "read"]

if TYPE_CHECKING:
    from xrfid.formats import read_spectrum as read
    from xrfid.identify.pipeline import identify
    from xrfid.identify.result import Identification
    from xrfid.identify.settings import Settings
    from xrfid.instrument import Instrument
    from xrfid.spectrum import Spectrum

_HOME = {
    "read": ("xrfid.formats", "read_spectrum"),
    "Identification": ("xrfid.identify.result", "Identification"),
    "Settings": ("xrfid.identify.settings", "Settings"),
    "Instrument": ("xrfid.instrument", "Instrument"),
    "Spectrum": ("xrfid.spectrum", "Spectrum"),
}


def __getattr__(name: str) -> Any:
    """Load the public names on first use, so that ``import xrfid`` costs nothing."""
    if name not in __all__:
        raise AttributeError(f"module 'xrfid' has no attribute {name!r}")
    from importlib import import_module

    if name == "identify":  # the sub-package is callable
        return import_module("xrfid.identify")
    module, attribute = _HOME[name]
    return getattr(import_module(module), attribute)


def __dir__() -> list[str]:
    return sorted([*__all__, "__version__"])
