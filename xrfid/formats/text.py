"""Plain text by its shape: one count a line, columns, headers of ``name separator value``, marked sections.

What a file means is read from how it is laid out and from the trade's own words (live time,
calibration, channel, keV, ...), never from who made it.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, field
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
_STATEMENT = re.compile(r"^\W*([A-Za-z_µ%#/(). \-]*?[A-Za-z_)%.])\s*(?:[:=]|\s-\s|\t|,|;|\s{2,}|\s)\s*(.+?)\W*$")
_MARK = re.compile(
    r"^\s*(?:<<\s*(.+?)\s*>>|\[\s*(.+?)\s*\]|\$\s*([A-Za-z_ ]+?)\s*:?|[*=-]{3,}\s*(.*?)\s*[*=-]{3,})\s*$"
)
_CALIBRATION = re.compile(r"calib|energ", re.I)
_END = re.compile(r"\bend\b|^/", re.I)
_LIVE = re.compile(r"live|lebend|lifetime|\blt\b", re.I)
_REAL = re.compile(r"real|true|elapsed|clock|\brt\b", re.I)
_MILLI = re.compile(r"\bms\b|millisec", re.I)


@dataclass
class _Block:
    """Consecutive lines of numbers with the same number of columns."""

    first_line: int
    section: str
    header: list[str]
    rows: list[list[float]] = field(default_factory=list)


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
        raise InputError(name, f"the longest run of numbers holds {found}, too few for a spectrum",
                         f"at least {FEWEST_CHANNELS} channels are needed; a layout file can say where they are")  # fmt: skip
    table = _rectangular(block.rows)
    scale_from_points, said = _calibration(contents, block)
    live, real = _times(contents.statements)
    facts = _facts(contents.statements)
    spectra = []
    for column in _columns(name, table, block.header):
        counts, more = checked_counts(
            f"{name}, column {column.number}", column.counts, f"line {block.first_line} + row"
        )
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
                continue
            current = _Block(number, section, _cells(header))
            out.blocks.append(current)
        current.rows.append(numbers)
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
    match = _STATEMENT.match(body)
    if match:
        out.statements.setdefault(" ".join(match.group(1).lower().split()), match.group(2).strip().strip('"'))


def _cells(header: str) -> list[str]:
    body = header.strip().lstrip("#%*!").strip()
    separator = next((s for s in ("\t", ";", ",") if s in body), None)
    cells = body.split(separator) if separator else body.split()
    return [c.strip().strip('"') for c in cells]


def _rectangular(rows: list[list[float]]) -> NDArray[np.float64]:
    return np.array(rows, dtype=float)


@dataclass(frozen=True)
class _Column:
    number: int
    name: str
    counts: NDArray[np.float64]
    scale: EnergyScale | None
    said: tuple[str, ...]


def _columns(name: str, table: NDArray[np.float64], header: list[str]) -> list[_Column]:
    """Decide which columns are axes and which are counts."""
    n, width = table.shape
    names = header if len(header) == width else [""] * width
    if width == 1:
        return [_Column(1, "", table[:, 0], None, ())]
    axes = [axis_of(table[:, i], names[i]) for i in range(width)]
    if (
        width >= 4
        and width % 2 == 0
        and all(axes[i] is not None for i in range(0, width, 2))
        and not any(
            axes[i] is not None and axes[i].certain
            for i in range(1, width, 2)  # type: ignore[union-attr]
        )
    ):
        return [_column(i + 2, names[i + 1], table[:, i + 1], axes[i]) for i in range(0, width, 2)]
    leading = [i for i in range(min(2, width - 1)) if axes[i] is not None]
    if not leading and width > 4 and n * width >= FEWEST_CHANNELS and not any(names):
        return [_Column(1, "", table.ravel()[~np.isnan(table.ravel())], None, ("counts are read row by row",))]
    energy = next((axes[i] for i in reversed(leading) if axes[i] is not None and not axes[i].is_channel), None)  # type: ignore[union-attr]
    energy = energy or next((axes[i] for i in leading), None)
    found = [_column(i + 1, names[i], table[:, i], energy) for i in range(width) if i not in leading]
    return [c for c in found if not _is_error_or_rate(c, found)]


def _column(number: int, name: str, counts: NDArray[np.float64], axis: Axis | None) -> _Column:
    keep = ~np.isnan(counts)
    trailing = counts[: int(np.flatnonzero(keep)[-1]) + 1] if keep.any() else counts
    if axis is None:
        return _Column(number, name, trailing, None, ())
    return _Column(number, name, trailing, axis.scale, axis.said)


def _is_error_or_rate(column: _Column, all_columns: list[_Column]) -> bool:
    """Columns of uncertainties, backgrounds or fits beside counts are no spectra."""
    words = re.compile(r"err|sigma|uncert|backgr|\bfit\b|resid|rate|cps|\bstd\b", re.I)
    return len(all_columns) > 1 and bool(words.search(column.name))


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
            if 5e-4 < second < 0.5:
                quadratic = rest[0] if rest else 0.0
                return EnergyScale(first, second, quadratic), ["energy scale from the coefficients of the file"]
    gain = _first_number(contents.statements, r"gain|slope|per chan|channel width|xperchan|steigung")
    offset = _first_number(contents.statements, r"offset|intercept|zero")
    if gain is not None and gain > 0:
        factor = 1e-3 if gain > 0.5 else 1.0
        said = ["energy scale from the gain and offset stated in the file"]
        return EnergyScale((offset or 0.0) * (factor if abs(offset or 0.0) > 2 else 1.0), gain * factor), said
    return None, []


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
    from dataclasses import replace

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
