"""Every command and code block of the documentation is run, page by page, and its output compared loosely.

A page's blocks run one after the other in one folder that holds ``sample_spectra``. The ``text`` block after
one or several ``sh`` or ``python`` blocks shows their output: its lines must appear in this order; ``...`` stands
for any lines, or for the rest of one; numbers may differ by a seventh. Other blocks (``toml``, ``text``) are not run.
"""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path
from typing import NamedTuple

import pytest
from shell import ROOT, SAMPLES

PAGES = ROOT / "docs" / "pages"
README = ROOT / "README.md"
FENCE = re.compile(r"^```(\w*)\n(.*?)^```$", re.M | re.S)
RUN = ("sh", "python")
NUMBER = re.compile(r"[+-]?\d+(?:\.\d+)?(?:e[+-]?\d+)?")
NEAR = 0.15


class Block(NamedTuple):
    kind: str
    body: str


def blocks(page: Path) -> list[Block]:
    return [Block(*m.groups()) for m in FENCE.finditer(page.read_text(encoding="utf-8"))]


def with_blocks() -> list[Path]:
    return [p for p in sorted(PAGES.rglob("*.md")) if any(b.kind in RUN for b in blocks(p))]


# -------------------------------------------------------------------------------------- comparison
def words(line: str) -> list[str]:
    joined = re.sub(r"(?<=\d)[ \u202f\u00a0](?=\d{3}(?!\d))", "", line)
    return joined.replace(",", " ,").split()


def same_word(shown: str, real: str) -> bool:
    if shown == real:
        return True
    parts, others = NUMBER.split(shown), NUMBER.split(real)
    if parts != others or len(parts) == 1:
        return False
    pairs = zip(NUMBER.findall(shown), NUMBER.findall(real), strict=True)
    return all(abs(float(a) - float(b)) <= NEAR * max(abs(float(a)), abs(float(b))) for a, b in pairs)


def same_line(shown: str, real: str) -> bool:
    open_end = shown.rstrip().endswith("...")
    wanted, found = words(shown.rstrip().removesuffix("...") if open_end else shown), words(real)
    if open_end:
        return len(found) >= len(wanted) and all(map(same_word, wanted, found[: len(wanted)]))
    return len(found) == len(wanted) and all(map(same_word, wanted, found))


def missing_line(shown: str, real: str) -> str | None:
    """First line shown that the real output does not have in its place; None if all is there."""
    rest = iter(real.splitlines())
    for line in shown.splitlines():
        if line.strip() in ("", "..."):
            continue
        if not any(same_line(line, candidate) for candidate in rest):
            return line
    return None


# ----------------------------------------------------------------------------------------- running
def prepare(folder: Path) -> dict[str, str]:
    """Put the samples and a command ``xrfid`` into a folder; return the environment to use there."""
    (folder / "sample_spectra").symlink_to(SAMPLES)
    programs = folder / ".bin"
    programs.mkdir()
    shim = programs / "xrfid"
    shim.write_text(f'#!/bin/sh\nexec "{sys.executable}" -m xrfid "$@"\n', encoding="utf-8")
    shim.chmod(0o755)
    return {**os.environ, "PATH": f"{programs}:{os.environ['PATH']}", "PYTHONPATH": str(ROOT), "COLUMNS": "80"}


def run(block: Block, folder: Path, environment: dict[str, str]) -> str:
    command = ["bash", "-euo", "pipefail", "-c"] if block.kind == "sh" else [sys.executable, "-c"]
    said = subprocess.run([*command, block.body], cwd=folder, env=environment, text=True, timeout=180,
                          stdout=subprocess.PIPE, stderr=subprocess.STDOUT)  # fmt: skip
    assert said.returncode == 0, f"{block.body}\n{said.stdout}"
    return said.stdout


@pytest.mark.parametrize("page", with_blocks(), ids=lambda p: str(p.relative_to(PAGES)))
def test_blocks_run_and_say_what_is_shown(page, tmp_path):
    environment, real, fresh = prepare(tmp_path), "", False
    for block in blocks(page):
        if block.kind in RUN:
            real = run(block, tmp_path, environment) if not fresh else real + run(block, tmp_path, environment)
            fresh = True
        elif block.kind == "text" and fresh:
            missing = missing_line(block.body, real)
            assert missing is None, f"shown, but not said: {missing!r}\n--- said was\n{real}"
            fresh = False


# ------------------------------------------------------------------------------------ the pages
@pytest.mark.parametrize("page", sorted(PAGES.rglob("*.md")), ids=lambda p: str(p.relative_to(PAGES)))
def test_each_block_has_a_kind(page):
    kinds = {b.kind for b in blocks(page)}
    assert kinds <= {*RUN, "text", "toml"}
    assert page.read_text(encoding="utf-8").count("```") == 2 * len(blocks(page))


def test_each_page_is_in_the_contents():
    listed = set(re.findall(r"[\w/-]+\.md", (ROOT / "docs" / "mkdocs.yml").read_text(encoding="utf-8")))
    assert listed == {str(p.relative_to(PAGES)) for p in PAGES.rglob("*.md")}


def test_the_readme_has_two_blocks_to_type():
    shell = [b.body for b in blocks(README) if b.kind == "sh"]
    assert len(shell) == 2
    assert "xrfid identify sample_spectra/coupon.msa" in shell[0]
    assert shell[1].rstrip().endswith("pytest")


def test_the_readme_leads_to_files_that_exist():
    for target in re.findall(r"\]\(([^)#\s]+)\)", README.read_text(encoding="utf-8")):
        assert (ROOT / target).exists(), target


def test_the_comparison_can_fail():
    real = "Fe  K  739 700 ± 1100\nCr  K  271 190 ± 940\n"
    assert missing_line("Fe K 740 900 ± 1090\nCr K ...", real) is None
    assert missing_line("Cr K 271 190 ± 940\nFe K 739 700 ± 1100", real) is not None
    assert missing_line("Fe K 939 700 ± 1100", real) is not None
    assert missing_line("Fe L 739 700 ± 1100", real) is not None
    assert missing_line("Fe K", real) is not None


# --------------------------------------------------------------------------------- the fault table
FAULTS = PAGES / "reference" / "faults.md"
ROW = re.compile(r"^\| (?!---)(?P<fault>[^|]+) \| (?P<sees>[^|]+) \| `(?P<test>[^`]+)` \|$", re.M)


def fault_rows() -> list[re.Match[str]]:
    return list(ROW.finditer(FAULTS.read_text(encoding="utf-8")))


def test_the_fault_table_is_long_enough_and_tells_faults_apart():
    rows = fault_rows()
    assert len({r["fault"] for r in rows}) == len(rows) >= 60


@pytest.mark.parametrize("row", fault_rows(), ids=lambda r: r["test"].rpartition("::")[2])
def test_the_test_named_for_a_fault_exists(row):
    file, _, name = row["test"].partition("::")
    function, _, case = name.rstrip("]").partition("[")
    source = (ROOT / file).read_text(encoding="utf-8")
    assert f"def {function}(" in source
    assert not case or f'"{case}"' in source
