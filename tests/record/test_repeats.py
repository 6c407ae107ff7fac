"""Repeat defects: found, told apart, flagged, and turned into evidence."""

from __future__ import annotations

from datetime import timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from diag.belief.evidence import make_finding
from diag.belief.hypotheses import Engine
from diag.circuit.model import UNLISTED
from diag.errors import UsageError
from diag.record.events import AnyEvent, Opened
from diag.record.repeats import (
    HOURS_A_DAY,
    Repeat,
    find_repeats,
    prior_factors,
    same_swaps,
    swaps_of,
)
from tests import support
from tests.record.cases import NAME, START, found, head, loaded, numbered, worked_case, written

LATER = START + timedelta(days=10)


def now(**more: Any) -> Opened:
    return head(**{"at": LATER, "complaint": "low again", **more})


def search(folder: Path, opened: Opened | None = None, **more: Any) -> list[Repeat]:
    complaint = more.pop("complaint", ["oil_pressure"])
    found = find_repeats(folder, opened or now(), complaint, loaded(NAME), **more)
    assert found.unreadable == ()
    return list(found.repeats)


def test_an_earlier_case_of_the_engine_is_found(tmp_path: Path) -> None:
    written(tmp_path / "a.jsonl", worked_case())
    (repeat,) = search(tmp_path)
    assert repeat.log == "a.jsonl"
    assert repeat.shared == ("oil_pressure",)
    assert repeat.causes == ("pressure_pump.worn",)
    assert repeat.fixes == ("pressure_pump_replace",)
    assert repeat.proof == "oil_pressure@hot_idle"
    assert repeat.verified
    assert repeat.days == pytest.approx(10 - 55 / 1440)


def changed(number: int, **update: Any) -> list[AnyEvent]:
    return [e.model_copy(update=update) if e.number == number else e for e in worked_case()]


def test_only_closed_cases_of_this_engine_with_this_complaint_count(tmp_path: Path) -> None:
    written(tmp_path / "open.jsonl", worked_case(closed=False))
    written(tmp_path / "other.jsonl", worked_case(engine="E-18"))
    written(tmp_path / "else.jsonl", changed(1, name="oil_temperature", value="high"))
    written(tmp_path / "asked.jsonl", changed(1, complaint=False))
    written(tmp_path / "later.jsonl", worked_case(at=LATER + timedelta(days=1)))
    written(tmp_path / "self.jsonl", worked_case(at=LATER))
    assert search(tmp_path) == []
    written(tmp_path / "same.jsonl", worked_case(engine="e 17"))
    assert [repeat.log for repeat in search(tmp_path)] == ["same.jsonl"]


def test_days_and_flights_bound_the_search(tmp_path: Path) -> None:
    written(tmp_path / "a.jsonl", worked_case(flights=100))
    written(tmp_path / "b.jsonl", worked_case(at=START + timedelta(days=6)))
    assert [r.log for r in search(tmp_path)] == ["b.jsonl", "a.jsonl"]
    assert [r.log for r in search(tmp_path, days=5)] == ["b.jsonl"]
    assert search(tmp_path, days=0) == []
    flown = now(flights=130)
    assert [r.flights for r in search(tmp_path, flown)] == [None, 30]
    assert [r.log for r in search(tmp_path, flown, days=0, flights=30)] == ["a.jsonl"]
    assert search(tmp_path, flown, days=0, flights=29) == []


def test_whether_it_was_verified_is_told(tmp_path: Path) -> None:
    none = {"verification": None, "not_verified_because": "aircraft left"}
    written(tmp_path / "a.jsonl", changed(11, **none))
    written(tmp_path / "b.jsonl", changed(10, value="51psi"))
    assert [(r.log, r.verified) for r in search(tmp_path)] == [
        ("a.jsonl", False),
        ("b.jsonl", False),
    ]


def test_logs_that_cannot_be_read_are_named_and_passed_over(tmp_path: Path) -> None:
    written(tmp_path / "a.jsonl", worked_case())
    (tmp_path / "b.jsonl").write_bytes(b"junk\n")
    (tmp_path / "c.jsonl").mkdir()
    found = find_repeats(tmp_path, now(), ["oil_pressure"])
    assert [repeat.log for repeat in found.repeats] == ["a.jsonl"]
    assert [text.split(":")[0] for text in found.unreadable] == ["b.jsonl", "c.jsonl"]
    assert found.repeats[0].proof_normal is None
    assert found.repeats[0].verified


@pytest.mark.parametrize(
    ("opened", "more", "reason"),
    [
        (now(engine=" "), {}, "no engine"),
        (now(), {"days": -1}, "negative"),
        (now(), {"days": float("nan")}, "negative"),
        (now(), {"flights": -1}, "negative"),
    ],
)
def test_what_cannot_be_searched(
    tmp_path: Path, opened: Opened, more: dict[str, Any], reason: str
) -> None:
    with pytest.raises(UsageError, match=reason):
        find_repeats(tmp_path, opened, ["oil_pressure"], **more)
    with pytest.raises(UsageError, match="not a folder"):
        find_repeats(tmp_path / "none", now(), [])


def test_the_same_swap_again_is_flagged(tmp_path: Path) -> None:
    written(tmp_path / "a.jsonl", worked_case())
    (repeat,) = search(tmp_path)
    assert swaps_of(worked_case()) == ("pressure_pump_replace",)
    again = list(same_swaps([repeat], [*swaps_of(worked_case()), "relief_valve_set_pressure"]))
    assert again == [(repeat, "pressure_pump_replace")]
    assert list(same_swaps([repeat], ["relief_valve_set_pressure"])) == []


# The fix not holding as evidence


def earlier(**more: Any) -> Repeat:
    given: dict[str, Any] = {
        "log": "a.jsonl", "closed": START, "days": 0.0, "flights": None,
        "shared": ("oil_pressure",), "outcome": "cause_confirmed",
        "causes": ("pressure_pump.worn",), "fixes": ("pressure_pump_replace",),
        "proof": "oil_pressure@hot_idle", "proof_normal": True,
    }  # fmt: skip
    return Repeat(**{**given, **more})


def test_factors_follow_the_stated_formula() -> None:
    """Against the formula worked out by hand from the circuit's own numbers."""
    circuit = loaded(NAME)
    success = circuit.remedies["pressure_pump_replace"].record.success
    factors = prior_factors(circuit, earlier(proof="", proof_normal=None), hours=0.0)
    assert set(factors) == {*circuit.modes, UNLISTED}
    assert factors["pressure_pump.worn"] == pytest.approx(1 - success)
    assert factors["relief_valve.sticky"] == 1.0
    half = prior_factors(
        circuit, earlier(proof="", proof_normal=None), hours=circuit.exposure.hours / 2
    )
    assert half["pressure_pump.worn"] == pytest.approx(0.5 + 0.5 * (1 - success))
    long = prior_factors(circuit, earlier(days=circuit.exposure.hours / HOURS_A_DAY + 1))
    assert set(long.values()) == {1.0}


def test_a_verification_speaks_against_what_would_have_failed_it() -> None:
    circuit = loaded(NAME)
    factors = prior_factors(circuit, earlier(fixes=()), hours=0.0)
    observable = circuit.observables["oil_pressure@hot_idle"]
    effects = circuit.nodes[observable.node].effects
    aloof = [
        ref
        for ref, mode in circuit.modes.items()
        if ref not in effects and mode.component not in observable.through
    ]
    strong = [
        ref for ref in effects if ref in circuit.modes and sum(effects[ref].gives.values()) > 0.6
    ]
    assert len(aloof) > 10
    assert len(strong) > 2
    assert [factors[ref] for ref in aloof] == pytest.approx([1.0] * len(aloof))
    assert max(factors[ref] for ref in strong) < 0.6
    unproven = prior_factors(circuit, earlier(fixes=(), proof_normal=False), hours=0.0)
    assert set(unproven.values()) == {1.0}


def test_factors_are_likelihoods_of_the_model() -> None:
    """A circuit of one check: P(normal | cause) worked out by hand."""
    circuit = support.circuit(
        [support.mode("pump", "worn", 0.01), support.mode("valve", "open", 0.01)],
        {"flow": (("low", "normal"), "normal", {"low": 0.1}, {"pump.worn": {"low": 0.7}})},
        {"gauge": ("flow", 0.9, 0.05)},
    )
    factors = prior_factors(circuit, earlier(proof="gauge", fixes=()), hours=0.0)

    def normal(low: float) -> float:
        return low * (1 - 0.9) + (1 - low) * (1 - 0.05)

    expected = normal(1 - 0.9 * 0.3) / normal(0.1)
    assert factors["pump.worn"] == pytest.approx(expected)
    assert factors["valve.open"] == pytest.approx(1.0)


def test_the_cause_that_was_fixed_is_suspected_less_than_before() -> None:
    circuit = loaded(NAME)
    factors = prior_factors(circuit, earlier(days=10.0))
    engine = Engine(circuit)
    scale = np.array([*(factors[ref] for ref in engine.frame.refs), 1.0])
    again = Engine(circuit, odds=engine.odds * scale)
    finding = [make_finding(circuit.observables["oil_pressure@hot_idle"], "52psi")]
    chances = [e.posterior(finding).probability("pressure_pump.worn") for e in (engine, again)]
    assert chances[1] < 0.5 * chances[0]


def test_a_case_with_a_repeated_complaint_can_be_opened_again(tmp_path: Path) -> None:
    """Flights are optional in a log; without them its lines are as they always were."""
    path = written(tmp_path / "a.jsonl", numbered([head(), found("oil_look", "clear")]))
    assert b"flights" not in path.read_bytes()
    written(tmp_path / "b.jsonl", [head(flights=0)])
    assert b'"flights":0' in (tmp_path / "b.jsonl").read_bytes()
