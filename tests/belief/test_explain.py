"""Decibans add up, conflict finds the odd reading, and a second cause is worth what it explains."""

from __future__ import annotations

import math
from itertools import pairwise, product

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from diag.belief.conflict import conflict_bits
from diag.belief.evidence import Finding, make_finding
from diag.belief.explain import added_factor, bayes_factor, decibans, ledger, suspect
from diag.belief.hypotheses import Engine
from diag.circuit.model import Circuit
from tests.belief.test_check_values import ASIA, yes
from tests.support import circuit, mode

ON_OFF = ("no", "yes")


def look(made: Circuit, *answers: str) -> list[Finding]:
    return [
        make_finding(made.observables[name], value)
        for name, value in (text.split("=") for text in answers)
    ]


def test_twenty_heads_weigh_as_good_says() -> None:
    """P9 of the check values: a double-headed coin, prior odds 1 to 10,000, twenty heads.

    The change in odds is 2 to the 20th. In ledger terms: twenty looks at twenty conditions,
    each certain under the cause and a toss-up (leak one half) without it.
    """
    nodes = {
        f"toss{k}": (("tail", "head"), "tail", {"head": 0.5}, {"coin.double": {"head": 1.0}})
        for k in range(20)
    }
    made = circuit(
        [mode("coin", "double", 1.0 / 10_001.0)],
        nodes,
        {f"see{k}": (f"toss{k}", 1.0, 0.0) for k in range(20)},
    )
    weights = ledger(Engine(made), look(made, *[f"see{k}=head" for k in range(20)]), "coin.double")
    total = sum(w.decibans for w in weights)
    odds = weights[-1].probability / (1.0 - weights[-1].probability)
    assert odds == pytest.approx(104.8576, rel=1e-9)
    assert decibans(odds) == pytest.approx(20.206, abs=5e-4)
    assert total == pytest.approx(20 * 10 * math.log10(2.0), rel=1e-9)


def test_evidence_ranks_asia_otherwise_than_the_posterior() -> None:
    """C9 of the check values (constructed on Lauritzen & Spiegelhalter 1988): with a visit to
    Asia, dyspnoea and a shadow, lung cancer is the likelier cause, yet the findings speak more
    for tuberculosis."""
    given: dict[str, str] = {}
    chances: dict[str, list[float]] = {v: [yes(ASIA, v)] for v in ("tub", "lung")}
    for finding in ("asia", "dysp", "xray"):
        given[finding] = "yes"
        for variable, row in chances.items():
            row.append(yes(ASIA, variable, **given))
    odds = {v: [p / (1.0 - p) for p in row] for v, row in chances.items()}
    whole = {v: decibans(row[-1] / row[0]) for v, row in odds.items()}
    steps = [decibans(b / a) for a, b in pairwise(odds["lung"])]
    assert chances["lung"][-1] > chances["tub"][-1]
    assert whole["tub"] == pytest.approx(17.873, abs=5e-4)
    assert whole["lung"] == pytest.approx(11.379, abs=5e-4)
    assert steps == pytest.approx([0.0, 2.785, 8.593], abs=1e-3)
    assert sum(steps) == pytest.approx(whole["lung"], abs=1e-9)


def fault_finding() -> Circuit:
    """Two causes of one low pressure, one of which also wets the engine."""
    return circuit(
        [mode("pump", "worn", 0.01), mode("line", "leak", 0.02), mode("valve", "weak", 0.005)],
        {
            "pressure": (
                ("low", "normal"),
                "normal",
                {"low": 0.002},
                {"pump.worn": {"low": 0.9}, "line.leak": {"low": 0.6}, "valve.weak": {"low": 0.95}},
            ),
            "oil": (("dry", "wet"), "dry", {"wet": 0.02}, {"line.leak": {"wet": 0.95}}),
            "copper": (ON_OFF, "no", {"yes": 0.01}, {"pump.worn": {"yes": 0.85}}),
        },
        {
            "gauge": ("pressure", 0.97, 0.02),
            "look": ("oil", 0.8, 0.15),
            "element": ("copper", 0.8, 0.06),
        },
    )


@settings(max_examples=20)
@given(
    answers=st.permutations(["gauge=low", "look=dry", "element=yes"]),
    ref=st.sampled_from(["pump.worn", "line.leak", "valve.weak"]),
)
def test_weights_add_up_to_the_change_in_log_odds(answers: list[str], ref: str) -> None:
    made = fault_finding()
    engine, findings = Engine(made), look(made, *answers)
    weights = ledger(engine, findings, ref)
    prior, after = (engine.posterior(f).probability(ref) for f in ([], findings))
    change = decibans(after / (1 - after)) - decibans(prior / (1 - prior))
    assert sum(w.decibans for w in weights) == pytest.approx(change, abs=1e-6)


def test_for_and_against_have_their_sign() -> None:
    made = fault_finding()
    weights = ledger(Engine(made), look(made, "gauge=low", "look=dry"), "line.leak")
    assert weights[0].decibans > 0
    assert weights[1].decibans < 0


def asia() -> Circuit:
    """The chest clinic of Lauritzen & Spiegelhalter 1988, read as causes and looks.

    Tuberculosis and lung cancer as causes whose priors already hold the visit to Asia (0.05)
    and the smoker's mean (0.055); dyspnoea and X-ray as conditions. Used here only to check
    the formulas against plain enumeration of the same model.
    """
    return circuit(
        [mode("t", "tb", 0.05), mode("l", "cancer", 0.055), mode("b", "bronchitis", 0.45)],
        {
            "shadow": (
                ON_OFF,
                "no",
                {"yes": 0.05},
                {"t.tb": {"yes": 0.97}, "l.cancer": {"yes": 0.97}},
            ),
            "dyspnoea": (
                ON_OFF,
                "no",
                {"yes": 0.1},
                {"t.tb": {"yes": 0.65}, "l.cancer": {"yes": 0.65}, "b.bronchitis": {"yes": 0.77}},
            ),
        },
        {"xray": ("shadow", 1.0, 0.0), "breath": ("dyspnoea", 1.0, 0.0)},
    )


def enumerate_evidence(made: Circuit, findings: list[Finding]) -> float:
    """P(findings) by plain enumeration of the causes (each on its own component)."""
    modes = list(made.modes.values())
    total = 0.0
    for present in product((False, True), repeat=len(modes)):
        weight = math.prod(
            m.probability if p else 1.0 - m.probability for m, p in zip(modes, present, strict=True)
        )
        for finding in findings:
            node = made.nodes[finding.observable.node]
            absent = 1.0 - node.record.leak["yes"]
            for m, p in zip(modes, present, strict=True):
                if p and m.ref in node.effects:
                    absent *= 1.0 - node.effects[m.ref].gives["yes"]
            weight *= absent if finding.value == "no" else 1.0 - absent
        total += weight
    return total


@pytest.mark.parametrize(("xray", "breath"), list(product(ON_OFF, ON_OFF)))
def test_conflict_is_jensens_formula(xray: str, breath: str) -> None:
    made = asia()
    findings = look(made, f"xray={xray}", f"breath={breath}")
    alone = [enumerate_evidence(made, [f]) for f in findings]
    expected = math.log2(math.prod(alone) / enumerate_evidence(made, findings))
    found = conflict_bits(Engine(made).posterior(findings, tolerance=0.0))
    assert found == pytest.approx(expected, abs=1e-9)


def test_agreeing_signs_do_not_conflict_and_opposing_ones_do() -> None:
    """The signs of C10 of the check values: a shadow with breathlessness hangs together."""
    engine = Engine(asia())
    made = engine.circuit
    together = conflict_bits(engine.posterior(look(made, "xray=yes", "breath=yes")))
    apart = conflict_bits(engine.posterior(look(made, "xray=yes", "breath=no")))
    assert together < 0 < apart


def test_the_odd_reading_is_named() -> None:
    names = [f"sign{k}" for k in range(4)]
    made = circuit(
        [mode("pump", "worn", 0.01)],
        {n: (ON_OFF, "no", {"yes": 0.02}, {"pump.worn": {"yes": 0.95}}) for n in names},
        {f"see_{n}": (n, 0.97, 0.02) for n in names},
    )
    answers = ["see_sign0=yes", "see_sign1=yes", "see_sign2=no", "see_sign3=yes"]
    posterior = Engine(made).posterior(look(made, *answers))
    found = suspect(posterior)
    assert found is not None
    finding, left = found
    assert finding.key == "see_sign2"
    assert left < conflict_bits(posterior)


def test_bayes_factor_is_posterior_over_prior_odds() -> None:
    made = fault_finding()
    engine = Engine(made)
    findings = look(made, "gauge=low", "element=yes")
    posterior = engine.posterior(findings, tolerance=0.0)
    before = engine.posterior([], tolerance=0.0).probability("pump.worn")
    after = posterior.probability("pump.worn")
    expected = (after / (1 - after)) / (before / (1 - before))
    assert bayes_factor(posterior, ["pump.worn"]) == pytest.approx(expected, rel=1e-9)


def test_a_second_cause_adds_only_what_it_explains() -> None:
    made = fault_finding()
    findings = look(made, "gauge=low", "element=yes", "look=wet")
    posterior = Engine(made).posterior(findings, tolerance=0.0)
    # The pump explains pressure and copper; the wet engine wants the leak, not the valve.
    assert added_factor(posterior, ["pump.worn"], "line.leak") > 3.0
    assert added_factor(posterior, ["pump.worn"], "valve.weak") < 1.2
