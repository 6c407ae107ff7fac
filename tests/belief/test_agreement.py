"""The hypotheses engine against full enumeration, pgmpy and pyAgrum."""

from __future__ import annotations

import itertools
import math
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from diag.belief.evidence import Finding, make_finding, state_likelihood
from diag.belief.hypotheses import Contradiction, Engine
from diag.belief.network import circuit_tables, safe, to_pgmpy, witness
from diag.belief.outlook import Outlook
from diag.circuit.model import Circuit
from diag.circuit.records import Signal
from tests.support import circuit, mode

chance = st.floats(0.02, 0.98)


@st.composite
def cases(draw: st.DrawFn) -> tuple[Circuit, list[Finding]]:
    """A random small circuit, two-sided conditions, instruments and promotion included."""
    count = draw(st.integers(2, 4))
    names = [f"c{i}" for i in range(count)]
    modes = []
    for i, name in enumerate(names):
        promotes = {}
        if i == 0 and draw(st.booleans()):
            promotes = {"c1.m0": draw(st.floats(0.2, 30.0))}
        for k in range(draw(st.integers(1, 2))):
            own = promotes if k == 0 else None
            modes.append(mode(name, f"m{k}", draw(st.floats(0.01, 0.3)), promotes=own))
    shift = draw(st.floats(0, 0.5))
    signal = Signal(shift_down=shift, shows={"highest": draw(st.floats(0, 0.4))}, basis="judgement")
    modes.append(mode("gauge", "off", draw(st.floats(0.01, 0.2)), signal=signal))
    nodes: dict[str, Any] = {}
    checks: dict[str, tuple[str, float, float]] = {}
    through: dict[str, tuple[str, ...]] = {}
    for n in range(draw(st.integers(1, 3))):
        states = draw(st.sampled_from([("low", "normal", "high"), ("none", "fuzz", "flakes")]))
        normal = "normal" if "normal" in states else "none"
        abnormal = [s for s in states if s != normal]
        leak = {s: draw(st.floats(0.0, 0.2)) for s in abnormal}
        effects = {}
        for m in modes[:-1]:
            if draw(st.booleans()):
                first = draw(chance)
                effects[m.ref] = {abnormal[0]: first, abnormal[1]: (1 - first) * draw(chance)}
        nodes[f"n{n}"] = (states, normal, leak, effects)
        checks[f"n{n}_look"] = (f"n{n}", draw(chance), draw(st.floats(0.01, 0.4)))
        checks[f"n{n}_gauge"] = (f"n{n}", draw(chance), draw(st.floats(0.01, 0.4)))
        through[f"n{n}_gauge"] = ("gauge",)
    made = circuit(modes, nodes, checks, through, unlisted=draw(st.sampled_from([0.0, 0.05])))
    findings = []
    for name in checks:
        if draw(st.booleans()):
            observable = made.observables[name]
            word = draw(st.sampled_from(observable.outcomes))
            findings.append(make_finding(observable, word, draw(st.sampled_from([1.0, 0.7]))))
    return made, findings


def enumerated(engine: Engine, findings: list[Finding]) -> tuple[np.ndarray, float]:
    """Posterior of every mode and P(findings) by summing over all hypotheses, from scratch."""
    frame, made = engine.frame, engine.circuit
    choices = [[frame.none, *frame.modes_of(c).tolist()] for c in frame.components]
    total, marginal = 0.0, np.zeros(frame.none + 1)
    for chosen in itertools.product(*choices):
        present = [m for m in chosen if m != frame.none]
        joint = _prior(engine, present)
        for node in made.nodes.values():
            states = _states(engine, node.id, present)
            seen = np.ones(len(states))
            for finding in findings:
                if finding.observable.node == node.id:
                    seen = seen * _seen(engine, finding, present)
            joint *= float(states @ seen)
        total += joint
        marginal[present] += joint
    return marginal[:-1] / total, total


def _prior(engine: Engine, present: list[int]) -> float:
    frame = engine.frame
    factors = np.ones(frame.none + 1)
    for m in present:
        if frame.refs[m] in engine.circuit.modes:
            record = engine.circuit.modes[frame.refs[m]].record
            for target, factor in record.promotes.items():
                factors[frame.index[target]] *= factor
    odds = engine.odds * factors
    value = 1.0
    for component in frame.components:
        own = frame.modes_of(component)
        value /= 1.0 + odds[own].sum()
    return value * math.prod(odds[m] for m in present)


def _states(engine: Engine, name: str, present: list[int]) -> np.ndarray:
    """The opposing noisy-MAX by summing over what each cause does, one by one."""
    node = engine.circuit.nodes[name]
    states, normal = node.record.states, node.normal
    found = np.zeros(len(states))
    sides = {}
    for word in ("down", "up"):
        depth = normal if word == "down" else len(states) - 1 - normal
        named = [
            states[normal - k - 1] if word == "down" else states[normal + k + 1]
            for k in range(depth)
        ]
        level = np.zeros(depth + 1)
        level[0] = 1.0
        refs = [engine.frame.refs[m] for m in present]
        for gives in [node.record.leak] + [
            node.effects[r].gives for r in refs if r in node.effects
        ]:
            own = np.array([gives.get(s, 0.0) for s in named])
            own = np.concatenate([[1.0 - own.sum()], own])
            new = np.zeros(depth + 1)
            for a, b in itertools.product(range(depth + 1), repeat=2):
                new[max(a, b)] += level[a] * own[b]
            level = new
        sides[word] = level
    for d, u in itertools.product(range(len(sides["down"])), range(len(sides["up"]))):
        found[normal + u - d] += sides["down"][d] * sides["up"][u]
    return found


def _seen(engine: Engine, finding: Finding, present: list[int]) -> np.ndarray:
    shown = state_likelihood(finding)
    size = len(shown)
    names = {engine.frame.refs[m].split(".")[0]: engine.frame.refs[m] for m in present}
    for component in reversed(finding.observable.through):
        if component not in names:
            continue
        signal = engine.circuit.modes[names[component]].record.signal
        assert signal is not None
        passed = []
        for true in range(size):
            down, top = shown[max(true - 1, 0)], shown[size - 1]
            rest = 1.0 - signal.shift_down - signal.shows["highest"]
            passed.append(
                signal.shift_down * down + signal.shows["highest"] * top + rest * shown[true]
            )
        shown = np.array(passed)
    return shown


@settings(max_examples=220, deadline=None, suppress_health_check=list(HealthCheck))
@given(cases())
def test_posteriors_equal_full_enumeration(case: tuple[Circuit, list[Finding]]) -> None:
    made, findings = case
    engine = Engine(made)
    expected, total = enumerated(engine, findings)
    try:
        posterior = engine.posterior(findings, tolerance=0.0, beam=10**6)
    except Contradiction:
        assert total == 0.0
        return
    assert posterior.coverage.method == "enumerated"
    np.testing.assert_allclose(posterior.marginals, expected, atol=1e-9)
    assert math.isclose(math.exp(posterior.log_evidence), total, rel_tol=1e-9)
    assert math.isclose(posterior.weight.sum(), 1.0, abs_tol=1e-12)


@settings(max_examples=200, deadline=None, suppress_health_check=list(HealthCheck))
@given(cases())
def test_posteriors_equal_pyagrum(case: tuple[Circuit, list[Finding]]) -> None:
    made, findings = case
    engine = Engine(made)
    posterior = engine.posterior(findings, tolerance=0.0, beam=10**6)
    for ref, value in _pyagrum(engine, findings).items():
        assert abs(posterior.probability(ref) - value) < 1e-9


def _pyagrum(engine: Engine, findings: list[Finding]) -> dict[str, float]:
    import pyagrum as gum

    tables = circuit_tables(engine, [f.key for f in findings])
    net = gum.BayesNet()
    for t in tables:
        net.add(gum.LabelizedVariable(t.variable, "", list(t.states)))
    for t in tables:
        for parent in t.parents:
            net.addArc(parent, t.variable)
    for t in tables:
        cpt = net.cpt(t.variable)
        for combo in np.ndindex(*t.values.shape):
            names = dict(zip((t.variable, *t.parents), map(int, combo), strict=True))
            cpt[names] = float(t.values[combo])
    inference = gum.LazyPropagation(net)
    for f in findings:
        inference.addEvidence(f"shown__{safe(f.key)}", state_likelihood(f).tolist())
    inference.makeInference()
    found = {}
    for ref in engine.frame.refs:
        component, name = ref.split(".")
        states = next(t.states for t in tables if t.variable == f"mode__{component}")
        posterior = inference.posterior(f"mode__{component}")
        found[ref] = float(posterior[states.index(name)])
    return found


@settings(max_examples=200, deadline=None, suppress_health_check=list(HealthCheck))
@given(cases())
def test_posteriors_equal_pgmpy(case: tuple[Circuit, list[Finding]]) -> None:
    made, findings = case
    engine = Engine(made)
    posterior = engine.posterior(findings, tolerance=0.0, beam=10**6)
    soft = {f.key: state_likelihood(f) for f in findings}
    refs = engine.frame.refs[:2]
    for ref, value in witness(engine, {}, soft, refs).items():
        assert abs(posterior.probability(ref) - value) < 1e-9


@settings(max_examples=200, deadline=None, suppress_health_check=list(HealthCheck))
@given(cases())
def test_stated_coverage_is_true(case: tuple[Circuit, list[Finding]]) -> None:
    """Truncated growth claims no more than it has."""
    made, findings = case
    engine = Engine(made)
    _, total = enumerated(engine, findings)
    truncated = engine.posterior(findings, tolerance=0.5, beam=2, max_faults=3)
    true = math.exp(truncated.log_evidence) / total
    assert truncated.coverage.value <= true + 1e-9


@settings(max_examples=100, deadline=None, suppress_health_check=list(HealthCheck))
@given(cases(), st.randoms())
def test_order_of_findings_does_not_matter(
    case: tuple[Circuit, list[Finding]], random: Any
) -> None:
    made, findings = case
    shuffled = list(findings)
    random.shuffle(shuffled)
    first = Engine(made).posterior(findings).marginals
    np.testing.assert_allclose(first, Engine(made).posterior(shuffled).marginals, atol=1e-12)


@settings(max_examples=100, deadline=None, suppress_health_check=list(HealthCheck))
@given(cases())
def test_predicted_outcomes_equal_enumeration(case: tuple[Circuit, list[Finding]]) -> None:
    """P(outcome | findings) = P(findings and outcome) / P(findings)."""
    made, findings = case
    engine = Engine(made)
    taken = {f.key for f in findings}
    _, before = enumerated(engine, findings)
    posterior = engine.posterior(findings, tolerance=0.0, beam=10**6)
    outlook = Outlook(posterior, keep=1.0, most=10**6)
    for name, observable in made.observables.items():
        if name in taken:
            continue
        chances = outlook.chances(observable)
        assert math.isclose(chances.sum(), 1.0, abs_tol=1e-9)
        for outcome, predicted in zip(observable.outcomes, chances, strict=True):
            _, both = enumerated(engine, [*findings, make_finding(observable, outcome)])
            assert predicted == pytest.approx(both / before, abs=1e-9)


def test_network_passes_pgmpys_own_check() -> None:
    made = circuit(
        [mode("a", "x", 0.1)],
        {"n": (("ok", "bad"), "ok", {"bad": 0.01}, {"a.x": {"bad": 0.9}})},
        {"look": ("n", 0.9, 0.1)},
    )
    assert to_pgmpy(circuit_tables(Engine(made))).check_model()
