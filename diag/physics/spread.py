"""How far engines, days and faults differ: ranges as data, and quasi-random draws from them.

Every range is uniform. Draws are scrambled Sobol sequences (Sobol 1967; Owen 1995) in a few
independent scrambles, so that their scatter tells the standard error of what is computed
from them (randomised quasi-Monte Carlo, L'Ecuyer and Lemieux 2002).
"""

from __future__ import annotations

from collections.abc import Mapping
from itertools import chain
from typing import Annotated, Any

import numpy as np
from pydantic import Field, model_validator

from diag.circuit.records import Based, Id
from diag.physics.units import Array

SCRAMBLES = 8
"""Independent scrambles that one set of draws consists of."""
Pair = tuple[float, float]
Parts = Annotated[tuple[Pair, ...], Field(min_length=1)]
"""Ranges that a value may lie in, each equally likely."""


class Ranges(Based):
    """Names of faults or surroundings with the ranges that they may take.

    In the short form each name holds `[low, high]`, or several such pairs.
    """

    ranges: Annotated[dict[str, Parts], Field(min_length=1)]

    @classmethod
    def _own(cls, data: dict[str, Any]) -> dict[str, Any]:
        if "ranges" in data:
            return data
        kept: dict[str, Any] = {key: data[key] for key in cls.model_fields if key in data}
        given = {key: _parts(value) for key, value in data.items() if key not in kept}
        return {**kept, "ranges": given}

    @model_validator(mode="after")
    def _rising(self) -> Ranges:
        for name, parts in self.ranges.items():
            if any(high < low for low, high in parts):
                raise ValueError(f"a range of {name} ends below its beginning")
        return self


class Severity(Ranges):
    """What a mode is in a calculation, from faults large enough to be complained about."""

    not_on: tuple[Id, ...] = ()
    """Conditions on which the calculation says nothing about this mode."""


def _parts(value: Any) -> Any:
    """One pair as the only part of a range."""
    if isinstance(value, list) and len(value) == 2 and not isinstance(value[0], list):
        return [value]
    return value


class Spread(Based):
    """What differs between sound engines and between days."""

    build: Ranges
    """Build tolerance and ordinary service, by names of `diag.physics.faults.FAULTS`."""
    day: Ranges
    """Surroundings, by names of `diag.physics.faults.DAY`."""
    start_c: Pair = (0.0, 0.0)
    """Degrees by which the oil differs where a point fixes its temperature."""


class Readout(Based):
    """How a condition of the circuit follows from a solved state."""

    quantities: Annotated[tuple[str, ...], Field(min_length=1)]
    """Quantities that it looks at; the largest counts."""
    limits: tuple[float, ...] = ()
    """Values between its states; without them those of the instrument that reads it."""
    at: tuple[Id, ...] = ()
    """Points at which it is judged where it has none of its own; the largest value counts."""
    stopped_from: Id | None = None
    """Point that a stopped engine comes from: oil hiding there is missing when it stands."""


def draws(ranges: Mapping[str, Parts], samples: int, seed: int) -> dict[str, Array]:
    """Values by name, each of shape (samples,), one scramble after the other.

    `samples` is `SCRAMBLES` times a power of two. The first names take the first dimensions,
    so that draws which differ only in the last names share the others.
    """
    from scipy.stats import qmc

    each = samples // SCRAMBLES
    blocks = []
    for scramble in range(SCRAMBLES):
        chance = np.random.default_rng([seed, scramble])
        blocks.append(qmc.Sobol(max(len(ranges), 1), seed=chance).random(each))
    points = np.concatenate(blocks)
    return {name: _within(points[:, i], parts) for i, (name, parts) in enumerate(ranges.items())}


def _within(shares: Array, parts: Parts) -> Array:
    """Shares from 0 to 1, shape (N,), as values of ranges that are equally likely."""
    place = shares * len(parts)
    which = np.minimum(place.astype(int), len(parts) - 1)
    low, high = np.array(parts).T
    return np.asarray(low[which] + (place - which) * (high - low)[which])


def usable_samples(samples: int) -> int:
    """The next number of samples that `draws` takes."""
    each = max(1, -(-samples // SCRAMBLES))
    return int(SCRAMBLES * 2 ** int(np.ceil(np.log2(each))))


def ends(ranges: Ranges) -> dict[str, Array]:
    """The outermost values of each range, shape (2,)."""
    found = {}
    for name, parts in ranges.ranges.items():
        values = list(chain(*parts))
        found[name] = np.array([min(values), max(values)])
    return found
