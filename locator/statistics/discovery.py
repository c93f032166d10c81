"""The false-discovery rate, for exploration."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from locator.errors import StatisticsError


def false_discovery(p_values: ArrayLike) -> NDArray[np.float64]:
    """Adjust p values so that those below q hold at most a share q of false ones, on average.

    Parameters
    ----------
    p_values : array_like of float
        Uncorrected, in [0, 1]; NaN stays NaN and is not counted.

    Returns
    -------
    ndarray
        Adjusted p values, same shape.

    Raises
    ------
    StatisticsError
        If a value lies outside [0, 1].

    References
    ----------
    .. [1] Benjamini Y, Hochberg Y (1995). Controlling the false discovery rate. J R Stat Soc B
       57:289-300.

    Examples
    --------
    >>> false_discovery([0.01, 0.04, 0.03, 0.5]).round(4).tolist()
    [0.04, 0.0533, 0.0533, 0.5]
    """
    values = np.asarray(p_values, dtype=np.float64)
    adjusted = np.full(values.shape, np.nan)
    there = ~np.isnan(values)
    found = values[there]
    if ((found < 0) | (found > 1)).any():
        wrong = found[(found < 0) | (found > 1)][0]
        msg = f"A p value is {wrong:g}, outside 0 to 1 (false-discovery rate). Give p values."
        raise StatisticsError(msg)
    order = np.argsort(found, kind="stable")[::-1]
    rank = np.arange(len(found), 0, -1)
    scaled = np.minimum.accumulate(np.minimum(found[order] * len(found) / rank, 1.0))
    back = np.zeros_like(found)
    back[order] = scaled
    adjusted[there] = back
    return adjusted
