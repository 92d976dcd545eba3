"""For all tests: property-based tests try the same examples on every machine, without a time limit each."""

from hypothesis import settings

settings.register_profile("same everywhere", derandomize=True, deadline=None)
settings.load_profile("same everywhere")
