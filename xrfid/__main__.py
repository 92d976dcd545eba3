"""``python -m xrfid`` is the same as ``xrfid``."""

from xrfid.cli import main

main()
