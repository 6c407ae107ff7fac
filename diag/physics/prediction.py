"""What the gauges would read with one or several faults, beside the sound engine."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np

from diag.errors import UsageError
from diag.physics.derivation import Known, Sampled, chances, sample
from diag.physics.parameters import Physics
from diag.physics.spread import usable_samples

Spread = tuple[float, float, float]
"""The 5th, 50th and 95th percentile, in the unit of the condition."""


@dataclass(frozen=True, slots=True)
class Reading:
    """One condition at one point."""

    known: Known
    sound: Spread
    faulty: Spread
    states: Mapping[str, float]
    """Chances of its states with the faults present."""


@dataclass(frozen=True, slots=True)
class Prediction:
    """Expected readings of one circuit with some modes present."""

    refs: tuple[str, ...]
    samples: int
    seed: int
    readings: tuple[Reading, ...]


def predict(
    physics: Physics,
    known: Mapping[str, Known],
    refs: Iterable[str],
    samples: int,
    seed: int,
) -> Prediction:
    """Readings of all known conditions with the modes `refs` together.

    Raises UnknownName for a mode without physics, UsageError where the faults leave the
    circuit without a steady state.
    """
    refs, samples = tuple(refs), usable_samples(samples)
    silent = {name for ref in refs if ref in physics.severities for name in _silent(physics, ref)}
    told = {name: found for name, found in known.items() if found.node.record.id not in silent}
    sound = sample(physics, told, (), samples, seed)
    faulty = sample(physics, told, refs, samples, seed)
    if not faulty.solved.any():
        raise UsageError(f"with {', '.join(refs)} the circuit has no steady state")
    readings = tuple(
        Reading(found, _spread(sound, name), _spread(faulty, name), _states(found, faulty))
        for name, found in told.items()
    )
    return Prediction(refs, samples, seed, readings)


def _silent(physics: Physics, ref: str) -> tuple[str, ...]:
    return physics.severities[ref].not_on


def _spread(sampled: Sampled, name: str) -> Spread:
    low, middle, high = np.quantile(sampled.values[name][sampled.solved], (0.05, 0.5, 0.95))
    return float(low), float(middle), float(high)


def _states(known: Known, sampled: Sampled) -> dict[str, float]:
    shares = chances(known, sampled).shares
    return {name: float(s) for name, s in zip(known.node.record.states, shares, strict=True)}
