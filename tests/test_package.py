"""The package as a whole: light to import, closed at the edges, of readable size, and silent on the network."""

from __future__ import annotations

import ast
import json
import re
import socket
import subprocess
import sys
import time
import tomllib
from pathlib import Path

import pytest
from click.testing import CliRunner

import xrfid
from xrfid.cli import _COMMANDS, cli

ROOT = Path(__file__).parents[1]
PACKAGE = ROOT / "xrfid"
SAMPLES = ROOT / "sample_spectra"
HEAVY = {"scipy", "matplotlib", "h5py", "lmfit", "pandas", "bokeh", "panel", "distributed", "numpy", "pydantic"}
MOST_LINES, MOST_LINES_OF_A_FUNCTION = 600, 70
SOURCES = sorted(PACKAGE.rglob("*.py"))


def loaded_by(code: str) -> set[str]:
    """Top-level modules in memory after running `code` in a fresh interpreter."""
    said = subprocess.run(
        [sys.executable, "-c", f"{code}\nimport sys, json\nprint(json.dumps(sorted(sys.modules)))"],
        check=True, capture_output=True, text=True, cwd=ROOT,
    )  # fmt: skip
    return {name.partition(".")[0] for name in json.loads(said.stdout.splitlines()[-1])}


def test_import_is_light():
    assert not loaded_by("import xrfid") & HEAVY


def test_help_is_light():
    run = "import xrfid.cli\ntry:\n    xrfid.cli.cli.main(['--help'])\nexcept SystemExit: pass"
    assert not loaded_by(run) & HEAVY


def test_help_answers_at_once():
    best = min(_seconds([sys.executable, "-m", "xrfid", "--help"]) for _ in range(5))
    assert best < 0.5


def _seconds(command: list[str]) -> float:
    start = time.perf_counter()
    subprocess.run(command, check=True, capture_output=True, cwd=ROOT)
    return time.perf_counter() - start


def test_public_names():
    assert set(dir(xrfid)) == {*xrfid.__all__, "__version__"}
    assert all(getattr(xrfid, name) is not None for name in xrfid.__all__)
    declared = {n for n in vars(xrfid) if not n.startswith("_") and n not in ("annotations", "TYPE_CHECKING", "Any")}
    modules = {p.stem for p in PACKAGE.glob("*.py")} | {p.name for p in PACKAGE.iterdir() if p.is_dir()}
    assert declared - modules <= set(xrfid.__all__)


def test_an_unknown_name_is_an_attribute_error():
    with pytest.raises(AttributeError, match="has no attribute 'identifyy'"):
        _ = xrfid.identifyy


def test_versions_agree():
    shown = CliRunner().invoke(cli, ["--version"]).output
    assert xrfid.__version__ in shown
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    assert project["tool"]["hatch"]["version"]["path"] == "xrfid/__init__.py"
    changes = (ROOT / "docs" / "pages" / "reference" / "changelog.md").read_text(encoding="utf-8")
    assert f"## {xrfid.__version__}" in changes


@pytest.mark.parametrize("name", _COMMANDS)
def test_each_command_explains_itself(name):
    shown = CliRunner().invoke(cli, [name, "--help"])
    assert shown.exit_code == 0, shown.output
    assert "Usage:" in shown.output
    assert "--help" in shown.output


def test_nothing_asks_the_network(monkeypatch, tmp_path):
    """Identification, page and figure included, neither connects, listens nor resolves a name."""

    def refuse(*_args, **_kwargs):
        raise AssertionError("the network was asked")

    for name in ("connect", "connect_ex", "bind", "sendto"):
        monkeypatch.setattr(socket.socket, name, refuse)
    monkeypatch.setattr(socket, "getaddrinfo", refuse)
    command = ["identify", str(SAMPLES / "coupon.msa"), "--instrument", str(SAMPLES / "workshop.toml"),
               "--json", str(tmp_path / "a.json"), "--page", str(tmp_path / "a.html"),
               "--figure", str(tmp_path / "a.png")]  # fmt: skip
    done = CliRunner().invoke(cli, command, catch_exceptions=False)
    assert done.exit_code == 0
    assert {p.name for p in tmp_path.iterdir()} == {"a.json", "a.html", "a.png"}


# ------------------------------------------------------------------------------ readable by a stranger
@pytest.mark.parametrize("path", SOURCES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_files_and_functions_stay_readable(path):
    text = path.read_text(encoding="utf-8")
    assert text.count("\n") <= MOST_LINES
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            assert node.end_lineno - node.lineno < MOST_LINES_OF_A_FUNCTION, f"{node.name} is too long"


@pytest.mark.parametrize("path", SOURCES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_each_module_says_what_it_is_for(path):
    tree = ast.parse(path.read_text(encoding="utf-8"))
    assert ast.get_docstring(tree) or not tree.body


def test_no_code_is_run_from_files():
    """No unpickling, no eval: an input stays data."""
    forbidden = re.compile(r"\b(pickle|dill|cloudpickle|marshal|shelve)\b|(?<![\w.])(eval|exec)\(|allow_pickle=True")
    found = [f"{p.name}: {m.group()}" for p in SOURCES for m in forbidden.finditer(p.read_text(encoding="utf-8"))]
    assert not found


def test_only_expected_things_at_the_top():
    allowed = {"pyproject.toml", "README.md", "DEVELOPERS.md", "LICENSE", "xrfid", "tests", "sample_spectra", "docs"}
    assert {p.name for p in ROOT.iterdir() if not p.name.startswith(".")} - {"build", "dist"} == allowed
