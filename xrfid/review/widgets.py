"""Panel as the review uses it: nothing from a network, no design but our own style sheets."""

from __future__ import annotations

from importlib import import_module
from typing import Any

pn: Any = import_module("panel")
"""The library; untyped, because its own hints cover only a part of it."""
pn.config.loading_indicator = False
pn.config.design = None
