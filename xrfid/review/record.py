"""The reviewed result, schema "xrfid.review/1": who decided what, when and why, beside the automatic verdict."""

from __future__ import annotations

import json
from typing import Any

from xrfid import __version__
from xrfid.identify.result import Identification, Verdict
from xrfid.report.document import to_document
from xrfid.review.decisions import in_force, now, to_plain
from xrfid.review.journal import Journal, fingerprint
from xrfid.spectrum import Spectrum

SCHEMA = "xrfid.review/1"


def to_record(spectrum: Spectrum, identification: Identification, journal: Journal, by: str) -> str:
    """Return the record as JSON text.

    Its `elements` have one entry for every finding and every decision: the automatic verdict as it
    is now, and the decision in force or null. `history` holds all decisions, those taken back as
    well; `trials` the what-ifs that were asked; `identification` the unchanged automatic document.
    """
    document = {
        "schema": SCHEMA,
        "saved_by": by.strip(),
        "saved_at": now(),
        "program": f"xrfid {__version__}",
        "spectrum": {"name": spectrum.name, "counts_sha256": fingerprint(spectrum)},
        "instrument": journal.instrument.to_toml(),
        "elements": _elements(identification, journal),
        "history": [to_plain(d) for d in journal.history],
        "trials": journal.trials,
        "identification": to_document(identification),
    }
    return json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def _elements(identification: Identification, journal: Journal) -> list[dict[str, Any]]:
    decisions = in_force(journal.history)
    verdicts = {f.element: (f.verdict, f.reason) for f in identification.findings}
    for element in decisions:
        limits = {x.verdict for x in identification.limits if x.element == element}
        other = Verdict.NOT_DETECTED if Verdict.NOT_DETECTED in limits else Verdict.OUT_OF_REACH
        verdicts.setdefault(element, (other, ""))
    return [
        {
            "element": element,
            "automatic": str(verdict),
            "reason": reason,
            "decision": to_plain(decisions[element]) if element in decisions else None,
        }
        for element, (verdict, reason) in verdicts.items()
    ]
