"""Published worked examples, solved by the engine and by the network builder.

An example that a circuit can express is one: its root variables become modes, its tables the
odds, effects and leaks that give the same numbers. Where root variables act together in a way
that no noisy-MAX gives (a table of its own for "both"), they become exclusive modes of one
component, one for each set of them; that is exact, not an approximation.

Figures of the worked examples are quoted from memory and were recomputed by enumeration;
those marked "constructed" were made for this project and solved by enumeration only.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np
import pytest

from diag.belief.conflict import alone_log_evidence, conflict_bits
from diag.belief.evidence import Finding, make_finding
from diag.belief.exact import log_evidence
from diag.belief.hypotheses import Engine, Posterior
from diag.belief.network import Table, circuit_tables, safe, to_pgmpy, witness
from diag.belief.outlook import Outlook
from diag.circuit.model import Circuit, Mode
from tests.support import circuit, mode

SIX = 5e-7
"""Half a unit in the sixth decimal, to which most of the figures are printed."""
YES_NO = ("no", "yes")
Gives = Mapping[str, Mapping[str, float]]


# -- circuits and networks of the examples ----------------------------------------------


def odd(
    component: str, name: str, odds: float, promotes: Mapping[str, float] | None = None
) -> Mode:
    """A mode with the prior odds given, against its component being sound."""
    return mode(component, name, odds / (1.0 + odds), promotes=promotes)


def alone(present: float, leak: float) -> dict[str, float]:
    """What a cause does alone when it and the leak together give `present` (noisy-OR)."""
    return {"yes": 1.0 - (1.0 - present) / (1.0 - leak)}


def event(leak: float, **gives: dict[str, float]) -> Any:
    """A condition with two states; `gives` has a double underscore where a mode has a dot."""
    effects = {ref.replace("__", "."): chances for ref, chances in gives.items()}
    return (YES_NO, "no", {"yes": leak}, effects)


def findings(made: Circuit, **values: str) -> list[Finding]:
    return [make_finding(made.observables[name], value) for name, value in values.items()]


def solved(made: Circuit, **values: str) -> Posterior:
    """The posterior with all hypotheses weighed, its evidence held against the closed sum."""
    found = Engine(made).posterior(findings(made, **values), tolerance=0.0, beam=10**6)
    assert found.coverage.method == "enumerated"
    assert found.log_evidence == pytest.approx(exact(found), abs=1e-9)
    return found


def exact(posterior: Posterior) -> float:
    """log P(findings) by the closed sum."""
    views: dict[Any, list[Any]] = {}
    for sight in posterior.sights:
        views.setdefault((sight.node, sight.world), []).append((sight.digit, sight.table))
    value = log_evidence(posterior.frame, posterior.engine.odds, views, 10**8)
    assert value is not None
    return value


def total(posterior: Posterior, refs: Iterable[str]) -> float:
    """Probability that one of several exclusive modes is present."""
    return sum(posterior.probability(ref) for ref in refs)


def chance(posterior: Posterior, name: str, value: str = "yes") -> float:
    """P(a check not made says `value` | findings)."""
    observable = posterior.engine.circuit.observables[name]
    outlook = Outlook(posterior, keep=1.0, most=10**6)
    return float(outlook.chances(observable)[observable.outcomes.index(value)])


def binary(variable: str, parents: Sequence[str], yes: Any) -> Table:
    """A two-state table from P(yes | parents), parents' states in the order no, yes."""
    given = np.asarray(yes, dtype=float)
    return Table(variable, YES_NO, tuple(parents), np.stack([1.0 - given, given]))


def query(tables: Iterable[Table], wanted: Sequence[str], **given: str) -> np.ndarray:
    """P(wanted | given) by pgmpy's variable elimination, axes in the order of `wanted`."""
    from pgmpy.inference import VariableElimination

    inference = VariableElimination(to_pgmpy(tables))
    factor = inference.query(list(wanted), evidence=given or None, show_progress=False)
    order = [factor.variables.index(name) for name in wanted]
    return np.asarray(factor.values).transpose(order)


def yes(tables: Iterable[Table], variable: str, **given: str) -> float:
    return float(query(tables, [variable], **given)[1])


# -- P4 Burglary: Pearl 1988; Russell & Norvig, Artificial Intelligence, ch. 14 ----------

B, E = 0.001, 0.002
BURGLARY = [
    binary("burglary", (), B),
    binary("earthquake", (), E),
    binary("alarm", ("burglary", "earthquake"), [[0.001, 0.29], [0.94, 0.95]]),
    binary("john", ("alarm",), [0.05, 0.90]),
    binary("mary", ("alarm",), [0.01, 0.70]),
]


@pytest.fixture
def burglary() -> Circuit:
    none = (1.0 - B) * (1.0 - E)
    modes = [
        odd("night", "burglary", B * (1.0 - E) / none),
        odd("night", "earthquake", (1.0 - B) * E / none),
        odd("night", "both", B * E / none),
    ]
    alarm = event(
        0.001,
        night__burglary=alone(0.94, 0.001),
        night__earthquake=alone(0.29, 0.001),
        night__both=alone(0.95, 0.001),
    )
    tremor = event(0.0, night__earthquake={"yes": 1.0}, night__both={"yes": 1.0})
    checks = {
        "john": ("alarm", 0.90, 0.05),
        "mary": ("alarm", 0.70, 0.01),
        "heard": ("alarm", 1.0, 0.0),
        "felt": ("tremor", 1.0, 0.0),
    }
    return circuit(modes, {"alarm": alarm, "tremor": tremor}, checks)


def test_burglary_as_a_circuit(burglary: Circuit) -> None:
    broken = ("night.burglary", "night.both")
    called = solved(burglary, john="yes", mary="yes")
    assert total(called, broken) == pytest.approx(0.2841718353643929, abs=1e-12)
    assert total(called, ("night.earthquake", "night.both")) == pytest.approx(0.176067, abs=SIX)
    assert math.exp(called.log_evidence) == pytest.approx(0.002084100239, abs=5e-13)
    assert total(solved(burglary, heard="yes"), broken) == pytest.approx(0.373551, abs=SIX)
    explained = solved(burglary, heard="yes", felt="yes")
    assert total(explained, broken) == pytest.approx(0.003268, abs=SIX)


def test_burglary_as_a_network() -> None:
    called = {"john": "yes", "mary": "yes"}
    assert yes(BURGLARY, "burglary", **called) == pytest.approx(0.2841718353643929, abs=1e-12)
    assert yes(BURGLARY, "earthquake", **called) == pytest.approx(0.176067, abs=SIX)
    assert yes(BURGLARY, "burglary", alarm="yes") == pytest.approx(0.373551, abs=SIX)
    both = yes(BURGLARY, "burglary", alarm="yes", earthquake="yes")
    assert both == pytest.approx(0.003268, abs=SIX)
    assert query(BURGLARY, ["john", "mary"])[1, 1] == pytest.approx(0.002084100239, abs=5e-13)


# -- P5 Wet grass: the sprinkler network of Murphy's tutorial on graphical models --------

WET = [
    binary("cloudy", (), 0.5),
    binary("sprinkler", ("cloudy",), [0.5, 0.1]),
    binary("rain", ("cloudy",), [0.2, 0.8]),
    binary("wet", ("sprinkler", "rain"), [[0.0, 0.9], [0.9, 0.99]]),
]


@pytest.fixture
def wet_grass() -> Circuit:
    """Clouds change the odds of the two causes; .99 is the noisy-OR of .9 and .9."""
    turns = {
        "sprinkler.on": (0.1 / 0.9) / (0.5 / 0.5),
        "rain.falls": (0.8 / 0.2) / (0.2 / 0.8),
    }
    modes = [
        odd("sky", "cloudy", 1.0, promotes=turns),
        odd("sprinkler", "on", 0.5 / 0.5),
        odd("rain", "falls", 0.2 / 0.8),
    ]
    nodes = {
        "wet": event(0.0, sprinkler__on={"yes": 0.9}, rain__falls={"yes": 0.9}),
        "rain_fell": event(0.0, rain__falls={"yes": 1.0}),
        "it_ran": event(0.0, sprinkler__on={"yes": 1.0}),
    }
    checks = {f"look_{name}": (name, 1.0, 0.0) for name in nodes}
    return circuit(modes, nodes, checks)


def test_wet_grass_as_a_circuit(wet_grass: Circuit) -> None:
    wet = solved(wet_grass, look_wet="yes")
    assert math.exp(wet.log_evidence) == pytest.approx(0.6471, abs=1e-12)
    assert wet.probability("sprinkler.on") == pytest.approx(0.429764, abs=SIX)
    assert wet.probability("rain.falls") == pytest.approx(0.707928, abs=SIX)
    both = solved(wet_grass, look_wet="yes", look_it_ran="yes")
    assert math.exp(both.log_evidence) == pytest.approx(0.2781, abs=1e-12)
    rained = solved(wet_grass, look_wet="yes", look_rain_fell="yes")
    assert rained.probability("sprinkler.on") == pytest.approx(0.194499, abs=SIX)


def test_wet_grass_as_a_network() -> None:
    assert yes(WET, "wet") == pytest.approx(0.6471, abs=1e-12)
    assert query(WET, ["sprinkler", "wet"])[1, 1] == pytest.approx(0.2781, abs=1e-12)
    assert yes(WET, "sprinkler", wet="yes") == pytest.approx(0.429764, abs=SIX)
    assert yes(WET, "rain", wet="yes") == pytest.approx(0.707928, abs=SIX)
    assert yes(WET, "sprinkler", wet="yes", rain="yes") == pytest.approx(0.194499, abs=SIX)


# -- P6 Asia: Lauritzen & Spiegelhalter, J. R. Statist. Soc. B 50 (1988) -----------------

ASIA = [
    binary("asia", (), 0.01),
    binary("smoker", (), 0.5),
    binary("tub", ("asia",), [0.01, 0.05]),
    binary("lung", ("smoker",), [0.01, 0.1]),
    binary("bronc", ("smoker",), [0.3, 0.6]),
    binary("either", ("tub", "lung"), [[0.0, 1.0], [1.0, 1.0]]),
    binary("xray", ("either",), [0.05, 0.98]),
    binary("dysp", ("bronc", "either"), [[0.1, 0.7], [0.8, 0.9]]),
]
ILLS = {"t": 0.01 / 0.99, "l": 0.01 / 0.99, "b": 0.3 / 0.7}
VISIT = {"t": (0.05 / 0.95) / ILLS["t"]}
SMOKE = {"l": (0.1 / 0.9) / ILLS["l"], "b": (0.6 / 0.4) / ILLS["b"]}
CHEST = ["".join(c) for n in (1, 2, 3) for c in itertools.combinations("tlb", n)]
"""All sets of tuberculosis, lung cancer and bronchitis but the empty one."""


def turned(factors: Mapping[str, float]) -> dict[str, float]:
    """The factor on the odds of each set: the product over its members."""
    return {f"chest.{s}": math.prod(factors.get(x, 1.0) for x in s) for s in CHEST}


@pytest.fixture
def asia() -> Circuit:
    modes = [
        odd("travel", "asia", 0.01 / 0.99, promotes=turned(VISIT)),
        odd("habit", "smoker", 1.0, promotes=turned(SMOKE)),
        *(odd("chest", s, math.prod(ILLS[x] for x in s)) for s in CHEST),
    ]
    dysp = {"b": 0.8, "either": 0.7, "both": 0.9}

    def breathless(s: str) -> float:
        if set(s) & {"t", "l"}:
            return dysp["both" if "b" in s else "either"]
        return dysp["b"]

    shadow = {f"chest__{s}": alone(0.98, 0.05) for s in CHEST if set(s) & {"t", "l"}}
    nodes = {
        "dysp": event(0.1, **{f"chest__{s}": alone(breathless(s), 0.1) for s in CHEST}),
        "shadow": event(0.05, **shadow),
        "was_there": event(0.0, travel__asia={"yes": 1.0}),
    }
    checks = {"ask_dysp": ("dysp", 1.0, 0.0), "xray": ("shadow", 1.0, 0.0)}
    return circuit(modes, nodes, {**checks, "ask_travel": ("was_there", 1.0, 0.0)})


ASIA_CASES = [
    ({}, 0.08775096, 0.09952515, 0.8114021),
    ({"xray": "yes"}, 0.391712, 0.444271, 0.628822),
    ({"xray": "no"}, 0.002249, 0.002550, 0.862761),
]
"""Further findings, and P(T), P(L), P(B); the first P(T) is not in the paper's text and was
computed by enumeration."""


@pytest.mark.parametrize(("more", "tub", "lung", "bronc"), ASIA_CASES)
def test_asia_as_a_circuit(
    asia: Circuit, more: dict[str, str], tub: float, lung: float, bronc: float
) -> None:
    found = solved(asia, ask_travel="yes", ask_dysp="yes", **more)
    for ill, expected in (("t", tub), ("l", lung), ("b", bronc)):
        ours = total(found, (f"chest.{s}" for s in CHEST if ill in s))
        assert ours == pytest.approx(expected, abs=SIX)
    if not more:
        assert math.exp(found.log_evidence) == pytest.approx(0.004501375, abs=5e-10)


@pytest.mark.parametrize(("more", "tub", "lung", "bronc"), ASIA_CASES)
def test_asia_as_a_network(more: dict[str, str], tub: float, lung: float, bronc: float) -> None:
    given = {"asia": "yes", "dysp": "yes", **more}
    assert yes(ASIA, "tub", **given) == pytest.approx(tub, abs=SIX)
    assert yes(ASIA, "lung", **given) == pytest.approx(lung, abs=SIX)
    assert yes(ASIA, "bronc", **given) == pytest.approx(bronc, abs=SIX)


def test_asia_evidence_as_a_network() -> None:
    assert query(ASIA, ["asia", "dysp"])[1, 1] == pytest.approx(0.004501375, abs=5e-10)


# -- C10 Conflict in Asia (constructed): formula of Jensen et al. 1990 -------------------

CONFLICTS = [("yes", -0.555567), ("no", 0.650846)]
"""What dyspnoea is, the X-ray being positive, and conf(e) in bits."""


@pytest.mark.parametrize(("dysp", "bits"), CONFLICTS)
def test_conflict_in_asia(asia: Circuit, dysp: str, bits: float) -> None:
    found = solved(asia, ask_dysp=dysp, xray="yes")
    assert conflict_bits(found) == pytest.approx(bits, abs=SIX)
    for finding, variable in zip(found.findings, ("dysp", "xray"), strict=True):
        alone_there = query(ASIA, [variable])[YES_NO.index(finding.value)]
        assert math.exp(alone_log_evidence(found.engine, finding)) == pytest.approx(alone_there)


@pytest.mark.parametrize(("dysp", "bits"), CONFLICTS)
def test_conflict_formula_from_the_network(dysp: str, bits: float) -> None:
    at = YES_NO.index(dysp)
    product = query(ASIA, ["dysp"])[at] * query(ASIA, ["xray"])[1]
    assert math.log2(product / query(ASIA, ["dysp", "xray"])[at, 1]) == pytest.approx(bits, abs=SIX)


# -- P7 Fire alarm: Poole & Mackworth, Artificial Intelligence, ch. 8 --------------------

T, F = 0.02, 0.01
ALARM = {"tamper": 0.85, "fire": 0.99, "both": 0.5}
ALARM_LEAK = 0.0001
FIRE = [
    binary("tampering", (), T),
    binary("fire", (), F),
    binary("alarm", ("tampering", "fire"), [[ALARM_LEAK, 0.99], [0.85, 0.5]]),
    binary("smoke", ("fire",), [0.01, 0.9]),
    binary("leaving", ("alarm",), [0.001, 0.88]),
    binary("report", ("leaving",), [0.01, 0.75]),
]


@pytest.fixture
def fire_alarm() -> Circuit:
    """Leaving lies between alarm and report only, so it is summed out into the report."""
    none = (1.0 - T) * (1.0 - F)
    modes = [
        odd("house", "tamper", T * (1.0 - F) / none),
        odd("house", "fire", (1.0 - T) * F / none),
        odd("house", "both", T * F / none),
    ]
    loud = {f"house__{name}": alone(p, ALARM_LEAK) for name, p in ALARM.items()}
    smoke = alone(0.9, 0.01)
    nodes = {
        "alarm": event(ALARM_LEAK, **loud),
        "smoke": event(0.01, house__fire=smoke, house__both=smoke),
    }
    told = [0.75 * leaving + 0.01 * (1.0 - leaving) for leaving in (0.88, 0.001)]
    checks = {"report": ("alarm", told[0], told[1]), "smoke": ("smoke", 1.0, 0.0)}
    return circuit(modes, nodes, checks)


FIRE_CASES = [
    ({"report": "yes"}, 0.399169, 0.230505),
    ({"report": "yes", "smoke": "no"}, 0.500797, 0.029369),
    ({"smoke": "yes"}, 0.02, 0.476190),
    ({"report": "yes", "smoke": "yes"}, 0.028436, 0.964234),
]
"""Findings, P(tampering), P(fire); smoke alone says nothing about tampering."""


@pytest.mark.parametrize(("seen", "tampering", "fire"), FIRE_CASES)
def test_fire_alarm_as_a_circuit(
    fire_alarm: Circuit, seen: dict[str, str], tampering: float, fire: float
) -> None:
    found = solved(fire_alarm, **seen)
    assert total(found, ("house.tamper", "house.both")) == pytest.approx(tampering, abs=SIX)
    assert total(found, ("house.fire", "house.both")) == pytest.approx(fire, abs=SIX)


@pytest.mark.parametrize(("seen", "tampering", "fire"), FIRE_CASES)
def test_fire_alarm_as_a_network(seen: dict[str, str], tampering: float, fire: float) -> None:
    assert yes(FIRE, "tampering", **seen) == pytest.approx(tampering, abs=SIX)
    assert yes(FIRE, "fire", **seen) == pytest.approx(fire, abs=SIX)


# -- P10 Noisy-OR fever: Russell & Norvig, Artificial Intelligence, ch. 14 ---------------

ILLNESSES = {"cold": 0.6, "flu": 0.2, "malaria": 0.1}
"""Inhibitors: P(no fever | this illness alone)."""
FEVERS = [
    ((), 0.0),
    (("cold",), 0.4),
    (("flu",), 0.8),
    (("malaria",), 0.9),
    (("cold", "flu"), 0.88),
    (("cold", "malaria"), 0.94),
    (("flu", "malaria"), 0.98),
    (("cold", "flu", "malaria"), 0.988),
]


@pytest.fixture
def fever() -> Circuit:
    """The illnesses are known for certain from checks of their own; the prior plays no part."""
    modes = [mode(name, "present", 0.1 * k) for k, name in enumerate(ILLNESSES, start=1)]
    nodes = {
        f"{name}_known": event(0.0, **{f"{name}__present": {"yes": 1.0}}) for name in ILLNESSES
    }
    nodes["fever"] = event(
        0.0, **{f"{name}__present": {"yes": 1.0 - q} for name, q in ILLNESSES.items()}
    )
    return circuit(modes, nodes, {f"see_{name}": (name, 1.0, 0.0) for name in nodes})


@pytest.mark.parametrize(("ill", "expected"), FEVERS)
def test_fever_by_noisy_or(fever: Circuit, ill: tuple[str, ...], expected: float) -> None:
    known = {f"see_{name}_known": "yes" if name in ill else "no" for name in ILLNESSES}
    given = solved(fever, **known)
    assert chance(given, "see_fever") == pytest.approx(expected, abs=1e-12)
    cool = solved(fever, **known, see_fever="no")
    ratio = math.exp(cool.log_evidence - given.log_evidence)
    assert ratio == pytest.approx(1.0 - expected, abs=1e-12)
    tables = circuit_tables(given.engine)
    seen = {f"mode__{name}": "present" if name in ill else "ok" for name in ILLNESSES}
    assert yes(tables, f"is__{safe('fever')}", **seen) == pytest.approx(expected, abs=1e-12)


# -- C8 Quickscore (constructed): the sum of Heckerman 1989 ------------------------------

PRIORS = (0.1, 0.2, 0.05)
STRENGTHS = ((0.8, 0.0, 0.3), (0.5, 0.6, 0.0), (0.0, 0.9, 0.7))
"""q of disease i on finding f; rows are diseases."""
LEAKS = (0.02, 0.05, 0.01)


@pytest.fixture
def quickscore() -> Circuit:
    modes = [mode(f"d{i + 1}", "present", p) for i, p in enumerate(PRIORS)]
    nodes = {
        f"f{k + 1}": event(
            LEAKS[k],
            **{f"d{i + 1}__present": {"yes": q[k]} for i, q in enumerate(STRENGTHS) if q[k]},
        )
        for k in range(3)
    }
    return circuit(modes, nodes, {f"look_{name}": (name, 1.0, 0.0) for name in nodes})


def test_quickscore(quickscore: Circuit) -> None:
    seen = {"look_f1": "yes", "look_f2": "yes", "look_f3": "no"}
    found = solved(quickscore, **seen)
    assert math.exp(found.log_evidence) == pytest.approx(0.0659778658, abs=5e-11)
    assert math.exp(exact(found)) == pytest.approx(0.0659778658, abs=5e-11)
    expected = {"d1": 0.1556015, "d2": 0.9455419, "d3": 0.0347153}
    for name, value in expected.items():
        assert found.probability(f"{name}.present") == pytest.approx(value, abs=5e-8)
    by_pgmpy = witness(found.engine, seen, {}, [f"{name}.present" for name in expected])
    assert list(by_pgmpy.values()) == pytest.approx(list(expected.values()), abs=5e-8)


# -- C11 Virtual evidence (constructed): Pearl 1988, 2.2.2 -------------------------------


@pytest.fixture
def report() -> Circuit:
    """A report four times as likely with the alarm as without; only the ratio counts."""
    alarm = event(0.01, house__burgled=alone(0.95, 0.01))
    checks = {"told": ("alarm", 0.8, 0.2), "heard": ("alarm", 1.0, 0.0)}
    return circuit([mode("house", "burgled", 1e-4)], {"alarm": alarm}, checks)


def test_virtual_evidence(report: Circuit) -> None:
    told, heard = solved(report, told="yes"), solved(report, heard="yes")
    assert told.probability("house.burgled") == pytest.approx(3.7368e-4, abs=5e-9)
    assert heard.probability("house.burgled") == pytest.approx(0.0094115, abs=5e-8)
    soft = {"heard": np.array([1.0, 4.0])}
    by_pgmpy = witness(told.engine, {}, soft, ["house.burgled"])
    assert by_pgmpy["house.burgled"] == pytest.approx(3.7368e-4, abs=5e-9)


def test_only_the_ratio_of_virtual_evidence_counts(report: Circuit) -> None:
    alarm = report.nodes["alarm"].effects["house.burgled"].gives
    made = circuit(
        [mode("house", "burgled", 1e-4)],
        {"alarm": event(0.01, house__burgled=dict(alarm))},
        {"told": ("alarm", 0.08, 0.02)},
    )
    found = solved(made, told="yes")
    assert found.probability("house.burgled") == pytest.approx(3.7368e-4, abs=5e-9)
