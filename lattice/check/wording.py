"""A certificate in words, for a terminal."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterator
from typing import TYPE_CHECKING

from lattice.check.certificate import CAUTION
from lattice.check.verdict import CERTIFIED, FAILED, REFUSED, Criterion

if TYPE_CHECKING:
    from lattice.check.certificate import Certificate
    from lattice.check.findings import Findings

COLUMNS, LABEL = 100, 26


def to_text(certificate: Certificate) -> str:
    """Return the certificate for a terminal, at most 100 columns wide."""
    found = certificate.findings
    sections = [
        [f"verdict: {certificate.verdict.upper()}", *_reasons(certificate)],
        list(_criteria(certificate.criteria)),
        list(_residuals(found)),
        list(_spectra(found)),
        list(_others(found)),
        list(_levels(found)),
        list(_bands(found)),
    ]
    text = "\n\n".join("\n".join(section) for section in sections if section)
    caution = textwrap.fill(CAUTION, COLUMNS, initial_indent="Caution: ", subsequent_indent="         ")
    return f"{text}\n\n{caution}\n"


def _reasons(certificate: Certificate) -> list[str]:
    if certificate.verdict == CERTIFIED:
        return []
    shown = [c for c in certificate.criteria if c.result != "passed"]
    if certificate.verdict == REFUSED:
        shown = [c for c in shown if c.result == FAILED] or shown
    return [
        line
        for c in shown
        for line in textwrap.wrap(
            f"{c.name}: {c.why}", COLUMNS, initial_indent="  because ", subsequent_indent="          "
        )
    ]


def _criteria(criteria: tuple[Criterion, ...]) -> Iterator[str]:
    yield f"{'criterion':<18}{'result':<9}{'value':>11}{'threshold':>11}  what"
    for c in criteria:
        lines = textwrap.wrap(c.why, COLUMNS - 51) or [""]
        yield f"{c.name:<18}{c.result:<9}{_short(c.value):>11}{_short(c.threshold):>11}  {lines[0]}"
        for line in lines[1:]:
            yield f"{'':<51}{line}"


def _residuals(found: Findings) -> Iterator[str]:
    r = found.residuals
    orders = " x ".join(str(o) for o in dict.fromkeys(r.orders))
    yield f"residuals           rms        largest    largest term            at order {orders}   exact"
    for e in r.equations:
        term = f"{e.term_rms:.2e} {e.term}"
        yield (
            f"  {e.component:<16}{e.rms:>9.2e}  {e.largest:>9.2e}    {term:<24.24}{e.raised_rms:>9.2e}"
            f"  {e.exact_rms:>9.2e}"
        )


def _spectra(found: Findings) -> Iterator[str]:
    yield "resolution          last third  beyond limit  limit      wavenumbers beyond it"
    for s in found.spectra:
        name = f"{s.component} along {s.axis}"
        yield (
            f"  {name:<18}{s.last_third:>9.1e}  {s.unrepresented:>9.1e}     {s.limit:<9.4g}"
            f"  {s.modes_beyond} of {len(s.energy)}"
        )


def _others(found: Findings) -> Iterator[str]:
    yield from _row("kind", found.periodicity.text)
    for line in found.periodicity.symmetries:
        yield from _row("", line)
    for b in found.balances:
        if b.origin == "conserved":
            yield from _row(b.name, f"wanders by {b.error:.1e} of the field from level to level")
        else:
            text = f"loss/gain {b.computed_to_expected:.8f}, expected 1 ({b.origin})"
            yield from _row(f"balance, {b.name}", text)
    if found.sensitivity is not None:
        s = found.sensitivity
        settled = "" if s.settled and s.exact else ", an upper bound: the iteration was stopped early"
        yield from _row("sensitivity", f"sigma_min {s.smallest[0]:.3e}{settled};")
        factor = "" if s.settled and s.exact else "3 "
        yield from _row("", f"|du| <= {factor}|R|/sigma_min = {s.error_bound:.1e} rms, a linear estimate")
    if math.isfinite(found.correction):
        text = f"error about {found.correction:.1e} of the fluctuation, to first order"
        yield from _row("discretisation", text)
    yield from _marches(found)


def _marches(found: Findings) -> Iterator[str]:
    m = found.march
    if m is None:
        yield from _row("march", found.march_failure)
        return
    segments = f"{len(m.mismatches)} segments of up to {m.levels} levels (time {m.time:.3g})"
    if found.levels == 1:
        segments = f"over a time of {m.time:.3g}"
    growth = f"errors grow {m.largest_growth:.2f}-fold (local rate {m.rate:.2g})"
    error = f"the marcher's own error is {m.marcher_error:.1e}"
    if math.isfinite(found.correction):
        explained = (1.0 + m.largest_growth) * found.correction
        error += f", the discretisation error explains up to {explained:.1e}"
    yield from _row("march", f"{segments}: mismatch {m.largest:.1e}, {growth}; {error}")
    if math.isfinite(found.single_march):
        yield from _row("single march", f"one march over the period misses by {found.single_march:.1e}")


def _row(label: str, text: str) -> Iterator[str]:
    """Yield a labelled line, wrapped below its own start."""
    for k, line in enumerate(textwrap.wrap(text, COLUMNS - LABEL, break_on_hyphens=False) or [""]):
        yield f"{label if k == 0 else '':<{LABEL}}{line}".rstrip()


def _levels(found: Findings) -> Iterator[str]:
    if found.refinement is None:
        return
    yield "refinement          nodes                residual    moved by   Newton steps   seconds"
    for level in found.refinement.levels:
        nodes = " x ".join(str(n) for n in level.shape if n > 1)
        yield (
            f"                    {nodes:<18}{level.residual_rms:>11.1e}{level.distance:>12.1e}"
            f"{level.newton_steps:>11}{level.seconds:>14.1f}"
        )


def _bands(found: Findings) -> Iterator[str]:
    if not found.bands:
        return
    how = "refinement" if found.refinement and found.refinement.bands else "the correction to first order"
    yield f"observables, bands from {how}"
    yield f"  {'':<27}{'value on its lattice':<21}{'band (+-)':<12}{'extrapolated':<18}{'band (+-)':<11}order"
    for b in found.bands.values():
        order = b.kind if b.order is None else f"{b.order:.2f}" + ("" if b.near_nominal else f" {b.kind}")
        own, best = f"{b.value:<21.11g}{b.half:<12.2e}", f"{b.best:<18.11g}{b.best_half:<11.2e}"
        yield f"  {b.name:<27}{own}{best}{order}"


def _short(value: float) -> str:
    return "-" if not math.isfinite(value) else f"{value:.2e}"
