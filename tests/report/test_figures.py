"""Figures: what is in them, that no name covers another, and how they are written."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest

from xrfid.errors import InputError, OutputError
from xrfid.report import style
from xrfid.report.canvas import new_figure
from xrfid.report.document import no_curves
from xrfid.report.figures import (
    draw_maps,
    draw_overview,
    draw_proof,
    draw_scale_residuals,
    draw_spectrum,
    save_figure,
)

SHOWN = ("Si", "S", "Ar", "Cr", "Mn", "Fe", "Ni", "Cu", "Mo", "Rh")


def peak_names(ax):
    ax.figure.canvas.draw()
    return [t for t in ax.texts if t.get_gid() == "peak name"]


def overlaps(texts):
    boxes = [(t.get_text(), t.get_window_extent()) for t in texts]
    return [(a[0], b[0]) for a, b in itertools.combinations(boxes, 2) if a[1].overlaps(b[1])]


def test_spectrum(steel):
    upper, lower = draw_spectrum(steel)
    assert upper.get_yscale() == "log"
    names = [t.get_text() for t in peak_names(upper)]
    assert {"Fe Kα", "Fe Kβ", "Cr Kα", "Mo Kα", "Si Kα", "escape", "? 11.31"} <= set(names)
    assert [t.get_text() for t in upper.get_legend().get_texts()] == ["counts", "model", "continuum", "parts"]
    assert lower.get_ylabel() == "residual (σ)"
    assert lower.get_xlim() == upper.get_xlim()


def test_no_name_covers_another_or_leaves_the_figure(steel):
    upper, _ = draw_spectrum(steel)
    names = peak_names(upper)
    assert overlaps(names) == []
    everything = upper.figure.get_window_extent()
    headline = [t.get_window_extent() for t in upper.figure.texts]
    for name in names:
        box = name.get_window_extent()
        assert box.x0 >= everything.x0
        assert box.y1 <= min(h.y0 for h in headline)


def test_names_share_narrow_axes(steel):
    figure = new_figure(3.0, 4.0)
    axes = (figure.add_axes((0.2, 0.4, 0.7, 0.4)), figure.add_axes((0.2, 0.1, 0.7, 0.2)))
    assert draw_spectrum(steel, axes) == axes
    names = peak_names(axes[0])
    assert 5 < len(names) < 20
    assert overlaps(names) == []


def test_curves_differ_in_more_than_colour(steel):
    upper, _ = draw_spectrum(steel)
    lines = {x.get_label(): x for x in upper.get_lines() if not x.get_label().startswith("_")}
    looks = {(x.get_linewidth(), x.get_linestyle(), x.is_dashed()) for x in lines.values()}
    assert len(looks) == len(lines) == 4


def grey(colour):
    """Relative luminance after IEC 61966-2-1 (sRGB), as WCAG 2 defines contrast."""
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(a, b):
    bright, dark = sorted((grey(a), grey(b)), reverse=True)
    return (bright + 0.05) / (dark + 0.05)


@pytest.mark.parametrize("colour", [style.INK, style.ACCENT, style.SOFT])
def test_text_colours_reach_the_contrast_of_wcag_aa(colour):
    assert contrast(colour, style.PAPER) >= 4.5
    assert contrast(colour, style.WASH) >= 4.0


def test_accent_and_ink_stay_apart_in_grey_print():
    assert contrast(style.ACCENT, style.INK) >= 2.5


def test_maps_grow_lighter_all_the_way():
    shades = style.map_colours()(np.linspace(0, 1, 64))[:, :3]
    luminance = shades @ [0.2126, 0.7152, 0.0722]
    assert np.all(np.diff(luminance) > 0)


def test_proof_has_a_panel_for_each_group(steel):
    axes = draw_proof(steel, "Mo")
    assert [ax.get_title("left") for ax in axes] == ["Mo Lα, Lβ", "Mo Kα", "Mo Kβ"]
    labels = [t.get_text() for t in axes[0].get_legend().get_texts()]
    assert labels == ["what it explains", "best without it", "model", "counts"]
    assert axes[1].get_xlim()[0] < 17.44 < axes[1].get_xlim()[1]
    assert [len(ax.child_axes[0].get_lines()) for ax in axes] == [2, 2, 2]
    axes[0].figure.canvas.draw()
    title = axes[0].figure.texts[0].get_window_extent()
    assert not axes[0].get_legend().get_window_extent().overlaps(title)


def test_proof_draws_in_given_axes(steel):
    axes = [new_figure(3, 3).add_subplot()]
    assert draw_proof(steel, "Fe", axes) == (axes[0],)


def test_proof_of_what_is_not_there(steel):
    with pytest.raises(KeyError, match="Au"):
        draw_proof(steel, "Au")
    with pytest.raises(InputError, match=r"coupon.msa: nothing to draw for Rh: no model without it was kept"):
        draw_proof(steel, "Rh")


def test_without_curves_there_is_nothing_to_draw(steel):
    with pytest.raises(InputError, match=r"coupon.msa: the result holds no curves to draw"):
        draw_spectrum(replace(steel, curves=no_curves()))


def test_scale_residuals_name_their_lines(steel):
    ax = draw_scale_residuals(steel)
    assert [t.get_text() for t in ax.texts] == ["Cr Kα", "Fe Kα", "Ni Kα", "Mo Kα"]
    ax.figure.canvas.draw()
    assert overlaps(ax.texts) == []


def test_a_scale_that_rests_on_no_line_says_so(steel):
    ax = draw_scale_residuals(replace(steel, calibration=replace(steel.calibration, residuals=())))
    assert [t.get_text() for t in ax.texts] == ["no line was used for this scale"]


def test_overview(make_steel):
    some = [make_steel("a.msa"), make_steel("a/very/long/path/to/a/file/that/goes/on/and/on.msa")]
    ax = draw_overview(some)
    assert [t.get_text() for t in ax.get_xticklabels()] == [
        "Si",
        "S",
        "Ar",
        "Cr",
        "Mn",
        "Fe",
        "Ni",
        "Cu",
        "Mo",
        "Rh",
    ]
    names = [t.get_text() for t in ax.get_yticklabels()]
    assert names == ["a.msa", "…" + some[1].source.path[-31:]]
    assert len(ax.collections) == 2 * 10
    ax.figure.canvas.draw()
    assert all(t.get_window_extent().x0 >= 0 for t in ax.get_yticklabels())


def test_maps():
    ramp = np.add.outer(np.arange(4.0), np.arange(6.0))
    ramp[0, 0] = np.nan
    axes = draw_maps({"Fe K": ramp, "Cu K": 2 * ramp, "empty": np.full((4, 6), np.nan)})
    assert [ax.get_title("left") for ax in axes] == ["Fe K", "Cu K", "empty"]
    assert axes[0].images[0].get_array().shape == (4, 6)


@pytest.mark.parametrize(
    ("maps", "message"),
    [
        ({}, "maps: there is none to draw"),
        ({"Fe K": np.zeros(5)}, r'map "Fe K": shape \(5,\) is not \(rows, columns\)'),
    ],
)
def test_maps_refuse(maps, message):
    with pytest.raises(InputError, match=message):
        draw_maps(maps)


@pytest.mark.parametrize(("ending", "magic"), [("png", b"\x89PNG"), ("svg", b"<?xml"), ("PDF", b"%PDF")])
def test_saving_by_ending(steel, tmp_path, ending, magic):
    path = tmp_path / f"proof.{ending}"
    save_figure(draw_proof(steel, "Si")[0].figure, path)
    assert path.read_bytes().startswith(magic)
    with pytest.raises(OutputError, match="exists"):
        save_figure(draw_proof(steel, "Si")[0].figure, path)
    save_figure(draw_proof(steel, "Mn"), path, overwrite=True)
    save_figure(draw_scale_residuals(steel), path, overwrite=True)


def test_the_same_figure_is_the_same_file(steel, tmp_path):
    for name in ("a.pdf", "b.pdf"):
        save_figure(draw_proof(steel, "Si")[0].figure, tmp_path / name)
    assert (tmp_path / "a.pdf").read_bytes() == (tmp_path / "b.pdf").read_bytes()


def test_an_unknown_ending(steel, tmp_path):
    with pytest.raises(InputError, match=r'figures are not written as ".jpg"; use .png, .svg or .pdf'):
        save_figure(draw_proof(steel, "Si")[0].figure, tmp_path / "x.jpg")
    assert list(tmp_path.iterdir()) == []


def test_titles_from_files_are_taken_as_they_are(make_steel, tmp_path):
    """Formula signs, other scripts and control characters neither fail nor warn."""
    hostile = make_steel("$\\frac{.msa", "材料 $x^$ \x07 <script>alert(1)</script>")
    save_figure(draw_spectrum(hostile)[0].figure, tmp_path / "x.svg")
    draw_overview([hostile]).figure.canvas.draw()
    text = (tmp_path / "x.svg").read_text("utf-8")
    assert "<script>" not in text


def test_no_global_state_is_touched(steel):
    import matplotlib

    before = dict(matplotlib.rcParams)
    draw_spectrum(steel)
    assert dict(matplotlib.rcParams) == before
