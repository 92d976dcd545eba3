"""The terminal's answer: what is in the sample first, then how sure, what else was seen and what was not."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

from xrfid.atoms.elements import ATOMIC_NUMBER
from xrfid.errors import one_line
from xrfid.identify.cautions import HAZARDOUS
from xrfid.identify.result import Finding, Identification, Limit, Verdict
from xrfid.report import wording

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

_ASCII = str.maketrans({"±": "+-", "–": "-", "●": "#", "…": "~", "⚠": "!"})
_ONE_RULE = "    \n    \n {}  \n    \n    \n    \n    \n    \n"
"""rich's drawing of a table with one line under its header and none elsewhere."""
_OPEN = (Verdict.TENTATIVE, Verdict.UNRESOLVED)


def render_table(identification: Identification, console: Console) -> None:
    """Print one identification: readable at 80 columns, with colour or without.

    Parameters
    ----------
    identification : Identification
    console : rich.console.Console
        Where to print; it knows its width and whether it is a terminal.
    """
    writer = _Writer(console)
    _head(identification, writer)
    _identified(identification, writer)
    _open_findings(identification, writer)
    _instrument(identification, writer)
    _other_peaks(identification, writer)
    _not_seen(identification, writer)
    writer.bullets("Assumed", identification.assumptions)
    writer.bullets("Mind", identification.cautions)


def render_comparison(identifications: Sequence[Identification], console: Console) -> None:
    """Print which elements each of several spectra shows: one row a spectrum, one column an element."""
    writer = _Writer(console)
    elements = shown_elements(identifications)
    names = wording.short_names(identifications)
    widest = max(12, min(30, console.width // 3, max(map(len, names), default=12)))
    per_block = max(1, (console.width - widest - 2) // 4)
    writer.heading(f"{len(identifications)} spectra, {len(elements)} elements")
    for start in range(0, max(len(elements), 1), per_block):
        block = elements[start : start + per_block]
        table = writer.table()
        table.add_column("", width=widest, no_wrap=True, overflow="ellipsis")
        for element in block:
            table.add_column(element, justify="center", width=2)
        for name, identification in zip(names, identifications, strict=True):
            verdicts = {f.element: f.verdict for f in identification.findings}
            marks = [writer.mark(verdicts.get(e, Verdict.NOT_DETECTED)) for e in block]
            table.add_row(writer.text(_shortened(name, widest)), *marks)
        console.print(table)
    writer.line("● identified, ? tentative or unresolved, i from the instrument, blank not seen", style="dim")


def shown_elements(identifications: Iterable[Identification]) -> list[str]:
    """Return the elements with any finding in any spectrum, by atomic number."""
    return sorted({f.element for i in identifications for f in i.findings}, key=ATOMIC_NUMBER.__getitem__)


def hazardous_limits(identification: Identification) -> tuple[dict[str, list[Limit]], list[str], list[str]]:
    """Sort the hazardous elements that were not found by what can be said of them.

    Returns
    -------
    seen : dict
        Per element, its series that would have shown; lowest detection limit first.
    out_of_reach : list of str
        Elements of which no series can show.
    unasked : list of str
        Elements that were not looked for.
    """
    found = {f.element for f in identification.findings}
    by_element: dict[str, list[Limit]] = {}
    for limit in identification.limits:
        by_element.setdefault(limit.element, []).append(limit)
    seen: dict[str, list[Limit]] = {}
    out_of_reach: list[str] = []
    unasked: list[str] = []
    for element in sorted(set(HAZARDOUS) - found, key=HAZARDOUS.index):
        own = by_element.get(element, [])
        usable = [x for x in own if x.verdict is Verdict.NOT_DETECTED and x.detection_limit is not None]
        if usable:
            seen[element] = sorted(usable, key=lambda x: x.detection_limit or 0.0)
        else:
            (out_of_reach if own else unasked).append(element)
    return seen, out_of_reach, unasked


class _Writer:
    """Prints text as it is (no markup, no control characters) in what the console's encoding can show."""

    def __init__(self, console: Console) -> None:
        self.console = console
        self.fancy = console.encoding.lower().startswith("utf")

    def text(self, content: str, style: str = "") -> Text:
        from rich.text import Text

        flat = one_line(content, 2000)
        if not self.fancy:
            flat = flat.translate(_ASCII).encode("ascii", "backslashreplace").decode("ascii")
        return Text(flat, style=style)

    def stacked(self, lines: Sequence[str]) -> Text:
        """Several short lines in one cell."""
        from rich.text import Text

        return Text("\n").join([self.text(line) for line in lines])

    def line(self, content: str, style: str = "") -> None:
        self.console.print(self.text(content, style))

    def heading(self, content: str) -> None:
        self.console.print()
        self.line(content, style="bold")

    def mark(self, verdict: Verdict) -> Text:
        return self.text(wording.VERDICT_MARKS[verdict], "bold" if verdict is Verdict.IDENTIFIED else "")

    def table(self, header: bool = True) -> Table:
        from rich.box import Box
        from rich.table import Table

        dash = "─" if self.fancy else "-"
        box = Box(_ONE_RULE.format(dash), ascii=True)
        return Table(
            box=box,
            show_header=header,
            header_style="dim",
            show_edge=False,
            pad_edge=False,
            padding=(0, 1, 0, 0),
            collapse_padding=True,
        )

    def bullets(self, title: str, items: Sequence[str], style: str = "") -> None:
        """Print a heading and one paragraph an item, indented behind its dash."""
        if not items:
            return
        self.heading(title)
        table = self.table(header=False)
        table.add_column(width=1)
        table.add_column(overflow="fold")
        for item in items:
            table.add_row("-", self.text(item, style))
        self.console.print(table)


def _head(identification: Identification, writer: _Writer) -> None:
    title = identification.source.title
    name = wording.subject(identification)
    writer.line(name if not title or title == name else f"{name} – {title}", style="bold")
    writer.line(wording.source_line(identification))
    writer.line(wording.scale_line(identification))
    if identification.calibration.note:
        writer.line(identification.calibration.note)


def _identified(identification: Identification, writer: _Writer) -> None:
    sure = [f for f in identification.findings if f.verdict is Verdict.IDENTIFIED]
    if not sure:
        writer.heading("No element is identified.")
        return
    writer.heading("Identified: " + ", ".join(f.element for f in sure))
    _findings_table(sure, writer)
    asked = max((f.evidence.threshold for f in sure), default=0.0)
    writer.line(
        "Sigma: how many standard deviations the fit is worse without the element; "
        f"{asked:.1f} are asked for "
        f"({identification.false_identification_level:g} false elements expected a spectrum).",
        style="dim",
    )


def _findings_table(findings: Sequence[Finding], writer: _Writer) -> None:
    table = writer.table()
    table.add_column("Element", no_wrap=True, min_width=7)
    table.add_column("Lines", no_wrap=True)
    table.add_column("Net counts", no_wrap=True, justify="right")
    table.add_column("Sigma", no_wrap=True, justify="right")
    table.add_column("Why", overflow="fold")
    for finding in findings:
        table.add_row(
            writer.text(finding.element, "bold"),
            writer.stacked([s.series for s in finding.series]),
            writer.stacked([wording.with_sigma(s.area, s.sigma) for s in finding.series]),
            writer.text(wording.significance(finding.evidence.significance)),
            writer.text(" ".join(filter(None, [finding.reason, wording.rivals_line(finding)]))),
        )
    writer.console.print(table)


def _open_findings(identification: Identification, writer: _Writer) -> None:
    for verdict in _OPEN:
        some = [f for f in identification.findings if f.verdict is verdict]
        if some:
            meaning = {
                Verdict.TENTATIVE: "Tentative, evidence incomplete",
                Verdict.UNRESOLVED: "Unresolved, one of several rivals is there",
            }[verdict]
            writer.heading(f"{meaning}: " + ", ".join(f.element for f in some))
            _findings_table(some, writer)


def _instrument(identification: Identification, writer: _Writer) -> None:
    own = [f for f in identification.findings if f.verdict is Verdict.INSTRUMENT]
    writer.bullets("From the instrument: " + ", ".join(f.element for f in own), [f.reason for f in own])


def _other_peaks(identification: Identification, writer: _Writer) -> None:
    if identification.artefacts:
        writer.heading("Peaks that are no line of the sample")
        table = writer.table()
        table.add_column("keV", justify="right", no_wrap=True)
        table.add_column("Counts", justify="right", no_wrap=True)
        table.add_column("What", overflow="fold")
        for peak in identification.artefacts:
            what = f"{peak.kind}: {peak.of}" if peak.of else str(peak.kind)
            said = f"{what} ({peak.advice})" if peak.advice else what
            counts = wording.with_sigma(peak.area, peak.sigma)
            table.add_row(f"{peak.energy_kev:.2f}", writer.text(counts), writer.text(said))
        writer.console.print(table)
    writer.bullets(
        "Unexplained",
        [
            f"{p.energy_kev:.2f} keV: {wording.with_sigma(p.area, p.sigma)} counts that nothing here explains"
            for p in identification.unexplained
        ],
    )


def _not_seen(identification: Identification, writer: _Writer) -> None:
    seen, out_of_reach, unasked = hazardous_limits(identification)
    lines = []
    if seen:
        each = [f"{e} {x[0].series} {wording.two_digits(x[0].detection_limit)}" for e, x in seen.items()]
        lines.append("not detected; from so many counts on they would have shown: " + ", ".join(each))
    if out_of_reach:
        lines.append("out of reach of this measurement: " + ", ".join(out_of_reach))
    if unasked:
        lines.append("not looked for, no statement: " + ", ".join(unasked))
    others = {x.element for x in identification.limits if x.verdict is Verdict.NOT_DETECTED} - set(seen)
    if others:
        lines.append(
            f"{len(others)} further elements looked for and not detected; --json and --page list their limits"
        )
    writer.bullets("Harmful elements not found" if seen else "Harmful elements", lines)


def _shortened(name: str, width: int) -> str:
    # the end of a long path says more than its beginning
    return name if len(name) <= width else "…" + name[-(width - 1) :]
