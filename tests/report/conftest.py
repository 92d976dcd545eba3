"""The invented steel, as fixtures for every test of the report."""

from steel import *  # noqa: F403
