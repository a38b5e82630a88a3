"""Fewer points, every peak among them."""

from itertools import pairwise

import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from pathplan.report.thinning import bucket_size, extremes, run_ends

VALUES = arrays.arrays(
    np.float64,
    st.tuples(st.integers(1, 200), st.integers(1, 3)),
    elements=st.floats(-1e6, 1e6) | st.just(np.nan),
)


@given(VALUES, st.integers(1, 50))
def test_every_bucket_keeps_its_least_and_its_largest(values, buckets):
    size = bucket_size(len(values), buckets)
    rows = extremes(values, size)
    assert rows.min() >= 0 and rows.max() < len(values) and (np.diff(rows, axis=0) >= 0).all()
    assert len(rows) <= max(2 * buckets, 1) + 1
    for c in range(values.shape[1]):
        kept = values[rows[:, c], c]
        for first in range(0, len(values), size):
            bucket = values[first : first + size, c]
            mine = kept[(rows[:, c] >= first) & (rows[:, c] < first + size)]
            if np.isnan(bucket).all():
                assert np.isnan(mine).all()  # the gap stays a gap
            else:
                assert np.nanmin(bucket) == np.nanmin(mine) and np.nanmax(bucket) == np.nanmax(mine)


def test_what_is_short_is_kept_whole():
    assert bucket_size(1200, 600) == 1 and bucket_size(1201, 600) == 3
    assert extremes(np.arange(5.0)[:, None], 1)[:, 0].tolist() == [0, 1, 2, 3, 4]


def test_a_single_spike_survives():
    values = np.zeros((60_001, 1))
    values[31_415] = 7.0
    rows = extremes(values, bucket_size(60_001, 600))
    assert len(rows) == 1200 - 2 * (600 - -(-60_001 // 101)) and 31_415 in rows


@given(st.lists(st.integers(0, 3), min_size=1, max_size=60))
def test_runs(values):
    ends = run_ends(np.array(values)).tolist()
    pieces = [values[a:b] for a, b in zip([0, *ends], ends, strict=False)]
    assert [value for piece in pieces for value in piece] == values
    assert all(len(set(piece)) == 1 for piece in pieces)
    assert all(a[-1] != b[0] for a, b in pairwise(pieces))
