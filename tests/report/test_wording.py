"""Numbers as a person reads them."""

from __future__ import annotations

import math

import pytest

from xrfid.report import wording


# Rounding after the Guide to the Expression of Uncertainty in Measurement (JCGM 100:2008, 7.2.6): the
# uncertainty to at most two digits, the value to the same place.
@pytest.mark.parametrize(
    ("value", "sigma", "text"),
    [
        (812345.0, 951.0, "812 340 ± 950"),
        (812345.0, 996.0, "812 300 ± 1000"),
        (1234.5678, 0.0456, "1234.568 ± 0.046"),
        (-0.04, 12.3, "0 ± 12"),
        (7.0, 0.0, "7.00"),
        (52.3, math.nan, "52"),
        (math.nan, 1.0, "–"),
        (3.0e6, 2.44e4, "3 000 000 ± 24 000"),
    ],
)
def test_value_with_sigma(value, sigma, text):
    assert wording.with_sigma(value, sigma) == text


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (90.4, "90"),
        (148.0, "150"),
        (9.96, "10"),
        (0.0, "0"),
        (None, "–"),
        (math.inf, "–"),
        (12_345.0, "12 000"),
    ],
)
def test_limits_have_two_digits(value, text):
    assert wording.two_digits(value) == text


@pytest.mark.parametrize(("value", "text"), [(5.237, "5.2"), (9.96, "10"), (855.3, "855"), (-2.0, "-2.0")])
def test_significance(value, text):
    assert wording.significance(value) == text


@pytest.mark.parametrize(
    ("name", "text"), [("Ka1", "Kα1"), ("Lb2", "Lβ2"), ("Mz", "Mζ"), ("escape", "escape"), ("K", "K")]
)
def test_line_names(name, text):
    assert wording.line_name(name) == text


@pytest.mark.parametrize(
    ("paths", "names"),
    [
        (["a.msa", "b.msa"], ["a.msa", "b.msa"]),
        (["/data/run/a.msa", "/data/run/b.msa"], ["a.msa", "b.msa"]),
        (["run/1/a.msa", "run/12/a.msa"], ["1/a.msa", "12/a.msa"]),
        (["run/a.msa", "a.msa"], ["run/a.msa", "a.msa"]),
        (["run/a.msa"], ["run/a.msa"]),
        (["/a.msa", "/b/a.msa"], ["/a.msa", "/b/a.msa"]),
    ],
)
def test_common_folders_are_left_out(make_steel, paths, names):
    assert wording.short_names([make_steel(p) for p in paths]) == names
