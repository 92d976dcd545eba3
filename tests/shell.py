"""The command line as a person meets it: arguments in; exit status, output and complaints out."""

from __future__ import annotations

import io
import os
import subprocess
import sys
from contextlib import redirect_stderr, redirect_stdout
from pathlib import Path
from typing import NamedTuple
from unittest import mock

ROOT = Path(__file__).parents[1]
SAMPLES = ROOT / "sample_spectra"


class Said(NamedTuple):
    """What a command left behind."""

    status: int
    out: str
    err: str


def xrfid(*arguments: object) -> Said:
    """Run ``xrfid ARGUMENTS`` in this process, its own handling of errors included."""
    from xrfid.cli import main

    out, err, status = io.StringIO(), io.StringIO(), 0
    with mock.patch.object(sys, "argv", ["xrfid", *map(str, arguments)]), redirect_stdout(out), redirect_stderr(err):
        try:
            main()
        except SystemExit as end:
            status = end.code if isinstance(end.code, int) else 0
    return Said(status, out.getvalue(), err.getvalue())


def start_xrfid(*arguments: object, **keywords: object) -> subprocess.Popen[str]:
    """Start ``xrfid ARGUMENTS`` as a process of its own."""
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "OPENBLAS_NUM_THREADS": "1"}
    return subprocess.Popen(
        [sys.executable, "-m", "xrfid", *map(str, arguments)],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env=environment, **keywords,
    )  # fmt: skip


def iron(path: Path) -> Path:
    """Write a small, quickly identified spectrum of iron: 512 channels of 40 eV, two columns."""
    import numpy as np

    energy = 0.04 * np.arange(512)
    lines = ((6.40, 1200.0), (7.06, 160.0))
    mean = 3.0 + sum(h * np.exp(-0.5 * ((energy - e) / 0.06) ** 2) for e, h in lines)
    counts = np.random.default_rng(3).poisson(mean)
    rows = [f"{e:.2f} {c}" for e, c in zip(energy, counts, strict=True)]
    path.write_text("\n".join(["# live time (s): 30", "# energy (keV) counts", *rows, ""]), encoding="utf-8")
    return path


def refused(said: Said, status: int = 3) -> str:
    """Check that a command was refused with one clear line and nothing else; return that line."""
    assert said.status == status, said
    lines = [line for line in said.err.splitlines() if line]
    assert len(lines) == 1, said.err
    assert lines[0].startswith("xrfid: ")
    assert "Traceback" not in said.err
    assert "internal error" not in said.err
    assert not said.out.strip()
    return lines[0]
