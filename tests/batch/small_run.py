"""Small runs with known content, and what a batch makes of one of them."""

from __future__ import annotations

import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

sys.path.insert(0, str(Path(__file__).parent))

import simulated

from xrfid.batch import Summary, run
from xrfid.batch.plan import Plan
from xrfid.report.document import to_json

SHAPE = (60, 50)
COUNTS = 1000.0
HIDDEN = (7, 11, 23, 1234, 1777, 2001, 2500, 2999)
"""Points that hold bromine, which the sum does not show."""
HIDDEN_COUNTS = 60.0


@pytest.fixture(scope="session")
def model() -> simulated.Model:
    return simulated.model(1024)


@dataclass(frozen=True, eq=False)
class Case:
    """A run on disk, the truth, and the result."""

    path: Path
    counts: NDArray[np.uint16]
    areas: NDArray[np.float64]
    out: Path
    summary: Summary


@pytest.fixture(scope="session")
def case(model: simulated.Model, tmp_path_factory: pytest.TempPathFactory) -> Case:
    """A map of 60 x 50 points, bromine in eight of them."""
    rng = np.random.default_rng(7)
    mean, areas = model.expected(simulated.mixtures(*SHAPE, rng), COUNTS)
    counts = rng.poisson(mean)
    counts[list(HIDDEN)] += rng.poisson(HIDDEN_COUNTS * simulated.series_column("Br", "K", 1024), (len(HIDDEN), 1024))
    folder = tmp_path_factory.mktemp("batch")
    stack = counts.astype(np.uint16).reshape(*SHAPE, 1024)
    path = simulated.write_run(folder / "run.h5", stack)
    out = folder / "result.h5"
    return Case(path, stack, areas, out, run(path, out, document=to_json, instrument=simulated.INSTRUMENT))


@pytest.fixture(scope="session")
def plan(model: simulated.Model) -> Plan:
    """A plan with the true columns, made without a search."""
    return simulated.true_plan(model, np.eye(3), COUNTS)
