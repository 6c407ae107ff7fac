"""P(findings) without enumerating hypotheses, where the sum is affordable.

Quickscore (Heckerman 1989) for opposing noisy-MAX with noisy findings: each condition that
was looked at expands into products of cumulative chances, and each product factors over the
components. The cost is exponential in the number of conditions looked at, not in the number
of modes. The sum alternates in sign; it is added exactly (`math.fsum`).
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping, Sequence

import numpy as np

from diag.belief.frame import Array, Frame, Indices, World

Sights = Mapping[tuple[str, World], Sequence[tuple[Indices, Array]]]
"""Node and world to its findings, each as (digit per mode, likelihood per signature)."""


def log_evidence(
    frame: Frame,
    odds: Array,
    sights: Sights,
    budget: int,
) -> float | None:
    """log P(findings), or None when the sum has more than `budget` terms.

    Args:
        frame: the circuit.
        odds: (modes + 1,) prior odds.
        sights: the findings, by the condition they read.
        budget: most terms × settings of instruments and promoting components × modes.
    """
    terms = math.prod(_size(frame, name) for name, _ in sights)
    fixed = _fixed(frame, sights)
    settings = math.prod(1 + len(frame.modes_of(c)) for c in fixed)
    if terms * settings * len(frame.refs) > budget:
        return None
    total = math.fsum(
        value
        for chosen in itertools.product(*([None, *frame.modes_of(c).tolist()] for c in fixed))
        for value in _setting(frame, odds, sights, fixed, [m for m in chosen if m is not None])
    )
    # Cancellation may leave a sum that is lost in the noise of its terms.
    return math.log(total) if total > 1e-12 else None


def _size(frame: Frame, name: str) -> int:
    side = frame.sides[name]
    downs = side.down.stop - side.down.start
    return int((downs + 1) * (side.states - downs))


def _fixed(frame: Frame, sights: Sights) -> list[str]:
    """Components whose modes are tried one by one: instruments in use, and promoters."""
    modes = {int(m) for group in sights.values() for d, _ in group for m in np.flatnonzero(d)}
    modes |= {int(m) for m in frame.promotions[1]}
    return sorted({frame.refs[m].split(".")[0] for m in modes})


def _setting(
    frame: Frame,
    odds: Array,
    sights: Sights,
    fixed: Sequence[str],
    chosen: Sequence[int],
) -> Array:
    """(terms,) all terms of the sum with the fixed components in one setting."""
    table, promoters = frame.promotions
    factors = table[np.isin(promoters, chosen)].sum(axis=0)
    raised = odds * np.exp(factors)
    norm = frame.normaliser(raised)
    numbers = {frame.components.index(c) for c in fixed}
    free = np.array([c for c in range(len(norm)) if c not in numbers], dtype=np.int64)
    modes = np.flatnonzero(np.isin(frame.component[:-1], free))
    modes = modes[np.argsort(frame.component[modes], kind="stable")]
    weight = math.prod(float(raised[m]) for m in chosen) / float(norm.prod())
    coefficient, product = np.array([weight]), np.ones((1, len(modes)))
    for where, group in sights.items():
        own, columns = _expansion(frame, where, group, chosen, modes)
        coefficient = (coefficient[:, None] * own).ravel()
        product = (product[:, None, :] * columns).reshape(-1, len(modes))
    if not len(modes):
        return coefficient
    starts = np.flatnonzero(np.diff(frame.component[modes], prepend=-1))
    sums = np.add.reduceat(product * raised[modes], starts, axis=1)
    found: Array = coefficient * (1.0 + sums).prod(axis=1)
    return found


def _expansion(
    frame: Frame,
    where: tuple[str, World],
    group: Sequence[tuple[Indices, Array]],
    chosen: Sequence[int],
    modes: Indices,
) -> tuple[Array, Array]:
    """Coefficients (terms,) and cumulative products (terms, modes) of one condition."""
    name, world = where
    side = frame.sides[name]
    downs = side.down.stop - side.down.start
    ups = side.states - 1 - downs
    seen = np.ones(side.states)
    for digit, likelihood in group:
        seen = seen * likelihood[int(digit[list(chosen)].sum())]
    grid = np.zeros((downs + 2, ups + 2))
    for d, u in np.ndindex(downs + 1, ups + 1):
        grid[d, u] = seen[side.normal + u - d]
    coefficient = grid[:-1, :-1] - grid[1:, :-1] - grid[:-1, 1:] + grid[1:, 1:]
    block = frame.table(world)[:, side.down.start : side.up.stop]
    here = frame.leak[side.down.start : side.up.stop] * block[list(chosen)].prod(axis=0)
    return (
        (coefficient * _grid(here[None, :], downs)[..., 0]).ravel(),
        _grid(block[modes], downs).reshape(-1, len(modes)),
    )


def _grid(columns: Array, downs: int) -> Array:
    """(down levels, up levels, rows) products of cumulative chances."""
    ones = np.ones((len(columns), 1))
    down = np.hstack([columns[:, :downs], ones]).T
    up = np.hstack([columns[:, downs:], ones]).T
    return down[:, None, :] * up[None, :, :]
