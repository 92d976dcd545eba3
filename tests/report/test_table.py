"""The terminal table: golden texts, width, no colour where there is no terminal, hostile titles."""

from __future__ import annotations

import io
from dataclasses import replace
from pathlib import Path

import pytest
from rich.console import Console

from xrfid.report.table import hazardous_limits, render_comparison, render_table

GOLDEN = Path(__file__).parent / "golden"


def shown(render, what, width=80, encoding="utf-8", **options):
    raw = io.BytesIO()
    stream = io.TextIOWrapper(raw, encoding=encoding)
    render(what, Console(file=stream, width=width, **options))
    stream.flush()
    return "\n".join(line.rstrip() for line in raw.getvalue().decode(encoding).splitlines()) + "\n"


def test_golden_table(steel):
    assert shown(render_table, steel) == (GOLDEN / "steel.txt").read_text("utf-8")


def test_golden_comparison(make_steel):
    some = [
        make_steel("a.msa"),
        make_steel("run/b.msa", title=""),
        make_steel(None, "a third one without a file"),
    ]
    some[1] = replace(some[1], findings=some[1].findings[:2])
    assert shown(render_comparison, some) == (GOLDEN / "comparison.txt").read_text("utf-8")


@pytest.mark.parametrize("width", [60, 80, 132])
def test_stays_within_the_width(steel, width):
    lines = shown(render_table, steel, width).splitlines()
    assert max(map(len, lines)) <= width


def test_no_colour_codes_without_a_terminal(steel):
    assert "\x1b" not in shown(render_table, steel)
    assert "\x1b[1m" in shown(render_table, steel, force_terminal=True, color_system="standard")


def test_a_console_without_unicode(steel):
    text = shown(render_table, steel, encoding="ascii")
    assert "800 000 +- 1100" in text
    assert "-------" in text


def test_a_hostile_title_cannot_speak_to_the_terminal(make_steel):
    text = shown(render_table, make_steel("x.msa", "[red]no[/red] \x1b]0;pwned\x07 \u202eevil\nline"))
    assert "[red]no[/red] ]0;pwned evil line" in text
    assert "\x1b" not in text
    assert "\u202e" not in text


def test_many_elements_break_into_blocks(make_steel, steel):
    from xrfid.atoms.elements import SYMBOLS

    many = replace(steel, findings=tuple(replace(steel["Fe"], element=s) for s in SYMBOLS[10:60]))
    text = shown(render_comparison, [many, make_steel("b.msa")])
    assert max(map(len, text.splitlines())) <= 80
    assert all(f" {s} " in text or f" {s}\n" in text for s in SYMBOLS[10:60])


def test_nothing_found(steel):
    text = shown(
        render_table, replace(steel, findings=(), artefacts=(), unexplained=(), assumptions=(), cautions=())
    )
    assert "No element is identified." in text
    assert "Peaks that are no line" not in text
    assert "Assumed" not in text


def test_every_harmful_element_is_accounted_for(steel):
    seen, out_of_reach, unasked = hazardous_limits(steel)
    assert list(seen) == ["As", "Hg", "Pb", "Cd", "Tl", "Br"]
    assert [x.series for x in seen["Pb"]] == ["L", "M"]
    assert (out_of_reach, unasked) == (["U", "Th"], ["Be"])
