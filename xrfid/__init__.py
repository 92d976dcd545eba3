"""xrfid reads X-ray fluorescence spectra and says which elements are there, and why."""

__version__ = "0.1.0"
