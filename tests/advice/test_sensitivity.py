"""One-way sensitivity against a published network, the fire alarm of Poole & Mackworth."""

from __future__ import annotations

import math

import pytest

from diag.advice.sensitivity import Line, admissible, lines, reaching

ALARM = {(1, 1): 0.5, (1, 0): 0.85, (0, 1): 0.99, (0, 0): 0.0001}
FIRE = 0.01


def joint(tampering: float) -> dict[str, float]:
    """P(cause, report, no smoke), the network enumerated (Poole & Mackworth)."""
    found = {"tampering": 0.0, "fire": 0.0, "all": 0.0}
    for t in (0, 1):
        for f in (0, 1):
            report = 0.0
            for alarm, p_alarm in ((1, ALARM[t, f]), (0, 1 - ALARM[t, f])):
                leaving = 0.88 if alarm else 0.001
                report += p_alarm * (leaving * 0.75 + (1 - leaving) * 0.01)
            prior = (tampering if t else 1 - tampering) * (FIRE if f else 1 - FIRE)
            p = prior * report * (0.1 if f else 0.99)
            found["all"] += p
            found["tampering"] += p * t
            found["fire"] += p * f
    return found


def test_posterior_before_anything_moves() -> None:
    """Poole & Mackworth: report and no smoke gives tampering .500797, fire .029369."""
    found = lines(joint)
    evidence = found["all"].at(0.02)
    assert found["tampering"].at(0.02) / evidence == pytest.approx(0.500797, abs=1e-6)
    assert found["fire"].at(0.02) / evidence == pytest.approx(0.029369, abs=1e-6)


def test_smallest_prior_that_reaches_a_threshold() -> None:
    """Recomputed on the same network: P(tampering) = .036405 lifts the posterior to .65."""
    found = lines(joint)
    x = reaching(found["tampering"], found["all"], 0.65)
    assert x == pytest.approx(0.036405, abs=1e-6)


def test_log_odds_move_together() -> None:
    """Chan & Darwiche 2002: a prior's log-odds shift bounds the posterior's.

    For the prior of a root itself the bound is met: both shift alike.
    """
    found = lines(joint)
    x = reaching(found["tampering"], found["all"], 0.65)
    assert x is not None

    def logit(p: float) -> float:
        return math.log(p / (1 - p))

    before = found["tampering"].at(0.02) / found["all"].at(0.02)
    assert logit(x) - logit(0.02) == pytest.approx(logit(0.65) - logit(before), abs=1e-9)


def test_range_in_which_the_top_cause_stays() -> None:
    """Two lines cross where fire and tampering are equally likely; found by bisection."""
    found = lines(joint)
    causes = {name: found[name] for name in ("tampering", "fire")}
    room = admissible(causes, 0.02)
    low, high = 0.0, 0.02
    for _ in range(60):
        middle = (low + high) / 2
        values = joint(middle)
        low, high = (middle, high) if values["fire"] > values["tampering"] else (low, middle)
    assert room.low == pytest.approx(low, abs=1e-12)
    assert (room.high, room.below, room.above) == (1.0, "fire", "")


def test_threshold_out_of_reach() -> None:
    assert reaching(Line(0.1, 0.0), Line(0.0, 1.0), 0.5) is None
    assert reaching(Line(0.5, 0.0), Line(1.0, 0.0), 0.5) is None
