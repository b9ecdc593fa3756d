"""P values of one family made safe against their number."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def holm(p_values: Floats) -> Floats:
    """P values adjusted by Holm's step-down method, in the order given.

    With the m known ones sorted, ``adjusted_i = max over j <= i of min(1, (m - j) p_j)``, j from 0.

    Parameters
    ----------
    p_values : (m,) array
        Between 0 and 1; NaN is no member of the family.

    Returns
    -------
    (m,) array
        NaN where there was NaN.

    Raises
    ------
    ValueError
        For a number outside 0 to 1.

    References
    ----------
    Holm, Scand. J. Stat. 6, 65 (1979); from memory.
    """
    p = np.asarray(p_values, dtype=np.float64)
    there = np.flatnonzero(np.isfinite(p))
    if np.any((p[there] < 0) | (p[there] > 1)):
        raise ValueError("p values must be between 0 and 1")
    order = there[np.argsort(p[there], kind="stable")]
    weights = len(order) - np.arange(len(order))
    adjusted = np.full(p.shape, np.nan)
    adjusted[order] = np.minimum(np.maximum.accumulate(weights * p[order]), 1.0)
    return adjusted
