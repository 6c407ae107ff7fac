"""Many one-dimensional roots at once: secant steps that never leave a shrinking bracket."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from diag.physics.units import Array, Flags, Values

_WIDTH = 4.0 * float(np.finfo(float).eps)


@dataclass(frozen=True, slots=True)
class Roots:
    """Where N falling functions cross zero; all arrays have shape (N,)."""

    x: Array
    value: Array
    """The function at `x`."""
    slope: Array
    """Last secant slope, a good start for a neighbouring problem."""
    solved: Flags
    """The value is within tolerance, or the bracket has shrunk to rounding."""
    at_end: Flags
    """No crossing inside: `x` is the end of the range nearest to one."""


@dataclass(slots=True)
class _Search:
    """The running state of the search."""

    low: Array
    high: Array
    x: Array
    value: Array
    slope: Array
    stalled: Array
    low_tried: Flags
    high_tried: Flags


def falling_roots(
    function: Callable[[Array], Array],
    start: Array,
    slope: Array,
    low: Array,
    high: Array,
    tolerance: float,
    reach: Values,
    limit: int = 60,
    enough: float = 1.0,
) -> Roots:
    """Finds x in [low, high] with |function(x)| <= tolerance, N problems side by side.

    `function` maps shape (N,) to (N,) and falls with x, at least across its root. `slope`
    (negative) guides the first step; no step is longer than `reach`. A step that leaves the
    bracket, or two that gain little, give way to halving it, so that kinks cannot trap the
    search. It ends after `limit` steps or when the share `enough` of all roots is found.
    Method: secant safeguarded by bisection (Dekker 1969), vectorised.
    """
    x = np.clip(start, low, high)
    search = _Search(
        low.copy(), high.copy(), x, function(x), slope.copy(), np.zeros(x.shape),
        x <= low, x >= high,
    )  # fmt: skip
    done = _done(search, low, high, tolerance)
    for _ in range(limit):
        if np.count_nonzero(done) >= enough * done.size:
            break
        _advance(search, function, done, low, high, reach)
        done = _done(search, low, high, tolerance)
    ends = ((search.x >= high) & (search.value > 0)) | ((search.x <= low) & (search.value < 0))
    at_end = ends & (np.abs(search.value) > tolerance)
    return Roots(search.x, search.value, search.slope, done & ~at_end, at_end)


def _done(search: _Search, low: Array, high: Array, tolerance: float) -> Flags:
    x, value = search.x, search.value
    stuck_high = (x >= high) & (value > 0)
    stuck_low = (x <= low) & (value < 0)
    narrow = search.high - search.low <= _WIDTH * np.abs(x)
    return np.asarray((np.abs(value) <= tolerance) | stuck_high | stuck_low | narrow)


def _advance(
    search: _Search,
    function: Callable[[Array], Array],
    done: Flags,
    low: Array,
    high: Array,
    reach: Values,
) -> None:
    x, value = search.x, search.value
    above = value > 0
    search.low = np.where(above, x, search.low)
    search.high = np.where(above, search.high, x)
    step = x + np.clip(-value / search.slope, -reach, reach)
    step = np.where(done, x, _kept_inside(search, step, done, low, high))
    fresh = function(step)
    moved = step - x
    with np.errstate(invalid="ignore", divide="ignore"):
        secant = (fresh - value) / moved
    search.slope = np.where((moved != 0) & (secant < 0), secant, search.slope)
    little = np.abs(fresh) > 0.5 * np.abs(value)
    search.stalled = (search.stalled + 1) * little
    search.low_tried |= step <= low
    search.high_tried |= step >= high
    search.x, search.value = step, fresh


def _kept_inside(search: _Search, step: Array, done: Flags, low: Array, high: Array) -> Array:
    """The step where it stays in the bracket and gains; else the bracket's middle or its end."""
    astray = ~((step > search.low) & (step < search.high)) & ~done
    stalled = (search.stalled >= 2) & (search.stalled % 2 == 0)
    if not (np.any(astray) or np.any(stalled)):
        return step
    halved = 0.5 * (search.low + search.high)
    # An end that was never evaluated is tried itself before the bracket is halved.
    over = np.where((search.high >= high) & ~search.high_tried, high, halved)
    under = np.where((search.low <= low) & ~search.low_tried, low, halved)
    step = np.where(step >= search.high, over, np.where(step <= search.low, under, step))
    return np.where(stalled | ~np.isfinite(step), halved, step)
