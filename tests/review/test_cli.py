"""The command: what it refuses before anything is served."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
from click.testing import CliRunner

pytest.importorskip("panel")

from xrfid.cli.review import _open, command
from xrfid.errors import InputError, OutputError
from xrfid.instrument import Instrument
from xrfid.review.session import Desk

SAMPLES = Path(__file__).parents[2] / "sample_spectra"


def ask(*arguments):
    return CliRunner().invoke(command, [str(a) for a in arguments])


def test_help_names_every_option():
    said = ask("--help").output
    for option in ("--instrument", "--port", "--no-browser", "--folder", "--reviewer"):
        assert option in said


def test_an_input_that_is_not_there_is_named(tmp_path):
    found = ask(tmp_path / "nothing.msa", "--no-browser", "--folder", tmp_path)
    assert isinstance(found.exception, InputError)
    assert "nothing.msa: cannot be read" in str(found.exception)


def test_a_folder_that_is_not_there_is_named(tmp_path):
    found = ask("--no-browser", "--folder", tmp_path / "nowhere")
    assert isinstance(found.exception, OutputError)
    assert "is no folder" in str(found.exception)


def test_several_spectra_come_on_the_desk(tmp_path):
    desk = Desk(tmp_path, Instrument())
    assert _open(desk, (SAMPLES / "coupon.msa", SAMPLES / "tool_steel.txt"), instrument_stated=False) is None
    assert [Path(name).name for name in desk.cases] == ["coupon.msa", "tool_steel.txt"]


def test_a_batch_result_comes_alone_and_brings_its_instrument(tmp_path, batch_result):
    desk = Desk(tmp_path, Instrument())
    scan = _open(desk, (batch_result,), instrument_stated=False)
    case = next(iter(desk.cases.values()))
    assert scan is not None
    assert case.journal.instrument.name == "museum tripod"
    with pytest.raises(InputError, match="review it alone"):
        _open(desk, (batch_result, SAMPLES / "coupon.msa"), instrument_stated=False)


def test_the_stated_instrument_goes_before_that_of_the_batch(tmp_path, batch_result):
    shutil.copy(batch_result, tmp_path / "result.h5")
    desk = Desk(tmp_path, Instrument(name="another"))
    _open(desk, (tmp_path / "result.h5",), instrument_stated=True)
    assert next(iter(desk.cases.values())).journal.instrument.name == "another"
