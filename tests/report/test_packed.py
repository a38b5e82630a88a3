"""Rows packed and read back."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from pathplan.report.packed import Column, decimals_for, pack, unpack

FLOATS = st.floats(-2e9, 2e9) | st.sampled_from([np.nan, np.inf, -np.inf, 1e300])


@given(st.lists(st.lists(FLOATS, min_size=7, max_size=7), min_size=1, max_size=5), st.integers(0, 6))
def test_read_back_as_rounded(columns, decimals):
    packed = pack([Column(np.array(values), decimals) for values in columns])
    for values, back in zip(columns, unpack(packed), strict=True):
        with np.errstate(over="ignore", invalid="ignore"):
            whole = np.round(np.array(values) * 10.0**decimals)
        fits = np.isfinite(whole) & (np.abs(whole) < 2**31)
        expected = np.where(fits, whole / 10.0**decimals, np.nan)
        assert np.array_equal(back, expected, equal_nan=True)


@pytest.mark.parametrize(
    ("scale", "decimals"),
    [(170.0, 3), (12000.0, 1), (4500.0, 2), (26.0, 3), (8.0, 3), (0.5, 4), (1e9, 0), (np.inf, 3), (0.0, 3)],
)
def test_decimals(scale, decimals):
    assert decimals_for(scale) == decimals


@given(st.floats(1e-2, 1e8))
def test_a_share_reads_right(scale):
    assert 0.5 * 10.0 ** -decimals_for(scale) <= 5e-4 * scale


def test_smooth_rows_pack_small():
    time = np.arange(60_000) / 1000
    columns = [Column(100 * np.sin(time + k), 3) for k in range(6)]
    assert len(pack(columns)["data"]) < 0.8 * 60_000 * 6  # bytes: less than one a value, base64 and all
