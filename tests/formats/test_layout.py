"""Layout files: text whose shape cannot be guessed, read as a person says."""

from __future__ import annotations

import numpy as np
import pytest
from made import COUNTS, ENERGY, SCALE, columns, fixed, lines

from xrfid.errors import InputError
from xrfid.formats import read_bytes, read_spectrum
from xrfid.formats.layout import load_layout
from xrfid.spectrum import Spectrum

ROWS = columns(["a"] * COUNTS.size, fixed(ENERGY, 3, ","), COUNTS, ["b"] * COUNTS.size, by=" | ")
ODD = lines("7 7 7", "8 8 8", *ROWS, "9 | 9 | 9 | 9")
LAYOUT = """
first_line = 3
last_line = 258
separator = "|"
decimal = ","
counts_column = 3
energy_column = 2
live_time_s = 30.5
real_time_s = 33.25
title = "bench coupon"
"""


def read(tmp_path, text: str, layout: str) -> Spectrum:
    path = tmp_path / "layout.toml"
    path.write_text(layout, encoding="utf-8")
    (found,) = read_bytes("odd.dat", text.encode(), layout=path)
    return found


def test_read(tmp_path):
    found = read(tmp_path, ODD, LAYOUT)
    assert np.array_equal(found.counts, COUNTS)
    assert found.energy_kev == pytest.approx(ENERGY)
    assert (found.live_time_s, found.real_time_s, found.title) == (30.5, 33.25, "bench coupon")


def test_read_from_a_file(tmp_path):
    (tmp_path / "odd.dat").write_text(ODD)
    (tmp_path / "layout.toml").write_text(LAYOUT)
    found = read_spectrum(tmp_path / "odd.dat", layout=tmp_path / "layout.toml")
    assert np.array_equal(found.counts, COUNTS)


def test_in_ev(tmp_path):
    text = lines(*columns(fixed(1e3 * ENERGY, 0), COUNTS))
    found = read(tmp_path, text, 'counts_column = 2\nenergy_column = 1\nenergy_unit = "eV"')
    assert found.energy_kev == pytest.approx(ENERGY)


def test_gain_and_offset(tmp_path):
    found = read(tmp_path, lines(*COUNTS), "gain_kev = 0.08\noffset_kev = -0.12")
    assert found.scale == SCALE


def test_nothing_stated(tmp_path):
    found = read(tmp_path, lines(*COUNTS, "", ""), "")
    assert np.array_equal(found.counts, COUNTS)
    assert found.scale is None


@pytest.mark.parametrize(
    ("layout", "says"),
    [
        ("seperator = ';'", 'unknown key "seperator"; did you mean "separator"'),
        ("first_line = 0", r"first_line: .*greater than or equal to 1 \(got 0\)"),
        ("gain_kev = inf", "gain_kev: .*finite"),
        ("separator = ''", "separator: .*at least 1 character"),
        ("energy_unit = 'nm'", "energy_unit: .*'keV' or 'eV'"),
        ("decimal = ','\nseparator = ','", 'separator and decimal are both ","; correct one of them'),
        ("first_line = 9\nlast_line = 3", "last_line 3 lies before first_line 9"),
        ("offset_kev = 0.1", "offset_kev is given without gain_kev"),
        ("gain_kev = 0.1\nenergy_column = 1", "give either energy_column or gain_kev, not both"),
        ("first_line 3", "is not valid TOML"),
        ("x = " + "[" * 5000, "is not valid TOML"),
    ],
)
def test_layout_refused(tmp_path, layout, says):
    with pytest.raises(InputError, match=says):
        read(tmp_path, ODD, layout)


def test_layout_that_cannot_be_read(tmp_path):
    with pytest.raises(
        InputError, match=r"none.toml: cannot be read \(no such file or directory\); give a layout file"
    ):
        load_layout(tmp_path / "none.toml")
    (tmp_path / "a.toml").write_bytes(b"title = '\xff\xfe'")
    with pytest.raises(InputError, match="is not a text file; give a layout file"):
        load_layout(tmp_path / "a.toml")


@pytest.mark.parametrize(
    ("layout", "says"),
    [
        (
            "first_line = 2\nseparator = '|'\ncounts_column = 3",
            "odd.dat, line 2: column 3 holds nothing; a number is needed",
        ),
        ("first_line = 3\nseparator = '|'\ncounts_column = 4", 'odd.dat, line 3: column 4 holds "b"'),
        ("first_line = 3\nlast_line = 40\nseparator = '|'\ncounts_column = 3", "holds 38 channels"),
        ("first_line = 3\nlast_line = 258\nseparator = '|'\ndecimal = ','\ncounts_column = 2", "the count is -0.12"),
        (
            "first_line = 3\nlast_line = 258\nseparator = '|'\ncounts_column = 3\nenergy_column = 3",
            "column 3 does not rise like an energy axis; check the layout",
        ),
        ("first_line = 900", "holds 0 channels"),
    ],
)
def test_text_refused(tmp_path, layout, says):
    with pytest.raises(InputError, match=says):
        read(tmp_path, ODD, layout)
