"""A check from the state file to the certificate."""

from __future__ import annotations

import os
import time
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from lattice.check.balances import measure_balances
from lattice.check.certificate import Certificate, make_certificate
from lattice.check.convergence import Band, band_of_correction
from lattice.check.failures import own_failure
from lattice.check.findings import Findings
from lattice.check.fourier import Fourier
from lattice.check.marching import MarchCheck, march_check, single_march
from lattice.check.observables import Named, measure, measure_with, read_named
from lattice.check.periodicity import measure_periodicity
from lattice.check.refinement import Refinement, nominal_order, refine, scale_of
from lattice.check.residuals import Residuals, measure_residuals
from lattice.check.resolution import measure_resolution
from lattice.check.sensitivity import (
    Correction,
    Inverse,
    Sensitivity,
    discretisation_error,
    smallest_singular_values,
    start_vector,
)
from lattice.check.subject import Subject, foreign_law, open_subject
from lattice.check.thresholds import Thresholds
from lattice.check.verdict import FAILED, NOT_RUN, REFUSED, WIDE, Criterion, judge
from lattice.errors import InputError, LatticeError
from lattice.job.schema import SolveSection
from lattice.solve.petsc import start_petsc
from lattice.solve.stop import StopFlag
from lattice.starts.streaming import on_root
from lattice.store.certificates import attach_certificate, input_checksums, read_certificate

if TYPE_CHECKING:
    from mpi4py import MPI

Report = Callable[[str], None]
T = TypeVar("T")
SLOW = ("sensitivity", "march", "single march")
"""Parts whose begin is told, too."""


@dataclass(frozen=True)
class CheckOptions:
    """What a check does.

    Parameters
    ----------
    refinements : int
        Refined lattices; 0 solves nothing, and certifies nothing.
    factor : float
        Of nodes from lattice to lattice, in every axis.
    observables : tuple of str
        The user's own, each `name=formula`.
    thresholds : Thresholds
    preconditioner : str
        Of the linear solves, as in a job file.
    march : bool
        Whether the slices are marched.
    single_march : bool
        Whether one march over the whole period is made, too.
    everything : bool
        Refine also a state that is refused already.
    store : bool
        Whether the certificate is written into the state file.
    """

    refinements: int = 2
    factor: float = 1.4
    observables: tuple[str, ...] = ()
    thresholds: Thresholds = field(default_factory=Thresholds)
    preconditioner: str = "auto"
    march: bool = True
    single_march: bool = False
    everything: bool = False
    store: bool = True


def check_state(
    path: str | os.PathLike[str], comm: MPI.Intracomm, options: CheckOptions, report: Report
) -> Certificate:
    """Check a stored state and return its certificate.

    Collective.

    Parameters
    ----------
    path : path-like
        The state file; the certificate is written into it unless the options say no.
    comm : MPI.Intracomm
    options : CheckOptions
    report : callable
        Takes lines of progress; silent on all ranks but one.

    Raises
    ------
    LatticeError
        If the file cannot be used or written.
    """
    start_petsc([])
    with StopFlag(comm) as stop:
        return _Check(Path(path), comm, options, report, stop).run()


class _Check:
    """The parts of a check, one after the other."""

    def __init__(
        self, path: Path, comm: MPI.Intracomm, options: CheckOptions, report: Report, stop: StopFlag
    ) -> None:
        self.path, self.comm, self.options, self.report, self.stop = path, comm, options, report, stop
        self.seconds: dict[str, float] = {}

    def run(self) -> Certificate:
        """Go through all parts."""
        inputs = on_root(self.comm, lambda: input_checksums(self.path))
        self.subject = self._timed("reading", lambda: open_subject(self.path, self.comm))
        self.named = read_named(self.subject.law, self.options.observables)
        findings, criteria = self._findings()
        certificate = make_certificate(
            self.subject.meta,
            findings,
            criteria,
            self.options.thresholds,
            inputs,
            self.seconds,
            self.comm.size,
            datetime.now(UTC).isoformat(timespec="seconds"),
        )
        self.subject.destroy()
        note = on_root(self.comm, lambda: self._keep(certificate)) if self.options.store else ""
        return replace(certificate, note=note)

    def _keep(self, certificate: Certificate) -> str:
        """Write the certificate into the state file, on one rank; tell what was done.

        A check without refinement that finds nothing wrong does not replace one with refinement.
        """
        stored = read_certificate(self.path)
        quick = self.options.refinements == 0 and not any(c.result == FAILED for c in certificate.criteria)
        if quick and stored is not None and stored.valid and stored.record.get("verdict") != REFUSED:
            return f"{self.path} keeps its certificate of {stored.record.get('written')}."
        attach_certificate(self.path, certificate.record)
        return f"The certificate is kept in {self.path}, and holds until the state changes."

    def _timed(self, name: str, work: Callable[[], T]) -> T:
        began = time.perf_counter()
        if name in SLOW:
            self.report(f"{name} ..")
        result = work()
        self.seconds[name] = time.perf_counter() - began
        self.report(f"{name}: {self.seconds[name]:.2f} s")
        return result

    def _findings(self) -> tuple[Findings, tuple[Criterion, ...]]:
        subject = self.subject
        fourier = self._timed("transforms", lambda: self._fourier(subject))
        residuals, exact = self._timed("residuals", lambda: measure_residuals(subject, fourier))
        spectra = self._timed("resolution", lambda: measure_resolution(fourier, subject.owned))
        balances = self._timed("balances", lambda: measure_balances(subject, fourier))
        periodicity = self._timed("periodicity", lambda: measure_periodicity(subject))
        own = self._timed(
            "observables",
            lambda: measure_with(fourier, subject.system, subject.owned, subject.values, self.named),
        )
        fourier.destroy()
        sensitivity, correction, failure = self._timed("sensitivity", lambda: self._linear(residuals, exact))
        march, march_failure, march_result = self._timed("march", self._march)
        single = float("nan")
        if self.options.single_march and march is not None:
            single = self._timed("single march", lambda: single_march(subject))
        scales = {name: scale_of(name, subject, own) for name in own}
        found = Findings(
            levels=subject.lattice.nt,
            fluctuation=_fluctuation(subject),
            foreign_law=foreign_law(subject.meta),
            flat=subject.flat,
            residuals=residuals,
            spectra=spectra,
            periodicity=periodicity,
            balances=balances,
            march=march,
            march_failure=march_failure,
            march_result=march_result,
            sensitivity=sensitivity,
            sensitivity_failure=failure,
            correction=correction.relative if correction else float("nan"),
            refinement=None,
            observables=own,
            bands=self._first_order(own, correction, scales),
            scales=scales,
            single_march=single,
        )
        return self._refined(found)

    def _fourier(self, subject: Subject) -> Fourier:
        return Fourier(subject.law, subject.system.blocks, subject.owned, subject.values)

    def _solve_options(self) -> SolveSection:
        return SolveSection(preconditioner=self.options.preconditioner, newton_steps=15)

    def _linear(self, residuals: Residuals, exact: Any) -> tuple[Sensitivity | None, Correction | None, str]:
        """Return the sensitivity and the correction to first order, or why there are none."""
        inverse: Inverse | None = None
        sensitivity = correction = None
        failure = ""
        try:
            inverse = self._inverse()
            correction = discretisation_error(self.subject, inverse, exact)
            start = start_vector(self.subject, correction.owned)
            sensitivity = smallest_singular_values(inverse, residuals.rms, start)
            start.destroy()
        except Exception as error:  # noqa: BLE001 - PETSc wraps the failures of a callback
            failure = f"the Jacobian at the state cannot be solved with: {own_failure(error)}"
        if inverse is not None:
            inverse.destroy()
        return sensitivity, correction, failure

    def _inverse(self) -> Inverse:
        """Return solves with the Jacobian; by LU where the preconditioner of choice refuses the lattice."""
        options = self._solve_options()
        try:
            return Inverse(self.subject, options, self.report)
        except InputError as error:
            if options.preconditioner != "auto":
                raise
            self.report(f"by LU instead: {error}")
        return Inverse(self.subject, options.model_copy(update={"preconditioner": "direct"}), self.report)

    def _march(self) -> tuple[MarchCheck | None, str, str]:
        """Return the march, or why there is none and what that means."""
        if not self.options.march:
            return None, "the slices were not marched", NOT_RUN
        try:
            return march_check(self.subject), "", ""
        except InputError as error:
            return None, f"the law cannot be marched: {error}", WIDE
        except LatticeError as error:
            return None, f"the slices cannot be marched: {error}", FAILED

    def _first_order(
        self, own: dict[str, float], correction: Correction | None, scales: dict[str, float]
    ) -> dict[str, Band]:
        """Return the bands that the correction to first order gives."""
        subject = self.subject
        if correction is None or not np.isfinite(correction.relative) or correction.relative > 1.0:
            return {}
        moved = subject.owned + correction.owned
        corrected = measure(subject.system, moved, correction.values, self.named)
        nominal = nominal_order(subject.lattice)
        return {
            name: band_of_correction(
                name, value, corrected[name], nominal, 1e-12 * max(scales[name], abs(value))
            )
            for name, value in own.items()
        }

    def _refined(self, found: Findings) -> tuple[Findings, tuple[Criterion, ...]]:
        """Refine the state unless it is refused already; return everything, judged."""
        criteria = judge(found, self.options.thresholds)
        refused = any(criterion.result == FAILED for criterion in criteria)
        if self.options.refinements == 0:
            return found, criteria
        if refused and not self.options.everything:
            self.report("refinement: left out, the state is refused already")
            return found, criteria
        refinement = self._timed("refinement", lambda: self._refine(found))
        found = replace(found, refinement=refinement, bands=refinement.bands or found.bands)
        return found, judge(found, self.options.thresholds)

    def _refine(self, found: Findings) -> Refinement:
        sensitivity = found.sensitivity
        per_residual = 1.0 / sensitivity.smallest[0] if sensitivity and sensitivity.smallest else 1.0
        named: tuple[Named, ...] = self.named
        return refine(
            self.subject,
            found.observables,
            per_residual,
            named,
            self.options.factor,
            self.options.refinements,
            self._solve_options(),
            self.report,
            self.stop,
            max(e.term_rms for e in found.residuals.equations),
        )


def _fluctuation(subject: Subject) -> float:
    means = np.array([subject.system.means[c] for c in subject.law.components])
    local = float(((subject.owned - means) ** 2).sum())
    return float(np.sqrt(subject.comm.allreduce(local) / subject.lattice.nodes))
