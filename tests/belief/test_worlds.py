"""Findings taken after a rectification see the restored circuit; older ones keep the old one.

The reference sums over everything by brute force: which modes were present at the complaint,
what each cause did to each condition in each world, and what each instrument handed on. It
shares no arrays with the engine. A repair is an action, not an observation (Heckerman, Breese
& Rommelse 1995; Pearl 2000), so it never changes what the older findings say.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from functools import cache
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from diag.belief.evidence import Finding, make_finding, state_likelihood
from diag.belief.exact import log_evidence
from diag.belief.frame import World
from diag.belief.hypotheses import Contradiction, Engine, Posterior
from diag.belief.outlook import Outlook
from diag.circuit.model import UNLISTED, Circuit, Node
from diag.circuit.records import Signal
from tests.support import J, circuit, mode

Present = frozenset[str]


@dataclass(frozen=True)
class Case:
    """A circuit, and findings taken before, between and after two rectifications."""

    circuit: Circuit
    findings: tuple[Finding, ...]
    worlds: tuple[World, ...]


# -- the reference -----------------------------------------------------------------------


def hypotheses(engine: Engine) -> Iterator[tuple[Present, float]]:
    """Every set of modes present at the complaint, with its prior probability."""
    made = engine.circuit
    odds = dict(zip(engine.frame.refs, engine.odds.tolist(), strict=False))
    groups = [[m.ref for m in c.modes] for c in made.components.values()] + [[UNLISTED]]
    for chosen in itertools.product(*([None, *group] for group in groups)):
        present = frozenset(ref for ref in chosen if ref is not None)
        factors = dict.fromkeys(odds, 1.0)
        for ref in present - {UNLISTED}:
            for target, factor in made.modes[ref].record.promotes.items():
                factors[target] *= factor
        prior = math.prod(odds[ref] * factors[ref] for ref in present)
        for group in groups:
            prior /= 1.0 + sum(odds[ref] * factors[ref] for ref in group)
        yield present, prior


def state_chances(node: Node, present: Present) -> list[float]:
    """P(state) by listing what the leak and each cause present do, one by one."""
    states, normal = node.record.states, node.normal
    acting = [node.record.leak, *(e.gives for ref, e in node.effects.items() if ref in present)]
    moves = [{states.index(s) - normal: p for s, p in gives.items()} for gives in acting]
    options = [
        [(0, 1.0 - sum(p for _, p in side)), *side]
        for one in moves
        for side in ([m for m in one.items() if m[0] < 0], [m for m in one.items() if m[0] > 0])
    ]
    found = [0.0] * len(states)
    for chosen in itertools.product(*options):
        at = [move for move, _ in chosen]
        found[normal + max(at) + min(at)] += math.prod(p for _, p in chosen)
    return found


def handed_on(signal: Signal, size: int, normal: int, true: int) -> list[float]:
    """P(state shown | true state) of a failed instrument, as the record describes it."""
    row = [0.0] * size
    row[max(true - 1, 0)] += signal.shift_down
    row[min(true + 1, size - 1)] += signal.shift_up
    places = {"lowest": 0, "normal": normal, "highest": size - 1}
    for word, chance in signal.shows.items():
        row[places[word]] += chance
    row[true] += 1.0 - signal.shift_down - signal.shift_up - sum(signal.shows.values())
    return row


class Reference:
    """Sums over all hypotheses; what depends on few modes only is kept for the next one."""

    def __init__(self, engine: Engine) -> None:
        self.engine, self.made = engine, engine.circuit
        self.prior = list(hypotheses(engine))
        self.states = cache(self._states)
        self.seen = cache(self._seen)

    def _states(self, name: str, causes: Present) -> list[float]:
        return state_chances(self.made.nodes[name], causes)

    def _seen(self, key: str, value: str, trust: float, failed: Present) -> list[float]:
        """Per true state P(finding), through the instruments as they are in its world."""
        observable = self.made.observables[key]
        node = self.made.nodes[observable.node]
        size = len(node.record.states)
        told = state_likelihood(make_finding(observable, value, trust)).tolist()
        found = []
        for true in range(size):
            shown = [float(true == k) for k in range(size)]
            for ref in sorted(failed):
                record = self.made.modes[ref].record.signal
                assert record is not None
                rows = [handed_on(record, size, node.normal, k) for k in range(size)]
                shown = [sum(shown[j] * rows[j][k] for j in range(size)) for k in range(size)]
            found.append(sum(p * value for p, value in zip(shown, told, strict=True)))
        return found

    def likelihood(self, findings: Sequence[Finding], present: Present) -> float:
        """P(findings | modes present at the complaint), each world with what is left of them."""
        value = 1.0
        for name, world in dict.fromkeys((f.observable.node, f.world) for f in findings):
            left = present - {ref for ref, _ in world}
            joint = list(self.states(name, left & set(self.made.nodes[name].effects)))
            for f in findings:
                if (f.observable.node, f.world) == (name, world):
                    through = f.observable.through
                    failed = frozenset(r for r in left if r.split(".")[0] in through)
                    seen = self.seen(f.key, f.value, f.trust, failed)
                    joint = [a * b for a, b in zip(joint, seen, strict=True)]
            value *= sum(joint)
        return value

    def posterior(self, findings: Sequence[Finding]) -> tuple[dict[str, float], float]:
        """Probability of every mode at the time of the complaint, and P(findings)."""
        total, marginal = 0.0, dict.fromkeys(self.engine.frame.refs, 0.0)
        for present, prior in self.prior:
            joint = prior * self.likelihood(findings, present)
            total += joint
            for ref in present:
                marginal[ref] += joint
        return {ref: value / total if total else 0.0 for ref, value in marginal.items()}, total


# -- random cases ------------------------------------------------------------------------

chance = st.floats(0.02, 0.98)


@st.composite
def circuits(draw: st.DrawFn) -> Circuit:
    """Three components, a gauge and one or two two-sided conditions looked at twice each."""
    modes = [
        mode(f"c{i}", f"m{k}", draw(st.floats(0.01, 0.3)), promotes=promotes)
        for i in range(3)
        for k in range(2 if i == 1 else 1)
        for promotes in [{"c1.m0": draw(st.floats(0.2, 30.0))} if i == 0 else None]
    ]
    for name in ("stuck", "off"):
        shift = draw(st.floats(0.0, 0.5))
        shows: Any = {draw(st.sampled_from(["lowest", "normal", "highest"])): 0.4}
        signal = Signal(shift_down=shift, shift_up=0.1, shows=shows, basis=J)
        modes.append(mode("gauge", name, draw(st.floats(0.01, 0.3)), signal=signal))
    nodes: dict[str, Any] = {}
    for n in range(draw(st.integers(1, 2))):
        effects = {
            m.ref: {"low": (low := draw(chance)), "high": (1.0 - low) * draw(chance)}
            for m in modes
            if m.component != "gauge" and draw(st.booleans())
        }
        leak = {"low": draw(st.floats(0.0, 0.2)), "high": draw(st.floats(0.0, 0.2))}
        nodes[f"n{n}"] = (("low", "normal", "high"), "normal", leak, effects)
    checks = {
        f"{n}_{way}": (n, draw(chance), draw(st.floats(0.01, 0.4)))
        for n in nodes
        for way in ("look", "gauge")
    }
    through = {name: ("gauge",) for name in checks if name.endswith("gauge")}
    return circuit(modes, nodes, checks, through, unlisted=draw(st.sampled_from([0.0, 0.05])))


@st.composite
def cases(draw: st.DrawFn) -> Case:
    """Findings before, after one and after two rectifications that always work."""
    made = draw(circuits())
    order = draw(st.permutations(list(made.modes)))
    first, second = ((ref, 1.0) for ref in order[:2])
    worlds: tuple[World, ...] = ((), (first,), (first, second))
    findings = []
    for world in worlds:
        for observable in made.observables.values():
            if draw(st.booleans()):
                word = draw(st.sampled_from(observable.outcomes))
                trust = draw(st.sampled_from([1.0, 0.7]))
                findings.append(replace(make_finding(observable, word, trust), world=world))
    return Case(made, tuple(findings), worlds)


def posterior(engine: Engine, findings: Sequence[Finding]) -> Posterior:
    return engine.posterior(findings, tolerance=0.0, beam=10**6)


def closed_sum(found: Posterior) -> float | None:
    views: dict[Any, list[Any]] = {}
    for sight in found.sights:
        views.setdefault((sight.node, sight.world), []).append((sight.digit, sight.table))
    return log_evidence(found.frame, found.engine.odds, views, 10**8)


ROOMY: Any = {"deadline": None, "suppress_health_check": list(HealthCheck)}


@settings(max_examples=200, **ROOMY)
@given(cases())
def test_posterior_equals_enumeration_over_all_worlds(case: Case) -> None:
    engine = Engine(case.circuit)
    expected, total = Reference(engine).posterior(case.findings)
    try:
        found = posterior(engine, case.findings)
    except Contradiction:
        assert total == 0.0
        return
    for ref, value in expected.items():
        assert found.probability(ref) == pytest.approx(value, abs=1e-9)
    assert math.exp(found.log_evidence) == pytest.approx(total, rel=1e-9)
    assert found.coverage.method == "enumerated"


@settings(max_examples=50, **ROOMY)
@given(cases())
def test_closed_sum_knows_the_worlds(case: Case) -> None:
    """P(findings) of the closed sum, which states the coverage, equals the enumeration."""
    engine = Engine(case.circuit)
    _, total = Reference(engine).posterior(case.findings)
    if total < 1e-10:
        return
    value = closed_sum(posterior(engine, case.findings))
    assert value is not None
    assert math.exp(value) == pytest.approx(total, rel=1e-6)


@settings(max_examples=50, **ROOMY)
@given(cases())
def test_predictions_are_for_the_world_as_it_is_now(case: Case) -> None:
    """P(outcome now | findings) = P(findings and outcome) / P(findings)."""
    engine, now = Engine(case.circuit), case.worlds[-1]
    reference = Reference(engine)
    _, before = reference.posterior(case.findings)
    if not before:
        return
    outlook = Outlook(posterior(engine, case.findings), now, keep=1.0, most=10**6)
    taken = {f.key for f in case.findings if f.world == now}
    for name, observable in case.circuit.observables.items():
        if name in taken:
            continue
        for outcome, predicted in zip(
            observable.outcomes, outlook.chances(observable), strict=True
        ):
            more = replace(make_finding(observable, outcome), world=now)
            _, both = reference.posterior((*case.findings, more))
            assert predicted == pytest.approx(both / before, abs=1e-9)


@settings(max_examples=50, **ROOMY)
@given(cases())
def test_a_rectification_alone_changes_no_odds(case: Case) -> None:
    """What was found before stays as telling as it was: repairs are no observations."""
    engine = Engine(case.circuit)
    old = [f for f in case.findings if not f.world]
    before = posterior(engine, old).marginals
    now = case.worlds[-1]
    flat = [
        replace(make_finding(o, o.normal, trust=0.0), world=now)
        for o in case.circuit.observables.values()
    ]
    assert posterior(engine, [*old, *flat]).marginals == pytest.approx(before, abs=1e-9)


# -- cases that can be worked out by hand ------------------------------------------------


def pump(detects: float = 1.0, alarm: float = 0.0) -> Circuit:
    """A pump that always lowers the pressure, a gauge that may always show low."""
    reads_low = Signal(shows={"lowest": 1.0}, basis=J)
    return circuit(
        [mode("pump", "worn", 0.1), mode("gauge", "reads_low", 0.2, signal=reads_low)],
        {"pressure": (("low", "normal"), "normal", {}, {"pump.worn": {"low": 1.0}})},
        {"gauge": ("pressure", detects, alarm), "direct": ("pressure", detects, alarm)},
        {"gauge": ("gauge",)},
    )


def finding(made: Circuit, name: str, value: str, world: World = ()) -> Finding:
    return replace(make_finding(made.observables[name], value), world=world)


def sole(found: Posterior) -> Any:
    """The likeliest set of modes, with its probability."""
    return found.hypotheses(1)[0]


def test_a_component_restored() -> None:
    """Low before and normal after replacing the pump: the pump it was.

    Low leaves pump (.1), gauge (.2) or both; normal after the repair leaves no gauge fault.
    """
    made = pump()
    world: World = (("pump.worn", 1.0),)
    low = finding(made, "gauge", "low")
    found = posterior(Engine(made), [low, finding(made, "gauge", "normal", world)])
    assert sole(found) == (("pump.worn",), pytest.approx(1.0))
    still = posterior(Engine(made), [low, finding(made, "gauge", "low", world)])
    assert still.probability("gauge.reads_low") == pytest.approx(1.0)
    assert still.probability("pump.worn") == pytest.approx(0.1)


def test_an_instrument_restored() -> None:
    """Low before and normal after changing the gauge: the gauge it was, the pump is sound."""
    made = pump()
    world: World = (("gauge.reads_low", 1.0),)
    low = finding(made, "gauge", "low")
    found = posterior(Engine(made), [low, finding(made, "gauge", "normal", world)])
    assert sole(found) == (("gauge.reads_low",), pytest.approx(1.0))
    still = posterior(Engine(made), [low, finding(made, "gauge", "low", world)])
    assert still.probability("pump.worn") == pytest.approx(1.0)
    assert still.probability("gauge.reads_low") == pytest.approx(0.2)


def test_an_older_finding_keeps_the_old_world() -> None:
    """Both readings of the old world share one state; the new world has its own."""
    made = pump(0.9, 0.2)
    world: World = (("pump.worn", 1.0),)
    old = [finding(made, "direct", "low"), finding(made, "gauge", "low")]
    new = [finding(made, "direct", "normal", world)]
    expected, total = Reference(Engine(made)).posterior([*old, *new])
    by_hand = {
        (True, False): 0.1 * 0.8 * 0.9 * 0.9 * 0.8,
        (True, True): 0.1 * 0.2 * 0.9 * 0.9 * 0.8,
        (False, False): 0.9 * 0.8 * 0.2 * 0.2 * 0.8,
        (False, True): 0.9 * 0.2 * 0.2 * 0.9 * 0.8,
    }
    assert total == pytest.approx(sum(by_hand.values()), rel=1e-12)
    found = posterior(Engine(made), [*old, *new])
    worn = sum(p for (pump_worn, _), p in by_hand.items() if pump_worn)
    assert found.probability("pump.worn") == pytest.approx(worn / total, abs=1e-12)
    assert expected["pump.worn"] == pytest.approx(worn / total, abs=1e-12)


@pytest.mark.parametrize("success", [0.0, 0.5, 0.9, 1.0])
def test_a_rectification_that_may_fail(success: float) -> None:
    """One condition looked at once afterwards: exact, the failure summed out by hand."""
    made = pump(0.9, 0.2)
    world: World = (("pump.worn", success),)
    findings = [finding(made, "direct", "low"), finding(made, "direct", "low", world)]
    found = posterior(Engine(made), findings)
    worn = 0.1 * 0.9 * ((1.0 - success) * 0.9 + success * 0.2)
    sound = 0.9 * 0.2 * 0.2
    assert found.probability("pump.worn") == pytest.approx(worn / (worn + sound), abs=1e-12)


@pytest.mark.parametrize("success", [0.0, 0.5, 1.0])
def test_an_instrument_change_that_may_fail(success: float) -> None:
    made = pump(0.9, 0.2)
    world: World = (("gauge.reads_low", success),)
    findings = [finding(made, "gauge", "low"), finding(made, "gauge", "low", world)]
    found = posterior(Engine(made), findings)
    off = sum(
        (0.1 if worn else 0.9) * 0.2 * 0.9 * (kept * 0.9 + (1.0 - kept) * (0.9 if worn else 0.2))
        for worn in (True, False)
        for kept in [1.0 - success]
    )
    right = sum(
        (0.1 if worn else 0.9) * 0.8 * (0.9 if worn else 0.2) ** 2 for worn in (True, False)
    )
    expected = off / (off + right)
    assert found.probability("gauge.reads_low") == pytest.approx(expected, abs=1e-12)
