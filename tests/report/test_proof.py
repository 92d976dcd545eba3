"""What is shown to prove an element."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from xrfid.report.document import no_curves
from xrfid.report.proof import proof_panels
from xrfid.report.svg import proof_svg, spectrum_svg


def test_a_panel_shows_three_widths_each_way(steel):
    panel = proof_panels(steel, "Ni")[0]
    width = float(steel.calibration.resolution.fwhm_kev(7.47))
    assert panel.title == "Ni Kα"
    assert panel.energy_kev[0] == pytest.approx(7.47 - 3 * width, abs=0.03)
    assert panel.energy_kev[-1] == pytest.approx(7.47 + 3 * width, abs=0.03)
    assert (panel.net, panel.expected) == ("45\u202f690 ± 210", "45\u202f240")


def test_close_groups_share_a_panel_and_at_most_so_many_are_shown(steel):
    assert [p.title for p in proof_panels(steel, "Mo")] == ["Mo Lα, Lβ", "Mo Kα", "Mo Kβ"]
    assert [p.title for p in proof_panels(steel, "Mo", at_most=1)] == ["Mo Kα"]


def test_a_high_neighbour_does_not_hide_the_line(steel):
    """Cr K-beta stands between Cr K-alpha and Fe K-alpha, both several times as high."""
    panel = proof_panels(steel, "Cr")[1]
    assert panel.counts.max() > 2 * panel.counts_range[1]
    at_line = np.interp(5.947, panel.energy_kev, panel.counts)
    assert 0.3 * panel.counts_range[1] < at_line < panel.counts_range[1]


def test_residuals_tell_the_models_apart(steel):
    with_it, without_it = proof_panels(steel, "Si")[0].residuals
    assert np.abs(with_it).max() < 4.5
    assert without_it.max() > 8.0
    assert 4.0 <= proof_panels(steel, "Si")[0].residual_reach <= 12.0


@pytest.mark.parametrize("element", ["Rh", "Au"])
def test_no_model_without_it_no_proof(steel, element):
    assert proof_panels(steel, element) == []
    assert proof_panels(replace(steel, curves=no_curves()), "Fe") == []


def test_pictures_hold_no_number_that_is_none(steel):
    for text in (*(proof_svg(p) for p in proof_panels(steel, "Mo")), spectrum_svg(steel)):
        assert "nan" not in text
        assert "inf" not in text
