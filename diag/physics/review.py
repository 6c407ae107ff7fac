"""Problems that only show when the sound engine is solved: a circuit that cannot do its work."""

from __future__ import annotations

from collections.abc import Callable, Iterator

from diag.errors import Problem
from diag.physics.parameters import Physics, Point
from diag.physics.solver import SteadyStates, steady

_STARVED = 0.5
"""Pump filling below which the suction side cannot feed the pump."""
_Check = Callable[[Physics, Point, SteadyStates], Iterator[Problem]]


def healthy_problems(physics: Physics) -> list[Problem]:
    """What is wrong with the sound engine at its operating points; empty when it runs well."""
    found = []
    for point in physics.points:
        if not point.speed:
            continue
        states = steady(physics, point.id)
        checks: tuple[_Check, ...] = _CHECKS if states.solved.all() else (_unsolved,)
        found += [problem for check in checks for problem in check(physics, point, states)]
    return found


def _unsolved(physics: Physics, point: Point, states: SteadyStates) -> Iterator[Problem]:
    message = f"the sound engine has no steady state at {point.id}"
    yield Problem(point.where, f"points.{point.id}", message)


def _overheats(physics: Physics, point: Point, states: SteadyStates) -> Iterator[Problem]:
    if states.at_range_end[0]:
        message = f"the oil leaves the range of its data at {point.id}"
        got = f"{states['supply_temperature_c'][0]:.0f} degC"
        yield Problem(point.where, f"points.{point.id}", message, got)


def _starves(physics: Physics, point: Point, states: SteadyStates) -> Iterator[Problem]:
    filling = float(states["pump_filling"][0])
    if filling < _STARVED:
        message = f"the suction line cannot feed the pump at {point.id}"
        yield Problem(physics.suction.where, "suction", message, f"filling {filling:.2f}")


def _regulates(physics: Physics, point: Point, states: SteadyStates) -> Iterator[Problem]:
    relief, spill = physics.relief, float(states["spill_flow_l_min"][0])
    if relief is None or point.oil_c is not None:
        return
    if physics.topology == "relief_valve" and not spill:
        reached = f"{states['gallery_pressure_psi'][0]:.0f} psi reached"
        message = f"the relief valve stays shut at {point.id}, so it regulates nothing"
        yield Problem(relief.where, "relief.crack_psi", message, reached)
    if physics.topology == "full_flow" and spill:
        message = f"the cold-start relief spills at {point.id} with the oil warm"
        yield Problem(relief.where, "relief.crack_psi", message, f"{spill:.1f} L/min")


def _floods(physics: Physics, point: Point, states: SteadyStates) -> Iterator[Problem]:
    for i, chamber in enumerate(physics.chambers):
        load = float(states[f"scavenge_load.{chamber.id}"][0])
        if load >= 1.0:
            message = f"the scavenge pump cannot keep the chamber dry at {point.id}"
            got = f"inflow {load:.2f} times capacity"
            yield Problem(chamber.where, f"chambers.{i}", message, got)


def _warns(physics: Physics, point: Point, states: SteadyStates) -> Iterator[Problem]:
    drop = float(states["filter_dp_psi"][0])
    if point.oil_c is None and drop >= physics.filter.alert_psi:
        message = f"a clean filter warns at {point.id} with the oil warm"
        yield Problem(physics.filter.where, "filter.alert_psi", message, f"{drop:.1f} psi")


_CHECKS: tuple[_Check, ...] = (_overheats, _starves, _regulates, _floods, _warns)
