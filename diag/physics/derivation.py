"""What each mode does to the conditions that physics knows, computed instead of guessed.

Severity, build tolerance and the day are drawn quasi-randomly, the circuit is solved at its
operating points, and the circuit's own limits turn each reading into a state. The share of
the samples in a state is its chance; the scatter over independent scrambles of the sequence
is its standard error.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass

import numpy as np

from diag.circuit.model import Circuit, Node
from diag.circuit.units import in_unit
from diag.errors import DiagError, Origin, Problem, UnknownName, UsageError
from diag.physics.faults import FAULTS, Fault
from diag.physics.parameters import Physics
from diag.physics.solver import SteadyStates, point_named, steady
from diag.physics.spread import SCRAMBLES, Parts, Readout, draws, usable_samples
from diag.physics.units import Array, Flags

SAMPLES = 4096
SEED = 1
UNITS = {"_psi": "psi", "_c": "degC", "_l": "litre"}
"""Units of quantities by the end of their name, as instruments write them."""
Progress = Callable[[int, int, str], None]
"""Told the number done, the number in all, and what comes next."""


@dataclass(frozen=True, slots=True)
class Known:
    """A condition at a point that physics knows, and how it follows from solved states."""

    node: Node
    readout: Readout
    cuts: tuple[float, ...]
    """Values between neighbouring states, in the unit of the quantity."""
    points: tuple[str, ...]
    """Points at which it is solved; the largest value counts."""

    @property
    def unit(self) -> str:
        """Unit of its values."""
        return _unit(self.readout.quantities[0])


@dataclass(frozen=True, slots=True)
class Sampled:
    """Values of the known conditions in one set of samples."""

    values: Mapping[str, Array]
    """Node id to values of shape (samples,)."""
    solved: Flags
    """Samples with a steady state at every point; no others count."""


@dataclass(frozen=True, slots=True)
class Chances:
    """Chances of the states of one condition, in the order of its states."""

    shares: Array
    errors: Array
    """Standard error of each."""


@dataclass(frozen=True, slots=True)
class Derived:
    """All computed chances of one circuit."""

    samples: int
    seed: int
    healthy: Mapping[str, Chances]
    """Node id to the chances in a sound engine."""
    modes: Mapping[str, Mapping[str, Chances]]
    """Mode reference to node id to the chances with that mode alone."""
    unsolved: int
    """Samples left out because a point had no steady state."""


def known_conditions(circuit: Circuit, physics: Physics) -> dict[str, Known]:
    """The conditions that physics knows, by node id.

    Raises UsageError where the limits of one are missing; `mapping_problems` places it.
    """
    found = {}
    for name, node in circuit.nodes.items():
        readout = physics.conditions.get(node.record.id)
        if readout is not None:
            points = (node.point,) if node.point else readout.at
            found[name] = Known(node, readout, _cuts(circuit, node, readout), points)
    return found


def _cuts(circuit: Circuit, node: Node, readout: Readout) -> tuple[float, ...]:
    cuts = readout.limits or _instrument_cuts(circuit, node, readout)
    if len(cuts) != len(node.record.states) - 1:
        wanted = len(node.record.states) - 1
        raise UsageError(f"{node.id} needs {wanted} limits between its states, has {len(cuts)}")
    return cuts


def _instrument_cuts(circuit: Circuit, node: Node, readout: Readout) -> tuple[float, ...]:
    """The limits of the indication that reads the condition, in the quantity's unit."""
    unit = _unit(readout.quantities[0])
    for observable in circuit.observables.values():
        record = observable.record
        if observable.node == node.id and record.kind == "indication" and record.scale:
            given = record.scale.unit
            return tuple(in_unit(cut, given, unit, observable.id) for cut in observable.cuts)
    return ()


def _unit(quantity: str) -> str:
    stem = quantity.partition(".")[0]
    return next((unit for end, unit in UNITS.items() if stem.endswith(end)), "")


def mapping_problems(circuit: Circuit, physics: Physics) -> list[Problem]:
    """Names in the mapping that the circuit does not have, and conditions without limits."""
    found = []
    for ref, ranges in physics.severities.items():
        if ref not in circuit.modes:
            error = UnknownName("mode in this circuit", ref, circuit.modes)
            found.append(Problem(ranges.where, f"severities.{ref}", str(error)))
    known = {node.record.id: node for node in circuit.nodes.values()}
    for name, readout in physics.conditions.items():
        if name not in known:
            error = UnknownName("condition in this circuit", name, known)
            found.append(Problem(readout.where, f"conditions.{name}", str(error)))
        elif not known[name].point and not readout.at:
            message = "without points of its own it needs `at`"
            found.append(Problem(readout.where, f"conditions.{name}", message))
    found += _names_agree(circuit, physics)
    return found or _limits_missing(circuit, physics)


def _names_agree(circuit: Circuit, physics: Physics) -> list[Problem]:
    found = []
    if physics.circuit != circuit.id:
        message = "not the circuit of this folder"
        found.append(Problem(physics.where, "circuit", message, physics.circuit, circuit.id))
    points = [point.id for point in physics.points]
    for point in circuit.file.points:
        if point not in points:
            message = "an operating point of the circuit is missing"
            found.append(Problem(physics.where, "points", message, point))
    return found


def _limits_missing(circuit: Circuit, physics: Physics) -> list[Problem]:
    try:
        known_conditions(circuit, physics)
    except DiagError as error:
        return [Problem(physics.where or Origin(), "conditions", str(error))]
    return []


# Sampling


def sample(
    physics: Physics, known: Mapping[str, Known], refs: Iterable[str], samples: int, seed: int
) -> Sampled:
    """Values of the known conditions with the modes `refs` present, in `samples` samples.

    Raises UnknownName for a mode that physics does not represent.
    """
    faults, day, start = _drawn(physics, tuple(refs), samples, seed)
    wanted = {point for found in known.values() for point in _points_solved(found)}
    states = {
        point.id: steady(physics, point.id, faults, day, _start(physics, point.id, start))
        for point in physics.points
        if point.id in wanted
    }
    solved = np.ones(samples, dtype=bool)
    for found in states.values():
        solved &= found.solved
    return Sampled({name: _value(physics, states, k) for name, k in known.items()}, solved)


def _points_solved(known: Known) -> tuple[str, ...]:
    stopped = known.readout.stopped_from
    return (*known.points, stopped) if stopped else known.points


def _start(physics: Physics, point: str, start: Array) -> Array | None:
    """Temperatures of the oil at a point that fixes it, shape (N,)."""
    celsius = point_named(physics, point).oil_c
    return None if celsius is None else celsius + start


def _drawn(
    physics: Physics, refs: tuple[str, ...], samples: int, seed: int
) -> tuple[dict[str, Array], dict[str, Array], Array]:
    """Severities and tolerances, surroundings, and the shift of fixed oil temperatures."""
    ranges: dict[str, Parts] = {"start": (physics.spread.start_c,)} if physics.spread else {}
    if physics.spread:
        ranges |= {f"day:{name}": p for name, p in physics.spread.day.ranges.items()}
        ranges |= {f"build:{name}": p for name, p in physics.spread.build.ranges.items()}
    for ref in refs:
        if ref not in physics.severities:
            raise UnknownName("mode with physics", ref, physics.severities)
        ranges |= {f"{ref}:{name}": p for name, p in physics.severities[ref].ranges.items()}
    faults: dict[str, Array] = {}
    day: dict[str, Array] = {}
    start = np.zeros(samples)
    for key, values in draws(ranges, samples, seed).items():
        owner, _, name = key.partition(":")
        if owner == "start":
            start = values
        elif owner == "day":
            day[name] = values
        else:
            faults[name] = values if name not in faults else _met(name, faults[name], values)
    return faults, day, start


def _met(name: str, first: Array, second: Array) -> Array:
    """Two causes of the same fault together, within the range that it may take."""
    fault: Fault = FAULTS[name.partition(".")[0]]
    if fault.neutral == 1:
        joined = first * second
    elif fault.least >= 0 and fault.most <= 1:
        joined = 1.0 - (1.0 - first) * (1.0 - second)
    else:
        joined = first + second
    return np.clip(joined, fault.least, fault.most)


def _value(physics: Physics, states: Mapping[str, SteadyStates], known: Known) -> Array:
    """Values of one condition, shape (samples,)."""
    rows = [
        states[point][quantity] for point in known.points for quantity in known.readout.quantities
    ]
    value = np.max(rows, axis=0)
    stopped = known.readout.stopped_from
    if stopped and not point_named(physics, known.points[0]).speed:
        value = value - states[stopped]["hiding_l"]
    return np.asarray(value)


# Chances


def chances(known: Known, sampled: Sampled) -> Chances:
    """Share of the solved samples in each state of a condition, with standard errors.

    The error is the larger of the scatter over the scrambles and what one sample more or
    less would change, so that a state never seen has one too.
    """
    size = len(known.node.record.states)
    values = sampled.values[known.node.id]
    state = np.searchsorted(np.array(known.cuts), values, side="right")
    hits = (state[:, None] == np.arange(size)) & sampled.solved[:, None]
    counted = hits.reshape(SCRAMBLES, -1, size).sum(axis=1)
    totals = sampled.solved.reshape(SCRAMBLES, -1).sum(axis=1)
    total = max(int(totals.sum()), 1)
    shares = counted.sum(axis=0) / total
    each = counted / np.maximum(totals, 1)[:, None]
    errors = each.std(axis=0, ddof=1) / np.sqrt(SCRAMBLES)
    return Chances(shares, np.maximum(errors, 1.0 / total))


def derive(
    circuit: Circuit,
    physics: Physics,
    samples: int = SAMPLES,
    seed: int = SEED,
    progress: Progress | None = None,
) -> Derived:
    """Chances of every state of every known condition, sound and with each mode alone.

    `samples` is raised to the next number that the sequences take. Modes outside
    `physics.severities` have none.
    """
    samples = usable_samples(samples)
    known = known_conditions(circuit, physics)
    cases: list[tuple[str, ...]] = [(), *((ref,) for ref in physics.severities)]
    found: dict[str, dict[str, Chances]] = {}
    unsolved = 0
    for done, refs in enumerate(cases):
        name = refs[0] if refs else "sound engine"
        if progress:
            progress(done, len(cases), name)
        sampled = sample(physics, known, refs, samples, seed)
        unsolved += int((~sampled.solved).sum())
        silent = physics.severities[name].not_on if refs else ()
        found[name] = {
            node: chances(what, sampled)
            for node, what in known.items()
            if what.node.record.id not in silent
        }
    if progress:
        progress(len(cases), len(cases), "")
    healthy = found.pop("sound engine")
    return Derived(samples, seed, healthy, found, unsolved)
