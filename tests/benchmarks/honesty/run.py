"""Generate a panel, have it identified, score it.

``python -m tests.benchmarks.honesty.run OUT --n 60 --seed 1 [--plot honesty.png]``

Writes every spectrum with instrument file and truth, and `outcomes.json`, into OUT; ``--score-only``
reads that file again without identifying anything.
"""

from __future__ import annotations

import os

# Several processes share the machine, and small matrices gain nothing from threads; must come before numpy
os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import argparse
import json
import multiprocessing
import sys
import time
from collections.abc import Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from .generator import Case, make_case, unit_response, with_trace, write_case
from .score import Area, Outcome, Trial, mistakes, summarise, table

DEFAULT_LEVEL = 0.01
_LEVELS = (0.001, 0.1)
_NO_TRIAL = {"He", "Ne", "Ar", "Kr", "Xe", "Tc", "Pm"}
"""Noble gases and unstable elements, for which more than the threshold is asked on purpose."""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the benchmark; returns the exit status."""
    asked = _parser().parse_args(arguments)
    folder: Path = asked.out
    folder.mkdir(parents=True, exist_ok=True)
    kept = folder / "outcomes.json"
    if not asked.score_only:
        outcomes = run(
            folder, asked.seed, range(asked.start, asked.start + asked.n), asked.levels, asked.trials, asked.jobs
        )
        kept.write_text(json.dumps([o.to_dict() for o in outcomes], indent=1), encoding="utf-8")
    outcomes = [Outcome.from_dict(d) for d in json.loads(kept.read_text(encoding="utf-8"))]
    scores = summarise(outcomes, DEFAULT_LEVEL)
    print(table(scores, outcomes))
    print(mistakes(outcomes), end="")
    if asked.plot:
        from .figure import save

        save(asked.plot, scores, outcomes)
    return 0


def _parser() -> argparse.ArgumentParser:
    p = argparse.ArgumentParser(prog="python -m tests.benchmarks.honesty.run", description=__doc__.split("\n")[0])
    p.add_argument("out", type=Path, help="folder for spectra and outcomes")
    p.add_argument("--n", type=int, default=60, help="number of spectra")
    p.add_argument("--start", type=int, default=0, help="first case")
    p.add_argument("--seed", type=int, default=1)
    p.add_argument("--jobs", type=int, default=2, help="processes")
    p.add_argument("--levels", type=float, nargs="*", default=list(_LEVELS), help="further false-identification levels")
    p.add_argument("--trials", type=int, default=1, help="elements added at the detection limit, per spectrum")
    p.add_argument("--plot", type=Path, help="save the figure here")
    p.add_argument("--score-only", action="store_true", help="score what an earlier run left in OUT")
    return p


def run(folder: Path, seed: int, indices: range, levels: Sequence[float], trials: int, jobs: int) -> list[Outcome]:
    """Generate and identify the cases `indices` of panel `seed` in `jobs` processes."""
    tasks = [(folder, seed, i, tuple(levels), trials) for i in indices]
    if jobs == 1:
        return [_progress(n, len(tasks), examine(*t)) for n, t in enumerate(tasks, 1)]
    with ProcessPoolExecutor(jobs, mp_context=multiprocessing.get_context("spawn")) as pool:
        futures = [pool.submit(examine, *t) for t in tasks]
        return [_progress(n, len(tasks), f.result()) for n, f in enumerate(futures, 1)]


def _progress(n: int, of: int, outcome: Outcome) -> Outcome:
    print(f"\r{n}/{of} {outcome.material:<40.40s}", end="" if n < of else "\n", file=sys.stderr, flush=True)
    return outcome


def examine(folder: Path, seed: int, index: int, levels: tuple[float, ...], trials: int) -> Outcome:
    """Generate one case and have it identified at all levels, and again with elements at their limits."""
    import xrfid
    from xrfid.errors import XrfidError

    case = make_case(seed, index)
    path = write_case(case, folder)
    blank = Outcome(
        index, case.material, case.kind, case.setup.kind, case.setup.tube.anode, float(case.counts.sum()), 0.0,
        {e: max(s["z"] for s in d.values()) for e, d in case.truth.items()}, {"default": []},
    )  # fmt: skip
    spectrum, instrument = xrfid.read(path), xrfid.Instrument.load(path.with_suffix(".toml"))
    began = time.perf_counter()
    try:
        result = xrfid.identify(spectrum, instrument=instrument)
    except XrfidError as error:
        return replace(blank, failure=str(error), seconds=time.perf_counter() - began)
    seconds = time.perf_counter() - began
    identified = {"default": list(result.identified)}
    for level in levels:
        settings = xrfid.Settings(false_identification_level=level)
        identified[f"{level:g}"] = list(xrfid.identify(spectrum, instrument, settings).identified)
    tried = _trials(case, result, instrument, folder, np.random.default_rng([seed, index, 7]), trials)
    return replace(blank, seconds=seconds, identified=identified, areas=_areas(case, result), trials=tried)


def _areas(case: Case, result: Any) -> list[Area]:
    """Stated areas of identified elements beside the true ones."""
    found = []
    for finding in result.findings:
        if str(finding.verdict) != "identified":
            continue
        for s in finding.series:
            true = case.truth.get(finding.element, {}).get(s.series)
            if true is not None:
                found.append(Area(finding.element, s.series, s.area, s.sigma, true["area"], true["z"]))
    return found


def _trials(case: Case, result: Any, instrument: Any, folder: Path, rng: np.random.Generator, n: int) -> list[Trial]:
    """Measure again with one absent element added exactly at its stated limit, `n` times.

    The question asked of the repetition is the one that a detection limit is about: not which of
    ninety elements are there, but whether this one is.
    """
    import xrfid

    limits: dict[str, dict[str, Any]] = {}
    for limit in result.limits:
        if limit.detection_limit and str(limit.verdict) == "not detected":
            limits.setdefault(limit.element, {})[limit.series] = limit
    absent = sorted(set(limits) - case.present - _NO_TRIAL - {case.setup.tube.anode})
    done: list[Trial] = []
    for element in map(str, rng.permutation(absent)):
        if len(done) >= n:
            break
        series = _most_sensitive(case, element, limits[element])
        if series is None:
            continue
        stated = limits[element][series]
        counts = with_trace(case, element, series, stated.detection_limit, rng)
        path = write_case(case, folder, counts, f"case-{case.index:03d}-with-{element}")
        again = xrfid.identify(xrfid.read(path), instrument, xrfid.Settings(present=(element,)))
        stated_then = (s for f in again.findings if f.element == element for s in f.series if s.series == series)
        area = next((s.area for s in stated_then), 0.0)
        done.append(Trial(element, series, stated.detection_limit, stated.decision_threshold, area))
    return done


def _most_sensitive(case: Case, element: str, limits: dict[str, Any]) -> str | None:
    """The series whose limit is the smallest amount of the element; None if the case cannot show it."""
    parts = unit_response(case, element)
    full = {s: parts[f"{element} {s}"].full for s in limits if f"{element} {s}" in parts}
    amount = {s: limits[s].detection_limit / n for s, n in full.items() if n > 0}
    return min(amount, key=amount.__getitem__) if amount else None


if __name__ == "__main__":
    sys.exit(main())
