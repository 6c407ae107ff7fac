"""Findings turned into likelihoods over the states of the condition they read.

A finding is virtual evidence (Pearl 1988, 2.2.2): it multiplies each state by
P(what was seen | state). A number is taken with the tolerance of its instrument, half-width
of the 95 % interval (coverage factor 2 as in JCGM 100:2008, 6.2).
"""

from __future__ import annotations

import math
import re
from bisect import bisect
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from diag.circuit.model import Circuit, Observable
from diag.circuit.reading import brief
from diag.circuit.records import Scale
from diag.circuit.units import in_unit, split_number
from diag.errors import UsageError

Array = NDArray[np.float64]

MISREAD = 0.001
"""P(a number read or written down has nothing to do with the instrument). Judgement."""

LONGEST = 200
"""Characters in a finding as it is written."""
_FINDING = re.compile(r"^([a-zA-Z][\w-]*)(?:@([a-zA-Z][\w-]*))?=(.+)$", re.ASCII)


@dataclass(frozen=True, slots=True)
class Finding:
    """What was found: an observation of the circuit with an outcome or a number."""

    observable: Observable
    value: str
    """As given: an outcome word or a number with its unit."""
    trust: float = 1.0
    """P(the finding is as good as its kind); the rest says nothing."""
    world: tuple[tuple[str, float], ...] = ()
    """Modes restored before it was taken, each with the chance that it worked."""

    @property
    def key(self) -> str:
        """`NAME@POINT`: a later finding of the same key takes the place of this one."""
        return self.observable.id

    def __str__(self) -> str:
        return f"{self.key}={self.value}"


def parse_finding(circuit: Circuit, text: str) -> Finding:
    """Reads `NAME@POINT=VALUE` or `NAME=VALUE`; inverse of `str(finding)`.

    Raises:
        UsageError: not of that form, or the value is not one the observation can take.
        UnknownName: no such observation; names the nearest.
    """
    match = _FINDING.match(text.strip()) if len(text) <= LONGEST else None
    if not match:
        raise UsageError(f"{brief(text)} is not a finding; write NAME@POINT=VALUE or NAME=VALUE")
    name, point, value = match.groups()
    plain = name.replace("-", "_").lower()
    where = point.replace("-", "_").lower() if point else None
    return make_finding(circuit.observable(plain, where), value)


def make_finding(observable: Observable, value: str, trust: float = 1.0) -> Finding:
    """A finding with its value checked.

    Raises:
        UsageError: the value is not an outcome, or the number does not fit the scale.
    """
    if len(value) > LONGEST:
        raise UsageError(f"{observable.id} cannot be {brief(value)}: too long")
    finding = Finding(observable, _tidy(observable, value), trust)
    state_likelihood(finding)
    return finding


def _tidy(observable: Observable, value: str) -> str:
    text = " ".join(value.split())
    word = text.lower().replace("-", "_").replace(" ", "_")
    return word if word in observable.outcomes else text


def number_of(finding: Finding) -> float | None:
    """The number of a finding in the unit of its scale, or None for an outcome word.

    Raises:
        UsageError: no unit, wrong kind of unit, or outside the instrument's range.
    """
    observable = finding.observable
    if finding.value in observable.outcomes:
        return None
    parts, scale = split_number(finding.value), observable.record.scale
    if parts is None or scale is None:
        raise UsageError(_not_taken(finding))
    number, unit = parts
    if not unit:
        example = f"{finding.value}{scale.unit}"
        raise UsageError(f"{finding}: the number needs its unit, for example {example}")
    value = in_unit(number, unit, scale.unit, finding.key)
    low, high = scale.range
    if not low <= value <= high:
        wanted = f"{low:g} to {high:g} {scale.unit}"
        raise UsageError(f"{finding}: outside the range of the instrument, {wanted}")
    return value


def _not_taken(finding: Finding) -> str:
    words = ", ".join(finding.observable.outcomes)
    scale = finding.observable.record.scale
    number = f", or a number with its unit such as {scale.limits_example()}" if scale else ""
    return f"{finding.key} cannot be {brief(finding.value)}; it takes {words}{number}"


def state_likelihood(finding: Finding) -> Array:
    """(states,) P(finding | state shown by the instrument), up to a common factor."""
    number = number_of(finding)
    observable = finding.observable
    if number is None:
        given = outcome_table(observable)[:, observable.outcomes.index(finding.value)]
    else:
        assert observable.record.scale is not None
        given = band_likelihood(observable.record.scale, observable.cuts, number)
    trusted: Array = finding.trust * given + (1.0 - finding.trust) * given.mean()
    return trusted


def outcome_of(finding: Finding) -> str:
    """The outcome word of a finding; a number counts as the state in whose band it lies."""
    number, observable = number_of(finding), finding.observable
    if number is None:
        return finding.value
    return observable.outcomes[observable.reports[bisect(observable.cuts, number)]]


def outcome_table(observable: Observable) -> Array:
    """(states, outcomes) P(outcome reported | state shown)."""
    record = observable.record
    reports = observable.reports
    table = np.zeros((len(reports), len(observable.outcomes)))
    normal = observable.outcomes.index(observable.normal)
    others = [i for i in range(len(observable.outcomes)) if i != normal]
    for state, outcome in enumerate(reports):
        if outcome == normal:
            table[state, normal] = 1.0 - record.false_alarm
            table[state, others] = record.false_alarm / len(others)
        else:
            table[state, outcome] = record.detects
            table[state, normal] = 1.0 - record.detects
    return table


def band_likelihood(scale: Scale, cuts: Iterable[float], number: float) -> Array:
    """(states,) density of reading `number` when the true value lies in each state's band.

    The true value is taken as uniform within its band and the reading as normal about it;
    a small share of readings is a misreading, uniform over the range.
    """
    sigma = scale.tolerance / 2.0
    low, high = scale.range
    edges = np.array([low, *cuts, high])
    below = np.array([_normal_cdf((number - edge) / sigma) for edge in edges])
    within = (below[:-1] - below[1:]) / np.diff(edges)
    density: Array = (1.0 - MISREAD) * within + MISREAD / (high - low)
    return density


def _normal_cdf(z: float) -> float:
    return 0.5 * math.erfc(-z / math.sqrt(2.0))
