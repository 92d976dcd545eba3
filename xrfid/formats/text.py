"""Plain text by its shape: one count a line, columns, headers of ``name separator value``, marked sections.

What a file means is read from how it is laid out and from the trade's own words (live time,
calibration, channel, keV, ...), never from who made it.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xrfid.errors import InputError
from xrfid.formats.axis import Axis, axis_of, fitted_scale
from xrfid.formats.decode import FEWEST_CHANNELS, checked_counts
from xrfid.spectrum import EnergyScale, Spectrum

_NUMBER = r"[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d+)?"
_IS_NUMBER = re.compile(rf"^{_NUMBER}$")
_COMMA_NUMBER = re.compile(r"^[+-]?\d+,\d+(?:[eE][+-]?\d+)?$")
_KEY = r"\W*([^\W\d][^\d,;:=\t]*?)"
_STATEMENTS = (
    # the first of the separators that stand for themselves, else a gap, else the blank before a number, else a blank
    re.compile(rf"^{_KEY}\s*(?:[:=;,\t]|\s-\s)\s*(\S.*)$"),
    re.compile(rf"^{_KEY}\s{{2,}}(\S.*)$"),
    re.compile(rf"^{_KEY}\s+(?={_NUMBER})(.*)$"),
    re.compile(rf"^{_KEY}\s+(\S.*)$"),
)
_LONGEST_STATEMENT = 400
_MARK = re.compile(
    r"^\s*(?:<<\s*(.+?)\s*>>|\[\s*(.+?)\s*\]|\$\s*([A-Za-z_ ]+?)\s*:?|[*=-]{3,}\s*(.*?)\s*[*=-]{3,})\s*$"
)
_GAIN = r"gain|slope|per chan|channel width|xperchan|steigung"
_CALIBRATION = re.compile(r"calib|energ", re.I)
_END = re.compile(r"\bend\b|^/", re.I)
_LIVE = re.compile(r"(?<![a-z])(live|lebend|lifetime)|\blt\b", re.I)
_REAL = re.compile(r"(?<![a-z])(real|echtz|true|elapsed|clock)|\brt\b", re.I)
_MILLI = re.compile(r"\bms\b|millisec", re.I)
_MICRO = re.compile(r"(?<![a-z])[uµμ]a\b|microamp", re.I)
_NO_SPECTRUM = re.compile(
    r"(?<![a-z])(err(or)?s?|sigma|uncert[a-z]*|backgr[a-z]*|fit|resid[a-z]*|rate|cps|std)(?![a-z])", re.I
)


@dataclass
class _Block:
    """Consecutive lines of numbers with the same number of columns."""

    first_line: int
    section: str
    header: list[str]
    rows: list[list[float]] = field(default_factory=list)
    lines: list[int] = field(default_factory=list)


@dataclass
class _Contents:
    blocks: list[_Block] = field(default_factory=list)
    statements: dict[str, str] = field(default_factory=dict)
    first_text: str = ""


def read(name: str, text: str) -> tuple[Spectrum, ...]:
    """Read all spectra of a text file.

    Raises
    ------
    InputError
        If no run of at least 64 rows of numbers is found, or a count is negative or not finite.
    """
    contents = _parse(text)
    block = max(contents.blocks, key=lambda b: len(b.rows), default=None)
    if block is None or len(block.rows) * len(block.rows[0]) < FEWEST_CHANNELS:
        found = 0 if block is None else len(block.rows) * len(block.rows[0])
        remedy = f"at least {FEWEST_CHANNELS} channels are needed; a layout file can say where they are"
        raise InputError(name, f"the longest run of numbers holds {found}, too few for a spectrum", remedy)
    table = np.array(block.rows, dtype=float)
    scale_from_points, said = _calibration(contents, block)
    live, real = _times(contents.statements)
    facts = _facts(contents.statements)
    spectra = []
    for column in _columns(table, block.header):
        place = _place(name, block, column)
        counts, more = checked_counts(place, column.counts)
        notes = [*said, *column.said, *more]
        scale = column.scale
        if scale is None and scale_from_points is not None:
            scale = scale_from_points
        overflow = _overflow(counts)
        if overflow:
            notes.append("the last channel holds far more counts than its neighbours: overflow, left out of the fit")
        title = _title(contents.statements, column.name)
        spectra.append(Spectrum(counts, scale, live, real, title, name, column.name or None, facts, tuple(notes)))
    return tuple(_named_apart(spectra))


def _parse(text: str) -> _Contents:
    """Sort lines into blocks of numbers and statements, keeping track of marked sections."""
    out = _Contents()
    section, header = "", ""
    current: _Block | None = None
    rows_before = _decimal_comma(text)
    for number, line in enumerate(text.split("\n"), start=1):
        if not line.strip():
            continue
        mark = _MARK.match(line)
        if mark and not _all_numbers(line, rows_before):
            word = next((g for g in mark.groups() if g), "")
            section, current = ("" if _END.search(word) else word), None
            continue
        numbers = _all_numbers(line, rows_before)
        if numbers is None:
            current = None
            _note_statement(out, line)
            header = line
            continue
        if current is None or current.section != section or len(current.rows[0]) != len(numbers):
            closing = current is not None and abs(len(current.rows[0]) - len(numbers)) > 0 and len(current.rows) > 20
            if closing and current is not None and len(numbers) < len(current.rows[0]):
                current.rows.append(numbers + [float("nan")] * (len(current.rows[0]) - len(numbers)))
                current.lines.append(number)
                continue
            current = _Block(number, section, _cells(header))
            out.blocks.append(current)
        current.rows.append(numbers)
        current.lines.append(number)
    return out


def _decimal_comma(text: str) -> bool:
    """Whether numbers are written with a decimal comma (and something else separates them)."""
    body = [line.strip() for line in text.split("\n") if re.match(r"^\s*[+-]?[\d,]", line)]
    some = body[len(body) // 4 : len(body) // 4 + 400]
    commas = sum(bool(re.search(r"\d,\d", line)) for line in some)
    if not some or commas < 0.2 * len(some) or any(re.search(r"\d\.\d", line) for line in some):
        return False
    spaced = sum(bool(re.search(r"[;\t]|\d\s+[+-]?\d", line)) for line in some)
    if spaced > 0.5 * len(some):
        return True
    # one comma a line: two columns of whole numbers, unless the second part looks like decimals
    pairs = [line.split(",") for line in some if line.count(",") == 1]
    if len(pairs) < 0.8 * len(some):
        return False
    first = [p[0] for p in pairs]
    return len(set(first)) < 0.6 * len(first)


def _all_numbers(line: str, decimal_comma: bool) -> list[float] | None:
    """The numbers of a line that holds nothing else; None otherwise."""
    body = line.strip().strip(",;").strip()
    pieces = re.split(r"[;\s]+" if decimal_comma else r"[,;\s]+", body)
    out = []
    for piece in pieces:
        word = piece.replace(",", ".") if decimal_comma and _COMMA_NUMBER.match(piece) else piece
        if _IS_NUMBER.match(word) or word.lower() in ("nan", "inf", "-inf", "+inf"):
            out.append(float(word))
        else:
            return None
    return out or None


def _note_statement(out: _Contents, line: str) -> None:
    body = line.strip().lstrip("#%*!;/'\"").strip()
    out.first_text = out.first_text or body
    if len(body) > _LONGEST_STATEMENT:
        return
    match = next((m for m in (pattern.match(body) for pattern in _STATEMENTS) if m), None)
    if match:
        key = " ".join(match.group(1).lower().split())
        out.statements.setdefault(key, match.group(2).strip().strip(";,").strip('"'))


def _cells(header: str) -> list[str]:
    """The cells of a heading; what stands between quotation marks is one cell."""
    body = header.strip().lstrip("#%*!").strip()
    parts = body.split('"')
    if len(parts) % 2 == 0:  # marks that do not pair, as in 2" pipe
        parts = [body]
    separator = next((s for s in ("\t", ";", ",") if any(s in part for part in parts[::2])), None)
    if separator is None:
        return body.split() if len(parts) == 1 else [c.strip() for c in parts if c.strip()]
    parts[1::2] = [part.replace(separator, "\x00") for part in parts[1::2]]
    cells = [c.strip().replace("\x00", separator) for c in '"'.join(parts).split(separator)]
    return [c[1:-1].replace('""', '"') if len(c) > 1 and c[0] == c[-1] == '"' else c for c in cells]


def _place(name: str, block: _Block, column: _Column) -> str:
    """Where the first count that is no count stands, for the complaint about it; else the column."""
    bad = np.flatnonzero(~(np.isfinite(column.counts) & (column.counts >= 0)))
    if not bad.size:
        return name if column.number == 0 else f"{name}, column {column.number}"
    if column.number == 0:
        return f"{name}, line {block.lines[bad[0] // len(block.rows[0])]}"
    return f"{name}, line {block.lines[bad[0]]}, column {column.number}"


@dataclass(frozen=True)
class _Column:
    """A column of counts; number 0 is the whole table read row by row."""

    number: int
    name: str
    counts: NDArray[np.float64]
    scale: EnergyScale | None
    said: tuple[str, ...]


def _columns(table: NDArray[np.float64], header: list[str]) -> list[_Column]:
    """Decide which columns are axes and which are counts."""
    n, width = table.shape
    names = header if len(header) == width else [""] * width
    if width == 1:
        return [_Column(1, "", table[:, 0], None, ())]
    if n < FEWEST_CHANNELS and width > 4:
        if n > 1 and axis_of(table[0]) is not None:  # a spectrum lies in a row, below its axis
            return _columns(table.T, [])
        return [_by_rows(table)]
    axes = [axis_of(table[:, i], names[i]) for i in range(width)]
    paired = width >= 4 and width % 2 == 0 and all(axes[::2])
    if paired and not any(axis is not None and axis.certain for axis in axes[1::2]):
        return [_column(i + 2, names[i + 1], table[:, i + 1], axes[i]) for i in range(0, width, 2)]
    leading = [i for i in range(min(2, width - 1)) if axes[i] is not None]
    if not leading and width > 4 and n * width >= FEWEST_CHANNELS and not any(names):
        return [_by_rows(table)]
    there = [axis for axis in (axes[i] for i in leading) if axis is not None]
    energy = next((axis for axis in reversed(there) if not axis.is_channel), there[0] if there else None)
    found = [_column(i + 1, names[i], table[:, i], energy) for i in range(width) if i not in leading]
    return _spectra_among(found)


def _by_rows(table: NDArray[np.float64]) -> _Column:
    return _Column(0, "", _without_padding(table.ravel()), None, ("counts are read row by row",))


def _column(number: int, name: str, counts: NDArray[np.float64], axis: Axis | None) -> _Column:
    scale, said = (None, ()) if axis is None else (axis.scale, axis.said)
    return _Column(number, name, _without_padding(counts), scale, said)


def _without_padding(counts: NDArray[np.float64]) -> NDArray[np.float64]:
    """Without the NaN at the end that fill up a last line or a shorter column."""
    kept = np.flatnonzero(~np.isnan(counts))
    return counts[: int(kept[-1]) + 1] if kept.size else counts


def _spectra_among(columns: list[_Column]) -> list[_Column]:
    """Leave out columns headed as uncertainties, backgrounds or fits if others remain, and say so."""
    kept = [c for c in columns if not _NO_SPECTRUM.search(c.name)]
    if not kept or len(kept) == len(columns):
        return columns
    names = ", ".join(f'"{c.name}"' for c in columns if c not in kept)
    note = f"columns headed {names} are taken as no counts and left out"
    return [replace(c, said=(*c.said, note)) for c in kept]


def _calibration(contents: _Contents, spectrum: _Block) -> tuple[EnergyScale | None, list[str]]:
    """Energy scale from calibration points or stated coefficients."""
    for block in contents.blocks:
        if block is spectrum or not block.rows:
            continue
        if _CALIBRATION.search(block.section) and len(block.rows[0]) == 2 and 2 <= len(block.rows) <= 40:
            scale = fitted_scale(np.array(block.rows))
            if scale is not None:
                return scale, [f"energy scale from {len(block.rows)} calibration points of the file"]
        if _CALIBRATION.search(block.section) and len(block.rows) == 1 and len(block.rows[0]) in (2, 3):
            first, second, *rest = block.rows[0]
            quadratic = rest[0] if rest else 0.0
            if 5e-4 < second < 0.5 and math.isfinite(first) and math.isfinite(quadratic):
                return EnergyScale(first, second, quadratic), ["energy scale from the coefficients of the file"]
    return _stated_scale(contents.statements)


def _stated_scale(statements: dict[str, str]) -> tuple[EnergyScale | None, list[str]]:
    """Energy scale from a gain and an offset; a gain above 0.5 without eV beside it is the amplifier's."""
    gain = _first_number(statements, _GAIN)
    if gain is None or not 5e-4 < gain < 500.0:
        return None, []
    in_ev = any(re.search(_GAIN, k) and re.search(r"(?<![km])ev", f"{k} {v}".lower()) for k, v in statements.items())
    if gain > 0.5 and not in_ev:
        return None, []
    offset = _first_number(statements, r"offset|intercept|zero") or 0.0
    factor = 1e-3 if gain > 0.5 else 1.0
    said = ["energy scale from the gain and offset stated in the file"]
    return EnergyScale(offset * (factor if abs(offset) > 2 else 1.0), gain * factor), said


def _first_number(statements: dict[str, str], pattern: str) -> float | None:
    for key, value in statements.items():
        match = re.match(_NUMBER, value.replace(",", "."))
        if match and re.search(pattern, key):
            return float(match.group())
    return None


def _times(statements: dict[str, str]) -> tuple[float | None, float | None]:
    """Live and real time in seconds."""
    found: dict[str, float] = {}
    for key, value in statements.items():
        for what, pattern in (("live", _LIVE), ("real", _REAL)):
            match = re.search(_NUMBER, value.replace(",", "."))
            if what not in found and pattern.search(key) and match:
                factor = 1e-3 if _MILLI.search(key) or _MILLI.search(value) else 1.0
                if float(match.group()) > 0:
                    found[what] = float(match.group()) * factor
    return found.get("live"), found.get("real")


def _facts(statements: dict[str, str]) -> dict[str, Any]:
    """Voltage and current where the file states them, and all its statements as read."""
    out: dict[str, Any] = {}
    for what, pattern in (("voltage_kv", r"voltage|\bkv\b|high volt|tube kv"), ("current_ma", r"current|\bma\b")):
        value = _first_number(statements, pattern)
        if value is not None and 0 < value < 500:
            out[what] = value
    if "current_ma" in out and any("current" in k and _MICRO.search(f"{k} {v}") for k, v in statements.items()):
        out["current_ma"] *= 1e-3
    return out | {"statements": dict(statements)}


def _title(statements: dict[str, str], column: str) -> str:
    for key in ("title", "description", "sample", "tag", "name", "comment", "spectrum"):
        if key in statements and not column:
            return statements[key]
    return column


def _overflow(counts: NDArray[np.float64]) -> bool:
    """Whether the last channel collects what lies beyond the range."""
    before = counts[-9:-1]
    return bool(counts[-1] > 5.0 * (before.max(initial=0.0) + 3.0))


def _named_apart(spectra: list[Spectrum]) -> list[Spectrum]:
    """Give every spectrum of a file a name of its own."""
    if len(spectra) == 1:
        return [replace(spectra[0], dataset=None)]
    taken: set[str] = set()
    out = []
    for i, s in enumerate(spectra, start=1):
        name = s.dataset or f"column {i}"
        while name in taken:
            name += "'"
        taken.add(name)
        out.append(replace(s, dataset=name, title=s.title or name))
    return out
