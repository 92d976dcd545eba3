"""Bad inputs: one clear line that says what would do, status 3, and nothing written."""

from __future__ import annotations

import gzip
import re
from collections.abc import Callable
from pathlib import Path
from unittest import mock

import h5py
import numpy as np
import pytest
from shell import SAMPLES, refused, xrfid

from xrfid.errors import InputError
from xrfid.formats import read_spectrum

COUPON = (SAMPLES / "coupon.msa").read_bytes()
NICKEL = (SAMPLES / "nickel_alloy.n42").read_bytes()
COLUMN = b"\n".join(b"%d" % (5 + i % 7) for i in range(256))
Bytes = bytes | Callable[[Path], None]


def head(**changed: str) -> bytes:
    """An EMSA file of 256 channels with some keywords changed; None removes one."""
    keys = {
        "FORMAT": "EMSA/MAS Spectral Data File", "VERSION": "1.0", "TITLE": "t", "NPOINTS": "256.", "NCOLUMNS": "1.",
        "XUNITS": "keV", "YUNITS": "counts", "DATATYPE": "Y", "XPERCHAN": "0.04", "OFFSET": "0.",
    }  # fmt: skip
    lines = [f"#{k:<12s}: {v}" for k, v in (keys | changed).items()]
    return "\r\n".join([*lines, "#SPECTRUM    :"]).encode() + b"\r\n"


def emsa(body: bytes = COLUMN, end: bytes = b"\r\n#ENDOFDATA   :\r\n", **changed: str) -> bytes:
    return head(**changed) + body + end


def column(**replaced: bytes) -> bytes:
    """One count a line, with the values of some rows replaced (keys ``row12``)."""
    rows = COLUMN.split(b"\n")
    for key, value in replaced.items():
        rows[int(key.removeprefix("row"))] = value
    return b"\n".join(rows)


def hdf5(
    shape: tuple[int, ...] = (256,), dtype: str = "u4", fill: object = None, **attributes: object
) -> Callable[[Path], None]:
    def make(path: Path) -> None:
        with h5py.File(path, "w") as file:
            made = file.create_dataset("scan/counts", shape, dtype)
            if fill is not None:
                made[...] = fill
            made.attrs.update(attributes)

    return make


def bomb() -> bytes:
    """Nested entities that would grow to 10^9 characters."""
    lines = ['<!ENTITY a0 "ha">', *(f'<!ENTITY a{i} "{f"&a{i - 1};" * 10}">' for i in range(1, 10))]
    return f'<?xml version="1.0"?><!DOCTYPE x [{"".join(lines)}]><RadInstrumentData>&a9;</RadInstrumentData>'.encode()


def n42(old: bytes, new: bytes) -> bytes:
    assert old in NICKEL
    return NICKEL.replace(old, new, 1)


N42_DATA = NICKEL[NICKEL.index(b"<ChannelData>") : NICKEL.index(b"</ChannelData>")]

# id: (name of the file, what is in it, what the complaint says)
REFUSED: dict[str, tuple[str, Bytes, str]] = {
    "empty": ("a.msa", b"", "is empty"),
    "blank": ("a.txt", b" \r\n\t\r\n" * 40, "is empty"),
    "binary": ("a.spc", bytes(range(256)) * 40, "binary file"),
    "compressed": ("a.txt", gzip.compress(COLUMN), "binary file"),
    "picture": ("a.txt", b"\x89PNG\r\n\x1a\n" + bytes(3000), "binary file"),
    "prose": ("a.txt", b"Dear colleague,\nthe spectrum follows by post.\n" * 20, "too few for a spectrum"),
    "few channels": ("a.txt", COLUMN[:100], "at least 64"),
    "few channels, emsa": ("a.msa", emsa(b"1,\r\n" * 40, NPOINTS="40."), "at least 64"),
    "too many channels": ("a.txt", b"3\n" * 70_000, "at most 65536"),
    "negative": ("a.txt", column(row12=b"-4"), "counts must be >= 0"),
    "negative, emsa": ("a.msa", emsa(column(row12=b"-4")), "counts must be >= 0"),
    "nan": ("a.txt", column(row77=b"nan"), "counts must be finite"),
    "nan, emsa": ("a.msa", emsa(column(row77=b"nan")), "counts must be finite"),
    "infinite": ("a.txt", column(row9=b"inf"), "counts must be finite"),
    "absurd count": ("a.txt", column(row9=b"1e300"), "give raw counts"),
    "letters among data": ("a.msa", emsa(column(row30=b"twelve")), 'line 42: found "twelve" among the data'),
    "cut short": ("a.msa", head(NPOINTS="512.") + COLUMN, "data end after 256"),
    "npoints is no number": ("a.msa", emsa(NPOINTS="many"), "NPOINTS"),
    "npoints is absurd": ("a.msa", emsa(NPOINTS="1e12"), "NPOINTS"),
    "npoints is negative": ("a.msa", emsa(NPOINTS="-256"), "NPOINTS"),
    "datatype unknown": ("a.msa", emsa(DATATYPE="Z"), 'DATATYPE is "Z"'),
    "xperchan is no number": ("a.msa", emsa(XPERCHAN="wide"), "XPERCHAN"),
    "offset is no number": ("a.msa", emsa(OFFSET="left"), "OFFSET"),
    "ncolumns is absurd": ("a.msa", emsa(NCOLUMNS="900"), "NCOLUMNS"),
    "no data": ("a.msa", emsa(b""), "NPOINTS says 256|holds 0 channels"),
    "no spectrum line": ("a.msa", head().replace(b"#SPECTRUM", b"#SPECTRAL"), "#SPECTRUM"),
    "odd pairs": ("a.msa", emsa(COLUMN + b"\n7", DATATYPE="XY"), "pairs are needed"),
    "xml cut short": ("a.n42", NICKEL[: len(NICKEL) // 2], "xml|XML|N42"),
    "xml without spectrum": ("a.n42", b'<?xml version="1.0"?><RadInstrumentData/>', "holds no Spectrum element"),
    "xml of another kind": ("a.n42", b'<?xml version="1.0"?><recipe><flour/></recipe>', "N42|spectrum"),
    "entity bomb": ("a.n42", bomb(), "entit|not allowed|forbidden"),
    "external entity": (
        "a.n42",
        b'<?xml version="1.0"?><!DOCTYPE x [<!ENTITY e SYSTEM "file:///etc/passwd">]><RadInstrumentData>&e;</RadInstrumentData>',
        "entit|not allowed|forbidden",
    ),
    "letters among data, n42": ("a.n42", n42(N42_DATA[:40], N42_DATA[:36] + b"abc "), "number|abc"),
    "negative, n42": ("a.n42", n42(N42_DATA[:40], N42_DATA[:36] + b" -3 "), "counts must be >= 0"),
    "hdf5 cut short": ("a.h5", (SAMPLES / "glazed_tile.h5").read_bytes()[:3000], "HDF5"),
    "hdf5 signature only": ("a.h5", b"\x89HDF\r\n\x1a\n" + b"\x00" * 64, "HDF5"),
    "hdf5 of text": ("a.h5", hdf5((256,), h5py.string_dtype()), "no dataset|numbers|spectrum"),
    "hdf5, few channels": ("a.h5", hdf5((40,), fill=3), "at least 64|no dataset"),
    "hdf5, negative": ("a.h5", hdf5(dtype="i4", fill=-3), "counts must be >= 0"),
    "hdf5, nan": ("a.h5", hdf5(dtype="f4", fill=np.nan), "finite"),
    "hdf5 without data": ("a.h5", lambda path: h5py.File(path, "w").close(), "no dataset|spectrum"),
    "hdf5, absurd size": ("a.h5", hdf5((10**13,)), "channels|too large|at most"),
}  # fmt: skip


def make(folder: Path, name: str, content: Bytes) -> Path:
    path = folder / name
    if isinstance(content, bytes):
        path.write_bytes(content)
    else:
        content(path)
    return path


@pytest.mark.parametrize(("name", "content", "says"), REFUSED.values(), ids=REFUSED)
def test_refused(tmp_path, name, content, says):
    path = make(tmp_path, name, content)
    before = path.read_bytes() if path.stat().st_size < 10**7 else b""
    line = refused(xrfid("identify", path, "--json", tmp_path / "out.json"))
    assert str(path) in line
    assert re.search(says, line), line
    assert {p.name for p in tmp_path.iterdir()} == {name}
    assert not before or path.read_bytes() == before


def test_missing_file(tmp_path):
    assert "no such file" in refused(xrfid("identify", tmp_path / "nothing.msa"))


def test_folder(tmp_path):
    assert "is a folder" in refused(xrfid("identify", tmp_path))


def test_two_spectra_where_one_is_expected(tmp_path):
    table = "energy (keV),first,second\n" + "".join(f"{0.02 * i:.3f},{i % 5},{i % 7}\n" for i in range(200))
    path = make(tmp_path, "pair.csv", table.encode())
    with pytest.raises(InputError, match=r"holds 2 spectra \(first, second\); choose one with dataset"):
        read_spectrum(path)
    assert read_spectrum(path, dataset="second").counts[6] == 6


def test_a_name_that_is_not_in_the_file(tmp_path):
    line = refused(xrfid("identify", SAMPLES / "coupon.msa", "--dataset", "stainles steel coupon, delivery 7"))
    assert 'did you mean "stainless steel coupon, delivery 7"?' in line


def test_an_hdf5_path_that_does_not_exist_lists_those_that_do():
    line = refused(xrfid("identify", SAMPLES / "glazed_tile.h5", "--dataset", "/entry/data/count"))
    assert "/entry/data/counts" in line


def test_an_input_that_is_not_allowed_to_be_read(tmp_path):
    path = make(tmp_path, "secret.msa", COUPON)
    with mock.patch("builtins.open", side_effect=PermissionError(13, "Permission denied")):
        line = refused(xrfid("identify", path))
    assert "cannot be read (permission denied)" in line


def test_one_bad_file_among_good_ones(tmp_path):
    """The good one is done, the bad one named, and the status says that not all went well."""
    bad = make(tmp_path, "empty.msa", b"")
    said = xrfid("identify", SAMPLES / "coupon.msa", bad, "--json", tmp_path / "out")
    assert said.status == 3
    assert "empty.msa: is empty" in said.err
    assert {p.name for p in (tmp_path / "out").iterdir()} == {"coupon.json"}


# ------------------------------------------------------------------------------- the instrument file
INSTRUMENTS: dict[str, tuple[str, str]] = {
    "unknown key": ('[tube]\nvoltage_kV = 40\n', 'unknown key "tube.voltage_kV"; did you mean "voltage_kv"?'),
    "unknown table": ('[detektor]\nthickness_um = 450\n', 'unknown key "detektor"; did you mean "detector"?'),
    "no toml": ("[tube\nanode = Rh", "is not valid TOML"),
    "wrong kind": ('[tube]\nvoltage_kv = "forty"\n', "tube.voltage_kv: .*'forty'"),
    "voltage out of range": ("[tube]\nvoltage_kv = 4000\n", "tube.voltage_kv: .*450.*4000"),
    "negative thickness": ('[detector]\nthickness_um = -5\n', "detector.thickness_um: .*-5"),
    "not a number": ("[scale]\ngain_kev = nan\n", "scale.gain_kev"),
    "gain of nothing": ("[scale]\ngain_kev = 0\n", "scale.gain_kev"),
    "tube and source": ("[tube]\n[source]\nlines_kev = [22.1]\n", r"either \[tube\] or \[source\]"),
    "weights do not match": ("[source]\nlines_kev = [22.1, 24.9]\nweights = [1.0]\n", "weights has 1 values"),
    "weights of nothing": ("[source]\nlines_kev = [22.1]\nweights = [0]\n", "at least one weight"),
    "no lines": ("[source]\nlines_kev = []\n", "source.lines_kev"),
    "anode is no element": ('[tube]\nanode = "Rhodium"\n', '"Rhodium" is no target element'),
    "atmosphere unknown": ('[path]\natmosphere = "argon"\n', "path.atmosphere: .*'argon'"),
    "detector unknown": ('[detector]\nmaterial = "NaI"\n', "detector.material: .*'NaI'"),
    "window of nothing known": ('[detector]\nwindow = { material = "unobtainium", thickness_um = 8 }\n', "unobtainium"),
    "stray is no element": ('[stray]\nelements = ["Zz"]\n', '"Zz"'),
}  # fmt: skip


@pytest.mark.parametrize(("text", "says"), INSTRUMENTS.values(), ids=INSTRUMENTS)
def test_instrument_refused(tmp_path, text, says):
    path = make(tmp_path, "bench.toml", text.encode())
    line = refused(xrfid("identify", SAMPLES / "coupon.msa", "--instrument", path))
    assert re.search(says, line), line


def test_instrument_file_missing(tmp_path):
    line = refused(xrfid("identify", SAMPLES / "coupon.msa", "--instrument", tmp_path / "none.toml"))
    assert "give an instrument file" in line


def test_instrument_file_of_bytes(tmp_path):
    path = make(tmp_path, "bench.toml", b"\xff\xfe\x00" * 40)
    assert "is not a text file" in refused(xrfid("identify", SAMPLES / "coupon.msa", "--instrument", path))


def test_instrument_file_nested_without_end(tmp_path):
    path = make(tmp_path, "bench.toml", b"a = " + b"[" * 5000)
    assert "is not valid TOML" in refused(xrfid("identify", SAMPLES / "coupon.msa", "--instrument", path))


# --------------------------------------------------------------------------------- the command line
COMMAND_LINES: dict[str, tuple[tuple[str, ...], int, str]] = {
    "no such command": (("identfy", "a.msa"), 2, 'did you mean "identify"?'),
    "no such option": (("identify", "a.msa", "--instument", "b"), 2, "--instrument"),
    "no input": (("identify",), 2, "INPUT"),
    "level is no number": (("identify", "a.msa", "--false-level", "low"), 2, "low"),
    "level out of range": (("identify", str(SAMPLES / "coupon.msa"), "--false-level", "7"), 3, "out of range"),
    "no such element": (("identify", str(SAMPLES / "coupon.msa"), "--present", "Xx"), 3, '"Xx" is no element symbol'),
    "present and absent": (
        ("identify", str(SAMPLES / "coupon.msa"), "--present", "Fe", "--absent", "Fe"), 3, "present and absent"),
    "no such series": (("identify", str(SAMPLES / "coupon.msa"), "--series", "KX"), 3, "not made of K, L and M"),
}  # fmt: skip


@pytest.mark.parametrize(("arguments", "status", "says"), COMMAND_LINES.values(), ids=COMMAND_LINES)
def test_command_line_refused(arguments, status, says):
    said = xrfid(*arguments)
    assert said.status == status
    assert says in said.err
    assert "Traceback" not in said.err
