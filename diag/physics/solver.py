"""The steady state of a whole circuit: oil flow and heat together, many samples at once.

For each sample the gallery pressure is the root of the flow balance at a given supply
temperature, and the supply temperature the root of the heat balance over those flows. Both
balances fall with their unknown, so both roots are bracketed from the start: the pressure
between zero and the head at which slip takes the whole delivery, the temperature within the
range of the oil's data. A start or warm-up point has its temperature given instead.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from diag.errors import UnknownName, UsageError
from diag.physics.balance import Balance
from diag.physics.faults import DAY, Severities, severities
from diag.physics.parameters import Physics, Point
from diag.physics.readout import quantities
from diag.physics.roots import Roots, falling_roots
from diag.physics.state import Flows, Heats, Supplied
from diag.physics.units import Array, Flags

BATCH = 2048
"""Samples solved side by side; the working set of a batch stays in the processor's cache."""
_HEAT_TOLERANCE = 5e-10
_LONGEST_STEP_K = 60.0


@dataclass(frozen=True, slots=True)
class _Effort:
    """How hard to try: first lightly with all samples, then patiently with those left."""

    heat_steps: int
    flow_steps: int
    """Steps allowed per temperature tried; the next one goes on where these ended."""
    enough: float
    """Share of the samples that must be found before the rest may be left for later."""
    flow_tolerances: tuple[float, ...]
    """Tolerance of the flow balance at the first temperatures tried; the last one stays."""


_QUICK = _Effort(8, 4, 0.97, (1e-3, 1e-5, 1e-8, 1e-12))
_PATIENT = _Effort(80, 80, 1.0, (1e-12,))


@dataclass(frozen=True, slots=True)
class SteadyStates:
    """The solved states of N samples at one operating point."""

    point: str
    quantities: Mapping[str, Array]
    """Name, unit at its end, to values of shape (N,)."""
    solved: Flags
    """False for a sample without a solution, whose quantities must not be used."""
    at_range_end: Flags
    """The temperature would leave the range of the oil's data and is held at its end."""
    mass_residual: Array
    """Flow balance left over, as a share of the pump's rated swept volume."""
    heat_residual: Array
    """Heat balance left over, as a share of the point's heat; the rest heats up the circuit."""

    def __getitem__(self, name: str) -> Array:
        """One quantity, shape (N,); raises UnknownName with the nearest names."""
        if name not in self.quantities:
            raise UnknownName("quantity", name, self.quantities)
        return self.quantities[name]

    @property
    def unsolved(self) -> tuple[int, ...]:
        """Positions of the samples that did not converge."""
        return tuple(int(i) for i in np.flatnonzero(~self.solved))


def steady(
    physics: Physics,
    point: str,
    faults: Mapping[str, ArrayLike] | None = None,
    day: Mapping[str, ArrayLike] | None = None,
    oil_c: ArrayLike | None = None,
) -> SteadyStates:
    """Steady states at an operating point for arrays of faults and surroundings.

    `faults` maps names of `diag.physics.faults.FAULTS` to severities, `day` those of `DAY`
    to values; numbers or arrays of one length N. `oil_c` fixes the temperature of the oil
    supplied (degC) where it shall not follow from the heat balance.

    Raises UnknownName, UsageError, and OilError for `oil_c` outside the oil's data.
    """
    given = _severities(physics, faults or {}, day or {}, oil_c)
    where = point_named(physics, point)
    rows = np.arange(max(part.size for part in given))
    found = _in_batches(physics, where, given, rows, _QUICK)
    left = np.flatnonzero(~found.solved)
    if left.size:
        _put(found, left, _in_batches(physics, where, given, left, _PATIENT))
    return found


def _in_batches(
    physics: Physics, point: Point, given: _Given, rows: NDArray[np.intp], effort: _Effort
) -> SteadyStates:
    parts = []
    for start in range(0, rows.size, BATCH):
        batch = rows[start : start + BATCH]
        parts.append(_solved(physics, point, [s.take(batch) for s in given], batch.size, effort))
    return _joined(point.id, parts)


def _put(found: SteadyStates, rows: NDArray[np.intp], better: SteadyStates) -> None:
    """Lays the states of some samples over those found first."""
    for name, values in found.quantities.items():
        values[rows] = better.quantities[name]
    found.solved[rows] = better.solved
    found.at_range_end[rows] = better.at_range_end
    found.mass_residual[rows] = better.mass_residual
    found.heat_residual[rows] = better.heat_residual


def states(
    physics: Physics,
    points: Iterable[str],
    faults: Mapping[str, ArrayLike] | None = None,
    day: Mapping[str, ArrayLike] | None = None,
) -> dict[str, SteadyStates]:
    """Steady states at several operating points for the same samples."""
    return {point: steady(physics, point, faults, day) for point in points}


def balance_at(
    physics: Physics,
    point: str,
    faults: Mapping[str, ArrayLike] | None = None,
    day: Mapping[str, ArrayLike] | None = None,
) -> Balance:
    """The two balances at a point, for other solvers to be set beside this one."""
    fault_values, day_values, _ = _severities(physics, faults or {}, day or {}, None)
    return Balance(physics, point_named(physics, point), fault_values, day_values)


def point_named(physics: Physics, name: str) -> Point:
    """The operating point of that id; raises UnknownName."""
    for point in physics.points:
        if point.id == name:
            return point
    raise UnknownName("operating point", name, [point.id for point in physics.points])


def _severities(
    physics: Physics,
    faults: Mapping[str, ArrayLike],
    day: Mapping[str, ArrayLike],
    oil_c: ArrayLike | None,
) -> _Given:
    feeds = [feed.id for feed in physics.feeds]
    chambers = [chamber.id for chamber in physics.chambers]
    optional = ("relief", "boost", "fuel_cooler", "air_cooler")
    missing = [name for name in optional if getattr(physics, name) is None]
    fixed = {}
    if oil_c is not None:
        fixed["oil_c"] = np.atleast_1d(physics.oil.oil().checked(np.asarray(oil_c, dtype=float)))
    sizes = {value.size for value in fixed.values()}
    found = [
        severities(faults, feeds, chambers, missing=missing),
        severities(day, known=DAY),
        Severities(fixed, max(sizes, default=1)),
    ]
    if len({part.size for part in found} - {1}) > 1:
        raise UsageError("faults, surroundings and oil temperatures differ in length")
    return found


class _FlowSolver:
    """Finds the gallery pressure at a supply temperature, starting from the last one found."""

    def __init__(self, balance: Balance, size: int, effort: _Effort) -> None:
        self.balance = balance
        self.size = size
        self.effort = effort
        self.calls = 0
        self.last: Roots | None = None

    def at(self, t: Array) -> tuple[Supplied, Flows]:
        """Oil and flows at supply temperature `t`, shape (N,)."""
        balance, effort = self.balance, self.effort
        oil = balance.supply(t)
        scale = balance.scale(oil)

        def excess(flow: Array) -> Array:
            return balance.flows(oil, scale.pressure(flow)).excess

        last = self.last
        start = self._row(balance.swept()) if last is None else last.x
        slope = np.full(self.size, -1.0 / balance.rated_flow) if last is None else last.slope
        low, top = np.zeros(self.size), self._row(scale.flow(balance.highest(oil)))
        reach = balance.rated_flow
        self.last = falling_roots(
            excess, start, slope, low, top, self._tolerance(), reach,
            effort.flow_steps, effort.enough,
        )  # fmt: skip
        return oil, balance.flows(oil, scale.pressure(self.last.x))

    def _tolerance(self) -> float:
        tolerances = self.effort.flow_tolerances
        self.calls += 1
        return tolerances[min(self.calls, len(tolerances)) - 1]

    def exact(self) -> None:
        """From now on only the last tolerance counts."""
        self.calls = len(self.effort.flow_tolerances)

    def _row(self, values: Array) -> Array:
        return np.broadcast_to(values, (self.size,)).copy()

    @property
    def solved(self) -> Flags:
        """Which samples have a flow balance."""
        assert self.last is not None
        return self.last.solved


_Given = list[Severities]
"""Faults, surroundings and fixed oil temperatures, checked."""
_Part = tuple[dict[str, Array], Flags, Flags, Array, Array]


def _solved(physics: Physics, point: Point, parts: _Given, size: int, effort: _Effort) -> _Part:
    faults, day, fixed = parts
    balance = Balance(physics, point, faults, day)
    flow = _FlowSolver(balance, size, effort)
    given = fixed.values.get("oil_c")
    if given is None and point.oil_c is not None:
        given = np.array([point.oil_c])
    if given is None:
        roots = _temperatures(balance, flow, size)
        t, closed, at_end = roots.x, roots.solved | roots.at_end, roots.at_end
    else:
        t = np.broadcast_to(given, (size,)).astype(float)
        closed, at_end = np.ones(size, dtype=bool), np.zeros(size, dtype=bool)
    flow.exact()
    oil, flows = flow.at(t)
    heats = balance.heats(oil, flows)
    if given is None:
        # The heat balance may have closed over flows found with a loose tolerance.
        closed = closed & (at_end | (np.abs(heats.excess) <= 2.0 * _HEAT_TOLERANCE))
    solved = flow.solved & closed & balance.vented
    return _part(balance, oil, flows, heats, solved, at_end, size)


def _temperatures(balance: Balance, flow: _FlowSolver, size: int) -> Roots:
    """The supply temperature at which the heat balance closes."""

    def excess(t: Array) -> Array:
        heats = balance.heats(*flow.at(t))
        return np.broadcast_to(heats.excess, (size,))

    low = np.full(size, balance.oil.lowest_c)
    high = np.full(size, balance.oil.highest_c)
    start = np.full(size, balance.point.heat_at_c)
    slope = np.full(size, -1.0 / 50.0)
    return falling_roots(
        excess, start, slope, low, high, _HEAT_TOLERANCE, _LONGEST_STEP_K,
        flow.effort.heat_steps, flow.effort.enough,
    )  # fmt: skip


def _part(
    balance: Balance, oil: Supplied, flows: Flows, heats: Heats, solved: Flags, at_end: Flags,
    size: int,
) -> _Part:  # fmt: skip
    values = {
        name: np.broadcast_to(value, (size,)).astype(float)
        for name, value in quantities(balance, oil, flows, heats).items()
    }
    finite = np.all([np.isfinite(value) for value in values.values()], axis=0)
    mass = np.broadcast_to(flows.excess, (size,))
    heat = np.broadcast_to(heats.excess, (size,))
    return values, np.asarray(solved & finite), at_end, mass, heat


def _joined(point: str, parts: list[_Part]) -> SteadyStates:
    values = {name: np.concatenate([part[0][name] for part in parts]) for name in parts[0][0]}
    solved = np.concatenate([part[1] for part in parts])
    at_end = np.concatenate([part[2] for part in parts])
    mass, heat = (np.concatenate([part[i] for part in parts]) for i in (3, 4))
    return SteadyStates(point, values, solved, at_end, mass, heat)
