"""The certificate: everything measured and judged, as a record and as JSON."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING, Any

from lattice.check.verdict import Criterion, verdict
from lattice.store.statemeta import plain
from lattice.store.versions import versions

if TYPE_CHECKING:
    from lattice.check.findings import Findings
    from lattice.check.thresholds import Thresholds
    from lattice.store.statemeta import StateMeta

FORMAT = 1
CAUTION = (
    "A certificate is about the law as written and its discretised equations: it says how near this state "
    "is to a solution of that law. It says nothing about the plant: whether the law describes an evaporator, "
    "within which range, and whether such a state occurs there, is for measurements and licensed "
    "engineering practice. Base no design decision on a certificate alone."
)


@dataclass(frozen=True)
class Certificate:
    """What may be said of a state.

    Parameters
    ----------
    verdict : str
        "certified", "certified with wide bands" or "not certified".
    criteria : tuple of Criterion
    findings : Findings
    record : dict
        Everything as plain data, as it is stored and printed by `--json`.
    note : str
        What became of it in the state file.
    """

    verdict: str
    criteria: tuple[Criterion, ...]
    findings: Findings
    record: dict[str, Any]
    note: str = ""

    @property
    def reasons(self) -> tuple[str, ...]:
        """Why the state is not certified, or only with wide bands."""
        return tuple(c.why for c in self.criteria if c.result != "passed")


def make_certificate(
    meta: StateMeta,
    findings: Findings,
    criteria: tuple[Criterion, ...],
    thresholds: Thresholds,
    inputs: Mapping[str, str],
    seconds: Mapping[str, float],
    ranks: int,
    written: str,
) -> Certificate:
    """Return the certificate of findings that have been judged."""
    found = verdict(criteria)
    record = {
        "format": FORMAT,
        "verdict": found,
        "criteria": [asdict(criterion) for criterion in criteria],
        "thresholds": asdict(thresholds),
        "law": meta.law,
        "equations": list(meta.text),
        "scalars": dict(meta.values),
        "lattice": asdict(meta.lattice),
        "inputs": dict(inputs),
        "bands": {name: asdict(band) for name, band in findings.bands.items()},
        "findings": _without_spectra(findings),
        "seconds": dict(seconds),
        "ranks": ranks,
        "versions": versions(),
        "written": written,
        "caution": CAUTION,
    }
    return Certificate(found, criteria, findings, plain(record))


def _without_spectra(findings: Findings) -> dict[str, Any]:
    """Return findings as plain data; of the spectra only what is judged."""
    record = asdict(findings)
    record["spectra"] = [
        {
            "component": s.component,
            "axis": s.axis,
            "last_third": s.last_third,
            "unrepresented": s.unrepresented,
            "limit": s.limit,
            "modes": len(s.energy),
            "modes_beyond": s.modes_beyond,
        }
        for s in findings.spectra
    ]
    del record["bands"]
    return record


def to_json(certificate: Certificate) -> str:
    """Return the certificate as JSON."""
    return json.dumps(certificate.record, indent=2, allow_nan=False, ensure_ascii=False) + "\n"
