"""The page: complete, self-contained, escaped, small."""

from __future__ import annotations

import base64
import hashlib
import json
import re
from dataclasses import replace
from html.parser import HTMLParser

import pytest

from xrfid.errors import OutputError
from xrfid.identify.result import Verdict
from xrfid.report.document import no_curves
from xrfid.report.page import render_page, save_page
from xrfid.report.plots import hover_texts, mark_data

HOSTILE = '</title></script><script>document.title="pwned"</script><img src=x onerror=alert(1)>'
VOID = {"meta", "link", "br", "img", "input", "hr"}


class Reader(HTMLParser):
    """Collects elements, their attributes and text, and complains about what is not closed."""

    def __init__(self, text):
        super().__init__(convert_charrefs=True)
        self.open, self.elements, self.scripts, self.words = [], [], [], []
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        (self.scripts if self.open and self.open[-1] == "script" else self.words).append(data)

    def attributes(self, name):
        return [attrs[name] for _, attrs in self.elements if name in attrs]


@pytest.fixture(scope="module")
def page():
    from steel import build

    return render_page(build())


@pytest.fixture(scope="module")
def read(page):
    return Reader(page)


def test_it_is_small(page):
    assert len(page.encode("utf-8")) < 3_000_000


def test_nothing_is_loaded_from_anywhere(read):
    loading = [
        v for name in ("src", "href", "data", "action", "srcset", "poster") for v in read.attributes(name)
    ]
    assert all(v.startswith("#") or v == "data:," for v in loading)
    assert not {tag for tag, _ in read.elements} & {"iframe", "object", "embed", "base", "form", "img"}
    own = "".join(t for t in read.words)
    assert "http" not in own
    assert "@import" not in own


def test_the_policy_names_exactly_the_scripts_in_the_page(read):
    policy = next(a["content"] for t, a in read.elements if a.get("http-equiv") == "Content-Security-Policy")
    running = [a for t, a in read.elements if t == "script" and a.get("type") != "application/json"]
    texts = [s for s in read.scripts if s.strip() and not s.startswith('{"plot"')]
    assert len(running) == len(texts) == 2
    hashes = {"sha256-" + base64.b64encode(hashlib.sha256(t.encode()).digest()).decode() for t in texts}
    assert set(re.findall(r"'(sha256-[^']+)'", policy)) == hashes
    assert policy.startswith("default-src 'none'; ")
    assert "unsafe-eval" not in policy
    assert "connect-src" not in policy
    assert not any(name.startswith("on") for _, attrs in read.elements for name in attrs)


def test_everything_is_said(read, steel):
    text = " ".join(" ".join(read.words).split())
    ids = read.attributes("id")
    for finding in steel.findings:
        assert f"finding-{finding.element}" in ids
        assert finding.reason in text
    for said in (*steel.assumptions, *steel.cautions):
        assert said in text
    assert "coherent scatter: Rh K lines of the source" in text
    assert "11.31 keV: 154 ± 31 counts" in text
    assert "800 000 ± 1100" in text
    assert "Out of reach: 1 series, its edge lies above the tube's voltage" in text
    assert "Harmful elements not detected" in text


def test_each_finding_with_a_model_without_it_has_its_proof(read):
    panels = [
        a["aria-label"]
        for t, a in read.elements
        if t == "svg" and "best model without" in a.get("aria-label", "")
    ]
    assert {p.split()[0] for p in panels} == {"Fe", "Cr", "Ni", "Mo", "Mn", "Si", "S", "Cu", "Ar"}
    assert sum(p.startswith("Mo ") for p in panels) == 3


def test_every_control_has_a_name(read):
    buttons = [a for t, a in read.elements if t == "button"]
    assert len(buttons) > 10
    assert all(a.get("type") == "button" for a in buttons)
    assert ("html", {"lang": "en"}) in read.elements


@pytest.mark.parametrize("where", ["title", "path", "assumption", "provenance", "line"])
def test_hostile_text_stays_text(make_steel, where):
    steel = make_steel("a.msa", "b")
    if where == "title":
        steel = make_steel("a.msa", HOSTILE)
    elif where == "path":
        steel = make_steel(HOSTILE)
    elif where == "assumption":
        steel = replace(steel, assumptions=(HOSTILE,), cautions=(HOSTILE,))
    elif where == "provenance":
        steel = replace(steel, provenance={HOSTILE: HOSTILE})
    else:
        doubted = replace(steel["Fe"], verdict=Verdict.TENTATIVE, reason=HOSTILE)
        steel = replace(
            steel, findings=(doubted,), artefacts=(replace(steel.artefacts[0], of=HOSTILE, advice=HOSTILE),)
        )
    read = Reader(render_page(steel))
    assert sum(t == "script" for t, _ in read.elements) == 3
    assert not [t for t, _ in read.elements if t == "img"]
    assert HOSTILE in " ".join("".join(read.words).split())


def test_the_plot_data_cannot_end_its_script(make_steel):
    hostile = make_steel()
    curves = hostile.curves
    parts = {("</script><b>" if name == "sum" else name): part for name, part in curves.parts.items()}
    text = render_page(replace(hostile, curves=replace(curves, parts=parts)))
    data = (
        text[text.index('<script type="application/json" id="data">') :]
        .split(">", 1)[1]
        .split("</script>")[0]
    )
    assert "</script><b> " in json.dumps(json.loads(data))


def test_without_curves_the_page_still_speaks(steel):
    read = Reader(render_page(replace(steel, curves=no_curves())))
    assert "finding-Fe" in read.attributes("id")
    assert [t for t, _ in read.elements].count("script") == 1
    assert not [t for t, _ in read.elements if t == "svg"]


def test_a_spectrum_of_nothing(steel):
    empty = replace(
        steel, findings=(), limits=(), artefacts=(), unexplained=(), assumptions=(), composition={}
    )
    text = " ".join("".join(Reader(render_page(empty)).words).split())
    assert "No element is identified." in text
    assert "Every peak is accounted for." in text
    assert "Nothing had to be assumed." in text


def test_hover_names_the_line_and_its_share(steel):
    here, line = hover_texts(steel)
    at = round((6.40 - 0.0) / 0.02)
    assert here[at].startswith("Fe K ")
    assert line[at] == "Fe Kα1, 58 % of Fe K"
    assert line[int(15.0 / 0.02)] == "none"
    assert here[int(15.0 / 0.02)] == "continuum 100 %"


def test_names_come_with_their_rank(steel):
    data = mark_data(steel)
    assert sorted(d["rank"] for d in data) == list(range(len(data)))
    assert {d["text"] for d in data if d["rank"] < 6} == {
        "Fe Kα",
        "Cr Kα",
        "Ni Kα",
        "Mo Kα",
        "Mn Kα",
        "Si Kα",
    }


def test_saving(steel, tmp_path):
    path = tmp_path / "page.html"
    save_page(steel, path)
    assert path.read_text("utf-8").startswith("<!doctype html>")
    with pytest.raises(OutputError, match="exists"):
        save_page(steel, path)
    save_page(steel, path, overwrite=True)
