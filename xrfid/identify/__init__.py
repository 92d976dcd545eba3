"""Select, weigh the evidence, decide: from a fit to verdicts.

The package itself is callable: ``xrfid.identify(spectrum)``.
"""

from __future__ import annotations

import sys
from types import ModuleType
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from xrfid.identify.result import Identification
    from xrfid.identify.settings import Settings
    from xrfid.instrument import Instrument
    from xrfid.spectrum import Spectrum


class _Callable(ModuleType):
    """Importing a sub-package binds its name in `xrfid`; calling it must still do the job of that name."""

    def __call__(
        self, spectrum: Spectrum, instrument: Instrument | None = None, settings: Settings | None = None
    ) -> Identification:
        """See `xrfid.identify.pipeline.identify`."""
        from xrfid.identify.pipeline import identify

        return identify(spectrum, instrument, settings)


sys.modules[__name__].__class__ = _Callable
