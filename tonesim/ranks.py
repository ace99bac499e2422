"""Influence told by ranks: correlation, regression, and what is beyond chance.

C. Spearman, "The proof and measurement of association between two things", American Journal of
Psychology 15, 1904; R. L. Iman, W. J. Conover, "The use of the rank transform in regression",
Technometrics 21(4), 1979.
"""

import numpy as np
import numpy.typing as npt
from scipy.stats import rankdata

Values = npt.NDArray[np.float64]

_BEYOND = 3.0  # standard deviations above chance that make an influence


def rank_correlations(x: npt.ArrayLike, y: npt.ArrayLike) -> Values:
    """Spearman's rank correlation of each column with a quantity; ties have their mean rank.

    Parameters
    ----------
    x : (builds, parts) array_like
    y : (builds,) array_like

    Returns
    -------
    (parts,) ndarray
        Zero where either side is the same in all builds.
    """
    a, b = _ranks(x), _ranks(np.asarray(y, dtype=float)[:, None])
    size = np.sqrt(np.sum(a**2, axis=0) * np.sum(b**2))
    return np.asarray(np.where(size > 0.0, (a.T @ b)[:, 0] / np.where(size > 0.0, size, 1.0), 0.0))


def rank_regression(x: npt.ArrayLike, y: npt.ArrayLike) -> float | None:
    """Share of a quantity's variance in ranks that all columns' ranks explain linearly.

    Adjusted for the number of columns that vary, 1 - (1 - R²)(n - 1)/(n - k - 1).

    Parameters
    ----------
    x : (builds, parts) array_like
    y : (builds,) array_like

    Returns
    -------
    float or None
        From 0 to 1; None with fewer than twice as many builds as columns, or nothing to explain.
    """
    a, b = _ranks(x), _ranks(np.asarray(y, dtype=float)[:, None])[:, 0]
    a = a[:, np.any(a != 0.0, axis=0)]
    n, k = a.shape
    if n < 2 * k + 2 or not np.any(b):
        return None
    left = b - a @ np.linalg.lstsq(a, b, rcond=None)[0] if k else b
    unexplained = float(left @ left / (b @ b))
    return float(max(1.0 - unexplained * (n - 1) / (n - k - 1), 0.0))


def _ranks(x: npt.ArrayLike) -> Values:
    """Ranks of each column about their mean."""
    ranks: Values = rankdata(np.asarray(x, dtype=float), axis=0)
    return np.asarray(ranks - ranks.mean(axis=0))


def beyond_chance(share: float, parts: int, chance: float) -> bool:
    """Whether a sum of squared rank correlations is beyond that of parts without influence.

    Theirs, over `chance`, are nearly chi-squared with one degree of freedom each: mean 1,
    variance 2.

    Parameters
    ----------
    share : float
        The sum.
    parts : int
        How many are summed.
    chance : float
        What a part without influence has on average, 1/(builds - 1).
    """
    return bool(share > chance * (parts + _BEYOND * np.sqrt(2.0 * parts)))
