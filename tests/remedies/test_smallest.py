"""The smallest size that works, against thresholds that are known."""

from __future__ import annotations

from hypothesis import example, given
from hypothesis import strategies as st

from pathplan.remedies.smallest import smallest

SIZES = (1.0, 2.0, 5.0, 10.0, 20.0, 50.0, 100.0, 200.0)


@given(st.floats(0.0, 200.0), st.floats(0.0, 3.0))
@example(5.5, 0.0)
def test_a_threshold_is_found_to_a_grain(promising: float, more: float) -> None:
    """Where looking quickly promises a little too much, the next grains or sizes are tried."""
    needed = promising + more
    found = smallest(lambda size: size >= promising, lambda size: size >= needed, SIZES, 0.1)
    if found is None:
        assert needed > SIZES[-1]
        return
    assert found >= needed
    if more == 0.0:
        assert found - needed <= (0.1 if found < 10.0 else 1.0) + 1e-9
    assert abs(found / 0.1 - round(found / 0.1)) < 1e-6


def test_nothing_promises() -> None:
    assert smallest(lambda size: False, lambda size: True, SIZES, 0.1) is None


def test_nothing_works() -> None:
    assert smallest(lambda size: True, lambda size: False, SIZES, 0.1) is None
