"""What a visit shows: widgets over the state of a `Desk`; one `View` for every open tab."""

from __future__ import annotations

import asyncio
import weakref
from collections.abc import Callable
from typing import Any

from xrfid.errors import XrfidError
from xrfid.review import pieces
from xrfid.review.decisions import Choice
from xrfid.review.facts import ATMOSPHERES, MEANINGS, Facts, facts_of
from xrfid.review.mapview import MapView
from xrfid.review.plot import SpectrumPlot
from xrfid.review.scan import Scan
from xrfid.review.session import Case, Desk
from xrfid.review.whatif import Trial, elements_to_try, said
from xrfid.review.widgets import pn

_OTHERS = "another element …"
_KEEP, _REPLACE = "are kept: choose another name", "are replaced"
_WIDE = {"sizing_mode": "stretch_width", "margin": (2, 0)}


class Room:
    """Who is looking: the desk, a batch result if there is one, and all open tabs."""

    def __init__(self, desk: Desk, scan: Scan | None = None, reviewer: str = "") -> None:
        self.desk, self.scan, self.reviewer = desk, scan, reviewer
        self.current = next(iter(desk.cases), "")
        self._views: weakref.WeakSet[View] = weakref.WeakSet()

    def page(self) -> Any:
        """Return the page of a new visit."""
        view = View(self)
        self._views.add(view)
        return view.page()

    def accept(self, name: str, data: bytes) -> list[str]:
        """Open an upload; the newest spectrum comes into work."""
        names = [case.name for case in self.desk.add_upload(name, data)]
        self.current = names[0] if names else self.current
        return names

    def opened(self) -> None:
        """Tell every tab that there is something new."""
        for view in list(self._views):
            view.later(view.take_up)


class View:
    """One open tab."""

    def __init__(self, room: Room) -> None:
        self.room, self.desk = room, room.desk
        self.case: Case | None = None
        self.element = ""
        self.trial: Trial | None = None
        self.plot: SpectrumPlot | None = None
        self._document: Any = pn.state.curdoc
        self._css = [pieces.asset("parts.css")]
        self._build()
        self._maps = MapView(room.scan, self._css, self._open_region, self._safely) if room.scan is not None else None
        pn.state.onload(lambda: self.later(self.take_up))

    # ------------------------------------------------------------------ what there is
    def _build(self) -> None:
        """Make every widget; what they hold comes later."""
        html = {"stylesheets": self._css, "sizing_mode": "stretch_width", "margin": 0}
        self.status = pn.pane.HTML(pieces.status("Ready."), **html)
        self.head, self.proof = pn.pane.HTML("", **html), pn.pane.HTML("", **html)
        self.spectrum = pn.Column(pn.pane.HTML(""), sizing_mode="stretch_width", margin=0)
        self.choose = self._widget(pn.widgets.Select, "Spectrum", self._choose_case, key="case")
        self.findings = self._widget(pn.widgets.Select, "Findings", self._choose_finding, size=11, key="findings")
        self.others = self._widget(pn.widgets.Select, "Not among the findings", self._choose_other, key="others")
        self.by = self._widget(pn.widgets.TextInput, "Your name", self._sign, value=self.room.reviewer, max_length=80)
        self.remark = self._widget(pn.widgets.TextAreaInput, "Remark", None, key="remark", rows=3, max_length=2000)
        self.remark.param.watch(self._keep_draft, "value_input")
        self.replace = self._widget(
            pn.widgets.Select, "Files of this name that are there", None, options=[_KEEP, _REPLACE]
        )
        self.name = self._widget(pn.widgets.TextInput, "Name of the files, without ending", None)
        self.scale = self._widget(pn.widgets.RadioButtonGroup, "Scale of the counts", self._rescale,
                                  options=["log", "linear"], width=130, height=34, sizing_mode="fixed",
                                  margin=(2, 14, 2, 0))  # fmt: skip
        self.whatif = self._button("What if it is not there?", self._ask, "whatif")
        self.facts = {
            "anode": self._widget(pn.widgets.TextInput, "Tube anode", None),
            "voltage": self._widget(pn.widgets.TextInput, "Tube voltage (kV)", None),
            "filters": self._widget(pn.widgets.TextInput, "Tube filters (material, µm)", None),
            "atmosphere": self._widget(pn.widgets.Select, "Atmosphere", None,
                                       options={a or "not known": a for a in ATMOSPHERES}),
            "width": self._widget(pn.widgets.TextInput, "Detector width at 5.9 keV (eV)", None),
        }  # fmt: skip

    def _widget(
        self, kind: Any, name: str, changed: Callable[[Any], None] | None, key: str = "", **options: Any
    ) -> Any:
        made = kind(
            label=name, stylesheets=self._css, css_classes=[f"key-{key}"] if key else [], **{**_WIDE, **options}
        )
        if changed is not None:
            made.param.watch(self._safely(changed), "value")
        return made

    def _button(self, name: str, pressed: Callable[[Any], None], key: str, **options: Any) -> Any:
        made = pn.widgets.Button(label=name, stylesheets=self._css, css_classes=[f"key-{key}"], margin=(2, 6, 2, 0),
                                 **options)  # fmt: skip
        made.on_click(self._safely(pressed))
        return made

    def page(self) -> Any:
        """Return the page as a Panel template."""
        template = pn.Template(pieces.asset("review.html.j2"))
        for name, value in pieces.page_variables(self.room.scan).items():
            template.add_variable(name, value)
        roots = {
            "choose": self.choose, "status": self.status, "head": self.head, "spectrum": self.spectrum,
            "proof": self.proof, "findings": pn.Column(self.findings, self.others, **_WIDE), "view": self._view_bar(),
            "decide": self._decide_form(), "instrument": self._instrument_form(), "save": self._save_form(),
        }  # fmt: skip
        if self._maps is not None:
            roots |= {"map": self._maps.picture, "mapcontrols": self._maps.controls}
        for name, root in roots.items():
            template.add_panel(name, root)
        return template

    def _view_bar(self) -> Any:
        def moved(act: Callable[[SpectrumPlot], None]) -> Callable[[Any], None]:
            return lambda _: act(self.plot) if self.plot is not None else None

        return pn.FlexBox(
            self.scale,
            self._button("+", moved(lambda p: p.zoom(0.5)), "closer", description="Zoom in"),
            self._button("−", moved(lambda p: p.zoom(2.0)), "farther", description="Zoom out"),
            self._button("←", moved(lambda p: p.move(-0.4)), "lower", description="To lower energies"),
            self._button("→", moved(lambda p: p.move(0.4)), "higher", description="To higher energies"),
            self._button("whole", moved(lambda p: p.show(*p.whole)), "whole"),
            self._button("lines of this element", lambda _: self._show_lines(), "lines"),
            sizing_mode="stretch_width", margin=0,
        )  # fmt: skip

    def _decide_form(self) -> Any:
        buttons = pn.FlexBox(
            self._button("Accept", lambda _: self._decide(Choice.ACCEPTED), "accept"),
            self._button("Question", lambda _: self._decide(Choice.QUESTIONED), "question"),
            self._button("Take back", lambda _: self._decide(Choice.OPEN), "back"),
            sizing_mode="stretch_width", margin=0,
        )  # fmt: skip
        return pn.Column(self.whatif, self.remark, self.by, buttons, **_WIDE)

    def _instrument_form(self) -> Any:
        cells = [
            pn.Column(widget, pn.pane.HTML(f'<p class="meaning">{MEANINGS[key]}</p>', stylesheets=self._css,
                                           sizing_mode="stretch_width", margin=0),
                      sizing_mode="stretch_width", min_width=220, max_width=420, margin=(0, 18, 0, 0))
            for key, widget in self.facts.items()
        ]  # fmt: skip
        apply = self._button("Identify with these facts", self._apply_facts, "facts")
        return pn.Column(pn.FlexBox(*cells, sizing_mode="stretch_width"), apply, **_WIDE)

    def _save_form(self) -> Any:
        where = pn.pane.HTML(pieces.status(f"Goes to {self.desk.folder}: a record (JSON) and the page (HTML)."),
                             stylesheets=self._css, sizing_mode="stretch_width", margin=0)  # fmt: skip
        save = self._button("Save", lambda _: self._save(), "save")
        return pn.Column(where, self.name, self.replace, save, sizing_mode="stretch_width", max_width=520, margin=0)

    # ------------------------------------------------------------------ what happens
    def _safely(self, act: Callable[[Any], None]) -> Callable[[Any], None]:
        """Do it in the tab's own turn (Panel may call without the document's lock); say what went wrong."""

        def acted(event: Any) -> None:
            try:
                act(event)
            except XrfidError as error:
                self.say(str(error), bad=True)

        return lambda event: self.later(lambda: acted(event))

    def say(self, text: str, *, bad: bool = False) -> None:
        """Show one line of status."""
        self.status.object = pieces.status(text, "bad" if bad else "note")

    def later(self, act: Callable[[], Any]) -> None:
        """Do something in this tab's turn; harmless if the tab is closed."""
        if self._document is not None and self._document.session_context is not None:
            self._document.add_next_tick_callback(act)

    def take_up(self) -> None:
        """Show the list of spectra and the one in work."""
        names = list(self.desk.cases)
        self.choose.param.update(options=names, value=self.room.current if self.room.current in names else None)
        if self.case is None or self.case.name != self.choose.value:
            self._choose_case(None)

    def _choose_case(self, event: Any) -> None:
        """Take the chosen spectrum into work; an event that only tells what is so already changes nothing."""
        chosen = self.desk.cases.get(self.choose.value or "")
        if event is not None and chosen is self.case:
            return
        self.case = chosen
        if self.case is None:
            self.head.object = pieces.head(None)
            return
        self.room.current = self.case.name
        self._identify(self._identify_if_new)

    def _identify_if_new(self, case: Case) -> None:
        if case.identification is None and not case.failure:
            self.desk.identify(case)

    def _identify(self, work: Callable[[Case], None]) -> None:
        """Identify in a thread, so that the page stays alive, then show what came out."""
        case = self.case
        assert case is not None
        self.say(f"Identifying {case.name} …")
        self.head.object = pieces.head(case)

        async def run() -> None:
            try:
                await asyncio.get_running_loop().run_in_executor(None, work, case)
            except XrfidError as error:
                self.say(str(error), bad=True)
                return
            if self.case is case:
                self._show_case()

        self._document.add_timeout_callback(run, 40)

    def _show_case(self) -> None:
        """Show everything of the spectrum in work."""
        case = self.case
        assert case is not None
        self.head.object, self.plot, self.trial = pieces.head(case), None, None
        shown = facts_of(case.journal.instrument)
        for key, value in zip(self.facts, (shown.anode, shown.voltage_kv, shown.filters, shown.atmosphere,
                                           shown.fwhm_ev), strict=True):  # fmt: skip
            self.facts[key].value = value
        self.name.value = self.desk.suggested_name(case)
        if case.identification is None:
            self.spectrum[:] = [pn.pane.HTML("")]
            self.findings.options, self.others.options, self.proof.object = {}, [], ""
            self.say(case.failure, bad=True)
            return
        self.plot = SpectrumPlot(case.identification)
        self.plot.scale(self.scale.value)
        self.spectrum[:] = [pn.pane.Bokeh(self.plot.layout, sizing_mode="stretch_width", margin=0)]
        assert case.work is not None
        named = {f.element for f in case.identification.findings}
        self.others.options = [_OTHERS, *(e for e in elements_to_try(case.work) if e not in named)]
        first = next(iter(case.identification.findings), None)
        self._show_element(self.element if self.element in named else first.element if first else "")
        self.say(f"{len(case.identification.identified)} elements identified; {len(case.decisions)} decided.")

    def _show_element(self, element: str, trial: Trial | None = None) -> None:
        """Show what speaks for an element, and the answer to a what-if if there is one."""
        case = self.case
        if case is None or case.identification is None or self.plot is None:
            return
        fresh = element != self.element
        self.element, self.trial = element, trial
        lines = pieces.choices(case, element)
        self.findings.param.update(options=lines, value=element, size=min(max(len(lines), 2), 11))
        self.others.value = element if element in self.others.options else _OTHERS
        self.plot.overlay(None if trial is None else trial.model)
        self.proof.object = pieces.proof(case, element, trial) if element else ""
        inside = case.work is not None and any(k.element == element for k in case.work.fit.keys)
        self.whatif.label = f"What if {element} is {'not ' if inside else ''}there?"
        self.whatif.disabled = not element
        if fresh:
            self._set_remark(self.desk.drafts.get((case.name, element), ""))

    def _choose_finding(self, event: Any) -> None:
        if event.new and event.new != self.element:
            self._show_element(event.new)

    def _choose_other(self, event: Any) -> None:
        if event.new and event.new not in (_OTHERS, self.element):
            self._show_element(event.new)

    def _ask(self, _: Any) -> None:
        if self.case is not None and self.element:
            trial = self.desk.what_if(self.case, self.element, self.by.value)
            self._show_element(self.element, trial)
            self.say(said(trial))

    def _show_lines(self) -> None:
        if self.plot is not None and self.case is not None and self.element and self.case.identification is not None:
            shown = self.trial.shown if self.trial is not None else self.case.identification
            energies = [x[2] for x in shown.curves.lines if x[0].split()[0] == self.element and x[3] > 0.02]
            if energies:
                self.plot.show(min(energies) - 0.5, max(energies) + 0.5)

    def _rescale(self, event: Any) -> None:
        if self.plot is not None:
            self.plot.scale(event.new)

    def _sign(self, event: Any) -> None:
        self.room.reviewer = event.new

    def _keep_draft(self, event: Any) -> None:
        if self.case is not None and self.element:
            self.desk.drafts[self.case.name, self.element] = event.new

    def _set_remark(self, text: str) -> None:
        self.remark.param.update(value=text, value_input=text)

    def _decide(self, choice: Choice) -> None:
        if self.case is None or not self.element:
            return
        self.desk.decide(self.case, self.element, choice, self.remark.value_input, self.by.value)
        self.desk.drafts.pop((self.case.name, self.element), None)
        self._set_remark("")
        self._show_element(self.element, self.trial)
        self.say(f"{self.element} {choice}; kept in the journal.")

    def _apply_facts(self, _: Any) -> None:
        if self.case is not None:
            facts = Facts(
                *(str(self.facts[k].value or "") for k in ("anode", "voltage", "filters", "atmosphere", "width"))
            )
            self.desk.set_facts(self.case, facts)
            self._identify(lambda case: self.desk.identify(case))

    def _save(self) -> None:
        if self.case is not None:
            record, page = self.desk.save(self.case, self.name.value, self.by.value,
                                          replace_existing=self.replace.value == _REPLACE)  # fmt: skip
            self.say(f"Saved {record.name} and {page.name}.")

    def _open_region(self, spectrum: Any) -> None:
        """Put a region's summed spectrum on the desk and identify it."""
        assert self.room.scan is not None
        case = self.desk.add(spectrum, self.room.scan.instrument)
        self.room.current = case.name
        self.take_up()
