"""A success rate with its confidence interval."""

from __future__ import annotations

from math import sqrt
from statistics import NormalDist

CONFIDENCE = 0.95


def wilson_interval(successes: int, trials: int, confidence: float = CONFIDENCE) -> tuple[float, float]:
    """Return the ends of Wilson's score interval of a proportion, without continuity correction.

    Parameters
    ----------
    successes, trials : int
        At least 0 of at least 0; without any trial nothing is known, and the interval is 0 to 1.
    confidence : float
        Between 0 and 1.

    References
    ----------
    .. [1] E. B. Wilson, "Probable inference, the law of succession, and statistical inference",
       J. Am. Stat. Assoc. 22 (1927), 209-212.

    Examples
    --------
    >>> low, high = wilson_interval(81, 263)
    >>> round(low, 4), round(high, 4)
    (0.2553, 0.3662)
    """
    if trials == 0:
        return 0.0, 1.0
    z = NormalDist().inv_cdf(0.5 + confidence / 2.0)
    p, share = successes / trials, z * z / trials
    middle = (p + share / 2.0) / (1.0 + share)
    half = z / (1.0 + share) * sqrt(p * (1.0 - p) / trials + share / (4.0 * trials))
    low = 0.0 if successes == 0 else middle - half
    high = 1.0 if successes == trials else middle + half
    return low, high
