"""Plain text is read by its shape. All files here are invented; each shape is one that instruments write."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from made import COUNTS, ENERGY, OTHER, SCALE, THIRD, N, columns, fixed, lines

from xrfid.errors import InputError
from xrfid.formats import read_bytes, read_spectrum
from xrfid.formats.axis import axis_of, fitted_scale
from xrfid.formats.decode import checked_counts, decoded
from xrfid.spectrum import EnergyScale

CHANNEL = np.arange(N)


@dataclass
class Shape:
    """A file, and what it says."""

    content: str | bytes
    scale: EnergyScale | None = None
    live: float | None = None
    real: float | None = None
    spectra: tuple[np.ndarray, ...] = (COUNTS,)
    names: tuple[str | None, ...] = (None,)
    within_kev: float = 1e-6


SECTIONS = lines(
    "<<RUN>>", "LABEL - bench coupon", "LIVE_TIME - 30.5", "REAL_TIME - 33.25", "START_DATE - 03/02/2031 11:20:07",
    "SERIAL_NUMBER - 40417", "<<CALIBRATION>>", "LABEL - Channel", "81 6.36", "90 7.08", "<<WINDOWS>>", "70 100",
    "<<DATA>>", *COUNTS, "<<END>>", "<<SETTINGS>>", "PEAKING=4.8; shaping", "FAST=100", "<<SETTINGS END>>",
    "<<STATUS>>", "Slow Count: 99012", "Detector Temp: 221 K", "<<STATUS END>>",
)  # fmt: skip

SHAPES: dict[str, Shape] = {
    # one count a line
    "bare counts": Shape(lines(*COUNTS)),
    "counts without a last line end": Shape(lines(*COUNTS).rstrip()),
    "counts with decimals": Shape(lines(*fixed(COUNTS, 1))),
    "counts with exponents": Shape(lines(*(f"{c:.6E}" for c in COUNTS))),
    "counts with a decimal comma": Shape(lines(*fixed(COUNTS, 2, ","))),
    "counts with a comma at each end": Shape(lines(*(f"  {c:7d}," for c in COUNTS))),
    "a blank line between all": Shape("\n\n".join(map(str, COUNTS))),
    "eight counts a line": Shape(lines(*(" ".join(map(str, row)) for row in COUNTS.reshape(-1, 8)))),
    "ten counts a line, the last line shorter": Shape(
        lines(*("".join(f"{c:8d}" for c in COUNTS[i : i + 10]) for i in range(0, N, 10)))
    ),
    "energies in one line, counts in the next": Shape(
        lines(" ".join(fixed(ENERGY)), " ".join(map(str, COUNTS)), " ".join(map(str, OTHER))), SCALE,
        spectra=(COUNTS, OTHER), names=("column 1", "column 2"),
    ),
    # headers
    "marked sections, NAME - value": Shape(SECTIONS, SCALE, 30.5, 33.25),
    "marked sections, CRLF": Shape(SECTIONS.replace("\n", "\r\n"), SCALE, 30.5, 33.25),
    "marked sections, Latin-1": Shape(
        SECTIONS.replace("221 K", "-52 \xb0C").encode("latin-1"), SCALE, 30.5, 33.25
    ),
    "NAME=value": Shape(
        lines("[HEADER]", "TITLE=bench coupon", "LIVETIME=30.5", "REALTIME=33.25", "GAIN=0.08", "OFFSET=-0.12",
              "[COUNTS]", *COUNTS, "[END]"), SCALE, 30.5, 33.25,
    ),
    "name: value, lower case": Shape(
        lines("# title: bench coupon", "# live time: 30.5 s", "# real time: 33.25 s", *COUNTS), None, 30.5, 33.25
    ),
    "name value, mixed case": Shape(lines("Live Time 30.5", "Real Time 33.25", "Counts", *COUNTS), None, 30.5, 33.25),
    "name, tab, value": Shape(lines("Live Time (s)\t30.5", "Real Time (s)\t33.25", *COUNTS), None, 30.5, 33.25),
    "times in milliseconds": Shape(lines("Live time (ms): 30500", "Real time (ms): 33250", *COUNTS), None, 30.5, 33.25),
    "a time with a decimal comma": Shape(lines("Lebendzeit; 30,5", "Echtzeit; 33,25", *COUNTS), None, 30.5, 33.25),
    "starred marks": Shape(lines("*** setup ***", "live = 30.5", "*** data ***", *COUNTS, "*** end ***"), None, 30.5),
    "dollar marks": Shape(lines("$LABEL:", "bench coupon", "$ENERGY_CALIBRATION:", "-0.12 0.08", "$DATA:", *COUNTS,
                                "$WINDOWS:", "1", "70 100"), SCALE),
    "coefficients of a calibration": Shape(lines("[energy calibration]", "-0.12 0.08 0", "[data]", *COUNTS), SCALE),
    "calibration points in eV": Shape(lines("[calibration]", "81, 6360", "90, 7080", "[data]", *COUNTS), SCALE),
    "numbers of other kinds after the data": Shape(lines("[data]", *COUNTS, "[regions]", "70 100 8812 7",
                                                         "40 60 2011 5")),
    # two columns and more
    "channel and counts": Shape(lines(*columns(CHANNEL, COUNTS))),
    "channel and counts, from 1": Shape(lines("channel counts", *columns(CHANNEL + 1, COUNTS))),
    "n N": Shape(lines("n N", *columns(CHANNEL, COUNTS))),
    "n N, tabs, CRLF": Shape(lines("n\tN", *columns(CHANNEL, COUNTS, by="\t"), end="\r\n")),
    "energy and counts, no header": Shape(lines(*columns(fixed(ENERGY), COUNTS)), SCALE),
    "energy and counts, commas": Shape(lines("energy (keV),counts", *columns(fixed(ENERGY), COUNTS, by=",")), SCALE),
    "energy and counts, comma and blank": Shape(lines(*columns(fixed(ENERGY), COUNTS, by=", ")), SCALE),
    "decimal commas, semicolons": Shape(
        lines("Energie (keV);Impulse", *columns(fixed(ENERGY, 3, ","), COUNTS, by=";")), SCALE
    ),
    "decimal commas, tabs": Shape(lines("keV\tN", *columns(fixed(ENERGY, 3, ","), COUNTS, by="\t")), SCALE),
    "decimal commas, blanks": Shape(lines(*columns(fixed(ENERGY, 3, ","), fixed(COUNTS, 1, ","))), SCALE),
    "channel, energy, counts": Shape(
        lines("Channel;Energy;Counts", *columns(CHANNEL, fixed(ENERGY), COUNTS, by=";")), SCALE
    ),
    "channel and counts by a comma": Shape(lines(*columns(CHANNEL, COUNTS, by=","))),
    "uncertainties beside counts": Shape(
        lines("E,counts,error", *columns(fixed(ENERGY), COUNTS, fixed(np.sqrt(COUNTS)), by=",")), SCALE
    ),
    "statements before two columns": Shape(
        lines("Live Time: 30.5", "Tube voltage: 40 kV", "", "Energy  Counts", *columns(fixed(ENERGY), COUNTS)),
        SCALE, 30.5,
    ),
    # several spectra
    "one energy column, three of counts": Shape(
        lines("keV,left,middle,right", *columns(fixed(ENERGY), COUNTS, OTHER, THIRD, by=",")), SCALE,
        spectra=(COUNTS, OTHER, THIRD), names=("left", "middle", "right"),
    ),
    "quoted names with commas": Shape(
        lines('"energy (keV)","rim, upper","rim, lower"', *columns(fixed(ENERGY), COUNTS, OTHER, by=",")), SCALE,
        spectra=(COUNTS, OTHER), names=("rim, upper", "rim, lower"),
    ),
    "a column that is no spectrum, and a name that only contains such a word": Shape(
        lines("keV,ferrite,background", *columns(fixed(ENERGY), COUNTS, OTHER, by=",")), SCALE
    ),
    "names that repeat": Shape(
        lines("keV\tspot\tspot", *columns(fixed(ENERGY), COUNTS, OTHER, by="\t")), SCALE,
        spectra=(COUNTS, OTHER), names=("spot", "spot'"),
    ),
    "pairs of columns": Shape(
        lines("Erim,Nrim,Efoot,Nfoot", *columns(fixed(ENERGY), COUNTS, fixed(ENERGY), OTHER, by=",")), SCALE,
        spectra=(COUNTS, OTHER), names=("Nrim", "Nfoot"),
    ),
    "pairs of columns under two header lines": Shape(
        lines("value,value,value,value", "E1,N1,E2,N2", *columns(fixed(ENERGY), COUNTS, fixed(ENERGY), OTHER, by=",")),
        SCALE, spectra=(COUNTS, OTHER), names=("N1", "N2"),
    ),
    "many columns of counts, no axis": Shape(
        lines("left middle right", *columns(COUNTS, OTHER, THIRD)),
        spectra=(COUNTS, OTHER, THIRD), names=("left", "middle", "right"),
    ),
    # encodings
    "UTF-8 with a mark": Shape(lines("keV,µ1", *columns(fixed(ENERGY), COUNTS, by=",")).encode("utf-8-sig"), SCALE),
    "UTF-16 with a mark": Shape(lines("live time: 30.5", *COUNTS).encode("utf-16"), None, 30.5),
    "UTF-16 without a mark": Shape(lines("live time: 30.5", *COUNTS).encode("utf-16-le"), None, 30.5),
    "Latin-1": Shape(lines("Prüfstück: Gehäuse", "live time: 30.5", *COUNTS).encode("latin-1"), None, 30.5),
    "carriage returns only": Shape(lines("live time: 30.5", *COUNTS, end="\r"), None, 30.5),
    # axes as they really come
    "energies rounded to 0.1, repeating": Shape(
        lines("E,N", *columns(fixed(0.04 * CHANNEL + 0.02, 1), COUNTS, by=",")),
        EnergyScale(0.02, 0.04), within_kev=0.03,
    ),
    "energies that start below zero": Shape(
        lines("E N", *columns(fixed(ENERGY - 1.0), COUNTS)), EnergyScale(-1.12, 0.08)
    ),
    "headed eV, but in keV": Shape(lines("energy (eV),N", *columns(fixed(ENERGY), COUNTS, by=",")), SCALE),
    "no unit, in eV": Shape(lines("energy,N", *columns(fixed(1e3 * ENERGY, 0), COUNTS, by=",")), SCALE),
    "headed keV, but in eV": Shape(lines("energy (keV),N", *columns(fixed(1e3 * ENERGY, 0), COUNTS, by=",")), SCALE),
}  # fmt: skip


@pytest.mark.parametrize("shape", SHAPES.values(), ids=SHAPES)
def test_shape(shape):
    data = shape.content if isinstance(shape.content, bytes) else shape.content.encode()
    found = read_bytes("bench.txt", data)
    assert len(found) == len(shape.spectra)
    for spectrum, counts in zip(found, shape.spectra, strict=True):
        assert np.array_equal(spectrum.counts, counts)
        assert spectrum.live_time_s == shape.live
        assert spectrum.real_time_s == shape.real
        if shape.scale is None:
            assert spectrum.scale is None
        else:
            assert spectrum.energy_kev == pytest.approx(shape.scale.energy_kev(CHANNEL), abs=shape.within_kev)
    assert tuple(s.dataset for s in found) == shape.names


@pytest.mark.parametrize(
    ("shape", "says"),
    [
        ("energies rounded to 0.1, repeating", r"rounded to 0.1: the straight line"),
        ("headed eV, but in keV", "headed eV, but can only be in keV"),
        ("no unit, in eV", "can only be in eV"),
        ("headed keV, but in eV", "can only be in eV"),
        ("marked sections, NAME - value", "energy scale from 2 calibration points"),
        ("NAME=value", "gain and offset stated"),
        ("coefficients of a calibration", "coefficients of the file"),
        ("eight counts a line", "read row by row"),
    ],
)
def test_what_was_assumed_is_said(shape, says):
    content = SHAPES[shape].content
    (spectrum,) = read_bytes("bench.txt", content.encode() if isinstance(content, str) else content)
    assert any(says in said for said in spectrum.assumptions), spectrum.assumptions


def test_nothing_is_said_where_nothing_was_assumed():
    (spectrum,) = read_bytes("bench.txt", SHAPES["energy and counts, commas"].content.encode())
    assert spectrum.assumptions == ()


def test_columns_left_out_are_said():
    (spectrum,) = read_bytes("bench.txt", SHAPES["uncertainties beside counts"].content.encode())
    assert spectrum.assumptions == ('columns headed "error" are taken as no counts and left out',)


def test_words_that_only_contain_a_trade_word_state_nothing():
    """A delivery is no live time, an amplifier's gain no scale."""
    (spectrum,) = read_bytes("bench.txt", lines("Delivery: 7", "Surreal: 4", "Gain: 12.5", *COUNTS).encode())
    assert (spectrum.live_time_s, spectrum.real_time_s, spectrum.scale) == (None, None, None)


def test_a_gain_in_ev_is_a_scale():
    (spectrum,) = read_bytes("bench.txt", lines("Gain (eV/channel): 80", "Offset (eV): -120", *COUNTS).encode())
    assert spectrum.energy_kev == pytest.approx(ENERGY)


def test_a_current_in_microamperes():
    (spectrum,) = read_bytes("bench.txt", lines("Tube current (µA): 150", *COUNTS).encode())
    assert spectrum.metadata["current_ma"] == pytest.approx(0.15)


def test_overflow_in_the_last_channel_is_said():
    counts = [*COUNTS[:-1], 5000]
    (spectrum,) = read_bytes("bench.txt", lines(*counts).encode())
    assert spectrum.counts[-1] == 5000
    assert "overflow" in " ".join(spectrum.assumptions)
    (usual,) = read_bytes("bench.txt", lines(*COUNTS).encode())
    assert "overflow" not in " ".join(usual.assumptions)


def test_title_and_facts():
    (spectrum,) = read_bytes("bench.txt", lines("Title: rim of a bowl", "Tube voltage (kV): 35", "Current (mA): 0.2",
                                                "Operator: nobody", *COUNTS).encode())  # fmt: skip
    assert spectrum.title == "rim of a bowl"
    assert spectrum.metadata["voltage_kv"] == 35.0
    assert spectrum.metadata["current_ma"] == 0.2
    assert spectrum.metadata["statements"]["operator"] == "nobody"


def test_a_slight_bend_becomes_a_quadratic_term():
    bent = EnergyScale(0.05, 0.08, 2e-5)
    rows = columns([f"{e:.6f}" for e in bent.energy_kev(CHANNEL)], COUNTS)
    (spectrum,) = read_bytes("bench.txt", lines("keV N", *rows).encode())
    assert spectrum.scale is not None
    assert spectrum.scale.quadratic_kev == pytest.approx(2e-5, rel=1e-3)
    assert spectrum.energy_kev == pytest.approx(bent.energy_kev(CHANNEL), abs=1e-4)


def test_counts_that_are_no_whole_numbers_are_said():
    (spectrum,) = read_bytes("bench.txt", lines(*fixed(COUNTS / 30.5, 4)).encode())
    assert "not whole numbers" in " ".join(spectrum.assumptions)


@pytest.mark.parametrize(
    ("rows", "says"),
    [
        (["Dear reader,", "no numbers here"], "the longest run of numbers holds 0, too few for a spectrum"),
        (list(range(40)), "the longest run of numbers holds 40, too few for a spectrum"),
        ([3] * 70_000, "holds 70000 channels; at most 65536"),
        ([*COUNTS[:70], -2, *COUNTS[71:]], "the count is -2; counts must be >= 0"),
        ([*COUNTS[:70], "nan", *COUNTS[71:]], "the count is nan; counts must be finite"),
        ([*COUNTS[:70], "1e200", *COUNTS[71:]], r"a channel holds 1e\+200 counts; give raw counts"),
    ],
)
def test_refused(rows, says):
    with pytest.raises(InputError, match=says):
        read_bytes("bench.txt", lines(*rows).encode())


def test_the_line_of_a_bad_count_is_named():
    rows = ["# live time: 3", *COUNTS[:70], -2, *COUNTS[71:]]
    with pytest.raises(InputError, match=r"bench.txt.*line 72"):
        read_bytes("bench.txt", lines(*rows).encode())


@pytest.mark.parametrize(
    ("data", "says"),
    [
        (b"", "is empty"),
        (b" \n\t\n", "is empty"),
        (bytes(range(256)) * 20, "is a binary file of no known format"),
        (b"1 " * 1_000_001, "holds a line of 2000002 characters; write one row of numbers a line"),
        (b"\x01\x02\x03\x04" * 200 + b"12\n" * 90, "is a binary file of no known format"),
    ],
)
def test_bytes_that_are_no_text(data, says):
    with pytest.raises(InputError, match=says):
        read_bytes("bench.txt", data)


def test_too_much_text():
    with pytest.raises(InputError, match="holds more than 64 MB of text; split it"):
        read_bytes("bench.txt", b"1\n" * (33 * 2**20))


def test_files_and_folders(tmp_path):
    with pytest.raises(InputError, match=r"cannot be read \(no such file or directory\)"):
        read_spectrum(tmp_path / "none.txt")
    with pytest.raises(InputError, match="is a folder; name a file"):
        read_spectrum(tmp_path)
    path = tmp_path / "three.csv"
    path.write_text(str(SHAPES["one energy column, three of counts"].content))
    with pytest.raises(InputError, match=r"holds 3 spectra \(left, middle, right\); choose one"):
        read_spectrum(path)
    with pytest.raises(InputError, match='holds no spectrum named "midle"; did you mean "middle"'):
        read_spectrum(path, dataset="midle")
    assert np.array_equal(read_spectrum(path, dataset="middle").counts, OTHER)


def test_checked_counts_names_the_place():
    with pytest.raises(InputError, match="f, channel 3: the count is inf"):
        checked_counts("f", np.array([*range(3), np.inf, *range(90)], dtype=float))
    with pytest.raises(InputError, match="holds 3 channels; a spectrum needs at least 64"):
        checked_counts("f", np.ones(3))


def test_decoded_line_ends_and_marks():
    assert decoded("f", b"\xef\xbb\xbfa\r\nb\rc\n") == "a\nb\nc\n"
    assert decoded("f", "aä".encode("utf-16-be", "strict").join([b"\xfe\xff", b""])) == "aä"


def test_axis_of_tells_axes_from_counts():
    assert axis_of(COUNTS.astype(float)) is None
    assert axis_of(np.full(100, 3.0)) is None
    assert axis_of(np.arange(4.0)) is None
    channel = axis_of(np.arange(100.0))
    assert channel is not None
    assert channel.is_channel
    assert channel.scale is None


def test_fitted_scale_needs_points_that_rise():
    assert fitted_scale(np.array([[1.0, 2.0], [1.0, 3.0]])) is None
    assert fitted_scale(np.array([[1.0, 3.0], [2.0, 2.0]])) is None
    assert fitted_scale(np.array([[81.0, 6360.0], [90.0, 7080.0]])).gain_kev == pytest.approx(SCALE.gain_kev)
