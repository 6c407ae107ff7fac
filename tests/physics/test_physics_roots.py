"""The vectorised root search against SciPy, kinks and missing roots included."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import brentq

from diag.physics.roots import falling_roots
from diag.physics.units import Array


def solve(function, start, low, high, **options):  # type: ignore[no-untyped-def]
    slope = np.full(start.shape, -1.0)
    reach = high - low
    return falling_roots(function, start, slope, low, high, 1e-13, reach, 100, **options)


@given(st.lists(st.tuples(st.floats(0, 10), st.floats(0.01, 50), st.floats(0.1, 9)), min_size=1))
def test_agrees_with_brentq_across_a_kink(cases: list[tuple[float, float, float]]) -> None:
    rest, stiff, knee = (np.array(column) for column in zip(*cases, strict=True))

    def function(x: Array) -> Array:
        return np.asarray(rest - np.sqrt(x) - stiff * np.maximum(x - knee, 0.0))

    low, high = np.zeros(rest.shape), np.full(rest.shape, 200.0)
    found = solve(function, np.full(rest.shape, 5.0), low, high)
    assert found.solved.all()
    for i in range(rest.size):
        known = brentq(
            lambda x, i=i: rest[i] - x**0.5 - stiff[i] * max(x - knee[i], 0.0), 0, 200, xtol=1e-15
        )
        assert abs(found.x[i] - known) <= 1e-9 * max(known, 1.0)


def test_no_crossing_stops_at_the_nearest_end_and_says_so() -> None:
    offset = np.array([-1.0, 0.5, 3.0])
    found = solve(lambda x: offset - x, np.full(3, 0.2), np.zeros(3), np.ones(3))
    assert found.x.tolist() == [0.0, 0.5, 1.0]
    assert found.at_end.tolist() == [True, False, True]
    assert found.solved.tolist() == [False, True, False]


def test_steps_run_out_without_a_claim() -> None:
    slope, low, high = np.full(1, -1.0), np.zeros(1), np.full(1, 100.0)
    found = falling_roots(
        lambda x: 1.0 - x**3, np.full(1, 90.0), slope, low, high, 1e-13, 100.0, limit=2
    )
    assert not found.solved.any()
    assert not found.at_end.any()


def test_a_jump_is_bracketed_to_rounding() -> None:
    found = solve(lambda x: np.where(x < 0.3, 1.0, -1.0), np.full(1, 0.9), np.zeros(1), np.ones(1))
    assert found.solved.all()
    assert abs(float(found.x[0]) - 0.3) < 1e-12


def test_enough_leaves_the_rest_for_later() -> None:
    rest = np.array([1.0] * 9 + [1e-9])
    found = solve(
        lambda x: rest - x**5, np.full(10, 1.0), np.zeros(10), np.full(10, 2.0), enough=0.9
    )
    assert found.solved.sum() >= 9
