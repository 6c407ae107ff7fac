"""Every shipped rule has a case in which it fires and one in which it must not."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime, timedelta
from functools import cache

import pytest

from diag.advice.rules import Odds, View, fired
from diag.belief.evidence import parse_finding
from diag.circuit.loading import load_circuit
from diag.circuit.model import Circuit
from diag.circuit.rules import EFFECTS, Rule, named_places
from diag.record.events import AnyEvent, Found, Noted, Opened, StateChanged
from diag.session import fold, rule_view

START = datetime(2026, 3, 1, 3, 0, tzinfo=UTC)
A, B = "relief_valve_turboprop", "full_flow_turbofan"
loaded = cache(load_circuit)

# Tokens of a case: NAME=VALUE is a finding, NAME=VALUE+N one taken N minutes after stop;
# wait:N lets N minutes pass; engine:STATE, open:NAME, near, worked:COMPONENT, both; and for
# rules on the odds chance:CAUSE:P, conflict:BITS, nothing.
CASES = [
    # holds
    (A, "flakes_no_run", "chip_look=flakes", "chip_look=fuzz"),
    (A, "filter_flakes_no_run", "filter_element=flakes", "filter_element=fines"),
    (A, "screen_metal_front_no_run", "front_screen_pull=metal", "front_screen_pull=coke"),
    (A, "screen_metal_rear_no_run", "rear_screen_pull=metal", "rear_screen_pull=clean"),
    (
        A,
        "no_pressure_no_run",
        "oil_pressure@hot_idle=5psi low_pressure_warning@hot_idle=on",
        "oil_pressure@hot_idle=5psi low_pressure_warning@hot_idle=off",
    ),
    (A, "no_pressure_on_motoring", "oil_pressure@motoring=0psi", "oil_pressure@motoring=12psi"),
    (A, "running_hands_off", "engine:idle", "engine:hot_stopped"),
    (A, "people_near_no_run", "near", ""),
    (A, "bowl_pressure", "engine:hot_stopped wait:5", "engine:hot_stopped wait:30"),
    (A, "open_line_no_run", "open:filter_bowl", "open:cowl"),
    (B, "fuel_in_oil_no_run", "fuel_dilution_lab=present", "fuel_dilution_lab=absent"),
    (
        A,
        "high_pressure_no_power",
        "oil_pressure@high_power=190psi",
        "oil_pressure@high_power=110psi",
    ),
    (B, "fuel_cooler_pressure_test_first", "oil_quantity@static=20l", "oil_quantity@static=17l"),
    (B, "oil_too_hot", "oil_temperature@high_power=170degC", "oil_temperature@high_power=158degC"),
    # cautions
    (A, "leak_caution", "walk_round=wet", "walk_round=dry"),
    (
        A,
        "hot_oil_caution",
        "oil_temperature@high_power=130degC",
        "oil_temperature@high_power=90degC",
    ),
    (A, "milky_oil_caution", "oil_look=milky", "oil_look=dark"),
    (A, "seal_count_caution", "worked:breather", ""),
    (A, "set_pressure_needs_direct_gauge", "chance:relief_valve:0.5", "chance:relief_valve:0.1"),
    (A, "torque_wild", "torque_reading@high_power=low", "torque_reading@high_power=normal"),
    # normal here
    (
        A,
        "dp_cold_start",
        "filter_dp_warning@hot_idle=on oil_temperature@hot_idle=12degC",
        "filter_dp_warning@hot_idle=on oil_temperature@hot_idle=90degC",
    ),
    (
        A,
        "gulp_at_idle",
        "oil_quantity@static=6l+2 oil_quantity@hot_idle=normal",
        "oil_quantity@static=6l+25 oil_quantity@hot_idle=normal",
    ),
    (
        A,
        "cold_pressure_high",
        "oil_pressure@cold_idle=93psi oil_pressure@hot_idle=78psi oil_pressure@high_power=86psi",
        "oil_pressure@cold_idle=93psi oil_pressure@hot_idle=78psi oil_pressure@high_power=120psi",
    ),
    (
        B,
        "pressure_follows_speed",
        "oil_pressure@hot_idle=60psi oil_pressure@high_power=169psi oil_pressure@cold_idle=80psi",
        "oil_pressure@hot_idle=50psi oil_pressure@high_power=169psi oil_pressure@cold_idle=80psi",
    ),
    (
        B,
        "running_quantity_low",
        "oil_quantity@high_power=10l oil_quantity@static=normal taxi_quantity=normal",
        "oil_quantity@high_power=8l oil_quantity@static=normal taxi_quantity=normal",
    ),
    # void
    (A, "level_too_late", "dipstick=6l+840", "dipstick=6l+20"),
    (A, "level_too_soon", "dipstick=6l+2", "dipstick=6l+20"),
    (A, "sample_too_late", "oil_spectrum=raised+300", "oil_spectrum=raised+20"),
    (A, "foam_too_late", "foam_look=absent+45", "foam_look=absent+3"),
    (A, "sump_drain_too_late_front", "drain_front_sump=excess+600", "drain_front_sump=excess+30"),
    (A, "sump_drain_too_late_rear", "drain_rear_sump=excess+600", "drain_rear_sump=excess+30"),
    # veto
    (
        A,
        "pressure_with_engine_stopped",
        "oil_pressure@motoring=30psi gauge_at_rest=offset",
        "oil_pressure@motoring=30psi gauge_at_rest=zero",
    ),
    (
        A,
        "temperature_jumps",
        "oil_temperature@hot_idle=80degC wait:0.1 oil_temperature@hot_idle=200degC",
        "oil_temperature@hot_idle=80degC wait:10 oil_temperature@hot_idle=120degC",
    ),
    (
        A,
        "temperature_jumps_at_power",
        "oil_temperature@high_power=80degC wait:0.1 oil_temperature@high_power=10degC",
        "oil_temperature@high_power=80degC wait:10 oil_temperature@high_power=100degC",
    ),
    (
        A,
        "gauge_without_pressure_warning",
        "oil_pressure@high_power=0psi low_pressure_warning@high_power=off "
        "pressure_needle@high_power=jumping",
        "oil_pressure@high_power=0psi low_pressure_warning@high_power=on "
        "pressure_needle@high_power=jumping",
    ),
    # repeat
    (
        A,
        "dp_again_warm",
        "filter_dp_warning@hot_idle=on oil_temperature@hot_idle=12degC",
        "filter_dp_warning@hot_idle=off oil_temperature@hot_idle=12degC",
    ),
    (A, "level_again", "dipstick=6l+840", "dipstick=6l+20"),
    (A, "sample_again", "oil_spectrum=raised+300", "oil_spectrum=normal+300"),
    (
        A,
        "gauge_and_warning_disagree",
        "oil_pressure@hot_idle=0psi low_pressure_warning@hot_idle=off",
        "oil_pressure@hot_idle=0psi low_pressure_warning@hot_idle=off direct_gauge@hot_idle=78psi",
    ),
    (
        A,
        "hot_idle_is_the_test",
        "oil_pressure@high_power=68psi",
        "oil_pressure@high_power=68psi oil_pressure@hot_idle=50psi",
    ),
    (
        B,
        "hot_day_again",
        "oil_temperature@high_power=150degC air_cooler_touch=normal",
        "oil_temperature@high_power=150degC air_cooler_touch=absent",
    ),
    (
        B,
        "hiding_not_loss",
        "oil_quantity@high_power=8l",
        "oil_quantity@high_power=8l taxi_quantity=normal",
    ),
    # escalate
    (A, "nothing_worth", "nothing", ""),
    (A, "unlisted_likely", "chance:unlisted:0.4", "chance:unlisted:0.1"),
    (A, "findings_conflict", "conflict:6", "conflict:2"),
    (A, "flakes_escalate", "filter_element=flakes", "filter_element=clean"),
    (A, "oil_in_air_escalate", "cabin_smell=oily duct_swab=oily", "cabin_smell=oily"),
    (
        A,
        "oil_in_intake",
        "intake_borescope=oily chance:oil_tank.intake_crack:0.5",
        "intake_borescope=oily chance:oil_tank.intake_crack:0.1",
    ),
    (B, "oil_in_fuel_escalate", "fuel_filter_sample=present", "fuel_filter_sample=absent"),
    # shared
    (A, "both_engines", "both", ""),
    (A, "filter_worked_on", "worked:pressure_filter", "worked:breather"),
    (A, "chip_worked_on", "worked:chip_detector", "worked:pressure_filter"),
]


def view_of(circuit: Circuit, case: str) -> View:
    """The case that the tokens tell, as rules see it."""
    tokens = case.split()
    worked = tuple(t.removeprefix("worked:") for t in tokens if t.startswith("worked:"))
    events: list[AnyEvent] = [
        Opened(
            at=START,
            circuit=circuit.id,
            version="1",
            content_hash="0",
            worked_on=worked,
            both_engines="both" in tokens or None,
        )
    ]
    at, chances, conflict = START, {}, 0.0
    for token in tokens:
        word, _, rest = token.partition(":")
        if "=" in token:
            events.append(found(circuit, token, at, len(events)))
        elif word == "engine":
            events.append(StateChanged(at=at, number=len(events), engine=rest))
        elif word == "open":
            events.append(StateChanged(at=at, number=len(events), opened=(rest,)))
        elif word == "near":
            events.append(StateChanged(at=at, number=len(events), people_clear=False))
        elif word == "wait":
            at += timedelta(minutes=float(rest))
            events.append(Noted(at=at, number=len(events), text="time passes"))
        elif word == "chance":
            name, _, p = rest.partition(":")
            chances[name] = float(p)
        elif word == "conflict":
            conflict = float(rest)
    odds = Odds(lambda n: chances.get(n, 0.0), lambda: conflict, lambda: "nothing" in tokens)
    return replace(rule_view(fold(circuit, events)), odds=odds)


def found(circuit: Circuit, token: str, at: datetime, number: int) -> Found:
    text, _, minutes = token.partition("+")
    finding = parse_finding(circuit, text)
    return Found(
        at=at,
        number=number,
        name=finding.observable.record.id,
        point=finding.observable.point,
        value=finding.value,
        minutes_after_stop=float(minutes) if minutes else None,
    )


def names(view: View) -> set[str]:
    return {firing.rule.id for firing in fired(view, EFFECTS)}


@pytest.mark.parametrize(("circuit", "rule", "fires", "silent"), CASES, ids=[c[1] for c in CASES])
def test_rule(circuit: str, rule: str, fires: str, silent: str) -> None:
    made = loaded(circuit)
    assert rule in names(view_of(made, fires))
    assert rule not in names(view_of(made, silent))


def all_rules() -> dict[str, Rule]:
    return {rule.id: rule for name in (A, B) for rule in loaded(name).rules}


def test_there_are_rules_enough_and_each_is_tried() -> None:
    assert len(all_rules()) >= 40
    assert set(all_rules()) == {case[1] for case in CASES}


def test_every_kind_of_rule_is_used() -> None:
    assert {rule.kind for rule in all_rules().values()} == set(EFFECTS)


def test_every_shared_rule_has_a_home() -> None:
    """A shared rule that speaks of unknown observations would silently stay away."""
    import yaml

    from diag.circuit.loading import knowledge_root

    raw = yaml.safe_load((knowledge_root() / "shared" / "rules.yaml").read_text())
    assert {rule["id"] for rule in raw["rules"]} <= set(all_rules())


def test_rules_say_where_they_come_from() -> None:
    for rule in all_rules().values():
        assert rule.basis
        assert rule.text.rstrip().endswith(".")
        assert list(named_places(rule)) or rule.when
