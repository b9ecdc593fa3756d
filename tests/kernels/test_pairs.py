from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from glidefit.kernels.pairs import pairs_at_lag

tracks = st.lists(
    st.sets(st.integers(0, 30), min_size=1, max_size=12).map(sorted), min_size=1, max_size=6
)


def pairs_one_by_one(paths, lags):
    rows, found = 0, []
    for path, lag in zip(paths, lags, strict=True):
        found += [
            (rows + i, rows + path.index(frame + lag))
            for i, frame in enumerate(path)
            if frame + lag in path
        ]
        rows += len(path)
    return found


@given(tracks, st.data())
def test_pairs_are_those_of_a_search_one_by_one(paths, data):
    lags = data.draw(
        st.lists(st.integers(1, 12), min_size=len(paths), max_size=len(paths)), label="lags"
    )
    frame = np.concatenate([np.array(p, dtype=np.int64) for p in paths])
    offsets = np.concatenate([[0], np.cumsum([len(p) for p in paths])])
    first, second = pairs_at_lag(frame, offsets, np.array(lags))
    assert list(zip(first.tolist(), second.tolist(), strict=True)) == pairs_one_by_one(paths, lags)


def test_lag_zero_is_refused():
    with pytest.raises(ValueError, match=r"lags must be >= 1 frame, the smallest is 0"):
        pairs_at_lag(np.array([0, 1]), np.array([0, 2]), 0)
