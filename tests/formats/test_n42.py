"""ANSI/IEEE N42.42 documents of 2006 and 2012."""

from __future__ import annotations

import numpy as np
import pytest
from made import COUNTS, ENERGY, OTHER, SCALE, N

from xrfid.errors import InputError
from xrfid.formats import read_bytes, read_spectrum
from xrfid.formats.n42 import channel_data
from xrfid.spectrum import Spectrum

NAMESPACE = ' xmlns="http://physics.nist.gov/N42/2011/N42"'
COEFFICIENTS = "<CoefficientValues>-0.12 0.08 0</CoefficientValues>"


def calibration(content: str = COEFFICIENTS, name: str = "scale", extra: str = "") -> str:
    return f'<EnergyCalibration id="{name}"{extra}>{content}</EnergyCalibration>'


def data(counts: np.ndarray = COUNTS, compression: str = "None") -> str:
    return f'<ChannelData compressionCode="{compression}">{" ".join(map(str, counts))}</ChannelData>'


def one(channel_data: str = data(), name: str = "front", refers: str = "scale", live: str = "PT30.5S") -> str:
    return (
        f'<Spectrum id="{name}" energyCalibrationReference="{refers}">'
        f"<LiveTimeDuration>{live}</LiveTimeDuration>{channel_data}</Spectrum>"
    )


def document(
    *spectra: str, calibrations: str = calibration(), namespace: str = NAMESPACE, real: str = "PT33.25S"
) -> str:
    return (
        f'<?xml version="1.0"?>\n<RadInstrumentData{namespace}>{calibrations}'
        f'<RadMeasurement id="run"><StartDateTime>2031-02-03T11:20:07</StartDateTime>'
        f"<RealTimeDuration>{real}</RealTimeDuration>{''.join(spectra or (one(),))}</RadMeasurement>"
        "</RadInstrumentData>"
    )


def calibrated(content: str) -> str:
    return document(calibrations=calibration(content))


def document_2006(scale: str, content: str = data(), root: str = "N42InstrumentData") -> str:
    return (
        f'<?xml version="1.0"?><{root}><Measurement><Spectrum Type="PHA"><RealTime>PT33.25S</RealTime>'
        f"<LiveTime>PT30.5S</LiveTime>{scale}{content.replace('compressionCode', 'Compression')}</Spectrum>"
        f"</Measurement></{root}>"
    )


SCALE_2006 = (
    '<Calibration Type="Energy" EnergyUnits="keV"><Equation Model="Polynomial">'
    "<Coefficients>-0.12 0.08 0</Coefficients></Equation></Calibration>"
)


def read(text: str) -> tuple[Spectrum, ...]:
    return read_bytes("bench.n42", text.encode())


def test_2012():
    (found,) = read(document())
    assert np.array_equal(found.counts, COUNTS)
    assert found.scale == SCALE
    assert (found.live_time_s, found.real_time_s) == (30.5, 33.25)
    assert found.metadata["start_time"] == "2031-02-03T11:20:07"
    assert found.title == "front"
    assert found.assumptions == ()


@pytest.mark.parametrize("namespace", ["", ' xmlns:n="http://physics.nist.gov/N42/2011/N42"'])
def test_without_a_namespace(namespace):
    (found,) = read(document(namespace=namespace))
    assert found.scale == SCALE


def test_prefixed_elements():
    text = document(namespace="").replace("<", "<n:").replace("<n:/", "</n:").replace("<n:?", "<?")
    (found,) = read(
        text.replace("<n:RadInstrumentData", f"<n:RadInstrumentData{NAMESPACE.replace('xmlns', 'xmlns:n')}", 1)
    )
    assert found.scale == SCALE
    assert found.live_time_s == 30.5


def test_2006():
    (found,) = read(document_2006(SCALE_2006))
    assert np.array_equal(found.counts, COUNTS)
    assert found.scale == SCALE
    assert (found.live_time_s, found.real_time_s) == (30.5, 33.25)


def test_2006_in_ev_and_compressed():
    scale = SCALE_2006.replace('"keV"', '"eV"').replace("-0.12 0.08", "-120 80")
    (found,) = read(document_2006(scale, squeezed(COUNTS)))
    assert np.array_equal(found.counts, COUNTS)
    assert found.energy_kev == pytest.approx(ENERGY)


def squeezed(counts: np.ndarray) -> str:
    out: list[int] = []
    run = 0
    for c in [*counts, -1]:
        if c == 0:
            run += 1
            continue
        out += [0, run] if run else []
        run = 0
        out += [int(c)] if c >= 0 else []
    return data(np.array(out), "CountedZeroes")


def test_counted_zeroes_vector():
    """The example of the standard (ANSI N42.42-2012, ChannelData): 18 channels."""
    found = channel_data("f", "22 5 0 1 2 1 0 2 3 4 0 8 1", "CountedZeroes")
    assert found.tolist() == [22, 5, 0, 2, 1, 0, 0, 3, 4, 0, 0, 0, 0, 0, 0, 0, 0, 1]


def test_counted_zeroes_in_a_document():
    (found,) = read(document(one(squeezed(COUNTS))))
    assert np.array_equal(found.counts, COUNTS)


def test_a_quadratic_term():
    (found,) = read(document(calibrations=calibration("<CoefficientValues>0.1 0.02 1e-7</CoefficientValues>")))
    assert (found.scale.offset_kev, found.scale.gain_kev, found.scale.quadratic_kev) == (0.1, 0.02, 1e-7)


def test_boundaries():
    """Channel i lies between boundary i and i + 1."""
    bounds = " ".join(f"{e:.6f}" for e in SCALE.edges_kev(N))
    (found,) = read(document(calibrations=calibration(f"<EnergyBoundaryValues>{bounds}</EnergyBoundaryValues>")))
    assert found.energy_kev == pytest.approx(ENERGY, abs=1e-5)


def test_boundaries_that_do_not_rise_are_no_scale():
    bounds = " ".join(["1.0"] * (N + 1))
    (found,) = read(document(calibrations=calibration(f"<EnergyBoundaryValues>{bounds}</EnergyBoundaryValues>")))
    assert found.scale is None


def test_coefficients_of_zero_are_no_scale():
    (found,) = read(document(calibrations=calibration("<CoefficientValues>0 0 0</CoefficientValues>")))
    assert found.scale is None


def test_several_spectra_each_with_its_scale(tmp_path):
    other = calibration("<CoefficientValues>0 0.05</CoefficientValues>", "other")
    text = document(one(), one(data(OTHER), "back", "other"), calibrations=calibration() + other)
    front, back = read(text)
    assert np.array_equal(back.counts, OTHER)
    assert (front.dataset, back.dataset) == ("front", "back")
    assert front.scale == SCALE
    assert back.scale.gain_kev == 0.05
    path = tmp_path / "two.n42"
    path.write_text(text)
    assert np.array_equal(read_spectrum(path, dataset="back").counts, OTHER)
    with pytest.raises(InputError, match=r"holds 2 spectra \(front, back\)"):
        read_spectrum(path)


def test_names_that_repeat_are_told_apart():
    front, again = read(document(one(), one(data(OTHER))))
    assert (front.dataset, again.dataset) == ("front", "front (2)")


def test_a_reference_that_leads_nowhere_is_said():
    (found,) = read(document(one(refers="lost")))
    assert found.scale == SCALE
    assert "lost" in found.assumptions[0]
    two = calibration() + calibration(name="other")
    (found,) = read(document(one(refers="lost"), calibrations=two))
    assert found.scale is None
    assert "which of the energy calibrations" in found.assumptions[0]


@pytest.mark.parametrize(
    ("text", "seconds"),
    [
        ("PT1M30S", 90.0),
        ("PT0H2M0.5S", 120.5),
        ("PT2H", 7200.0),
        ("P1DT1S", 86401.0),
        ("PT30.5S", 30.5),
        ("PT0S", None),
    ],
)
def test_durations(text, seconds):
    """ISO 8601, section 5.5.2."""
    (found,) = read(document(one(live=text)))
    assert found.live_time_s == seconds


def doctype(entity: str) -> str:
    return document().replace("<RadInstrumentData", f"<!DOCTYPE x [{entity}]><RadInstrumentData", 1)


BAD = "counts per channel are needed"


@pytest.mark.parametrize(
    ("text", "says"),
    [
        (document()[:-40], r"is not well-formed XML \(.*\); the file is damaged"),
        (doctype('<!ENTITY e "x">'), "declares a document type or entities"),
        (doctype('<!ENTITY e SYSTEM "file:///etc/hostname">'), "declares a document type or entities"),
        (doctype(""), "declares a document type or entities"),
        ("<RadInstrumentData/>", "holds no Spectrum element"),
        (document(one("")), "spectrum front: has no ChannelData"),
        (document(one("<ChannelData> </ChannelData>")), "spectrum front: has no ChannelData"),
        (document(one(data().replace(">0 ", ">0 x ", 1))), f"ChannelData holds no number .*'x'.*{BAD}"),
        (document(one(data(-COUNTS - 1))), "channel 0: the count is -1"),
        (document(one(data(compression="Zip"))), 'ChannelData is compressed as "Zip"'),
        (document(one(data(COUNTS[:30]))), "spectrum front: holds 30 channels"),
        (document(one(data(np.ones(140_000, dtype=int)))), "ChannelData holds more than 131072 numbers"),
        (document(one(live="30 seconds")), 'the duration "30 seconds" is not ISO 8601'),
        (document(real="-PT3S"), 'the duration "-PT3S" is not ISO 8601'),
        (calibrated("<CoefficientValues>a b</CoefficientValues>"), "CoefficientValues holds no number"),
        (calibrated("<CoefficientValues>inf 1</CoefficientValues>"), "holds a value that is not finite"),
        (calibrated("<EnergyBoundaryValues>0 1 z</EnergyBoundaryValues>"), "EnergyBoundaryValues holds no number"),
        (document(calibrations=calibration(extra=' EnergyUnits="nm"')), 'EnergyUnits is "nm"; use keV'),
    ],
)  # fmt: skip
def test_refused(text, says):
    with pytest.raises(InputError, match=says):
        read(text)


@pytest.mark.parametrize(
    ("numbers", "says"),
    [
        ("5 0", "a zero in CountedZeroes data has no run length"),
        ("5 0 0 5", "has no run length"),
        ("5 0 1.5 5", "has no run length"),
        ("5 0 -3 5", "has no run length"),
        ("5 0 nan 5", "has no run length"),
        ("5 0 inf 5", "has no run length"),
        ("5 0 1e12 5", "expand to more than 65536 channels"),
        ("5" + " 0 60000" * 2, "expand to more than 65536 channels"),
    ],
)
def test_counted_zeroes_refused(numbers, says):
    with pytest.raises(InputError, match=says):
        channel_data("f", numbers, "CountedZeroes")
