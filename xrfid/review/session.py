"""The state of a review, without any picture: spectra on the desk, findings, decisions, what-ifs, saving."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from xrfid.errors import InputError, XrfidError
from xrfid.fit.threads import one_blas_thread
from xrfid.formats import read_bytes
from xrfid.identify.assemble import assemble
from xrfid.identify.pipeline import search
from xrfid.identify.result import Identification, Verdict
from xrfid.identify.settings import Settings
from xrfid.identify.work import Work
from xrfid.instrument import Instrument
from xrfid.output import atomic_output
from xrfid.review.decisions import Choice, Decision, in_force, now
from xrfid.review.facts import Facts, with_facts
from xrfid.review.journal import (
    Journal,
    checked_folder,
    checked_name,
    fingerprint,
    plain_name,
    read_journal,
    write_journal,
)
from xrfid.review.record import to_record
from xrfid.review.uploads import refuse_links
from xrfid.review.whatif import Trial, said, try_element
from xrfid.spectrum import Spectrum

MOST_CASES = 500


@dataclass(eq=False)
class Case:
    """One spectrum on the desk.

    Attributes
    ----------
    name : str
        What it is called on the desk; no two are called the same.
    spectrum : Spectrum
    journal : Journal
    work, identification : Work, Identification or None
        None until `Desk.identify` has run, or if it failed.
    failure : str
        Why there is no identification.
    """

    name: str
    spectrum: Spectrum
    journal: Journal
    work: Work | None = None
    identification: Identification | None = None
    failure: str = ""

    @property
    def decisions(self) -> dict[str, Decision]:
        """Decisions in force, by element."""
        return in_force(self.journal.history)

    def automatic(self, element: str) -> tuple[Verdict, float]:
        """Return the program's verdict on an element and its significance (0 if it is no finding)."""
        if self.identification is None:
            raise InputError(self.name, "is not identified", self.failure or "wait until it is")
        for finding in self.identification.findings:
            if finding.element == element:
                return finding.verdict, finding.evidence.significance
        limits = {x.verdict for x in self.identification.limits if x.element == element}
        return (Verdict.NOT_DETECTED if Verdict.NOT_DETECTED in limits else Verdict.OUT_OF_REACH), 0.0


class Desk:
    """All spectra under review, and the one folder that is written to.

    Parameters
    ----------
    folder : Path
        Where journals and saved results go.
    instrument, settings : Instrument, Settings, optional

    Raises
    ------
    OutputError
        If `folder` is none.
    """

    def __init__(self, folder: Path, instrument: Instrument | None = None, settings: Settings | None = None) -> None:
        self.folder = checked_folder(folder)
        self.instrument, self.settings = instrument or Instrument(), settings or Settings()
        self.cases: dict[str, Case] = {}
        self.drafts: dict[tuple[str, str], str] = {}

    def add(self, spectrum: Spectrum, instrument: Instrument | None = None) -> Case:
        """Put a spectrum on the desk, with what its journal remembers; one that lies there already is returned."""
        for case in self.cases.values():
            if case.spectrum.name == spectrum.name and fingerprint(case.spectrum) == fingerprint(spectrum):
                return case
        if len(self.cases) >= MOST_CASES:
            raise InputError(spectrum.name, f"the desk holds {MOST_CASES} spectra already", "begin another review")
        remembered = read_journal(self.folder, spectrum)
        case = Case(self._free_name(spectrum.name), spectrum, remembered or Journal(instrument or self.instrument))
        self.cases[case.name] = case
        return case

    def add_upload(self, name: str, data: bytes) -> list[Case]:
        """Put the spectra of a file that came from the browser on the desk; it stays in memory.

        Raises
        ------
        InputError
            If it cannot be read, or is an HDF5 file that refers to other files.
        """
        shown = Path(name.replace("\\", "/")).name or "upload"
        refuse_links(shown, data)
        return [self.add(s) for s in read_bytes(shown, data)]

    def _free_name(self, name: str) -> str:
        made, count = name, 1
        while made in self.cases:
            count += 1
            made = f"{name} ({count})"
        return made

    def identify(self, case: Case) -> None:
        """Identify a spectrum; what goes wrong is told by `case.failure`."""
        case.work, case.identification, case.failure = None, None, ""
        try:
            with one_blas_thread():
                work = search(case.spectrum, case.journal.instrument, self.settings)
                found = assemble(work)
        except XrfidError as error:
            case.failure = str(error)
            return
        case.work, case.identification = work, found

    def set_facts(self, case: Case, facts: Facts) -> None:
        """Change the instrument of a spectrum, which must be identified anew; decisions stay as they were taken."""
        changed = with_facts(case.journal.instrument, facts)
        self._journalled(case, replace(case.journal, instrument=changed))
        case.work, case.identification, case.failure = None, None, ""

    def decide(self, case: Case, element: str, choice: Choice, remark: str, by: str) -> Decision:
        """Accept or question what is said of an element, or take that back; the journal is written at once.

        Raises
        ------
        InputError
            If the decision is not signed, or questions without a reason.
        OutputError
            If the journal cannot be written; then nothing is decided.
        """
        verdict, significance = case.automatic(element)
        made = Decision(element, choice, remark.strip(), by.strip(), now(), str(verdict), significance)
        self._journalled(case, replace(case.journal, history=[*case.journal.history, made]))
        return made

    def what_if(self, case: Case, element: str, by: str = "") -> Trial:
        """Redo the fit without an element that is in it, or with one that is not; the journal keeps the answer."""
        if case.work is None or case.identification is None:
            raise InputError(case.name, "is not identified", case.failure or "wait until it is")
        trial = try_element(case.work, case.identification, element)
        question = "if it is there" if trial.added else "if it is not there"
        entry = {"element": element, "question": question, "answer": said(trial),
                 "deviance_change": trial.deviance_change, "by": by.strip(), "at": now()}  # fmt: skip
        self._journalled(case, replace(case.journal, trials=[*case.journal.trials, entry]))
        return trial

    def _journalled(self, case: Case, journal: Journal) -> None:
        """Write the journal first, then take it over: what is shown is on the disk."""
        write_journal(self.folder, case.spectrum, journal)
        case.journal = journal

    def suggested_name(self, case: Case) -> str:
        """Return a name for the saved files."""
        spectrum = case.spectrum
        stem = Path(spectrum.path).stem if spectrum.path else spectrum.title
        return plain_name(f"{stem}-{spectrum.dataset}" if spectrum.dataset else stem)

    def save(self, case: Case, name: str, by: str, *, replace_existing: bool = False) -> tuple[Path, Path]:
        """Write the reviewed result and the page.

        Parameters
        ----------
        name : str
            Plain file name without ending; no folders.
        replace_existing : bool
            Replace files of that name.

        Returns
        -------
        record, page : Path

        Raises
        ------
        InputError, OutputError
            If the name cannot be used, or a file exists or cannot be written.
        """
        from xrfid.report.page import render_page

        checked = checked_name(name)
        if case.identification is None:
            raise InputError(case.name, "is not identified", case.failure or "wait until it is")
        record, page = self.folder / f"{checked}.review.json", self.folder / f"{checked}.html"
        signed = replace(case.identification, provenance={**case.identification.provenance, **_signatures(case)})
        with (
            atomic_output(record, overwrite=replace_existing) as beside,
            atomic_output(page, overwrite=replace_existing) as page_beside,
        ):
            beside.write_text(to_record(case.spectrum, case.identification, case.journal, by), encoding="utf-8")
            page_beside.write_text(render_page(signed), encoding="utf-8")
        return record, page


def _signatures(case: Case) -> dict[str, Any]:
    """Return the decisions as lines of the page's provenance."""
    return {
        f"{d.element}, {d.choice}": f"{d.by}, {d.at}{': ' + d.remark if d.remark else ''}"
        for d in case.decisions.values()
    }
