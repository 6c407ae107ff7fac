"""The planner on the shipped circuits: what it is made from, and what it says."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from diag.advice.plan.draft import LIKELY_ENOUGH, comes_back, draft, ground_of
from diag.advice.plan.ground import Stand, Wants
from diag.advice.planner import Budget, Plan, Situation, plan
from diag.advice.steps import Place
from diag.belief.evidence import parse_finding
from diag.belief.hypotheses import Engine
from diag.belief.outlook import Outlook
from diag.circuit.loading import load_circuit

CIRCUIT = load_circuit("relief_valve_turboprop")
ENGINE = Engine(CIRCUIT)
LOW = ["oil_pressure@hot_idle=52psi", "oil_pressure@high_power=81psi"]


def situation(texts: list[str], barred: frozenset[str] = frozenset()) -> Situation:
    findings = [parse_finding(CIRCUIT, text) for text in texts]
    done = frozenset(f.key for f in findings)
    return Situation(CIRCUIT, ENGINE.posterior(findings), done=done, barred=barred)


@pytest.fixture(scope="module")
def made() -> Plan:
    return plan(situation(LOW), Budget(4))


def test_steps_stand_in_order_with_their_rivals(made: Plan) -> None:
    minutes = [step.minutes for step in made.steps]
    assert minutes == pytest.approx(sorted(minutes))
    assert len(made.rivals) == 4
    assert made.lower <= made.chosen.minutes
    assert {"escalate", "close"} <= {step.id for step in made.steps}


def test_answers_of_a_step_add_up(made: Plan) -> None:
    for step in made.steps:
        if step.answers:
            assert sum(a.chance for a in step.answers) == pytest.approx(1.0)
            assert all(0.0 < a.probability <= 1.0 + 1e-9 for a in step.answers)


def test_same_budget_same_plan(made: Plan) -> None:
    assert plan(situation(LOW), Budget(4)) == made


def test_barred_and_done_steps_are_not_planned(made: Plan) -> None:
    barred = frozenset({made.chosen.id})
    again = plan(situation(LOW, barred), Budget(1))
    assert again.rated(made.chosen.id) is None
    assert all(again.rated(text.split("=")[0]) is None for text in LOW)


def test_predictions_are_those_of_the_outlook() -> None:
    """With nothing repaired the abstract checks answer as the outlook does."""
    case = situation(LOW)
    built = draft(case, rows=100)
    outlook = Outlook(case.posterior, most=100)
    kept = [frozenset(m for m in row if m != outlook.frame.none) for row in outlook.modes.tolist()]
    rows = [built.sets.index(faults) for faults in kept]
    for check, observable in zip(built.problem.checks, built.observables, strict=True):
        now = built.problem.conditions[check.condition].now
        answers = (now[:, :, None] * check.table).sum(axis=1)[rows]
        assert answers == pytest.approx(outlook.answers(observable), abs=1e-9), check.id


def test_every_repair_has_its_twin() -> None:
    built = draft(situation(LOW))
    for repair, remedy in zip(built.problem.repairs, built.remedies, strict=True):
        gone = {ENGINE.frame.index[ref] for ref in remedy.restores}
        for faults, twin in zip(built.sets, repair.after.tolist(), strict=True):
            assert built.sets[twin] == faults - gone


def test_a_passed_verification_clears_what_was_repaired() -> None:
    """After a rectification with its proof in order, what it restores is hardly likely."""
    remedy = CIRCUIT.remedies["pressure_pump_replace"]
    world = tuple((ref, remedy.record.success) for ref in remedy.restores)
    before = [parse_finding(CIRCUIT, text) for text in LOW]
    proof = parse_finding(CIRCUIT, "oil_pressure@hot_idle=78psi")
    findings = [*before, replace(proof, world=world)]
    built = draft(Situation(CIRCUIT, ENGINE.posterior(findings), world))
    worn = ENGINE.frame.index["pressure_pump.worn"]
    left = sum(
        w for s, w in zip(built.sets, built.problem.weights.tolist(), strict=True) if worn in s
    )
    assert left < 1.0 - remedy.record.success


def test_closing_pays_from_the_probability_at_which_it_is_proposed() -> None:
    escalate = CIRCUIT.file.costs.escalate_minutes
    assert comes_back(CIRCUIT) * (1.0 - LIKELY_ENOUGH) == pytest.approx(escalate)


def test_an_opening_is_paid_once() -> None:
    ground = ground_of(CIRCUIT)
    cowl, bowl = CIRCUIT.openings["cowl"], CIRCUIT.openings["filter_bowl"]
    costs = [o.open_minutes + o.close_minutes for o in (cowl, bowl)]
    minutes, there = ground.go(Stand("cold"), Wants("stopped", ("filter_bowl",)))
    assert minutes == pytest.approx(sum(costs))
    assert ground.go(there, Wants("stopped", ("filter_bowl", "cowl"))) == (0.0, there)


def test_a_warm_engine_is_worth_something() -> None:
    """Stopping at idle leaves a warm engine; from cold it takes a warm-up run."""
    ground, states = ground_of(CIRCUIT), CIRCUIT.engine_states
    warm, _ = ground.go(Stand("idle"), Wants("hot_stopped"))
    cold, _ = ground.go(Stand("cold"), Wants("hot_stopped"))
    assert warm == states["idle"].leave_minutes
    assert cold == states["hot_stopped"].reach_minutes > warm


def test_where_the_work_stands_counts() -> None:
    case = situation(LOW)
    open_ = Situation(
        CIRCUIT, case.posterior, place=Place("cold", frozenset({"cowl"})), done=case.done
    )
    closed_costs, open_costs = (plan(s, Budget(1)).chosen.minutes for s in (case, open_))
    assert open_costs <= closed_costs + 1e-9
    assert np.isfinite(open_costs)
