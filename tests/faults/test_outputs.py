"""Outputs are whole or absent, and nothing is replaced unless asked for."""

from __future__ import annotations

import os
import resource
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest
from shell import ROOT, SAMPLES, iron, refused, start_xrfid, xrfid

from xrfid.errors import OutputError
from xrfid.output import atomic_output

BENCH = SAMPLES / "workshop.toml"
OUTPUTS = {"--json": "out.json", "--page": "out.html", "--figure": "out.png"}


@pytest.fixture(scope="module")
def sample(tmp_path_factory) -> Path:
    """A quickly identified spectrum, in a folder of its own."""
    return iron(tmp_path_factory.mktemp("sample") / "iron.txt")


@pytest.mark.parametrize(("option", "name"), OUTPUTS.items())
def test_what_exists_stays(sample, tmp_path, option, name):
    path = tmp_path / name
    path.write_text("precious")
    line = refused(xrfid("identify", sample, option, path))
    assert "exists; give --overwrite to replace it" in line
    assert path.read_text() == "precious"


def test_overwrite_replaces(sample, tmp_path):
    path = tmp_path / "out.json"
    path.write_text("old")
    assert xrfid("identify", sample, "--json", path, "--overwrite").status == 0
    assert path.read_text().startswith("{")


@pytest.mark.parametrize("option", OUTPUTS)
def test_an_input_is_never_an_output(sample, tmp_path, option):
    path = tmp_path / "iron.txt"
    path.write_bytes(sample.read_bytes())
    line = refused(xrfid("identify", path, option, path, "--overwrite"))
    assert "is an input as well as an output" in line
    assert path.read_bytes() == sample.read_bytes()


@pytest.mark.parametrize(("option", "name"), OUTPUTS.items())
def test_a_folder_that_does_not_exist(sample, tmp_path, option, name):
    line = refused_after_work(xrfid("identify", sample, option, tmp_path / "nowhere" / name))
    assert "no such file or directory" in line
    assert not list(tmp_path.iterdir())


def test_a_folder_where_a_file_is_meant(sample, tmp_path):
    line = refused_after_work(xrfid("identify", sample, "--json", tmp_path, "--overwrite"))
    assert "is a folder" in line


def test_a_file_where_a_folder_is_meant(sample, tmp_path):
    (tmp_path / "out").write_text("precious")
    line = refused(xrfid("identify", sample, SAMPLES / "coupon.msa", "--json", tmp_path / "out"))
    assert "several spectra need a folder" in line


def test_a_figure_of_no_known_kind(sample, tmp_path):
    line = refused_after_work(xrfid("identify", sample, "--figure", tmp_path / "out.bmp"))
    assert ".bmp" in line
    assert not list(tmp_path.iterdir())


def refused_after_work(said) -> str:
    """Like `refused`, for what shows only when the result is written."""
    assert said.status == 3, said
    lines = said.err.splitlines()
    assert len(lines) == 1
    assert "internal error" not in lines[0]
    return lines[0]


@pytest.mark.parametrize("rights", [0o555, 0o700])
def test_read_only_folder(tmp_path, rights):
    """A process that may not write there (or not even look) says so and leaves nothing."""
    folder = tmp_path / "closed"
    folder.mkdir()
    code = (
        "import os, sys; sys.path.insert(0, sys.argv[1])\n"
        "from xrfid.output import atomic_output\nfrom xrfid.errors import OutputError\n"
        "os.chmod(os.path.dirname(sys.argv[2]), int(sys.argv[3]) if os.geteuid() == 0 else 0o555)\n"
        "if os.geteuid() == 0: os.setuid(65534)\n"
        "try:\n    with atomic_output(sys.argv[2]): pass\nexcept OutputError as e: print(e)"
    )
    arguments = [sys.executable, "-c", code, str(ROOT), str(folder / "a"), str(rights)]
    said = subprocess.run(arguments, capture_output=True, text=True)
    assert "permission denied" in said.stdout, said.stderr
    assert not list(folder.iterdir())


def small_files_only() -> None:
    """As on a full disk: nothing larger than 2000 bytes can be written."""
    signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (2000, 2000))


@pytest.mark.parametrize(("option", "name"), OUTPUTS.items())
def test_full_disk(sample, tmp_path, option, name):
    target = tmp_path / name
    process = start_xrfid("identify", sample, "--instrument", BENCH, option, target, preexec_fn=small_files_only)
    _, complaint = process.communicate(timeout=120)
    assert process.returncode == 3, complaint
    assert "could not be written (file too large)" in complaint
    assert not list(tmp_path.iterdir())


def test_full_disk_keeps_what_was_there(sample, tmp_path):
    target = tmp_path / "out.json"
    target.write_text("precious")
    process = start_xrfid(
        "identify", sample, "--instrument", BENCH, "--json", target, "--overwrite", preexec_fn=small_files_only
    )
    process.communicate(timeout=120)
    assert process.returncode == 3
    assert target.read_text() == "precious"


def test_killed_while_writing(tmp_path):
    """A process killed in the middle leaves at most a hidden file beside, never half an output."""
    code = (
        "import sys, time; sys.path.insert(0, sys.argv[1])\n"
        "from xrfid.output import atomic_output\n"
        "with atomic_output(sys.argv[2]) as beside:\n"
        "    beside.write_text('half'); print('half', flush=True); time.sleep(60)"
    )
    target = tmp_path / "out.json"
    process = subprocess.Popen([sys.executable, "-c", code, str(ROOT), str(target)], stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    assert process.stdout.readline() == "half\n"
    process.kill()
    process.communicate()
    assert not target.exists()
    assert all(p.name.startswith(".") for p in tmp_path.iterdir())


def test_interrupted_by_the_keyboard(tmp_path):
    """Ctrl-C ends quietly; what is there is whole."""
    many = [SAMPLES / n for n in ("coupon.msa", "panel_red.msa", "panel_green.msa", "aluminium_bracket.msa")] * 4
    process = start_xrfid("identify", *many, "--json", tmp_path / "out")
    time.sleep(1.5)
    process.send_signal(signal.SIGINT)
    _, complaint = process.communicate(timeout=60)
    assert process.returncode in (130, -signal.SIGINT)
    assert "Traceback" not in complaint
    assert all(p.read_text().endswith("}\n") for p in tmp_path.rglob("*.json"))


def test_an_error_while_writing_leaves_nothing(tmp_path):
    def write() -> None:
        with atomic_output(tmp_path / "a.txt") as beside:
            Path(beside).write_text("half")
            raise RuntimeError("in the middle")

    with pytest.raises(RuntimeError, match="in the middle"):
        write()
    assert not list(tmp_path.iterdir())


def test_two_at_once_give_one_whole_output(tmp_path):
    """Of several that write to the same place at once one wins, the others say so, and the output is one's own."""
    target, refusals = tmp_path / "a.txt", []
    ready = threading.Barrier(8)

    def work(number: int) -> None:
        try:
            with atomic_output(target) as beside:
                Path(beside).write_text(str(number) * 10_000)
                ready.wait(timeout=20)
        except OutputError as error:
            refusals.append(str(error))

    threads = [threading.Thread(target=work, args=(n,)) for n in range(8)]
    for t in threads:
        t.start()
    for t in threads:
        t.join()
    assert len(refusals) == 7
    assert all("exists" in said for said in refusals)
    assert len(set(target.read_text())) == 1
    assert len(target.read_text()) == 10_000
    assert [p.name for p in tmp_path.iterdir()] == ["a.txt"]


def test_two_processes_with_the_same_output(sample, tmp_path):
    target = tmp_path / "out.json"
    both = [start_xrfid("identify", sample, "--instrument", BENCH, "--json", target) for _ in range(2)]
    said = [p.communicate(timeout=180)[1] for p in both]
    assert sorted(p.returncode for p in both) == [0, 3]
    assert any("exists" in s for s in said)
    assert target.read_text().rstrip().endswith("}")


def test_a_link_is_replaced_not_followed(tmp_path):
    """With --overwrite a symbolic link gives way; what it pointed at stays as it is."""
    (tmp_path / "other.txt").write_text("precious")
    link = tmp_path / "a.txt"
    link.symlink_to(tmp_path / "other.txt")
    with atomic_output(link, overwrite=True) as beside:
        Path(beside).write_text("new")
    assert (tmp_path / "other.txt").read_text() == "precious"
    assert link.read_text() == "new"


def test_outputs_can_be_read_by_others(tmp_path):
    """The temporary file is private; the output has the usual rights."""
    with atomic_output(tmp_path / "a.txt") as beside:
        Path(beside).write_text("x")
    mask = os.umask(0)
    os.umask(mask)
    assert (tmp_path / "a.txt").stat().st_mode & 0o777 == 0o666 & ~mask


def test_standard_output_that_is_closed(sample, tmp_path):
    """``xrfid ... | head -1`` ends quietly."""
    command = f"{sys.executable} -m xrfid identify {sample} --instrument {BENCH} --json - | head -c 10"
    said = subprocess.run(command, shell=True, capture_output=True, text=True, cwd=ROOT)
    assert said.stdout.startswith("{")
    assert "Traceback" not in said.stderr
