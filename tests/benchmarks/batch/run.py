"""What a batch costs, each figure beside its limit, measured in the same run.

    python tests/benchmarks/batch/run.py [--points 200000] [--million] [--keep FOLDER]

Files are made on the fly in a temporary folder: Poisson spectra of 2048 channels with position-dependent
composition, drawn from the predicted columns. Every pair of figures is measured alternately, the best
of several counts, the page cache is warm.
"""

from __future__ import annotations

import argparse
import contextlib
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import h5py
import numpy as np
from numpy.typing import NDArray

sys.path.insert(0, str(Path(__file__).parents[2] / "batch"))

import simulated

from xrfid.batch import run
from xrfid.batch.engine import one_blas_thread
from xrfid.batch.plan import Plan
from xrfid.batch.stack import Place, Stack
from xrfid.batch.store import Part
from xrfid.batch.work import Threads, fit_blocks
from xrfid.report.document import to_json

CHANNELS, ROWS = 2048, 4000
IDENTIFYING = ("identifying", "looking at points that stand out", "fitting single points")


class Stages:
    """Seconds spent on each stage of a run, from its reports of progress."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self._last, self._doing = time.perf_counter(), "starting"

    def __call__(self, what: str, done: int, of: int) -> None:
        if what != self._doing:
            self.stop()
            self._doing = what

    def stop(self) -> None:
        now = time.perf_counter()
        self.seconds[self._doing] = self.seconds.get(self._doing, 0.0) + now - self._last
        self._last = now


def make_run(path: Path, n_points: int, **options: object) -> None:
    """Write a run, every spectrum drawn afresh; about 15 s for 200,000."""
    rng = np.random.default_rng(1)
    model = simulated.model(CHANNELS)
    mean, _ = model.expected(simulated.mixtures(100, ROWS // 100, rng), 1000.0)
    with h5py.File(path, "w") as file:
        data = simulated.create_run(file, (n_points, CHANNELS), np.uint16, **options)
        for first in range(0, n_points, len(mean)):
            rows = min(len(mean), n_points - first)
            data[first : first + rows] = rng.poisson(mean[:rows])


def whole(source: Path, out: Path) -> tuple[Stages, float]:
    """Run everything once; stages and seconds."""
    stages, begun = Stages(), time.perf_counter()
    run(source, out, document=to_json, instrument=simulated.INSTRUMENT, overwrite=True, progress=stages)
    stages.stop()
    return stages, time.perf_counter() - begun


def plan_of(source: Path, folder: Path) -> Plan:
    """Return the plan of a run, caught when its fit begins."""

    class Caught(Exception):
        pass

    def stop(what: str, done: int, of: int) -> None:
        if what == "fitting":
            raise Caught

    out = folder / "caught.h5"
    with contextlib.suppress(Caught):
        run(source, out, document=to_json, instrument=simulated.INSTRUMENT, overwrite=True, progress=stop)
    part = Part(out.with_name("caught.h5.part"))
    part.close()
    return part.plan


def limit_reading(source: Path, plan: Plan | None) -> float:
    """Seconds to read with h5py; with a plan also to cast and multiply, the matrix library using all cores."""
    if plan is not None:
        projection = plan.projection[:CHANNELS]
        squared = projection[:, : plan.n_series] ** 2
    begun = time.perf_counter()
    with h5py.File(source) as file:
        data = file["entry/data/counts"]
        buffer = np.empty((ROWS, CHANNELS), np.uint16)
        for first in range(0, data.shape[0], ROWS):
            rows = min(ROWS, data.shape[0] - first)
            data.read_direct(buffer, np.s_[first : first + rows], np.s_[:rows])
            if plan is not None:
                y = buffer[:rows].astype(np.float32)
                _ = y @ projection, y @ squared
    return time.perf_counter() - begun


def streaming(source: Path, folder: Path) -> float:
    """Seconds to fit and store every block, everything a batch does per point included."""
    from xrfid.batch.store import create_part

    with Stack(Place(str(source))) as stack, one_blas_thread():
        part = create_part(folder / "stream.part", {}, PLAN[0], stack.shape, stack.n_blocks)
        team = Threads(stack)
        begun = time.perf_counter()
        fit_blocks(stack, part, team, lambda what, done, of: None)
        seconds = time.perf_counter() - begun
        team.close()
        part.close()
    return seconds


PLAN: list[Plan] = []


def nnls_seconds(source: Path, plan: Plan, n: int = 300) -> float:
    """Seconds per spectrum of scipy's non-negative least squares with the same columns, channel by channel."""
    from scipy.optimize import nnls

    first, last = int(plan.starts[0]), int(plan.starts[-1])
    with h5py.File(source) as file:
        counts = file["entry/data/counts"][:n, first:last].astype(float)
    spread = np.array([plan.grouping.spread(c, CHANNELS)[first:last] for c in (*plan.columns, plan.mean)])
    weight = np.sqrt(np.maximum(spread[-1], 1e-6))
    columns = np.ascontiguousarray((spread[:-1] / weight).T)
    begun = time.perf_counter()
    for y in counts:
        nnls(columns, y / weight)
    return (time.perf_counter() - begun) / n


def alternately(times: int, *measured: Callable[[], float]) -> NDArray[np.float64]:
    """Best of several, taken in turn so that a busy machine disturbs all alike."""
    return np.min([[m() for m in measured] for _ in range(times)], axis=0)


def report(name: str, value: str, asked: str, kept: bool) -> bool:
    """Print one line; return whether the limit is kept."""
    print(f"{'kept  ' if kept else 'MISSED'}  {name:<58} {value:>22}   asked: {asked}", flush=True)
    return kept


def measure(folder: Path, n_points: int) -> bool:
    """Measure everything but the million."""
    plain, packed = folder / "plain.h5", folder / "gzip.h5"
    make_run(plain, n_points)
    make_run(packed, n_points, chunks=(256, CHANNELS), compression="gzip", compression_opts=4)
    PLAN[:] = [plan_of(plain, folder)]
    plan = PLAN[0]
    print(f"{n_points} x {CHANNELS} channels, {plan.columns.shape[0]} columns, {plan.n_series} of them series")
    limit, ours = alternately(4, lambda: limit_reading(plain, plan), lambda: streaming(plain, folder))
    read, zipped = alternately(5, lambda: limit_reading(packed, None), lambda: streaming(packed, folder))
    single = nnls_seconds(plain, plan)
    took = f"{ours / limit:.2f} ({ours:.2f} s, {n_points / ours:,.0f}/s)"
    good = report("plain: over read + cast + two matrix products", took, "<= 2.0, aim 1.3", ours <= 2.0 * limit)
    good &= report(
        "gzip-4: over a plain h5py read", f"{zipped / read:.2f} ({zipped:.2f} s)", "<= 1.15", zipped <= 1.15 * read
    )
    good &= report(
        "throughput over an nnls loop", f"{single * n_points / ours:.0f}", ">= 100", single * n_points >= 100 * ours
    )
    stages, seconds = whole(plain, folder / "whole.h5")
    thinking = sum(stages.seconds.get(s, 0.0) for s in ("starting", *IDENTIFYING))
    print("        " + ", ".join(f"{k} {v:.2f} s" for k, v in stages.seconds.items()))
    return good & report(
        "start-up and identification", f"{thinking:.1f} s of {seconds:.1f} s", "<= 6 s", thinking <= 6.0
    )


def million(folder: Path) -> bool:
    """Run a million spectra once here, once in a process of its own for its peak memory."""
    source = folder / "million.h5"
    make_run(source, 1_000_000)
    stages, seconds = whole(source, folder / "million-result.h5")
    print("        " + ", ".join(f"{k} {v:.2f} s" for k, v in stages.seconds.items()))
    print(f"        one million spectra in {seconds:.1f} s")
    peak = peak_memory_mb(source, folder / "again.h5")
    return report("peak memory, one million", f"{peak:.0f} MB", "<= 1024 MB", peak <= 1024.0)


def peak_memory_mb(source: Path, out: Path) -> float:
    """Peak resident memory of a run in a process of its own, MB."""
    import subprocess

    toml = out.with_suffix(".toml")
    toml.write_text(simulated.INSTRUMENT.to_toml())
    code = (
        "import re, sys; from xrfid.cli import main\n"
        "try: main()\n"
        "except SystemExit: pass\n"
        "print(re.search(r'VmHWM:\\s+(\\d+)', open('/proc/self/status').read())[1], file=sys.stderr)"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, "batch", str(source), "--out", str(out), "--instrument", str(toml)],
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    return float(done.stderr.split()[-1]) / 1024


def main() -> None:
    """Measure and say whether every limit is kept."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--points", type=int, default=200_000)
    parser.add_argument("--million", action="store_true", help="run one million spectra as well (4 GB of disk)")
    parser.add_argument("--keep", type=Path, help="folder for the files instead of a temporary one")
    given = parser.parse_args()
    with tempfile.TemporaryDirectory(dir=given.keep) as name:
        good = measure(Path(name), given.points)
        if given.million:
            good &= million(Path(name))
    raise SystemExit(0 if good else 1)


if __name__ == "__main__":
    main()
