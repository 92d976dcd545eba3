"""A whole batch on one screen: sample, plan, fit, second look, single refits, result."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from xrfid.batch.discover import (
    Hidden,
    Judgement,
    hidden_elements,
    restricted,
    sample_sum,
    sampled_blocks,
    sum_spectrum,
)
from xrfid.batch.engine import one_blas_thread
from xrfid.batch.plan import Plan, make_plan
from xrfid.batch.refit import Refits, refit
from xrfid.batch.result import Finished, Strongest, point_status_counts, write_result
from xrfid.batch.stack import Place, Stack
from xrfid.batch.store import DRIFT_FIELDS, Part, create_part
from xrfid.batch.work import Progress, Threads, Workers, fit_blocks
from xrfid.errors import InputError, OutputError
from xrfid.identify.assemble import assemble, provenance
from xrfid.identify.pipeline import search
from xrfid.identify.result import Identification
from xrfid.identify.settings import Settings
from xrfid.identify.work import Work
from xrfid.instrument import Instrument
from xrfid.response.series import SeriesKey

MOST_REFITS = 100
_SAMPLED, _FINAL = "sampled", "final"


@dataclass(frozen=True, eq=False)
class Summary:
    """What a batch found.

    Attributes
    ----------
    identification : Identification
        Of the summed spectrum.
    series : tuple of str
        Series with maps in the result.
    hidden : tuple of Hidden
        Elements that the sum does not show.
    strongest : tuple of Strongest
        Where each series is strongest.
    bad_points : dict
        Points without a result, counted by what is the matter.
    badly_fitted : int
        Points that deviate from their fit; the worst of them were fitted singly.
    drift_ev : float
        Largest credible shift of the energy scale along the run, at 6 keV, eV.
    resumed_at : int
        Blocks that an earlier call had done.
    """

    identification: Identification
    series: tuple[str, ...]
    hidden: tuple[Hidden, ...]
    strongest: tuple[Strongest, ...]
    bad_points: dict[str, int]
    badly_fitted: int
    drift_ev: float
    resumed_at: int


def _silent(what: str, done: int, of: int) -> None:
    """Report no progress."""


def run(
    source: str | Path,
    out: str | Path,
    *,
    document: Callable[[Identification], str],
    instrument: Instrument | None = None,
    dataset: str | None = None,
    detectors: tuple[int, ...] | str = (),
    elements: tuple[str, ...] = (),
    settings: Settings | None = None,
    workers: int | None = None,
    scheduler: str | None = None,
    compress: bool = False,
    overwrite: bool = False,
    progress: Progress = _silent,
) -> Summary:
    """Fit every spectrum of a run and write the result file.

    A run that was interrupted goes on where it stood when the same call is made again.

    Parameters
    ----------
    source : str or Path
        HDF5 file.
    out : str or Path
        Result file; while it is unfinished, ``<out>.part`` lies beside it.
    document : callable
        Turns the identification of the sum into its JSON document (`xrfid.report.document.to_json`).
    instrument, settings : Instrument, Settings, optional
        For the identifications.
    dataset : str, optional
        HDF5 path of the ``(..., channels)`` counts; ``"a,b"`` sums several.
    detectors : tuple of int, or "all", optional
        Indices on the first axis to be summed, if that axis counts detectors.
    elements : tuple of str
        Fit exactly these; found if not given.
    workers : int, optional
        Threads; all cores if not given.
    scheduler : str, optional
        Address of a Dask scheduler whose workers see the same files.
    compress : bool
    overwrite : bool
        Replace a result that exists, or an unfinished one of another input or other settings.
    progress : callable, optional
        Told what is being done, how much of it, and of how much.

    Raises
    ------
    InputError, OutputError
        If the input makes no sense, or the result exists, cannot be written, or is of something else.
    Untrustworthy
        If the summed spectrum does not allow a trustworthy answer.
    """
    place = Place(os.path.abspath(source), dataset, detectors)
    with Stack(place) as stack, one_blas_thread():
        job = _Job(stack, Path(out), instrument or Instrument(), settings or Settings(), elements, progress)
        job.check(overwrite)
        with _workers(stack, workers, scheduler) as team:
            return job.run(team, document, compress, overwrite)


@contextmanager
def _workers(stack: Stack, n: int | None, scheduler: str | None) -> Iterator[Workers]:
    if scheduler is not None:
        from xrfid.batch.cluster import Cluster

        team: Any = Cluster(stack.place, scheduler)
    else:
        team = Threads(stack, n)
    try:
        yield team
    finally:
        team.close()


class _Job:
    """One batch: what it works on, and the steps in order."""

    def __init__(
        self, stack: Stack, out: Path, instrument: Instrument, settings: Settings, elements: tuple[str, ...],
        progress: Progress,
    ) -> None:  # fmt: skip
        self.stack, self.out, self.progress = stack, out, progress
        self.instrument = instrument
        self.settings = restricted(settings, elements)
        self.looks_further = not elements
        self._searched: Work | None = None
        self.part_path = out.with_name(out.name + ".part")
        self.header = {
            "input": stack.fingerprint(),
            "settings": {**asdict(settings), "elements": list(elements)},
            "instrument": instrument.to_toml(),
            "program": provenance(),
        }

    def check(self, overwrite: bool) -> None:
        """Refuse before any work what could not be written."""
        if self.out.exists() and Path(self.stack.place.path).samefile(self.out):
            raise InputError(str(self.out), "is the input as well as the output", "choose another name")
        if self.out.exists() and not overwrite:
            raise OutputError(str(self.out), "exists", "give --overwrite to replace it, or another name")
        if not self.out.parent.is_dir():
            raise OutputError(str(self.out), "its folder does not exist", "make the folder first")

    def run(self, team: Workers, document: Callable[[Identification], str], compress: bool, overwrite: bool) -> Summary:
        """Do everything that is not done yet."""
        part = self._begun(overwrite) or self._begin()
        resumed_at = part.sums.count
        try:
            fit_blocks(self.stack, part, team, self.progress)
            work = self._search(part.sums.summed)
            if part.header["stage"] == _SAMPLED:
                part = self._second_look(part, work)
                fit_blocks(self.stack, part, team, self.progress)
            summary = self._finish(part, work, document, compress, overwrite, resumed_at)
        finally:
            part.close()
        self.part_path.unlink()
        return summary

    def _begun(self, overwrite: bool) -> Part | None:
        """Return the unfinished result of an earlier call, if it is of the same input and settings."""
        if not self.part_path.exists():
            return None
        part = Part(self.part_path)
        wanted = _plain(self.header)
        other = [key for key in wanted if part.header.get(key) != wanted[key]]
        if not other:
            return part
        part.close()
        if overwrite:
            return None
        raise OutputError(str(self.part_path), f"is the unfinished result of another {other[0]}",
                          "give --overwrite to begin anew, or another name for the result")  # fmt: skip

    def _begin(self) -> Part:
        """Look at a sample, decide what to fit, and lay out the result."""
        blocks = sampled_blocks(self.stack)
        summed, n = sample_sum(self.stack, blocks, self.progress)
        if not summed.any():  # dark where we looked
            summed, n = sample_sum(self.stack, np.arange(self.stack.n_blocks), self.progress)
        if not summed.any():
            source = f"{self.stack.place.path}:{self.stack.names[0]}"
            raise InputError(source, "holds no counts that can be used", "is this the run?")
        work = self._search(summed)
        stage = _SAMPLED if self.looks_further else _FINAL
        return self._lay_out(make_plan(work, n), stage, ())

    def _lay_out(self, plan: Plan, stage: str, hidden: tuple[Hidden, ...]) -> Part:
        header = _plain({**self.header, "stage": stage, "hidden": [_hidden_record(h) for h in hidden]})
        return create_part(self.part_path, header, plan, self.stack.shape, self.stack.n_blocks)

    def _search(self, summed: NDArray[np.float64]) -> Work:
        """Search a sum of points; that of a small run is the same before and after, and searched once."""
        if self._searched is None or not np.array_equal(self._searched.spectrum.counts, summed):
            self.progress("identifying", 0, 1)
            self._searched = search(sum_spectrum(self.stack, summed, "sum of points"), self.instrument, self.settings)
        return self._searched

    def _second_look(self, part: Part, work: Work) -> Part:
        """Search the whole sum and the points that stand out; begin again if they show more."""
        judged = self._judgement(part)
        known = {k for k in work.ingredients.columns.keys if str(k) in part.plan.names}
        fitted = frozenset(known | set(work.fit.keys))
        hidden = hidden_elements(
            self.stack, judged, part.sums.holder, work, fitted, self.instrument, self.settings, self.progress
        )
        extra = tuple(k for h in hidden for k in h.series)
        if set(work.fit.keys) <= known and not extra:
            part.header["stage"] = _FINAL
            return part
        kept = tuple(k for k in known if k not in work.fit.areas)
        good = int((judged.status == 0).sum())
        plan = make_plan(work, good, (*sorted(kept, key=str), *extra))
        part.close()
        return self._lay_out(plan, _FINAL, tuple(hidden))

    def _judgement(self, part: Part) -> Judgement:
        with h5py.File(self.part_path, "r", locking=False) as file:
            fit = file["entry/fit"]
            names = ("reduced_chi2", "largest_residual", "largest_residual_energy", "status")
            chi2, excess, energy, status = (fit[name][()].reshape(-1) for name in names)
        return Judgement(chi2, excess, energy, status, part.plan.bands[1] - part.plan.bands[0])

    def _finish(self, part: Part, work: Work, document: Callable[[Identification], str], compress: bool,
                overwrite: bool, resumed_at: int) -> Summary:  # fmt: skip
        """Refit the worst points singly, write the result, say what was found."""
        judged = self._judgement(part)
        refits = self._refit(part, work, judged)
        identification = assemble(work)
        hidden = tuple(_hidden_from(record) for record in part.header["hidden"])
        with h5py.File(self.part_path, "r", locking=False) as file:
            drift = file["entry/fit/drift"][()]
        bad = point_status_counts(judged.status)
        self.progress("writing", 0, 1)
        finished = Finished(
            self.stack.shape, part.plan.names, part.sums, work.setting.scale, document(identification),
            refits, hidden, {**self.header, "points_without_result": bad, "input_path": self.stack.place.path,
             "truncated": int(self.stack.truncated)},
        )  # fmt: skip
        strongest = write_result(self.part_path, self.out, finished, compress=compress, overwrite=overwrite)
        return Summary(identification, part.plan.names, hidden, strongest, bad, refits.listed,
                       _largest_drift_ev(drift), resumed_at)  # fmt: skip

    def _refit(self, part: Part, work: Work, judged: Judgement) -> Refits:
        bad = judged.badly_fitted()
        points = np.sort(bad[:MOST_REFITS])
        self.progress("fitting single points", 0, max(points.size, 1))
        by_name = {str(k): k for k in work.ingredients.columns.keys}
        keys: tuple[SeriesKey, ...] = tuple(by_name[name] for name in part.plan.names if name in by_name)
        if len(keys) < len(part.plan.names):  # a series beyond this search's range
            points = points[:0]
        return refit(work, keys, points, self.stack.spectra(points), judged.chi2[points], bad.size)


def _plain(header: dict[str, Any]) -> dict[str, Any]:
    """Return the header as it reads back from JSON."""
    import json

    read: dict[str, Any] = json.loads(json.dumps(header))
    return read


def _hidden_record(hidden: Hidden) -> dict[str, Any]:
    series = [[k.z, k.series] for k in hidden.series]
    return {"element": hidden.element, "series": series, "where": hidden.where, "points": list(hidden.points)}


def _hidden_from(record: dict[str, Any]) -> Hidden:
    series = tuple(SeriesKey(z, s) for z, s in record["series"])
    return Hidden(record["element"], series, record["where"], tuple(record["points"]))


def _largest_drift_ev(drift: Any) -> float:
    """Largest shift at 6 keV over blocks in which it is known to better than 5 eV."""
    offset, sigma = (
        drift[:, DRIFT_FIELDS.index("offset_kev")],
        drift[:, DRIFT_FIELDS.index("offset_sigma_kev")],
    )
    known = offset[sigma < 0.005]
    return float(1e3 * known[np.argmax(np.abs(known))]) if known.size else 0.0
