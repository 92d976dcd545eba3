"""The page to hand over: one HTML file with the interactive spectrum, the verdicts and their proofs.

It opens offline and loads nothing: BokehJS is inlined from the installed package, and a content
security policy allows exactly the scripts that are in the file (by their SHA-256) and no connection
at all. Everything that came from a file is escaped.
"""

from __future__ import annotations

import base64
import hashlib
import json
from collections.abc import Callable, Mapping
from functools import lru_cache
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING, Any

from xrfid.errors import one_line
from xrfid.identify.result import Finding, Identification, Limit, Verdict
from xrfid.report import style, wording
from xrfid.report.proof import proof_panels
from xrfid.report.svg import proof_key, proof_svg, spectrum_key, spectrum_svg
from xrfid.report.table import hazardous_limits

if TYPE_CHECKING:
    from jinja2 import Environment

_THIN = wording.GROUP_SPACE
_MEANINGS: Mapping[Verdict, str] = {
    Verdict.IDENTIFIED: "counts that nothing else explains",
    Verdict.TENTATIVE: "above the decision threshold, but the evidence is incomplete",
    Verdict.UNRESOLVED: "one of several rivals is there; this spectrum cannot say which",
    Verdict.INSTRUMENT: "lines that this instrument itself produces; the sample may hold the element as well",
}


def render_page(identification: Identification) -> str:
    """Return the page as HTML text.

    Parameters
    ----------
    identification : Identification
        With its curves; without them (read back from a document) the page has no pictures.
    """
    drawn = identification.curves.counts.size > 0
    scripts = [_bokeh(), _asset("page.js")] if drawn else [_asset("page.js")]
    return _environment().get_template("page.html.j2").render(
        policy=_policy(scripts),
        scripts=scripts,
        css=_asset("page.css"),
        data=_data(identification) if drawn else None,
        spectrum=spectrum_svg(identification) if drawn else None,
        proof_legend=proof_key(),
        spectrum_legend=spectrum_key(),
        result=identification,
        name=one_line(wording.subject(identification)),
        title=one_line(identification.source.title),
        source_line=wording.source_line(identification, _THIN),
        scale_line=wording.scale_line(identification),
        groups=_groups(identification),
        asked=max((f.evidence.threshold for f in identification.findings), default=0.0),
        harmful=hazardous_limits(identification),
        limits=_limit_rows(identification),
        out_of_reach=_out_of_reach(identification),
    )  # fmt: skip


def save_page(identification: Identification, path: str | Path, overwrite: bool = False) -> None:
    """Write the page; it appears whole or not at all.

    Raises
    ------
    OutputError
        If the file exists and may not be overwritten, or cannot be written.
    """
    from xrfid.output import atomic_output

    page = render_page(identification)
    with atomic_output(path, overwrite=overwrite) as unfinished:
        unfinished.write_text(page, encoding="utf-8")


def _environment() -> Environment:
    """Templates with autoescape on and the words of the other reports as filters."""
    from jinja2 import Environment, PackageLoader, StrictUndefined

    environment = Environment(
        loader=PackageLoader("xrfid.report"), autoescape=True, undefined=StrictUndefined, trim_blocks=True,
        lstrip_blocks=True,
    )  # fmt: skip
    filters: dict[str, Callable[..., str]] = {
        "with_sigma": lambda x: wording.with_sigma(x.area, x.sigma, _THIN),
        "limit": lambda value: wording.two_digits(value, _THIN),
        "significance": wording.significance,
        "line_name": wording.line_name,
        "grouped": lambda value, decimals=0: wording.grouped(value, decimals, _THIN),
    }
    environment.filters.update(filters)
    environment.globals["rivals_line"] = wording.rivals_line
    return environment


@lru_cache
def _asset(name: str) -> str:
    text = files("xrfid.report").joinpath("templates", name).read_text("utf-8")
    if name.endswith(".css"):
        for key in ("INK", "PAPER", "ACCENT", "SOFT", "FAINT", "WASH", "ACCENT_WASH"):
            text = text.replace(f"var(--{key.lower().replace('_', '-')})", getattr(style, key))
    return text


@lru_cache
def _bokeh() -> str:
    """BokehJS without widgets, as installed."""
    from bokeh.resources import Resources

    library = Resources(mode="inline", components=["bokeh"]).js_raw[0]
    return library.replace("</script", "<\\/script")


def _policy(scripts: list[str]) -> str:
    """Content security policy: these scripts and no other, nothing from anywhere else."""
    hashes = [base64.b64encode(hashlib.sha256(s.encode("utf-8")).digest()).decode("ascii") for s in scripts]
    allowed = " ".join(f"'sha256-{h}'" for h in hashes)
    return (
        f"default-src 'none'; script-src {allowed}; style-src 'unsafe-inline'; img-src data:; "
        "base-uri 'none'; form-action 'none'"
    )


def _data(identification: Identification) -> str:
    """Return the plots and names as JSON that may stand inside a script element."""
    from bokeh.core.types import ID
    from bokeh.embed import json_item

    from xrfid.report.plots import mark_data, spectrum_plot

    item = json_item(spectrum_plot(identification), ID("plot"))
    text = json.dumps({"plot": item, "marks": mark_data(identification)}, allow_nan=False)
    return text.replace("&", "\\u0026").replace("<", "\\u003c").replace(">", "\\u003e")


def _groups(identification: Identification) -> list[dict[str, Any]]:
    """Return the findings by verdict, each with its proof."""
    groups = []
    for verdict, meaning in _MEANINGS.items():
        some = [f for f in identification.findings if f.verdict is verdict]
        if some:
            rows = [_row(identification, f) for f in some]
            groups.append({"verdict": verdict, "meaning": meaning, "rows": rows})
    return groups


def _row(identification: Identification, finding: Finding) -> dict[str, Any]:
    panels = proof_panels(identification, finding.element)
    energies = [e for p in panels for e in p.energies_kev]
    return {
        "finding": finding,
        "panels": [proof_svg(p) for p in panels],
        "from_kev": min(energies) - 0.5 if energies else None,
        "to_kev": max(energies) + 0.5 if energies else None,
    }


def _limit_rows(identification: Identification) -> list[Limit]:
    return [x for x in identification.limits if x.verdict is Verdict.NOT_DETECTED]


def _out_of_reach(identification: Identification) -> dict[str, list[str]]:
    """Series out of reach, by reason."""
    reasons: dict[str, list[str]] = {}
    for limit in identification.limits:
        if limit.verdict is Verdict.OUT_OF_REACH:
            reasons.setdefault(limit.reason or "out of reach", []).append(f"{limit.element} {limit.series}")
    return reasons
