"""The same blocks on a real cluster over loopback, one worker killed half-way: the identical result."""

from __future__ import annotations

import os
import signal
import threading
import time
from pathlib import Path

import h5py
import numpy as np
import pytest
import simulated

from xrfid.batch.cluster import Cluster, _result
from xrfid.batch.plan import Plan
from xrfid.batch.stack import Place, Stack
from xrfid.batch.store import Part, create_part
from xrfid.batch.work import Threads, fit_blocks
from xrfid.errors import InputError, XrfidError

distributed = pytest.importorskip("distributed")


@pytest.mark.cluster
@pytest.mark.filterwarnings("ignore::ResourceWarning")  # of the worker that is killed
def test_two_workers_one_of_which_dies(model: simulated.Model, plan: Plan, tmp_path: Path,
                                       monkeypatch: pytest.MonkeyPatch) -> None:  # fmt: skip
    rng = np.random.default_rng(2)
    mean, _ = model.expected(simulated.mixtures(1, 4000, rng), 500.0)
    counts = np.tile(rng.poisson(mean).astype(np.uint16), (30, 1))
    source = simulated.write_run(tmp_path / "run.h5", counts)
    with Stack(Place(str(source))) as stack:
        for name in ("threads", "cluster"):
            create_part(tmp_path / name, {}, plan, stack.shape, stack.n_blocks).close()
        local, part = Threads(stack, 2), Part(tmp_path / "threads")
        fit_blocks(stack, part, local, lambda what, done, of: None)
        local.close()
        part.close()
        with distributed.LocalCluster(
            n_workers=2, threads_per_worker=1, processes=True, host="127.0.0.1", dashboard_address=None
        ) as servers:
            team, part = Cluster(stack.place, servers.scheduler_address), Part(tmp_path / "cluster")
            victim = next(iter(servers.workers.values())).pid
            killed = threading.Event()

            def kill_half_way(what: str, done: int, of: int) -> None:
                if done > of // 4 and not killed.is_set():
                    os.kill(victim, signal.SIGKILL)
                    killed.set()
                    time.sleep(0.2)

            fit_blocks(stack, part, team, kill_half_way)
            assert killed.is_set()
            team.close()
            part.close()
    with h5py.File(tmp_path / "threads") as a, h5py.File(tmp_path / "cluster") as b:
        for name in ("series/Fe_K/area", "series/Fe_K/sigma", "series/Ti_K/area", "fit/reduced_chi2", "fit/status"):
            assert a["entry"][name][()].tobytes() == b["entry"][name][()].tobytes(), name
        assert b["entry/fit/done"][()].all()


@pytest.mark.cluster
def test_a_scheduler_that_does_not_answer_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("xrfid.batch.cluster._CONNECT_S", 0.5)
    with pytest.raises(InputError, match="does not answer"):
        Cluster(Place("run.h5"), "tcp://127.0.0.1:9")


def test_a_missing_extra_names_itself(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(__import__("sys").modules, "distributed", None)
    with pytest.raises(InputError, match=r"pip install 'xrfid\[cluster\]'"):
        Cluster(Place("run.h5"), "tcp://127.0.0.1:9")


def test_a_block_that_kills_every_worker_is_said() -> None:
    class Doomed:
        def result(self) -> None:
            raise distributed.KilledWorker("fit", None, 3)

    with pytest.raises(XrfidError, match="block 7 could not be fitted by the cluster"):
        _result(Doomed(), 7)
