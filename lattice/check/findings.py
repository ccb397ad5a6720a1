"""Everything a check finds out about a state, before it is judged."""

from __future__ import annotations

from dataclasses import dataclass, field

from lattice.check.balances import Balance
from lattice.check.convergence import Band
from lattice.check.marching import MarchCheck
from lattice.check.periodicity import Periodicity
from lattice.check.refinement import Refinement
from lattice.check.residuals import Residuals
from lattice.check.resolution import AxisSpectrum
from lattice.check.sensitivity import Sensitivity


@dataclass(frozen=True)
class Findings:
    """What was measured.

    Parameters
    ----------
    levels : int
        Of the state's lattice.
    fluctuation : float
        Root mean square of the field about its means.
    foreign_law : str
        Why the file's law is not the one it names; empty where it is.
    flat : str
        Which phase the field lacks; empty where it has all.
    residuals, spectra, periodicity, balances
        Parts of the check that always run.
    march, sensitivity, refinement
        Parts that may be left out or fail; None then.
    march_failure, sensitivity_failure : str
        Why.
    march_result : str
        What a missing march means: "not run" where it was left out, "wide" where the law cannot be marched,
        "failed" where the slices blow up.
    correction : float
        Estimate of the field's discretisation error to first order, in units of the fluctuation.
    observables : dict of str to float
    bands : dict of str to Band
        From refinement; where there was none from the correction to first order.
    scales : dict of str to float
        Sizes that observables are measured against where they may vanish.
    single_march : float
        Mismatch of one march over the whole period; NaN where not asked for.
    """

    levels: int
    fluctuation: float
    foreign_law: str
    flat: str
    residuals: Residuals
    spectra: tuple[AxisSpectrum, ...]
    periodicity: Periodicity
    balances: tuple[Balance, ...]
    march: MarchCheck | None
    march_failure: str
    march_result: str
    sensitivity: Sensitivity | None
    sensitivity_failure: str
    correction: float
    refinement: Refinement | None
    observables: dict[str, float]
    bands: dict[str, Band] = field(default_factory=dict)
    scales: dict[str, float] = field(default_factory=dict)
    single_march: float = float("nan")
