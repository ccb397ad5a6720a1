"""The verdict: criteria, each with its value, its threshold and the reason, and what they add up to."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

from lattice.check.statistics import CORRELATION
from lattice.check.thresholds import Thresholds

if TYPE_CHECKING:
    from lattice.check.convergence import Band
    from lattice.check.findings import Findings

PASSED, WIDE, FAILED, NOT_RUN = "passed", "wide", "failed", "not run"
CERTIFIED, CERTIFIED_WIDE, REFUSED = "certified", "certified with wide bands", "not certified"


@dataclass(frozen=True)
class Criterion:
    """One thing a certificate asks for.

    Parameters
    ----------
    name : str
    result : str
        "passed", "wide", "failed" or "not run".
    value : float
        NaN where the criterion is no number.
    threshold : float
        Largest value that passes; NaN where there is none.
    why : str
        In words.
    """

    name: str
    result: str
    value: float
    threshold: float
    why: str


def judge(findings: Findings, thresholds: Thresholds) -> tuple[Criterion, ...]:
    """Return every criterion, judged."""
    judged = _Judge(findings, thresholds)
    return tuple(criterion for part in judged.parts() for criterion in part)


def verdict(criteria: tuple[Criterion, ...]) -> str:
    """Return what the criteria add up to.

    A criterion that failed, or that was not run, refuses the certificate; one that is only wide weakens it.
    """
    results = {criterion.result for criterion in criteria}
    if results & {FAILED, NOT_RUN}:
        return REFUSED
    return CERTIFIED_WIDE if WIDE in results else CERTIFIED


class _Judge:
    def __init__(self, findings: Findings, thresholds: Thresholds) -> None:
        self.found, self.limits = findings, thresholds

    def parts(self) -> Iterator[Iterator[Criterion]]:
        """Yield the criteria of every part of the check."""
        yield self._law()
        yield self._residuals()
        yield self._sensitivity()
        yield self._periodicity()
        yield self._resolution()
        yield self._balances()
        yield self._march()
        yield self._refinement()

    def _number(self, name: str, value: float, limit: str, why: str, place: str = "") -> Criterion:
        """Judge a number by a threshold and, where there is one, by its wide one."""
        threshold = getattr(self.limits, limit)
        wide = getattr(self.limits, f"{limit}_wide", threshold)
        result = PASSED if value <= threshold else WIDE if value <= wide else FAILED
        where = f" ({place})" if place else ""
        if result == PASSED:
            text = f"{why}{where} is at most {threshold:g}"
        else:
            text = f"{why}{where} must be at most {wide if result == FAILED else threshold:g}"
        return Criterion(name, result, value, threshold, text)

    def _law(self) -> Iterator[Criterion]:
        other = self.found.foreign_law
        yield Criterion(
            "law",
            FAILED if other else PASSED,
            math.nan,
            math.nan,
            other or "the equations are those of the law that the file names",
        )

    def _residuals(self) -> Iterator[Criterion]:
        residuals = self.found.residuals
        worst = max(residuals.equations, key=lambda e: e.relative)
        why = f"residual of the equation of {worst.component} in units of its largest term"
        yield self._number("residual", worst.relative, "residual", why, worst.term)
        worst = max(residuals.equations, key=lambda e: e.truncation)
        why = f"residual of the equation of {worst.component} with exact derivatives"
        yield self._number("truncation", worst.truncation, "truncation", why, "in units of its largest term")

    def _sensitivity(self) -> Iterator[Criterion]:
        sensitivity = self.found.sensitivity
        if sensitivity is None:
            yield Criterion("sensitivity", NOT_RUN, math.nan, math.nan, self.found.sensitivity_failure)
            return
        size = self.found.fluctuation or 1.0
        why = "linear bound of the field's error in units of its fluctuation"
        yield self._number("error_bound", sensitivity.error_bound / size, "error_bound", why)
        if math.isfinite(self.found.correction):
            why = "discretisation error to first order in units of the fluctuation"
            yield self._number("correction", self.found.correction, "correction", why)

    def _periodicity(self) -> Iterator[Criterion]:
        found = self.found.periodicity
        steady = found.kind in ("constant", "steady", "travelling")
        if found.kind == "constant":
            result, why = FAILED, "the field is constant: there is nothing to certify"
        elif found.repeat_text:
            result = FAILED
            why = f"{found.repeat_text}; check the smallest state, whose bands serve both"
        elif steady and self.found.levels > 1:
            result = FAILED
            why = f"{found.text}, dressed as periodic: solve it with lattice.nt = 1 and check that"
        else:
            result, why = PASSED, found.text
        yield Criterion("periodicity", result, math.nan, math.nan, why)
        if self.found.flat and not steady:
            yield Criterion("phases", FAILED, math.nan, math.nan, self.found.flat)

    def _resolution(self) -> Iterator[Criterion]:
        spectra = self.found.spectra
        worst = max(spectra, key=lambda s: s.last_third, default=None)
        if worst is None:
            return
        why = f"share of {worst.component}'s energy in the last third of the wavenumbers of {worst.axis}"
        yield self._number("resolution", worst.last_third, "tail", why)
        worst = max(spectra, key=lambda s: s.unrepresented)
        why = f"share of {worst.component}'s energy that the differences in {worst.axis} cannot represent"
        yield self._number("representation", worst.unrepresented, "unrepresented", why)

    def _balances(self) -> Iterator[Criterion]:
        conserved = [b for b in self.found.balances if b.origin == "conserved"]
        if conserved:
            worst = max(conserved, key=lambda b: b.error)
            why = f"wandering of the {worst.name} in units of the field"
            yield self._number("conserved means", worst.error, "conserved", why)
        others = [b for b in self.found.balances if b.origin != "conserved"]
        if others:
            worst = max(others, key=lambda b: b.error)
            why = f"relative difference of gain and loss, {worst.name}"
            yield self._number("balances", worst.error, "balance", why)

    def _march(self) -> Iterator[Criterion]:
        march = self.found.march
        if march is None:
            yield Criterion("march", self.found.march_result, math.nan, math.nan, self.found.march_failure)
            return
        why = f"largest mismatch of {len(march.mismatches)} marched segments in units of the fluctuation"
        judged = self._number("march", march.largest, "march", why)
        yield judged
        if march.marcher_error > 0.1 * max(march.largest, self.limits.march):
            text = f"the marcher's own error, {march.marcher_error:.1e}, is not small beside the mismatch"
            yield Criterion("marcher", FAILED, march.marcher_error, self.limits.march, text)

    def _refinement(self) -> Iterator[Criterion]:
        found = self.found.refinement
        if found is None or not found.levels:
            why = "the state was not solved again on finer lattices, and may exist on this one only"
            yield Criterion("refinement", NOT_RUN, math.nan, math.nan, why)
            return
        lost = next((level for level in found.levels if not level.converged), None)
        if lost is not None:
            nodes = " x ".join(str(n) for n in lost.shape if n > 1)
            if lost.interrupted:
                why = f"refinement to {nodes} nodes was {lost.reason}"
                yield Criterion("refinement", NOT_RUN, lost.residual_rms, math.nan, why)
                return
            why = f"the state did not survive refinement to {nodes} nodes: {lost.reason}"
            yield Criterion("refinement", FAILED, lost.residual_rms, math.nan, why)
            return
        why = "distance of the refined field from the one carried over"
        yield self._number("refinement", found.distance, "moved", why, "in units of the fluctuation")
        yield self._orders()
        yield self._bands()

    def _orders(self) -> Criterion:
        seen = [b for b in self._judged().values() if b.kind != "exact"]
        # Errors that cancel by chance show any order; where the widened band is narrow, it does no harm.
        odd = [b for b in seen if not b.near_nominal and self._relative(b.name) > 0.1 * self.limits.band]
        if not odd:
            nominal = next((b.nominal for b in seen), math.nan)
            return Criterion("order", PASSED, math.nan, nominal, "observables converge at the nominal order")
        order = odd[0].order
        shown = "no order" if order is None else f"order {order:.2g}"
        names = ", ".join(b.name for b in odd[:4]) + (" .." if len(odd) > 4 else "")
        why = f"{names}: {shown} instead of {odd[0].nominal:g} ({odd[0].kind}); their bands are widened"
        return Criterion("order", WIDE, math.nan if order is None else order, odd[0].nominal, why)

    def _bands(self) -> Criterion:
        worst = max(self._judged(), key=self._relative)
        why = f"half width of the band of {worst}, relative to its size,"
        return self._number("bands", self._relative(worst), "band", why)

    def _judged(self) -> dict[str, Band]:
        """Return the bands that the verdict depends on."""
        bands = self.found.refinement.bands if self.found.refinement else {}
        return {name: band for name, band in bands.items() if not name.startswith(CORRELATION)}

    def _relative(self, name: str) -> float:
        assert self.found.refinement is not None
        band = self.found.refinement.bands[name]
        size = max(abs(band.value), self.found.scales.get(name, 0.0))
        return band.half / size if size > 0.0 else (0.0 if band.half == 0.0 else math.inf)
