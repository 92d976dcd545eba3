"""EMSA/MAS files (ISO 22029): keywords as the standard words them, and as files really write them."""

from __future__ import annotations

import numpy as np
import pytest
from made import COUNTS, ENERGY, OTHER, SCALE, N, columns, fixed, lines, spectrum

from xrfid.errors import InputError, OutputError
from xrfid.formats import read_bytes, read_spectrum, write_spectrum
from xrfid.spectrum import EnergyScale, Spectrum

KEYS = {
    "FORMAT": "EMSA/MAS Spectral Data File", "VERSION": "1.0", "TITLE": "bench coupon", "DATE": "03-FEB-2031",
    "TIME": "11:20", "OWNER": "the workshop", "NPOINTS": f"{N}.", "NCOLUMNS": "1.", "XUNITS": "keV", "YUNITS": "counts",
    "DATATYPE": "Y", "XPERCHAN": "0.08", "OFFSET": "-0.12",
}  # fmt: skip


def emsa(*rows: object, end: str = "#ENDOFDATA   : ", extra: tuple[str, ...] = (), **changed: str | None) -> str:
    """An EMSA file; a keyword set to None is left out."""
    keys = {k: v for k, v in (KEYS | changed).items() if v is not None}
    head = [f"#{k:<12s}: {v}" for k, v in keys.items()]
    return lines(*head, *extra, "#SPECTRUM    : ", *(rows or COUNTS), *([end] if end else []), end="\r\n")


def rows(values: object, by: int) -> list[str]:
    """Several values a line."""
    some = list(values)
    return [", ".join(map(str, some[i : i + by])) for i in range(0, len(some), by)]


def read(text: str) -> Spectrum:
    (found,) = read_bytes("bench.msa", text.encode("latin-1"))
    return found


def test_required_keywords():
    found = read(emsa())
    assert np.array_equal(found.counts, COUNTS)
    assert found.scale == SCALE
    assert found.title == "bench coupon"
    assert found.metadata["date"] == "03-FEB-2031"
    assert found.metadata["owner"] == "the workshop"
    assert found.assumptions == ()


PAIRS = columns(fixed(ENERGY, 4), COUNTS, by=", ")
SAME: dict[str, str] = {
    # ISO 22029: data of type Y in one to five columns, or XY pairs
    "Y with commas at the ends": emsa(*(f"{c}," for c in COUNTS)),
    "five columns": emsa(*rows(COUNTS, 5), NCOLUMNS="5."),
    "XY": emsa(*PAIRS, DATATYPE="XY"),
    "XY, two pairs a line": emsa(*rows(PAIRS, 2), DATATYPE="XY", NCOLUMNS="2"),
    "XY, tabs": emsa(*columns(fixed(ENERGY, 4), COUNTS, by="\t"), DATATYPE="XY"),
    "exponents": emsa(*(f"{c:.6E}" for c in COUNTS)),
    "exponents with a blank": emsa(*(f"{c:.6f} E+00" for c in COUNTS)),
    "in eV": emsa(XUNITS="eV", XPERCHAN="80.", OFFSET="-120."),
    "no unit is eV": emsa(XUNITS=None, XPERCHAN="80.", OFFSET="-120."),
    "lower case": emsa().replace("#FORMAT      :", "#Format      :").replace("#NPOINTS ", "#npoints "),
    "other spacing": emsa().replace("#FORMAT      :", "#FORMAT:").replace("#XPERCHAN    :", "# XPERCHAN  :"),
    "unit beside the keyword": emsa().replace("#XPERCHAN    :", "#XPERCHAN -keV :"),
    "old wording": emsa(FORMAT="EMSA/MAS SPECTRAL DATA STANDARD"),
    "newer version": emsa(VERSION="TC202v2.0"),
    "line feeds only": emsa().replace("\r\n", "\n"),
    "something after the end": emsa(end="#ENDOFDATA   : 1234 check sum\r\nmore words"),
    "decimal commas": emsa(*(f"{c},0" for c in COUNTS), XPERCHAN="0,08", OFFSET="-0,12"),
    "decimal commas, XY": emsa(*columns(fixed(ENERGY, 4, ","), fixed(COUNTS, 1, ","), by="; "), DATATYPE="XY"),
    "a colon in the title": emsa(TITLE="bench: coupon"),
    "no end mark, all there": emsa(end=""),
}  # fmt: skip


@pytest.mark.parametrize("text", SAME.values(), ids=SAME)
def test_the_same_spectrum(text):
    found = read(text)
    assert np.array_equal(found.counts, COUNTS)
    assert found.scale is not None
    assert found.energy_kev == pytest.approx(ENERGY, abs=1e-4)


def test_detector_keywords():
    extra = (
        "#LIVETIME  -s: 30.5", "#REALTIME   s: 33.25", "#BEAMKV   -kV: 40.0", "#FWHMMNKA -eV: 142.",
        "#ELEVANGLE-dg: 35.", "##LAMP       : on", "#COMMENT     : one", "#COMMENT     : two",
    )  # fmt: skip
    found = read(emsa(extra=extra))
    assert (found.live_time_s, found.real_time_s) == (30.5, 33.25)
    assert found.metadata["voltage_kv"] == 40.0
    assert found.metadata["fwhm_mn_ka_ev"] == 142.0
    assert found.metadata["takeoff_deg"] == 35.0
    assert found.metadata["comment"] == "one two"


@pytest.mark.parametrize(
    ("text", "says"),
    [
        (emsa(NPOINTS=None), "NPOINTS is not stated"),
        (emsa(NPOINTS="200."), "NPOINTS says 200, but the file holds 256: the first 200"),
        (emsa(NPOINTS="300."), "NPOINTS says 300, but the file holds 256: all are taken"),
        (emsa(XUNITS="nm"), 'XUNITS is "nm", no energy'),
        (emsa(XPERCHAN=None), "XPERCHAN is missing or not above 0"),
        (emsa(XPERCHAN="0"), "XPERCHAN is missing or not above 0"),
        (emsa(XUNITS="eV", XPERCHAN="0.0008"), "XUNITS says eV, but the values can only be keV"),
        (emsa(XUNITS="keV", XPERCHAN="80.", OFFSET="-120."), "XUNITS says keV, but the values can only be eV"),
    ],
)
def test_what_was_assumed_is_said(text, says):
    assert any(says in said for said in read(text).assumptions)


def test_channels_as_unit_are_no_scale():
    found = read(emsa(XUNITS="channel", XPERCHAN="1.", OFFSET="0."))
    assert found.scale is None
    assert found.assumptions == ()


@pytest.mark.parametrize(
    ("text", "says"),
    [
        (emsa().replace("#SPECTRUM ", "#SPECTRA "), "has no #SPECTRUM line"),
        (emsa(NCOLUMNS="70"), "NCOLUMNS is 70; it must be 1 to 5"),
        (emsa(NCOLUMNS="few"), 'NCOLUMNS is "few"; a number is needed'),
        (emsa(DATATYPE="YX"), 'DATATYPE is "YX"; it must be Y or XY'),
        (emsa(NPOINTS="0"), 'NPOINTS is "0"; it must be a whole number'),
        (emsa(NPOINTS="9e9"), 'NPOINTS is "9e9"; it must be a whole number'),
        (emsa(NPOINTS="300.", end=""), "NPOINTS says 300, but the data end after 256; the file is cut short"),
        (emsa(*COUNTS, 7, DATATYPE="XY"), "XY data hold 257 numbers; pairs are needed"),
        (emsa(*COUNTS[:9], "seven", *COUNTS[10:]), 'bench.msa, line 24: found "seven" among the data'),
        (emsa(*COUNTS[:9], -7, *COUNTS[10:]), "channel 9: the count is -7"),
        (emsa(OFFSET="nan"), 'OFFSET is "nan"; a number is needed'),
        (emsa(*COUNTS[:30], NPOINTS="30."), "holds 30 channels"),
    ],
)
def test_refused(text, says):
    with pytest.raises(InputError, match=says):
        read(text)


def test_written_and_read_back(tmp_path):
    written = spectrum(metadata={"voltage_kv": 40.0, "date": "03-FEB-2031"})
    write_spectrum(written, tmp_path / "a.msa")
    found = read_spectrum(tmp_path / "a.msa")
    assert np.array_equal(found.counts, COUNTS)
    assert found.scale == SCALE
    assert (found.live_time_s, found.real_time_s, found.title) == (30.5, 33.25, "bench coupon")
    assert found.metadata["voltage_kv"] == 40.0
    assert found.metadata["date"] == "03-FEB-2031"


def test_written_form_follows_the_standard(tmp_path):
    """ISO 22029: colon in column 14, value from column 16; lines end CR LF; FORMAT and VERSION first."""
    write_spectrum(spectrum(title="t" * 90), tmp_path / "a.emsa")
    data = (tmp_path / "a.emsa").read_bytes()
    rows = data.decode("ascii").split("\r\n")
    head = rows[: rows.index("#SPECTRUM    : ")]
    assert all(row[0] == "#" and row[13:15] == ": " for row in head)
    assert [row[1:13].strip() for row in head[:13]] == [
        "FORMAT", "VERSION", "TITLE", "DATE", "TIME", "OWNER", "NPOINTS", "NCOLUMNS", "XUNITS", "YUNITS", "DATATYPE",
        "XPERCHAN", "OFFSET",
    ]  # fmt: skip
    assert len(head[2]) == 15 + 64
    assert rows[-2:] == ["#ENDOFDATA   : ", ""]
    assert b"\n" not in data.replace(b"\r\n", b"")


def test_a_bent_scale_is_written_as_pairs(tmp_path):
    bent = EnergyScale(0.05, 0.08, 2e-6)
    write_spectrum(spectrum(scale=bent), tmp_path / "a.msa")
    found = read_spectrum(tmp_path / "a.msa")
    assert found.scale is not None
    assert found.energy_kev == pytest.approx(bent.energy_kev(np.arange(N)), abs=1e-6)


def test_one_spectrum_a_file(tmp_path):
    with pytest.raises(OutputError, match=r"an EMSA file holds one spectrum, not 2; use .csv or .h5"):
        write_spectrum([spectrum(), spectrum(counts=OTHER)], tmp_path / "a.msa")
    assert not list(tmp_path.iterdir())


def test_endings(tmp_path):
    with pytest.raises(OutputError, match=r'no format has the ending ".spx"; use .msa'):
        write_spectrum(spectrum(), tmp_path / "a.spx")
