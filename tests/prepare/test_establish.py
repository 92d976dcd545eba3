import time
from dataclasses import replace

import pytest
from synthetic import made, tube

from xrfid.errors import Untrustworthy
from xrfid.instrument import Detector, Instrument
from xrfid.instrument import Scale as ScaleTable
from xrfid.prepare.end_point import end_point, stop_channel
from xrfid.prepare.establish import establish
from xrfid.spectrum import EnergyScale

TRUE = EnergyScale(0.01, 0.02)
STEEL = {"Fe": 0.70, "Cr": 0.20, "Ni": 0.10}


@pytest.fixture(scope="module")
def steel():
    return made(STEEL, TRUE, 2048)


def test_a_right_scale_stays_and_costs_little(steel):
    spectrum = steel.with_scale(TRUE)
    establish(spectrum, tube())  # tables are read once
    start = time.process_time()
    calibration, end = establish(spectrum, tube())
    assert time.process_time() - start < 0.1  # 12 ms on one core; room for a busy machine
    assert (calibration.origin, calibration.scale, calibration.note, end) == ("file", TRUE, "", 40.0)
    assert calibration.resolution.fwhm_mn_ka_ev == pytest.approx(145, abs=8)


@pytest.mark.parametrize(
    ("stated", "words"),
    [
        (EnergyScale(TRUE.offset_kev + TRUE.gain_kev, TRUE.gain_kev), "does not fit the peaks"),  # one channel
        (EnergyScale(TRUE.offset_kev, 1.01 * TRUE.gain_kev), "does not fit the peaks"),
        (EnergyScale(TRUE.offset_kev, 2.0 * TRUE.gain_kev), "does not fit the peaks"),
        (EnergyScale(0.0, 1.0), "impossible"),  # channel numbers
        (EnergyScale(1e3 * TRUE.offset_kev, 1e3 * TRUE.gain_kev), "in eV, not keV"),
        (EnergyScale(1e-3 * TRUE.offset_kev, 1e-3 * TRUE.gain_kev), "in MeV, not keV"),
    ],
)
def test_a_wrong_scale_is_corrected_and_said(steel, stated, words):
    calibration, _ = establish(steel.with_scale(stated), tube())
    assert calibration.scale.gain_kev == pytest.approx(TRUE.gain_kev, rel=0.002)
    assert calibration.scale.offset_kev == pytest.approx(TRUE.offset_kev, abs=0.02)
    assert words in calibration.note
    assert calibration.stated == stated


def test_the_instrument_files_scale_stands_in_for_a_wrong_header(steel):
    table = ScaleTable(offset_kev=TRUE.offset_kev, gain_kev=TRUE.gain_kev)
    instrument = tube().model_copy(update={"scale": table})
    calibration, _ = establish(steel.with_scale(EnergyScale(0.3, 0.0196)), instrument)
    assert calibration.origin == "instrument"
    assert calibration.scale == TRUE
    assert "that of the instrument file is taken" in calibration.note


def test_the_instrument_files_scale_serves_a_file_without(steel):
    table = ScaleTable(offset_kev=TRUE.offset_kev, gain_kev=TRUE.gain_kev)
    calibration, _ = establish(steel, tube().model_copy(update={"scale": table}))
    assert (calibration.origin, calibration.scale) == ("instrument", TRUE)


def test_a_worn_detector_is_named():
    spectrum = made(STEEL, TRUE, 2048, fwhm_ev=210.0).with_scale(TRUE)
    instrument = tube().model_copy(update={"detector": Detector(fwhm_mn_ka_ev=140.0)})
    calibration, _ = establish(spectrum, instrument)
    assert calibration.resolution.fwhm_mn_ka_ev == pytest.approx(210, rel=0.07)
    assert "worn or noisy detector" in calibration.note


def test_an_impossible_scale_on_hopeless_counts_is_refused(steel):
    flat = replace(steel, counts=0.0 * steel.counts + 4.0).with_scale(EnergyScale(0.0, 1.0))
    with pytest.raises(Untrustworthy, match=r"impossible; no energy scale: no peak"):
        establish(flat, Instrument())


@pytest.mark.parametrize("voltage", [20.0, 30.0, 45.0])
def test_the_end_point_is_read_off_the_continuum(voltage):
    # Duane & Hunt, Phys. Rev. 6 (1915) 166: no photon above the tube voltage
    spectrum = made({"Fe": 0.05, "C": 0.5, "O": 0.45}, EnergyScale(0.0, 0.03), 2048, 1e6, voltage=voltage, pile_up=0.0)
    assert end_point(spectrum.counts, EnergyScale(0.0, 0.03)) == pytest.approx(voltage, rel=0.08)


def test_overflow_counts_do_not_move_the_end(steel):
    counts = steel.counts.copy()
    before = stop_channel(counts)
    counts[-1] = 500
    assert stop_channel(counts) == pytest.approx(before)
