"""How sure a share of members is."""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy.special import betaincinv

__all__ = ["probability_interval"]


def probability_interval(hits: Any, trials: Any) -> tuple[np.ndarray, np.ndarray]:
    """Central 90 % interval of a probability from hits in trials (Jeffreys' prior).

    Parameters
    ----------
    hits, trials : array_like
        Counts; trials may be a fractional effective number.

    Returns
    -------
    tuple of ndarray
        5 % and 95 % quantiles of the Beta(hits + ½, trials − hits + ½) posterior; the lower is 0
        without a hit and the upper 1 without a miss.
    """
    k = np.asarray(hits, dtype=float)
    n = np.asarray(trials, dtype=float)
    lower = np.where(k <= 0.0, 0.0, betaincinv(k + 0.5, n - k + 0.5, 0.05))
    upper = np.where(k >= n, 1.0, betaincinv(k + 0.5, n - k + 0.5, 0.95))
    missing = np.isnan(k)
    return np.where(missing, np.nan, lower), np.where(missing, np.nan, upper)
