"""The small invented run, as fixtures for every test of the batch."""

from small_run import *  # noqa: F403
