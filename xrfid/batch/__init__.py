"""Many spectra: every point of a scanning run fitted at the speed of the disk.

`run` is the whole job; `Summary` what it returns.
"""

from xrfid.batch.run import Summary, run

__all__ = ["Summary", "run"]
