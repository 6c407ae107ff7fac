"""An operator's own values laid over a circuit."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from tests.circuit.conftest import Root

HEAD = "overlay: line_station\nbasis: common practice\n"


def overlay(root: Root, text: str, name: str = "overlay.yaml") -> Path:
    return root.write(name, HEAD + text)


def test_it_changes_minutes_by_id_and_leaves_the_rest(root: Root) -> None:
    before = root.load()
    after = root.load(overlay(root, "checks: {tank_listen: {minutes: 9}}\n"))
    listen = after.observables["tank_listen"].record
    assert listen.minutes == 9
    assert listen.basis == "common practice"
    assert after.overlays == ("line_station",)
    assert listen.detects == before.observables["tank_listen"].record.detects
    others = [name for name in before.observables if name != "tank_listen"]
    assert [after.observables[n] for n in others] == [before.observables[n] for n in others]
    assert after.nodes == before.nodes
    assert after.modes == before.modes


def test_it_reaches_the_checks_and_rectifications_of_kinds(root: Root) -> None:
    text = "checks: {oil_pump_strip: {minutes: 7, needs: {engine: idle}}}\n"
    text += "rectifications: {oil_pump_replace: {minutes: 8, parts_minutes: 90, success: 0.9}}\n"
    circuit = root.load(overlay(root, text))
    strip = circuit.observables["oil_pump_strip"].record
    assert (strip.minutes, strip.needs.engine, strip.needs.opens) == (7, "idle", ("cowl",))
    replace = circuit.remedies["oil_pump_replace"].record
    assert (replace.minutes, replace.parts_minutes, replace.success) == (8, 90, 0.9)


def test_it_changes_limits_point_by_point(root: Root) -> None:
    text = "indications: {oil_pressure: {scale: {tolerance: 3, limits: {any: [55, 110]}}}}\n"
    circuit = root.load(overlay(root, text))
    hot, cold = (circuit.observables[f"oil_pressure@{p}"] for p in ("hot_idle", "cold_idle"))
    assert (hot.cuts, cold.cuts) == ((55, 110), (50, 120))
    scale = hot.record.scale
    assert scale is not None
    assert (scale.tolerance, scale.unit, scale.range) == (3, "psi", (0, 150))
    # The numbers are the operator's now, and so is what they rest on.
    assert scale.basis == "common practice"


def test_it_changes_costs_openings_states_exposure_and_share(root: Root) -> None:
    text = (
        "costs: {escalate_minutes: 900}\n"
        "openings: {cowl: {open_minutes: 15}}\n"
        "engine_states: {idle: {reach_minutes: 30}}\n"
        "exposure: {hours: 1000, events: {servicing: 40}}\n"
        "unlisted: {share: 0.08}\n"
    )
    before, after = root.load(), root.load(overlay(root, text))
    assert after.file.costs.escalate_minutes == 900
    assert (after.openings["cowl"].open_minutes, after.openings["cowl"].close_minutes) == (15, 6)
    assert after.engine_states["idle"].reach_minutes == 30
    assert after.engine_states["stopped"] == before.engine_states["stopped"]
    assert after.file.unlisted.share == 0.08
    # Poisson over the hours, and 40 servicings that each err at 0.2 %.
    worn = after.modes["oil_pump.worn"].probability
    assert worn == pytest.approx(1.0 - math.exp(-20e-6 * 1000), abs=1e-15)
    low = after.modes["oil_tank.low"].probability
    assert low == pytest.approx(1.0 - (1.0 - 0.002) ** 40, abs=1e-12)


def test_it_changes_rates_and_their_kind(root: Root) -> None:
    text = (
        "rates:\n"
        "  oil_pump.worn: {per_million_hours: 40}\n"
        "  oil_pump.sheared: {per_event: 0.001, event: servicing}\n"
        "  oil_tank.low: {per_event: 0.01}\n"
    )
    circuit = root.load(overlay(root, text.replace("0.01}", "0.01, event: servicing}")))
    sheared = circuit.modes["oil_pump.sheared"]
    assert (sheared.rate.per_million_hours, sheared.rate.per_event) == (None, 0.001)
    assert sheared.probability == pytest.approx(1.0 - (1.0 - 0.001) ** 10, abs=1e-12)
    assert circuit.modes["oil_pump.worn"].rate.per_million_hours == 40
    assert circuit.modes["oil_tank.low"].rate.per_event == 0.01
    problem = root.problem(overlay(root, text))
    assert problem.path == "rates.oil_tank.low"
    assert "per_event and event belong together" in problem.message


def test_it_adds_references_to_approved_data(root: Root) -> None:
    text = "checks: {chamber_drain: {reference: task 12-34}}\n"
    text += "rectifications: {pressure_filter_element: {reference: task 56-78}}\n"
    circuit = root.load(overlay(root, text))
    assert circuit.observables["chamber_drain"].record.reference == "task 12-34"
    assert circuit.remedies["pressure_filter_element"].record.reference == "task 56-78"


def test_it_changes_and_adds_links(root: Root) -> None:
    text = "links:\n  oil_tank.low: {tank_sound: {gurgling: 0.9}}\n"
    text += "  oil_breather.blocked: {chamber_oil: {excess: 0.3}}\n"
    nodes = root.load(overlay(root, text)).nodes
    assert nodes["tank_sound"].effects["oil_tank.low"].gives == {"gurgling": 0.9}
    assert nodes["chamber_oil"].effects["oil_breather.blocked"].gives == {"excess": 0.3}


def test_a_later_overlay_wins(root: Root) -> None:
    first = overlay(root, "checks: {tank_listen: {minutes: 9, reference: A}}\n", "a.yaml")
    second = overlay(root, "checks: {tank_listen: {minutes: 3}}\n", "b.yaml")
    listen = root.load(first, second).observables["tank_listen"].record
    assert (listen.minutes, listen.reference) == (3, "A")
    assert root.load(second, first).observables["tank_listen"].record.minutes == 9


def test_it_changes_the_content_hash(root: Root) -> None:
    file = overlay(root, "checks: {tank_listen: {minutes: 9}}\n")
    plain, laid = root.load().content_hash, root.load(file).content_hash
    assert plain != laid
    overlay(root, "checks: {tank_listen: {minutes: 10}}\n")
    assert root.load(file).content_hash not in (plain, laid)


def test_one_for_another_circuit_changes_nothing(root: Root) -> None:
    other = root.path / "circuits" / "large"
    other.mkdir()
    text = "circuit: large\nchecks: {tank_listen: {minutes: 9}, nothing: {minutes: 1}}\n"
    text += "links: {nothing.worn: {tank_sound: {gurgling: 0.9}}}\n"
    circuit = root.load(overlay(root, text))
    assert circuit.observables["tank_listen"].record.minutes == 4
    assert circuit.overlays == ()
    assert root.load(overlay(root, "circuit: small\n")).overlays == ("line_station",)


PROBLEMS = {
    "circuit": ("circuit: smal\n", "smal\n", "circuit", "circuit", "smal", "small"),
    "check": (
        "checks:\n  tank_lisen: {minutes: 1}\n", "tank_lisen", "tank_lisen",
        "checks.tank_lisen", "tank_lisen", "tank_listen",
    ),
    "indication": (
        "indications:\n  oil_presure: {minutes: 1}\n", "oil_presure", "oil_presure",
        "indications.oil_presure", "oil_presure", "oil_pressure",
    ),
    "rectification": (
        "rectifications:\n  oil_pump_replac: {minutes: 1}\n", "oil_pump_replac",
        "oil_pump_replac", "rectifications.oil_pump_replac", "oil_pump_replac",
        "oil_pump_replace",
    ),
    "opening": (
        "openings:\n  cow: {open_minutes: 1}\n", "cow:", "cow", "openings.cow", "cow", "cowl",
    ),
    "engine state": (
        "engine_states:\n  motoring: {reach_minutes: 1}\n", "motoring", "motoring",
        "engine_states.motoring", "motoring", "idle",
    ),
    "rate": (
        "rates:\n  oil_pump.wrn: {per_million_hours: 1}\n", "oil_pump.wrn", "oil_pump.wrn",
        "rates.oil_pump.wrn", "oil_pump.wrn", "oil_pump.worn",
    ),
    "link": (
        "links:\n  oil_pump.wrn: {tank_sound: {gurgling: 0.9}}\n", "oil_pump.wrn",
        "oil_pump.wrn", "links.oil_pump.wrn", "oil_pump.wrn", "oil_pump.worn",
    ),
    "field": (
        "checks:\n  tank_listen: {minuts: 1}\n", "minuts", "minuts",
        "checks.tank_listen.minuts", "1", "minutes",
    ),
    "value": (
        "checks:\n  tank_listen: {detects: 1.5}\n", "1.5", "detects",
        "checks.tank_listen.detects", "1.5", "at most 1",
    ),
    "value inside": (
        "indications:\n  oil_pressure:\n    scale:\n      unit: psj\n", "psj", "unit",
        "indications.oil_pressure.scale.unit", "psj", "'psi'",
    ),
    "limits": (
        "indications:\n  oil_pressure:\n    scale:\n      limits: {any: [1]}\n", "any: [1]",
        "any", "oil_pressure.scale.limits.hot_idle", "[1.0]", "2 numbers",
    ),
    "limits at a point": (
        "indications:\n  oil_pressure:\n    scale:\n      limits: {hot: [1, 2]}\n", "hot:",
        "hot", "oil_pressure.scale.limits.hot", "hot", "hot_idle",
    ),
    "caution": (
        "checks:\n  tank_listen:\n    cautions: [hot_oli]\n", "hot_oli", "hot_oli",
        "tank_listen.cautions.hot_oli", "hot_oli", "hot_oil",
    ),
    "source": (
        "checks:\n  tank_listen: {minutes: 1, basis: 'published: S9'}\n", "S9", "basis",
        "basis", "S9", "S1",
    ),
    "id": (
        "checks:\n  tank_listen: {id: tank_hear}\n", "tank_hear", "id",
        "checks.tank_listen.id", "tank_hear", "",
    ),
    "cost": (
        "costs: {escalate_minutes: -1}\n", "-1", "escalate_minutes",
        "costs.escalate_minutes", "-1", "at least 0",
    ),
}  # fmt: skip


@pytest.mark.parametrize(
    ("text", "mark", "word", "path", "value", "accepted"), PROBLEMS.values(), ids=PROBLEMS.keys()
)
def test_a_fault_in_it_is_told_at_its_own_place(
    root: Root, text: str, mark: str, word: str, path: str, value: str, accepted: str
) -> None:
    problem = root.problem(overlay(root, text))
    assert root.named(problem) == "overlay.yaml"
    where = (problem.where.line, problem.where.column)
    assert where == root.place("overlay.yaml", mark, word)
    assert problem.path == path
    assert value in problem.value
    assert accepted in problem.accepted


def test_all_its_faults_are_told_with_those_of_the_circuit(root: Root) -> None:
    root.edit("circuits/small/checks.yaml", "detects: 0.6", "detects: 6")
    text = "checks: {oil_pump_strp: {minutes: 1}, oil_pump_strip: {minutes: -1, tools: x}}\n"
    text += "rates: {oil_pump.worn: {per_million_hours: lots}}\ncosts: {escalate_minutes: x}\n"
    found = {problem.path for problem in root.problems(overlay(root, text))}
    # `oil_pump_strp` waits: it might be the name of the check that could not be read.
    assert found == {
        "checks.0.detects", "checks.oil_pump_strip.minutes", "checks.oil_pump_strip.tools",
        "rates.oil_pump.worn.per_million_hours", "costs.escalate_minutes",
    }  # fmt: skip


def test_a_missing_overlay_is_told(root: Root) -> None:
    problem = root.problem(root.path / "nowhere.yaml")
    assert root.named(problem) == "nowhere.yaml"
    assert problem.message.startswith("cannot be read: No such file")


def test_an_overlay_is_no_circuit(root: Root) -> None:
    file = root.write("overlay.yaml", "overlay: x\ncheks: {}\n")
    found = {(p.path, p.message, p.accepted) for p in root.problems(file)}
    assert found == {("basis", "required key missing", ""), ("cheks", "unknown key", "checks")}
