"""The journal: everything decided so far in a small file beside, so that a closed tab loses nothing.

It is written whole after every decision and found again by the counts of the spectrum, whatever the
file is called then.
"""

from __future__ import annotations

import hashlib
import json
import re
import tomllib
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from xrfid.errors import InputError, OutputError
from xrfid.instrument import Instrument
from xrfid.output import atomic_output
from xrfid.review.decisions import Decision, from_plain, to_plain
from xrfid.spectrum import Spectrum

SCHEMA = "xrfid.review-journal/1"
LARGEST_BYTES = 16 * 2**20
_NAME = re.compile(r"[^\W_][\w .+-]{0,79}")


@dataclass
class Journal:
    """What a person has done with one spectrum.

    `instrument` is the instrument in force; `trials` lists the what-ifs asked, each with its answer.
    """

    instrument: Instrument
    history: list[Decision] = field(default_factory=list)
    trials: list[dict[str, Any]] = field(default_factory=list)


def fingerprint(spectrum: Spectrum) -> str:
    """Return the SHA-256 of a spectrum's counts, by which its journal is known."""
    return hashlib.sha256(spectrum.counts.astype("<f8").tobytes()).hexdigest()


def checked_name(name: str) -> str:
    """Return a file name that may be used in the folder, without its ending.

    Raises
    ------
    InputError
        If it is anything but a plain name: no folders, no leading dot, nothing odd.
    """
    if not _NAME.fullmatch(name) or name.endswith((".", " ")):
        raise InputError("name", f"{name[:80]!r} cannot be used for a file",
                         "use letters, digits, spaces and . _ + - only, at most 80 of them")  # fmt: skip
    return name


def plain_name(text: str) -> str:
    """Return a usable file name made of what a spectrum is called."""
    made = re.sub(r"[^\w.+-]+", "_", text).strip("._+-")[:60].rstrip(".")
    return made or "spectrum"


def journal_path(folder: Path, spectrum: Spectrum) -> Path:
    """Return where the journal of a spectrum lies."""
    return folder / f"xrfid-review-{fingerprint(spectrum)[:16]}.journal.json"


def write_journal(folder: Path, spectrum: Spectrum, journal: Journal) -> None:
    """Write the journal; what was there before is replaced in one step.

    Raises
    ------
    OutputError
        If it cannot be written; what was there before is untouched.
    """
    document = {
        "schema": SCHEMA,
        "spectrum": spectrum.name,
        "sha256": fingerprint(spectrum),
        "instrument": journal.instrument.to_toml(),
        "history": [to_plain(d) for d in journal.history],
        "trials": journal.trials,
    }
    with atomic_output(journal_path(folder, spectrum), overwrite=True) as beside:
        beside.write_text(json.dumps(document, indent=1, ensure_ascii=False) + "\n", encoding="utf-8")


def read_journal(folder: Path, spectrum: Spectrum) -> Journal | None:
    """Read the journal of a spectrum; None if there is none.

    Raises
    ------
    InputError
        If there is one that cannot be read or is of something else; it is left alone.
    """
    path = journal_path(folder, spectrum)
    try:
        with path.open("rb") as handle:
            data = handle.read(LARGEST_BYTES + 1)
    except FileNotFoundError:
        return None
    except OSError as error:
        raise InputError(str(path), f"cannot be read ({error.strerror})", "make it readable or remove it") from None
    remedy = "rename it to begin anew"
    try:
        document = json.loads(data.decode("utf-8")) if len(data) <= LARGEST_BYTES else None
    except (ValueError, RecursionError):
        document = None
    if not isinstance(document, dict) or document.get("schema") != SCHEMA:
        raise InputError(str(path), "is no journal of a review", remedy)
    if document.get("sha256") != fingerprint(spectrum):
        raise InputError(str(path), "is the journal of another spectrum", remedy)
    history, trials, stated = (document.get(k) for k in ("history", "trials", "instrument"))
    if not isinstance(history, list) or not isinstance(trials, list) or not isinstance(stated, str):
        raise InputError(str(path), "is no whole journal", remedy)
    try:
        table = tomllib.loads(stated)
    except tomllib.TOMLDecodeError as error:
        raise InputError(str(path), f"its instrument is not valid TOML ({error})", remedy) from None
    return Journal(Instrument.from_table(table, str(path)), [from_plain(d, str(path)) for d in history],
                   [t for t in trials if isinstance(t, dict)])  # fmt: skip


def checked_folder(folder: Path) -> Path:
    """Return the folder for journals and saved results, made absolute.

    Raises
    ------
    OutputError
        If it is none.
    """
    if not folder.is_dir():
        raise OutputError(str(folder), "is no folder", "name a folder that exists")
    return folder.resolve()
