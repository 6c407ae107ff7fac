"""How far one number may move before the answer changes.

Any posterior is (a x + b) / (c x + d) in one parameter x of the network, so two evaluations
give it everywhere (Castillo, Gutiérrez & Hadi 1997; Coupé & van der Gaag 2002). The admissible
deviation is how far x may move before another answer comes first (van der Gaag & Renooij 2001).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

Joint = Callable[[float], Mapping[str, float]]
"""Per answer, P(answer and findings) with the parameter at a value; linear in it."""


@dataclass(frozen=True, slots=True)
class Line:
    """P(answer and findings) as a function of the parameter: `slope * x + start`."""

    slope: float
    start: float

    def at(self, x: float) -> float:
        """Its value."""
        return self.slope * x + self.start


@dataclass(frozen=True, slots=True)
class Admissible:
    """Between which values of the parameter the answer stays first.

    Attributes:
        below, above: what comes first beyond the ends; empty where nothing else ever does.
    """

    low: float
    high: float
    below: str = ""
    above: str = ""


def lines(joint: Joint) -> dict[str, Line]:
    """Each answer's line, from the two ends of the parameter's range."""
    zero, one = joint(0.0), joint(1.0)
    return {name: Line(one[name] - zero[name], zero[name]) for name in zero}


def reaching(numerator: Line, evidence: Line, threshold: float) -> float | None:
    """The parameter at which `numerator / evidence` is `threshold`; None outside 0 to 1."""
    slope = numerator.slope - threshold * evidence.slope
    if slope == 0.0:
        return None
    x = (threshold * evidence.start - numerator.start) / slope
    return x if 0.0 <= x <= 1.0 else None


def admissible(rivals: Mapping[str, Line], value: float) -> Admissible:
    """How far the parameter may move from `value` before another rival has the most.

    The same lines serve probabilities of causes and, negated, expected minutes of steps: both
    are linear in the parameter once they are weighted with P(findings).
    """
    top = max(rivals, key=lambda name: (rivals[name].at(value), name))
    low, high, below, above = 0.0, 1.0, "", ""
    for name, line in rivals.items():
        slope = line.slope - rivals[top].slope
        if name == top or slope == 0.0:
            continue
        x = (rivals[top].start - line.start) / slope
        # A rival that gains with the parameter overtakes above, one that loses below.
        if slope > 0.0 and x < high:
            high, above = max(x, value), name
        if slope < 0.0 and x > low:
            low, below = min(x, value), name
    return Admissible(low, high, below, above)
