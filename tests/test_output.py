"""Outputs appear whole or not at all, and replace nothing unasked."""

from __future__ import annotations

import os
import stat
from pathlib import Path
from unittest import mock

import pytest

from xrfid.errors import OutputError
from xrfid.output import atomic_output


def names(folder: Path) -> set[str]:
    return {p.name for p in folder.iterdir()}


def put(
    target: Path, text: str, overwrite: bool = False, meanwhile: str | None = None, failure: BaseException | None = None
) -> None:
    """Write `text`; before the block ends another program may write `meanwhile`, or the work may fail."""
    with atomic_output(target, overwrite=overwrite) as beside:
        beside.write_text(text)
        if meanwhile is not None:
            target.write_text(meanwhile)
        if failure is not None:
            raise failure


def test_appears_when_the_block_ends(tmp_path):
    target = tmp_path / "result.json"
    with atomic_output(target) as beside:
        assert beside.parent == tmp_path
        assert beside.suffix == ".json"
        beside.write_text("whole")
        assert not target.exists()
    assert target.read_text() == "whole"
    assert names(tmp_path) == {"result.json"}


def test_permissions_follow_the_umask(tmp_path):
    before = os.umask(0o027)
    try:
        with atomic_output(tmp_path / "a.txt") as beside:
            beside.write_text("x")
    finally:
        os.umask(before)
    assert stat.S_IMODE((tmp_path / "a.txt").stat().st_mode) == 0o640


@pytest.mark.parametrize("failure", [ValueError("wrong"), KeyboardInterrupt(), SystemExit(1)])
def test_a_failure_leaves_nothing(tmp_path, failure):
    with pytest.raises(type(failure)):
        put(tmp_path / "a.txt", "half", failure=failure)
    assert not names(tmp_path)


def test_what_exists_is_refused(tmp_path):
    target = tmp_path / "a.txt"
    target.write_text("mine")
    with (
        pytest.raises(OutputError, match=r"a.txt: exists; give --overwrite to replace it, or another name"),
        atomic_output(target),
    ):
        pytest.fail("the block must not run")
    assert target.read_text() == "mine"


def test_overwrite_replaces_in_one_step(tmp_path):
    target = tmp_path / "a.txt"
    target.write_text("old")
    with atomic_output(target, overwrite=True) as beside:
        beside.write_text("new")
        assert target.read_text() == "old"
    assert target.read_text() == "new"
    assert names(tmp_path) == {"a.txt"}


def test_a_failed_overwrite_keeps_the_old(tmp_path):
    target = tmp_path / "a.txt"
    target.write_text("old")
    with pytest.raises(RuntimeError, match="half way"):
        put(target, "half", overwrite=True, failure=RuntimeError("half way"))
    assert target.read_text() == "old"
    assert names(tmp_path) == {"a.txt"}


def test_one_that_appears_meanwhile_is_kept(tmp_path):
    target = tmp_path / "a.txt"
    with pytest.raises(OutputError, match="exists"):
        put(target, "ours", meanwhile="theirs")
    assert target.read_text() == "theirs"
    assert names(tmp_path) == {"a.txt"}


def without_links(*_: object) -> None:
    raise OSError(95, "Operation not supported")


def test_a_file_system_without_hard_links(tmp_path):
    target = tmp_path / "a.txt"
    with mock.patch("os.link", without_links):
        put(target, "first")
        assert target.read_text() == "first"
        other = tmp_path / "b.txt"
        with pytest.raises(OutputError, match=r"b\.txt: exists"):
            put(other, "ours", meanwhile="theirs")
    assert other.read_text() == "theirs"
    assert names(tmp_path) == {"a.txt", "b.txt"}


def test_folders(tmp_path):
    with pytest.raises(OutputError, match="is a folder; name a file"), atomic_output(tmp_path):
        pytest.fail("the block must not run")
    missing = tmp_path / "none" / "a.txt"
    with (
        pytest.raises(OutputError, match=r"no such file or directory; name a file in a folder that exists"),
        atomic_output(missing),
    ):
        pytest.fail("the block must not run")


def test_a_disk_that_is_full(tmp_path):
    with pytest.raises(OutputError, match=r"a.txt: could not be written \(no space left on device\)"):
        put(tmp_path / "a.txt", "half", failure=OSError(28, "No space left on device"))
    assert not names(tmp_path)


def test_an_output_error_within_keeps_its_own_words(tmp_path):
    with pytest.raises(OutputError, match=r"^b\.txt: no table holds this$"):
        put(tmp_path / "a.txt", "half", failure=OutputError("b.txt", "no table holds this"))
    assert not names(tmp_path)


def test_a_long_name(tmp_path):
    target = tmp_path / ("n" * 240 + ".json")
    with atomic_output(target) as beside:
        beside.write_text("x")
    assert target.read_text() == "x"
