import pytest
from click.testing import CliRunner
from synthetic import made, tube

from xrfid.cli.calibrate import command
from xrfid.errors import InputError, Untrustworthy
from xrfid.formats import write_spectrum
from xrfid.instrument import Instrument
from xrfid.prepare.calibrate import Reference, calibrate
from xrfid.spectrum import EnergyScale, Spectrum

TRUE = EnergyScale(-0.02, 0.02)


def _reference(composition, elements, name, scale=TRUE, **options):
    return Reference(made(composition, scale, 2048, **options), elements, name)


@pytest.fixture(scope="module")
def references():
    iron = _reference({"Fe": 0.6, "Zn": 0.4}, ("Fe", "Zn"), "iron", fwhm_ev=160.0)
    molybdenum = _reference({"Mo": 1.0}, ("Mo",), "molybdenum", fwhm_ev=160.0, seed=2)
    return [iron, molybdenum]


def test_scale_and_width_of_two_measurements(references):
    found = calibrate(references, tube())
    assert abs(found.scale.gain_kev - TRUE.gain_kev) < 4 * found.gain_sigma_kev < 0.001 * TRUE.gain_kev
    assert abs(found.scale.offset_kev - TRUE.offset_kev) < 4 * found.offset_sigma_kev < 0.03
    assert found.resolution.fwhm_mn_ka_ev == pytest.approx(160, abs=3)
    assert {line.name for line in found.lines} >= {"Fe Ka", "Fe Kb", "Zn Ka", "Mo Ka"}
    assert found.rms_ev < 5
    assert not any(d.clear for d in found.drifts)


def test_drift_between_measurements_is_told(references):
    moved = _reference({"Mo": 1.0}, ("Mo",), "later", EnergyScale(0.01, 0.02), fwhm_ev=160.0)
    copper = _reference({"Cu": 0.5, "Ti": 0.5}, ("Cu", "Ti"), "between", EnergyScale(-0.02, 0.02), fwhm_ev=160.0)
    found = calibrate([references[0], copper, moved, references[1]], tube())
    assert any(d.clear for d in found.drifts)


def test_the_instrument_keeps_everything_else(references):
    instrument = Instrument.from_table({"name": "bench", "tube": {"anode": "Rh", "voltage_kv": 40}})
    written = calibrate(references, instrument).applied_to(instrument).to_toml()
    again = Instrument.from_table(__import__("tomllib").loads(written))
    assert (again.name, again.tube) == ("bench", instrument.tube)
    assert again.energy_scale.gain_kev == pytest.approx(0.02, rel=1e-3)
    assert again.detector.fwhm_mn_ka_ev == pytest.approx(160, abs=3)


def test_too_few_lines_are_refused():
    with pytest.raises(Untrustworthy, match="too few lines for offset and gain"):
        calibrate([_reference({"Fe": 0.05, "C": 0.95}, ("Fe",), "iron")], Instrument())


def test_wrong_names_are_refused(references):
    wrong = Reference(references[0].spectrum, ("Fe", "Zn", "Pb"), "iron")
    with pytest.raises(Untrustworthy, match="iron: no lines of Pb"):
        calibrate([wrong, references[1]], tube())
    with pytest.raises(InputError, match='"Fx" is no element symbol'):
        calibrate([Reference(references[0].spectrum, ("Fx",), "iron")], tube())


def test_nothing_measured_is_refused():
    with pytest.raises(Untrustworthy, match="no peak stands out; measure longer"):
        calibrate([Reference(Spectrum([2.0] * 512), ("Fe",), "empty")], tube())


def test_command(tmp_path, references):
    (tmp_path / "in.toml").write_text('[tube]\nanode = "Rh"\nvoltage_kv = 40\n')
    for reference in references:
        write_spectrum(reference.spectrum.with_scale(TRUE), tmp_path / f"{reference.name}.msa")
    arguments = [f"{tmp_path}/iron.msa=Fe,Zn", f"{tmp_path}/molybdenum.msa=Mo", "--instrument", f"{tmp_path}/in.toml",
                 "--save", f"{tmp_path}/out.toml", "--figure", f"{tmp_path}/out.png"]  # fmt: skip
    result = CliRunner().invoke(command, arguments, catch_exceptions=False)
    assert result.exit_code == 0
    assert "eV a channel" in result.output
    assert Instrument.load(tmp_path / "out.toml").energy_scale.gain_kev == pytest.approx(0.02, rel=1e-3)
    assert (tmp_path / "out.png").read_bytes().startswith(b"\x89PNG")
    again = CliRunner().invoke(command, arguments)
    assert "exists" in str(again.exception)
    nameless = CliRunner().invoke(command, [f"{tmp_path}/iron.msa", "--save", f"{tmp_path}/other.toml"])
    assert isinstance(nameless.exception, InputError)
    assert "names no elements" in str(nameless.exception)
