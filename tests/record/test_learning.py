"""Learning from closed cases: against worked values, SciPy, brute force and known fleets."""

from __future__ import annotations

import hashlib
import importlib.util
import itertools
import json
import shutil
from collections import Counter
from collections.abc import Callable, Sequence
from functools import cache
from pathlib import Path
from typing import Any

import joblib
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate, optimize, stats

from diag.belief.evidence import make_finding
from diag.belief.hypotheses import Engine
from diag.circuit.loading import knowledge_root, load_circuit
from diag.circuit.model import Circuit
from diag.errors import InputError, UnknownName, UsageError
from diag.record.harvest import CHUNK, Harvest, LeftOut, Look, Scene, gather
from diag.record.learning import (
    Em,
    Fleet,
    Learned,
    Weights,
    _shares,
    complaint_chance,
    learn,
    learned_rates,
)
from diag.record.lesson import counted_in, overlay_data, overlay_text
from tests import support
from tests.record import fleet as simulated

NAME = "relief_valve_turboprop"
loaded = cache(load_circuit)


def scene(node: str, causes: Sequence[str], looks: Sequence[tuple[str, str]], states: int) -> Scene:
    made = (Look(check, outcome, (), True) for check, outcome in looks)
    return Scene(node, tuple(causes), tuple(sorted(made)), (1.0,) * states)


# Expectation and maximisation


def coins() -> Circuit:
    """A coin is a condition: coin A its abnormal state, coin B its normal one."""
    return support.circuit(
        [support.mode("bag", "drawn", 0.5)],
        {"coin": (("b", "a"), "b", {}, {"bag.drawn": {"a": 0.5}})},
        {"toss": ("coin", 0.6, 0.5)},
    )


def test_coins_of_unknown_identity() -> None:
    """P12: 5 9 8 4 7 heads of 10; Do & Batzoglou 2008, figure 1."""
    scenes = [
        scene("coin", ["bag.drawn"], [("toss", "a")] * heads + [("toss", "b")] * (10 - heads), 2)
        for heads in (5, 9, 8, 4, 7)
    ]
    # Which coin is drawn stays even: the condition counts as one that the report speaks of.
    em = Em(coins(), Counter(scenes), complained=["coin"], weight=0.0)
    em.iterate()
    assert em.checks["toss"] == pytest.approx((0.713012, 0.581339), abs=5e-7)
    for _ in range(9):
        em.iterate()
    assert em.checks["toss"] == pytest.approx((0.796744, 0.519659), abs=5e-7)


def two_checks() -> Circuit:
    return support.circuit(
        [support.mode("valve", "stuck", 0.1)],
        {"flow": (("normal", "low"), "normal", {"low": 0.05}, {"valve.stuck": {"low": 0.7}})},
        {"gauge": ("flow", 0.9, 0.05), "sight": ("flow", 0.8, 0.1)},
    )


def seen(stuck: int, gauge: str, sight: str, count: int) -> tuple[Scene, int]:
    looks = [("gauge", gauge)] * bool(gauge) + [("sight", sight)] * bool(sight)
    return scene("flow", ["valve.stuck"] if stuck else [], looks, 2), count


def test_the_fixed_point_is_the_summit_of_the_posterior() -> None:
    """Against direct maximisation by SciPy of a likelihood written out by hand.

    Pseudo-counts w·p and w·(1 - p) are those of a Beta(w·p + 1, w·(1 - p) + 1) prior.
    """
    cases = [
        seen(1, "low", "low", 31), seen(1, "low", "normal", 11), seen(1, "normal", "low", 9),
        seen(1, "normal", "normal", 17), seen(1, "low", "", 12), seen(0, "normal", "low", 7),
        seen(0, "normal", "normal", 50), seen(0, "low", "normal", 6), seen(0, "", "low", 3),
        seen(0, "low", "low", 4),
    ]  # fmt: skip
    weight, given = 8.0, np.array([0.7, 0.9, 0.05, 0.8, 0.1])

    def rise(x: np.ndarray[Any, np.dtype[np.float64]]) -> float:
        strength, *chances = 1.0 / (1.0 + np.exp(-x))
        total = 0.0
        for (_, causes, looks, _), count in cases:
            low = 1.0 - (1.0 - 0.05) * (1.0 - (strength if causes else 0.0))
            both = [low, 1.0 - low]
            for look in looks:
                detects, alarm = chances[:2] if look.observable == "gauge" else chances[2:]
                for state, chance in enumerate((detects, alarm)):
                    both[state] *= chance if look.outcome == "low" else 1.0 - chance
            total += count * np.log(sum(both))
        p = np.array([strength, *chances])
        prior = weight * (given * np.log(p) + (1.0 - given) * np.log(1.0 - p))
        return -float(total + prior.sum())

    best = optimize.minimize(rise, np.log(given / (1 - given)), tol=1e-12).x
    em = Em(two_checks(), dict(cases), weight=weight)
    em.run(settled=1e-10)
    found = [em.links["valve.stuck", "flow", 0 + 1][1], *em.checks["gauge"], *em.checks["sight"]]
    assert found == pytest.approx((1.0 / (1.0 + np.exp(-best))).tolist(), abs=2e-5)


answers = st.sampled_from(["low", "normal", ""])


@settings(max_examples=40)
@given(st.lists(st.tuples(st.integers(0, 1), answers, answers, st.integers(1, 20)), min_size=1))
def test_no_iteration_lowers_the_likelihood(rows: list[tuple[int, str, str, int]]) -> None:
    scenes: Counter[Scene] = Counter()
    for row in rows:
        made, count = seen(*row)
        scenes[made] += count
    em = Em(two_checks(), scenes, weight=0.0)
    em.iterate()
    for _ in range(6):
        before = em.log_likelihood
        em.iterate()
        assert em.log_likelihood >= before - 1e-9


chances = st.lists(st.floats(0.0, 1.0), min_size=3, max_size=3).map(
    lambda weights: np.array(weights) + 0.01
)


@settings(max_examples=60)
@given(st.lists(chances, min_size=1, max_size=3), chances)
def test_credit_for_the_highest_level_is_shared_as_enumeration_says(
    draws: list[Any], reached: Any
) -> None:
    draws = [p / p.sum() for p in draws]
    joint = np.zeros((len(draws), 3, 3))
    for levels in itertools.product(range(3), repeat=len(draws)):
        chance = np.prod([p[k] for p, k in zip(draws, levels, strict=True)])
        for i, level in enumerate(levels):
            joint[i, level, max(levels)] += chance
    expected = [table @ (reached / table.sum(axis=0)) for table in joint]
    for ours, theirs in zip(_shares(draws, reached), expected, strict=True):
        assert ours == pytest.approx(theirs)


def test_what_is_certain_or_impossible_stays_so() -> None:
    circuit = support.circuit(
        [support.mode("valve", "stuck", 0.1)],
        {"flow": (("very_low", "low", "normal"), "normal", {}, {"valve.stuck": {"low": 0.7}})},
        {"gauge": ("flow", 1.0, 0.0)},
    )
    scenes = {scene("flow", ["valve.stuck"], [("gauge", x)], 3): 50 for x in ("low", "normal")}
    em = Em(circuit, scenes, weight=20.0)
    em.run()
    assert em.checks["gauge"] == (1.0, 0.0)
    assert em.links["valve.stuck", "flow", 0].tolist() == pytest.approx([56 / 120, 64 / 120, 0.0])
    assert {(n.kind, n.item) for n in em.numbers()} == {("link", "low")}


# Rates


def mean_under(weight: Callable[[float], float], top: float, near: float) -> float:
    """Mean of a variable between 0 and `top` whose density goes with `weight`."""
    how: dict[str, Any] = {"points": [near], "limit": 500, "epsabs": 0.0, "epsrel": 1e-10}
    mass = integrate.quad(weight, 0.0, top, **how)[0]
    return float(integrate.quad(lambda x: x * weight(x), 0.0, top, **how)[0] / mass)


@pytest.mark.parametrize(("x", "hours"), [(0, 40_000.0), (3, 40_000.0), (25, 2e6)])
def test_a_rate_is_the_mean_of_its_posterior(x: int, hours: float) -> None:
    """Gamma prior times Poisson likelihood, integrated by SciPy."""
    circuit = loaded(NAME)
    ref = "relief_valve.spring_weak"
    seen_hours = hours * complaint_chance(circuit)[ref]
    _, numbers = learned_rates(circuit, {ref: x}, Fleet(hours=hours), Weights(events=2.0))
    number = next(n for n in numbers if n.name == ref)
    prior = stats.gamma(2.0, scale=number.before * 1e-6 / 2.0)
    assert prior.mean() == pytest.approx(number.before * 1e-6)

    def weight(rate: float) -> float:
        return float(prior.pdf(rate) * stats.poisson.pmf(x, rate * seen_hours))

    top = 60.0 * max(number.after, number.before) * 1e-6
    mean = mean_under(weight, top, number.after * 1e-6)
    assert number.after == pytest.approx(mean * 1e6, rel=1e-6)
    assert stats.gamma(number.posterior[0], scale=1 / number.posterior[1]).mean() == pytest.approx(
        mean
    )


def test_a_chance_per_event_is_the_mean_of_its_posterior() -> None:
    """Beta prior times binomial likelihood, integrated by SciPy."""
    circuit = loaded(NAME)
    ref = "relief_valve.wrong_shim"
    events = 400.0 / complaint_chance(circuit)[ref]
    fleet = Fleet(hours=1e5, events={"maintenance": events})
    _, numbers = learned_rates(circuit, {ref: 3}, fleet, Weights())
    number = next(n for n in numbers if n.name == ref)
    prior = stats.beta(*number.prior)
    assert prior.mean() == pytest.approx(circuit.modes[ref].rate.per_event)

    def weight(p: float) -> float:
        return float(prior.pdf(p) * stats.binom.pmf(3, 400, p))

    assert number.after == pytest.approx(mean_under(weight, 1.0, number.after), rel=1e-6)


def test_without_hours_only_proportions_are_learned() -> None:
    circuit = loaded(NAME)
    arisen = {"pressure_pump.worn": 30, "relief_valve.sticky": 10}
    hours, numbers = learned_rates(circuit, arisen, Fleet(), Weights())
    caught, exposure = complaint_chance(circuit), circuit.exposure
    expected = 0.0
    for number in numbers:
        rate = circuit.modes[number.name].rate
        often = exposure.events[rate.event] / exposure.hours if rate.event else 1e-6
        expected += number.before * often * hours * caught[number.name]
    assert expected == pytest.approx(40)
    twice, _ = learned_rates(circuit, {r: 2 * n for r, n in arisen.items()}, Fleet(), Weights())
    assert twice == pytest.approx(2 * hours)


@pytest.mark.parametrize("bad", [Fleet(hours=0.0), Fleet(hours=-5.0), Fleet(hours=float("nan"))])
def test_exposure_must_be_positive(bad: Fleet) -> None:
    with pytest.raises(UsageError, match="positive"):
        learned_rates(loaded(NAME), {}, bad, Weights())


def test_an_event_that_the_circuit_does_not_count() -> None:
    with pytest.raises(UnknownName, match="servicing"):
        learned_rates(loaded(NAME), {}, Fleet(hours=1.0, events={"servicings": 4.0}), Weights())


def test_the_chance_of_a_complaint_is_what_a_simulated_fleet_shows() -> None:
    circuit = loaded(NAME)
    fleet = simulated.Fleet(circuit, np.random.default_rng(11), asked=0)
    chances = complaint_chance(circuit)
    for ref in ("relief_valve.sticky", "low_pressure_switch.set_point_low", "rear_seals.worn"):
        complaints = sum(bool(fleet.case([ref])[0]) for _ in range(400))
        low, high = stats.binom.interval(0.999, 400, chances[ref])
        assert low <= complaints <= high, ref


# Fleets whose truth is known

CHECK = "oil_spectrum"
LINK = ("pressure_filter.loaded", "filter_debris")
HOURS = 2e6


def fleet(asked: int = 4, seed: int = 1) -> simulated.Fleet:
    """A fleet that is not as shipped: its rates, one check and one link are others.

    The seed draws its cases; the fleet itself is always the same one.
    """
    circuit, factors = loaded(NAME), np.random.default_rng(20240611)
    return simulated.Fleet(
        circuit,
        np.random.default_rng(seed),
        factors={ref: float(np.exp(factors.normal(0.0, 1.2))) for ref in circuit.modes},
        checks={CHECK: (0.6, 0.3)},
        gives={LINK: {"fines": 0.2}},
        asked=asked,
        always=(CHECK, "filter_element"),
    )


@pytest.fixture(scope="module")
def truth() -> simulated.Fleet:
    return fleet()


@pytest.fixture(scope="module")
def logs(truth: simulated.Fleet, tmp_path_factory: pytest.TempPathFactory) -> list[Path]:
    return truth.logs(tmp_path_factory.mktemp("fleet"), HOURS)


@pytest.fixture(scope="module")
def harvest(truth: simulated.Fleet, logs: list[Path]) -> Harvest:
    harvest = gather(logs, truth.circuit)
    assert harvest.left_out == []
    assert harvest.cases == len(logs)
    return harvest


@pytest.fixture(scope="module")
def learned(truth: simulated.Fleet, harvest: Harvest) -> Learned:
    return learn(truth.circuit, harvest, Fleet(hours=HOURS))


def test_rates_converge(truth: simulated.Fleet, learned: Learned, tmp_path: Path) -> None:
    few_hours = HOURS / 10
    few = learn(
        truth.circuit, gather(truth.logs(tmp_path, few_hours), truth.circuit), Fleet(few_hours)
    )

    def misses(found: Learned) -> tuple[float, float, float]:
        """Root mean square log error as shipped and as learned, and how many intervals hold."""
        shipped, after, held = [], [], []
        for number in found.numbers:
            if number.kind == "rate":
                real = number.before * truth.factors[number.name]
                shipped.append(np.log(number.before / real))
                after.append(np.log(number.after / real))
                family = stats.gamma if number.item == "per_million_hours" else stats.beta
                a, b = number.posterior
                scale = {"scale": 1e6 / b} if family is stats.gamma else {}
                low, high = family.interval(0.95, a, *(() if scale else (b,)), **scale)
                held.append(low <= real <= high)
        rms = (float(np.sqrt(np.mean(np.square(errors)))) for errors in (shipped, after))
        return (*rms, float(np.mean(held)))  # type: ignore[return-value]

    shipped, after_few, _ = misses(few)
    _, after, held = misses(learned)
    assert shipped > 1.0
    assert after < after_few < shipped
    assert after < 0.6 * shipped
    assert held > 0.85


def test_strengths_and_reliabilities_converge(truth: simulated.Fleet, learned: Learned) -> None:
    found = {(n.kind, n.name, n.item): n for n in learned.numbers}
    alarm = found["check", CHECK, "false_alarm"]
    assert alarm.before == 0.1
    assert alarm.after == pytest.approx(truth.checks[CHECK][1], abs=0.04)
    assert alarm.out_of > 500
    for state, real in truth.gives[LINK].items():
        number = found["link", " -> ".join(LINK), state]
        low, high = stats.binom.interval(0.999, round(number.out_of), real)
        assert number.out_of > 50
        assert low - 1 <= number.counted <= high + 1
        assert abs(number.after - real) < abs(number.before - real)


def test_conditions_that_make_the_complaint_keep_their_links(learned: Learned) -> None:
    circuit = loaded(NAME)
    read = {o.node for o in circuit.observables.values() if o.record.kind == "indication"}
    nodes = {n.name.partition(" -> ")[2] for n in learned.numbers if n.kind == "link"}
    assert nodes
    assert not nodes & read


def test_a_learned_ranking_beats_the_shipped_one(
    truth: simulated.Fleet, learned: Learned, tmp_path: Path
) -> None:
    """Mean log of the probability given to the true cause, over cases nobody learned from."""
    overlay = tmp_path / "learned.yaml"
    overlay.write_text(overlay_text(learned, truth.circuit, "learned"))
    circuits = [truth.circuit, load_circuit(NAME, [overlay])]
    engines = [Engine(circuit) for circuit in circuits]
    fresh = fleet(asked=0, seed=2)
    scores: list[list[float]] = []
    for ref in fresh.faults(HOURS)[:80]:
        report, asked = fresh.case([ref])
        if report:
            row = []
            for circuit, engine in zip(circuits, engines, strict=True):
                findings = [
                    make_finding(circuit.observables[o.id], value) for o, value in [*report, *asked]
                ]
                row.append(
                    float(
                        np.log(
                            max(
                                engine.posterior(findings, max_faults=2, beam=50).probability(ref),
                                1e-6,
                            )
                        )
                    )
                )
            scores.append(row)
    shipped, after = np.mean(scores, axis=0)
    assert after > shipped + 0.2


# The overlay


def test_the_overlay_says_what_moved_and_loads(learned: Learned, tmp_path: Path) -> None:
    circuit = loaded(NAME)
    before = shipped_files()
    path = tmp_path / "learned.yaml"
    path.write_text(overlay_text(learned, circuit, "learned"))
    laid = load_circuit(NAME, [path])
    assert laid.overlays == ("learned",)
    moves = [round(n.moved, 9) for n in learned.numbers]
    assert moves == sorted(moves, reverse=True)
    for number in learned.numbers:
        if number.kind == "rate":
            rate = laid.modes[number.name].rate
            assert getattr(rate, number.item) == pytest.approx(number.after, rel=1e-5)
            assert rate.basis == "computed"
            assert number.note in rate.note
        elif number.kind == "check":
            record = next(o.record for o in laid.observables.values() if o.record.id == number.name)
            assert getattr(record, number.item) == pytest.approx(number.after, rel=1e-5)
            assert number.note in record.note
        else:
            ref, _, node = number.name.partition(" -> ")
            effect = laid.nodes[node].effects[ref]
            assert effect.gives[number.item] == pytest.approx(number.after, rel=1e-4, abs=2e-9)
            assert number.note in effect.note
    assert shipped_files() == before


def shipped_files() -> dict[str, str]:
    root = Path(str(knowledge_root()))
    return {str(p): hashlib.sha256(p.read_bytes()).hexdigest() for p in root.rglob("*.yaml")}


def test_a_note_holds_counts_prior_and_posterior(learned: Learned) -> None:
    number = next(n for n in learned.numbers if n.name == "pressure_filter.loaded")
    prior, posterior = number.prior, number.posterior
    assert posterior == (prior[0] + number.counted, prior[1] + number.out_of)
    assert f"{number.counted:.4g} in {number.out_of:.6g} h" in number.note
    assert f"Gamma({prior[0]:.6g}, {prior[1]:.6g} h) -> Gamma({posterior[0]:.6g}" in number.note


def test_two_sided_effects_stay_within_one(tmp_path: Path) -> None:
    circuit = support.circuit(
        [support.mode("valve", "stuck", 0.1)],
        {
            "flow": (
                ("low", "normal", "high"), "normal", {}, {"valve.stuck": {"low": 0.5, "high": 0.5}}
            )
        },
        {"gauge": ("flow", 0.95, 0.02)},
    )  # fmt: skip
    scenes = Counter({scene("flow", ["valve.stuck"], [("gauge", "normal")], 3): 40})
    learned = learn(circuit, Harvest(cases=40, scenes=scenes))
    gives = overlay_data(learned, circuit, "x")["links"]["valve.stuck"]["flow"]["gives"]
    assert set(gives) == {"low", "high"}
    assert sum(gives.values()) <= 1.0


@pytest.mark.parametrize("name", ["", "Site", "a b", "x" * 61, "../x"])
def test_an_overlay_needs_a_plain_name(learned: Learned, name: str) -> None:
    with pytest.raises(UsageError, match="lower-case word"):
        overlay_text(learned, loaded(NAME), name)


# What counts and what does not


def case(
    folder: Path, name: str, change: Callable[[list[dict[str, Any]]], object] | None = None
) -> Path:
    """A sound log of one worn pump; `change` may alter its lines before they are chained."""
    path = folder / f"{name}.jsonl"
    rng = np.random.default_rng([ord(c) for c in name])
    maker = simulated.Fleet(loaded(NAME), rng, always=("filter_element",), asked=0)
    while not maker.log(path, 1 + int(rng.integers(1, 10**6)), ["pressure_pump.worn"]):
        pass
    if change is not None:
        lines = [json.loads(line) for line in path.read_bytes().splitlines()]
        for line in lines:
            del line["hash"], line["hash_before"]
        change(lines)
        simulated.write_log(path, lines)
    return path


def of_kind(lines: list[dict[str, Any]], event: str) -> list[dict[str, Any]]:
    return [line for line in lines if line["event"] == event]


def only(lines: list[dict[str, Any]], event: str) -> dict[str, Any]:
    (found,) = of_kind(lines, event)
    return found


CLOSED: list[tuple[str, Callable[[list[dict[str, Any]]], object], str]] = [
    ("open", lambda x: x.pop(), "not closed"),
    ("nff", lambda x: only(x, "closed").update(outcome="no_fault_found", causes=[]), "no cause"),
    ("unproven", lambda x: only(x, "closed").pop("verification"), "not verified"),
    ("early", lambda x: only(x, "closed").update(verification=1), "not verified"),
    ("bad", lambda x: x[-2].update(value="low"), "verification reads abnormal"),
    ("psi", lambda x: x[-2].update(value="45psi"), "verification reads abnormal"),
    (
        "swap",
        lambda x: only(x, "rectified").update(rectification="relief_valve_set_pressure"),
        "was not rectified",
    ),
    (
        "more",
        lambda x: only(x, "closed")["causes"].append("relief_valve.sticky"),
        "was not rectified",
    ),
    ("odd", lambda x: only(x, "closed").update(causes=["unlisted.present"]), "does not list"),
    ("other", lambda x: x[0].update(circuit="full_flow_turbofan"), "another circuit"),
    ("word", lambda x: x[1].update(name="ouija_board"), "unknown finding"),
    ("headless", lambda x: x.pop(0), "not an event"),
    ("guess", lambda x: x[1].update(event="guessed"), "not an event"),
    ("when", lambda x: x[1].update(at="yesterday"), "not an event"),
    ("what", lambda x: x[1].update(value=None), "its fields are not those of a case"),
]


@pytest.mark.parametrize(("name", "change", "reason"), CLOSED, ids=[c[0] for c in CLOSED])
def test_replaced_is_not_was_faulty(
    tmp_path: Path, name: str, change: Callable[[list[dict[str, Any]]], object], reason: str
) -> None:
    harvest = gather([case(tmp_path, "sound"), case(tmp_path, name, change)], loaded(NAME))
    assert harvest.cases == 1
    assert harvest.arisen == {"pressure_pump.worn": 1}
    (left,) = harvest.left_out
    assert left.log.endswith(f"{name}.jsonl")
    assert reason in left.reason


def test_a_good_part_replaced_on_the_way_counts_for_nothing(tmp_path: Path) -> None:
    def swapped_first(lines: list[dict[str, Any]]) -> None:
        at = lines.index(only(lines, "rectified"))
        lines.insert(at, {**lines[at], "rectification": "relief_valve_set_pressure"})
        lines[-1]["verification"] += 1

    harvest = gather([case(tmp_path, "swap", swapped_first)], loaded(NAME))
    assert harvest.left_out == []
    assert harvest.arisen == {"pressure_pump.worn": 1}


def test_a_log_counts_once(tmp_path: Path) -> None:
    one, two = case(tmp_path, "one"), case(tmp_path, "two")
    copy = Path(shutil.copy(one, tmp_path / "copy.jsonl"))
    harvest = gather([one, two, copy, two], loaded(NAME))
    assert harvest.cases == 2
    assert harvest.left_out == [
        LeftOut(str(copy), "counted already"),
        LeftOut(str(two), "counted already"),
    ]
    # The same case carried on from a copy begins with the same line.
    lines = one.read_bytes().splitlines(keepends=True)
    data = [json.loads(line) for line in lines]
    for line in data:
        del line["hash"], line["hash_before"]
    data[-1]["by"] = "another hand"
    simulated.write_log(copy, data)
    assert copy.read_bytes() != one.read_bytes()
    assert gather([one, copy], loaded(NAME)).cases == 1


def test_cases_in_an_overlay_are_not_counted_on_top_of_it(tmp_path: Path) -> None:
    circuit = loaded(NAME)
    paths = [case(tmp_path, name) for name in "abcdefgh"]
    overlay = tmp_path / "first.yaml"
    first = gather(paths[:7], circuit)
    overlay.write_text(overlay_text(learn(circuit, first), circuit, "first"))
    assert counted_in([overlay]) == first.known
    again = gather(paths, circuit, counted_in([overlay]))
    assert again.cases == 1
    assert [left.reason for left in again.left_out] == ["counted already"] * 7
    with pytest.raises(UsageError, match="no log counts"):
        learn(circuit, gather(paths[:7], circuit, first.known))
    with pytest.raises(InputError, match="cannot be read"):
        counted_in([tmp_path / "none.yaml"])


def test_an_altered_log_is_left_out(tmp_path: Path) -> None:
    original = case(tmp_path, "sound").read_bytes()
    path, rng = tmp_path / "changed.jsonl", np.random.default_rng(3)
    for _ in range(300):
        place = int(rng.integers(len(original)))
        changed = bytearray(original)
        changed[place] ^= int(rng.integers(1, 256))
        path.write_bytes(bytes(changed))
        harvest = gather([path], loaded(NAME))
        assert harvest.cases == 0
        assert "unsound" in harvest.left_out[0].reason
    for content in (b"", original[:-1], original[:-30], b"\n\n"):
        path.write_bytes(content)
        assert "unsound" in gather([path], loaded(NAME)).left_out[0].reason
    missing = gather([tmp_path / "none.jsonl", tmp_path], loaded(NAME))
    assert len(missing.left_out) == 2


def test_a_promoted_fault_and_recent_work_count_for_no_rate(tmp_path: Path) -> None:
    circuit = loaded(NAME)
    assert circuit.modes["oil.coking"].record.promotes["vent_line.coked"] > 1
    maker = simulated.Fleet(circuit, np.random.default_rng(4), asked=0)
    path = tmp_path / "two.jsonl"
    while not maker.log(path, 7, ["oil.coking", "vent_line.coked"]):
        pass
    assert gather([path], circuit).arisen == {"oil.coking": 1}
    touched = case(tmp_path, "work", lambda x: x[0].update(worked_on=["pressure_pump"]))
    harvest = gather([touched], circuit)
    assert (harvest.cases, dict(harvest.arisen)) == (1, {})


def scenes_of(path: Path) -> dict[tuple[str, bool], Scene]:
    """Scenes by condition and whether a cause bears on it."""
    return {(s.node, bool(s.causes)): s for s in gather([path], loaded(NAME)).scenes}


def test_findings_of_the_report_and_the_proof_do_not_count(tmp_path: Path) -> None:
    path = case(tmp_path, "sound")
    looks = [look for scene in scenes_of(path).values() for look in scene.looks]
    counting = {look.observable for look in looks if look.counts}
    assert counting == {"filter_element"}
    assert any(not look.counts for look in looks)
    proof = loaded(NAME).remedies["pressure_pump_replace"].record.verify
    assert all(
        s.causes for s in scenes_of(path).values() if s.node == proof.replace("oil", "gallery")
    )


def test_the_stretch_between_two_attempts_is_passed_over(tmp_path: Path) -> None:
    def twice(lines: list[dict[str, Any]]) -> None:
        at = lines.index(only(lines, "rectified"))
        again = {**lines[at - 1], "name": "filter_element", "value": "flakes", "complaint": False}
        lines[at + 1 : at + 1] = [again, dict(lines[at])]
        lines[-1]["verification"] += 2

    plain, repeated = case(tmp_path, "same"), tmp_path / "x"
    repeated.mkdir()
    assert scenes_of(case(repeated, "same", twice)) == scenes_of(plain)


def test_a_doubted_finding_counts_for_nothing(tmp_path: Path) -> None:
    def doubted(lines: list[dict[str, Any]]) -> None:
        n = next(i for i, line in enumerate(lines) if line.get("name") == "filter_element")
        lines.insert(n + 1, {"event": "doubted", "target": n, "trust": 0.3, "at": lines[n]["at"]})
        lines[-1]["verification"] += 1

    looks = [k for s in scenes_of(case(tmp_path, "d", doubted)).values() for k in s.looks]
    assert "filter_element" not in {look.observable for look in looks}


def test_a_reading_is_evidence_of_the_condition(tmp_path: Path) -> None:
    def number(lines: list[dict[str, Any]]) -> None:
        report = (x for x in lines if x.get("name") == "oil_pressure")
        next(x for x in report if x["point"] == "hot_idle")["value"] = "52psi"

    found = scenes_of(case(tmp_path, "n", number))["gallery_pressure@hot_idle", True]
    assert found.numbers[1] == max(found.numbers)
    assert min(found.numbers) < 0.1


# Many logs


MANY = 280
"""More logs than one task reads."""


def test_several_processes_find_the_same(logs: list[Path]) -> None:
    told: list[int] = []
    again = gather(logs[:MANY], loaded(NAME), jobs=2, progress=told.append)
    assert again == gather(logs[:MANY], loaded(NAME))
    assert told == [CHUNK, MANY - CHUNK]


if importlib.util.find_spec("distributed"):

    def test_a_cluster_finds_the_same(logs: list[Path]) -> None:
        from distributed import Client, LocalCluster

        with (
            LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=None) as cluster,
            Client(cluster),
            joblib.parallel_config(backend="dask"),
        ):
            spread = gather(logs[:MANY], loaded(NAME), jobs=-1)
        assert spread == gather(logs[:MANY], loaded(NAME))
