"""A small steel, identified once, and desks in a folder of their own."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from xrfid.formats import read_spectrum
from xrfid.instrument import Instrument
from xrfid.review.session import Case, Desk

ROOT = Path(__file__).parents[2]
SAMPLES = ROOT / "sample_spectra"


@pytest.fixture(scope="session")
def instrument():
    return Instrument.load(SAMPLES / "workshop.toml")


@pytest.fixture(scope="session")
def identified(tmp_path_factory, instrument):
    """A case of the coupon, identified once for all tests; they copy what they change."""
    desk = Desk(tmp_path_factory.mktemp("first"), instrument)
    case = desk.add(read_spectrum(SAMPLES / "coupon.msa"))
    desk.identify(case)
    assert case.failure == ""
    return case


@pytest.fixture
def desk(tmp_path, instrument):
    return Desk(tmp_path, instrument)


@pytest.fixture
def case(desk, identified) -> Case:
    """The coupon on a fresh desk."""
    made = desk.add(identified.spectrum)
    made.work, made.identification = identified.work, identified.identification
    return made


@pytest.fixture(scope="session")
def batch_result(tmp_path_factory):
    """The batch of the sample run, made of a copy that tests may move."""
    from xrfid.batch import run
    from xrfid.report.document import to_json

    folder = tmp_path_factory.mktemp("batch")
    shutil.copy(SAMPLES / "panel_run.h5", folder / "run.h5")
    run(folder / "run.h5", folder / "result.h5", document=to_json, instrument=Instrument.load(SAMPLES / "museum.toml"))
    return folder / "result.h5"
