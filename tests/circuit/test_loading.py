"""Reading a knowledge root: what is accepted, and how everything else is told."""

from __future__ import annotations

import os
import re
import time
import tracemalloc
from collections.abc import Sequence
from pathlib import Path
from typing import NamedTuple, get_args

import pint
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from diag.circuit.loading import circuit_names, load_circuit
from diag.circuit.reading import MAX_BYTES, MAX_DEPTH, MAX_NODES, read_document
from diag.circuit.records import Unit
from diag.errors import DiagError, Exit, InputError, Problem, UnknownName
from tests.circuit.conftest import FILES, Root

CIRCUIT = "circuits/small/circuit.yaml"
CONDITIONS = "circuits/small/conditions.yaml"
INDICATIONS = "circuits/small/indications.yaml"
CHECKS = "circuits/small/checks.yaml"
LINKS = "circuits/small/links.yaml"
SHARED = "shared/conditions.yaml"
PUMP = "kinds/pump.yaml"


def test_the_small_circuit_loads_clean(root: Root) -> None:
    circuit = root.load()
    assert (circuit.id, circuit.title) == ("small", "A small circuit")
    assert list(circuit.modes) == [
        "oil_tank.low", "oil_pump.worn", "oil_pump.sheared", "return_pump.worn",
        "pressure_filter.loaded", "filter_bypass.stuck", "main_bearing.spalled",
        "main_chamber.seal_worn", "oil_breather.blocked", "oil_gauge.reads_low",
    ]  # fmt: skip
    assert list(circuit.nodes) == [
        "gallery_pressure@cold_idle", "gallery_pressure@hot_idle", "chamber_oil", "tank_sound",
        "oil_pump_strip",
    ]  # fmt: skip
    assert set(circuit.remedies) == {"oil_pump_replace", "pressure_filter_element"}
    assert "return_pump_strip" not in circuit.observables
    assert circuit.components["oil_pump"].title == "Pressure pump"
    assert circuit.observables["oil_pump_strip"].record.title == "Pressure pump: strip the pump"


def test_everything_remembers_its_file_and_line(root: Root) -> None:
    circuit = root.load()
    effect = circuit.nodes["gallery_pressure@hot_idle"].effects["oil_pump.worn"]
    assert effect.where.file == str(root.path / PUMP)
    place = root.place(PUMP, "gallery_pressure@hot_idle")
    assert (effect.where.line, effect.where.column) == place
    line = circuit.lines[4]
    mark = "- {source: pressure_filter, target: main_bearing"
    assert (line.where.line, line.where.column) == root.place(CIRCUIT, mark, "{")


def test_the_answers_of_yaml_1_1_stay_words(root: Root) -> None:
    assert root.load().observables["tank_listen"].outcomes == ("yes", "no")


def test_promotions_of_kinds_and_links_are_merged(root: Root) -> None:
    modes = root.load().modes
    # The kind also promotes a mode of `chip_probe`, which this circuit does not have.
    assert modes["oil_pump.worn"].record.promotes == {"pressure_filter.loaded": 2.0}
    assert modes["main_bearing.spalled"].record.promotes == {"pressure_filter.loaded": 3.0}


def test_a_link_replaces_the_promotion_of_the_kind(root: Root) -> None:
    root.edit(LINKS, "promotes:\n", "promotes:\n  oil_pump.worn: {pressure_filter.loaded: 7}\n")
    promotes = root.load().modes["oil_pump.worn"].record.promotes
    assert promotes == {"pressure_filter.loaded": 7.0}


# -- one fault, told once, at its place ---------------------------------------------------


class Fault(NamedTuple):
    file: str
    old: str
    new: str
    mark: str
    """Text that stands once in the spoilt file, on the line that is to be named."""
    word: str
    """Text on that line, where the column is."""
    path: str
    message: str
    value: str
    accepted: str


FAULTS = {
    "unknown key": Fault(
        CHECKS, "minutes: 4", "minuts: 4\n    minutes: 4", "minuts", "minuts",
        "checks.0.minuts", "unknown key", "4", "minutes",
    ),
    "unknown table": Fault(
        LINKS, "promotes:", "promote:", "promote:", "promote:",
        "promote", "unknown key", "{'main_bearing.spalled'", "promotes",
    ),
    "missing key": Fault(
        CHECKS, "    minutes: 4\n", "", "- id: tank_listen", "id",
        "checks.0.minutes", "required key missing", "", "",
    ),
    "doubled key": Fault(
        CHECKS, "minutes: 4", "minutes: 4\n    minutes: 9", "minutes: 9", "minutes",
        "checks.0.minutes", "stands twice", "minutes", "",
    ),
    "probability above one": Fault(
        CHECKS, "detects: 0.6", "detects: 1.6", "1.6", "detects",
        "checks.0.detects", "out of range", "1.6", "at most 1",
    ),
    "probability below zero": Fault(
        CHECKS, "false_alarm: 0.1", "false_alarm: -0.1", "-0.1", "false_alarm",
        "checks.0.false_alarm", "out of range", "-0.1", "at least 0",
    ),
    "effect above one": Fault(
        LINKS, "{gurgling: 0.5}", "{gurgling: 50}", "50}", "gurgling",
        "links.oil_tank.low.tank_sound.gurgling", "out of range", "50", "at most 1",
    ),
    "effects adding up to more than one": Fault(
        PUMP, "hot_idle: {low: 0.9}", "hot_idle: {low: 0.9, high: 0.2}", "high: 0.2",
        "gallery_pressure", "modes.0.shows.gallery_pressure@hot_idle", "more than 1", "", "",
    ),
    "not a number": Fault(
        PUMP, "minutes: 120", "minutes: soon", "soon", "minutes",
        "checks.0.minutes", "not of the right kind", "'soon'", "a number",
    ),
    "endless number": Fault(
        PUMP, "minutes: 120", "minutes: 1e999", "1e999", "minutes",
        "checks.0.minutes", "not of the right kind", "inf", "a finite number",
    ),
    "a list where a mapping belongs": Fault(
        CIRCUIT, "{escalate_minutes: 400}", "[400]", "[400]", "costs",
        "costs", "not of the right kind", "[400]", "a mapping",
    ),
    "id with blanks": Fault(
        CHECKS, "id: tank_listen", "id: Tank listen", "Tank listen", "id",
        "checks.0.id", "not written as it has to be", "'Tank listen'", "lower-case word",
    ),
    "basis out of the air": Fault(
        CHECKS, "basis: judgement", "basis: guess", "guess", "basis",
        "basis", "not written as it has to be", "'guess'", "judgement",
    ),
    "no basis": Fault(
        CHECKS, "basis: judgement\n", "", "checks:", "",
        "basis", "required key missing", "", "",
    ),
    "unknown medium": Fault(
        CIRCUIT, "carries: vent", "carries: steam", "steam", "carries",
        "lines.8.carries", "not one of the words", "'steam'", "'scavenge'",
    ),
    "unknown unit": Fault(
        INDICATIONS, "unit: psi", "unit: psj", "psj", "unit",
        "indications.0.scale.unit", "not one of the words", "'psj'", "'psi'",
    ),
    "limits that do not rise": Fault(
        INDICATIONS, "any: [45, 100]", "any: [100, 45]", "scale:", "scale",
        "indications.0.scale", "must rise", "", "",
    ),
    "limits too few": Fault(
        INDICATIONS, "any: [45, 100]", "any: [45]", "any: [45]", "any",
        "oil_pressure.scale.limits.hot_idle", "limits between the states", "[45.0]", "2 numbers",
    ),
    "limits at no point": Fault(
        INDICATIONS, "cold_idle: [50, 120]", "cold_idel: [50, 120]", "cold_idel", "cold_idel",
        "oil_pressure.scale.limits.cold_idel", "no such operating point", "cold_idel",
        "cold_idle",
    ),
    "outcomes that miss a state": Fault(
        CHECKS, "{yes: [gurgling], no: [quiet]}", "{yes: [gurgling]}", "outcomes", "outcomes",
        "tank_listen.outcomes", "exactly one outcome", "gurgling", "quiet, gurgling",
    ),
    "id that stands twice": Fault(
        CIRCUIT, "- {id: bowl,", "- {id: cowl, title: Twice, open_minutes: 1, close_minutes: 1}\n"
        "  - {id: bowl,", "title: Twice", "id", "cowl", "stands twice", "cowl", "",
    ),
    "rate too high to be one": Fault(
        PUMP, "per_million_hours: 20", "per_million_hours: 20000", "20000", "rate",
        "oil_pump.worn", "likelier than not", "1.0", "below 0.5",
    ),
    "circuit under another name": Fault(
        CIRCUIT, "id: small\n", "id: smaller\n", "id: smaller", "id",
        "id", "not the name of its folder", "smaller", "small",
    ),
    "kind under another name": Fault(
        PUMP, "id: pump\n", "id: pumps\n", "id: pumps", "id",
        "id", "not the name of its file", "pumps", "pump",
    ),
    # Names that lead nowhere, table by table
    "component of no kind": Fault(
        CIRCUIT, "kind: breather", "kind: breathr", "breathr", "kind",
        "components.7.kind", "no such kind", "breathr", "breather",
    ),
    "omission of nothing": Fault(
        CIRCUIT, "omit: [strip]", "omit: [stripp]", "stripp", "stripp",
        "return_pump.omit.stripp", "no such mode, check or rectification", "stripp", "strip",
    ),
    "rate of no mode": Fault(
        CIRCUIT, "kind: gauge}", "kind: gauge, rates: {reads_lo: {per_million_hours: 1}}}",
        "reads_lo:", "reads_lo", "oil_gauge.rates.reads_lo", "no such mode", "reads_lo",
        "reads_low",
    ),
    "line from nowhere": Fault(
        CIRCUIT, "{source: return_pump,", "{source: return_pmp,", "return_pmp", "{",
        "lines.7.source", "no such component", "return_pmp", "return_pump",
    ),
    "line to nowhere": Fault(
        CIRCUIT, "target: oil_breather", "target: breather", "target: breather", "{",
        "lines.8.target", "no such component", "breather", "oil_breather",
    ),
    "event of no exposure": Fault(
        "kinds/tank.yaml", "event: servicing", "event: service", "event: service", "",
        "oil_tank.low.rate.event", "no such event", "service", "servicing",
    ),
    "opening inside nothing": Fault(
        CIRCUIT, "inside: [cowl]", "inside: [cowling]", "cowling", "cowling",
        "bowl.inside.cowling", "no such opening", "cowling", "cowl",
    ),
    "openings inside each other": Fault(
        CIRCUIT, "close_minutes: 6,", "close_minutes: 6, inside: [bowl],", "inside: [bowl]",
        "inside", "openings.cowl.inside", "cowl in bowl in cowl", "", "",
    ),
    "caution of an opening": Fault(
        CIRCUIT, "cautions: [hot_oil]", "cautions: [cold_oil]", "cold_oil", "cold_oil",
        "cowl.cautions.cold_oil", "no such caution", "cold_oil", "hot_oil",
    ),
    "shared condition unknown": Fault(
        CONDITIONS, "conditions:\n", "  - {id: chamber_air, at: [main_chamber]}\nconditions:\n",
        "chamber_air", "id", "use.chamber_air", "no such shared condition", "chamber_air",
        "chamber_oil",
    ),
    "condition at no component": Fault(
        CONDITIONS, "at: [main_chamber]", "at: [main_chamber, mane_chamber]", "mane", "mane",
        "chamber_oil.at.mane_chamber", "no such component", "mane_chamber", "main_chamber",
    ),
    "condition at no point": Fault(
        CONDITIONS, "id: gallery_pressure,", "id: gallery_pressure, points: [cold_idle, "
        "hot_idle, hot],", "hot],", "hot]", "gallery_pressure.points.hot",
        "no such operating point", "hot", "hot_idle",
    ),
    "link of no mode": Fault(
        LINKS, "return_pump.worn:", "return_pump.torn:", "torn", "return_pump",
        "links.return_pump.torn", "no such mode", "return_pump.torn", "return_pump.worn",
    ),
    "link to no condition": Fault(
        LINKS, "chamber_oil: ", "chamber_oils: ", "chamber_oils", "chamber_oils",
        "links.return_pump.worn.chamber_oils", "no such condition", "chamber_oils",
        "chamber_oil",
    ),
    "link to a condition at no point": Fault(
        LINKS, "chamber_oil: ", "chamber_oil@hot_idle: ", "@hot_idle", "chamber_oil",
        "links.return_pump.worn.chamber_oil@hot_idle", "no such point of chamber_oil",
        "hot_idle", "",
    ),
    "link to no state": Fault(
        LINKS, "excess: 0.8", "excessive: 0.8", "excessive", "excessive",
        "links.return_pump.worn.chamber_oil.excessive", "no such abnormal state", "excessive",
        "excess",
    ),
    "link to the normal state": Fault(
        LINKS, "excess: 0.8", "normal: 0.8", "normal: 0.8", "normal",
        "links.return_pump.worn.chamber_oil.normal", "no such abnormal state", "normal",
        "excess",
    ),
    "promotion by no mode": Fault(
        LINKS, "main_bearing.spalled:", "main_bearing.spald:", "spald", "main_bearing",
        "promotes.main_bearing.spald", "no such mode", "main_bearing.spald",
        "main_bearing.spalled",
    ),
    "promotion of no mode": Fault(
        LINKS, "pressure_filter.loaded: 3", "pressure_filter.loadd: 3", "loadd",
        "pressure_filter", "promotes.main_bearing.spalled.pressure_filter.loadd",
        "no such mode", "pressure_filter.loadd", "pressure_filter.loaded",
    ),
    "promotion by a kind of no mode": Fault(
        PUMP, "pressure_filter.loaded: 2", "pressure_filter.loadd: 2", "loadd",
        "pressure_filter", "worn.promotes.pressure_filter.loadd", "no such mode", "loadd",
        "loaded",
    ),
    "kind showing no condition": Fault(
        PUMP, "cabin_smell:", "cabin_smel:", "cabin_smel", "cabin_smel",
        "worn.shows.cabin_smel", "no such shared condition", "cabin_smel", "cabin_smell",
    ),
    "kind showing a condition at no point": Fault(
        PUMP, "gallery_pressure@cold_idle", "gallery_pressure@cold_idel", "cold_idel",
        "gallery_pressure", "worn.shows.gallery_pressure@cold_idel", "no such point",
        "cold_idel", "cold_idle",
    ),
    "inspection of no mode": Fault(
        PUMP, "sheared: 0.99", "shear: 0.99", "shear: ", "shear:",
        "strip.sees.shear", "no such mode", "shear", "sheared",
    ),
    "rectification of no mode": Fault(
        PUMP, "restores: [worn, sheared]", "restores: [worn, shear]", "restores", "shear]",
        "replace.restores.shear", "no such mode", "shear", "sheared",
    ),
    "rectification proved by nothing": Fault(
        PUMP, "verify: oil_pressure@hot_idle", "verify: oil_pressure@hot", "verify", "verify",
        "replace.verify", "no such observation", "oil_pressure@hot", "oil_pressure@hot_idle",
    ),
    "step through no opening": Fault(
        "shared/checks.yaml", "opens: [cowl]", "opens: [cowls]", "cowls", "cowls",
        "chamber_drain.needs.opens.cowls", "no such opening", "cowls", "cowl",
    ),
    "step with no such caution": Fault(
        "shared/checks.yaml", "cautions: [hot_oil]", "cautions: [hot_oli]", "hot_oli", "hot_oli",
        "chamber_drain.cautions.hot_oli", "no such caution", "hot_oli", "hot_oil",
    ),
    "step in a state the circuit lacks": Fault(
        "shared/checks.yaml", "engine: stopped", "engine: motoring", "motoring", "engine",
        "chamber_drain.needs", "no such engine state", "motoring", "idle",
    ),
    "observation of no condition": Fault(
        CHECKS, "reads: tank_sound", "reads: tank_sond", "tank_sond", "reads",
        "tank_listen.reads", "no such condition", "tank_sond", "tank_sound",
    ),
    "observation at no point": Fault(
        CHECKS, "reads: tank_sound", "points: [hot_idel]\n    reads: tank_sound", "hot_idel",
        "hot_idel", "tank_listen.points.hot_idel", "no such operating point", "hot_idel",
        "hot_idle",
    ),
    "observation through nothing": Fault(
        INDICATIONS, "through: [oil_gauge]", "through: [oil_guage]", "oil_guage", "oil_guage",
        "oil_pressure.through.oil_guage", "no such component", "oil_guage", "oil_gauge",
    ),
    "words for no outcome": Fault(
        INDICATIONS, "words: {low:", "words: {lwo:", "lwo", "lwo",
        "oil_pressure.words.lwo", "no such outcome", "lwo", "low",
    ),
    "omission of no shared check": Fault(
        CHECKS, "omit: [smell]", "omit: [smel]", "smel", "smel",
        "checks.omit.smel", "no such shared check", "smel", "smell",
    ),
    "source unknown": Fault(
        PUMP, "published: S1", "published: S1, S2", "S2", "basis",
        "basis", "no such source", "S2", "S1",
    ),
}  # fmt: skip


@pytest.mark.parametrize("fault", FAULTS.values(), ids=FAULTS.keys())
def test_a_fault_is_told_once_with_its_place_value_and_remedy(root: Root, fault: Fault) -> None:
    root.edit(fault.file, fault.old, fault.new)
    problem = root.problem()
    assert root.named(problem) == fault.file
    assert (problem.where.line, problem.where.column) == root.place(
        fault.file, fault.mark, fault.word
    )
    assert problem.path == fault.path
    assert fault.message in problem.message
    assert fault.value in problem.value
    assert bool(fault.value) == bool(problem.value)
    assert fault.accepted in problem.accepted


def test_all_problems_of_a_folder_are_told_at_once(root: Root) -> None:
    # One of each table; none hides another, and none is told twice.
    chosen = [
        "probability above one", "unknown unit", "not a number", "effect above one",
        "line from nowhere", "event of no exposure", "promotion of no mode",
        "step with no such caution", "condition at no component", "link of no mode",
        "shared condition unknown", "opening inside nothing", "component of no kind",
        "kind showing no condition", "source unknown",
    ]  # fmt: skip
    for name in chosen:
        root.edit(FAULTS[name].file, FAULTS[name].old, FAULTS[name].new)
    wanted = {
        (FAULTS[name].file, *root.place(FAULTS[name].file, FAULTS[name].mark, FAULTS[name].word))
        for name in chosen
    }
    found = [(root.named(p), p.where.line, p.where.column) for p in root.problems()]
    assert len(found) == len(chosen)
    assert set(found) == wanted
    assert found == sorted(found), "in the order of files and lines"


def test_faults_of_one_file_do_not_hide_each_other(root: Root) -> None:
    root.edit(CHECKS, "detects: 0.6", "detects: 6")
    check = "  - {id: tank_knock, title: Knock, minutes: 1, reads: tank_sond, detects: 0.5,"
    root.edit(CHECKS, "omit: [smell]", check + " false_alarm: 0.5}\nomit: [smel]")
    paths = {problem.path for problem in root.problems()}
    # `smel` waits: the faulty table might have been the place of a check of that name.
    assert paths == {"checks.0.detects", "tank_knock.reads"}


def test_a_word_wrong_at_the_top_of_a_file_hides_nothing(root: Root) -> None:
    root.edit(CIRCUIT, 'version: "1"', "version: 1")
    root.edit(CIRCUIT, "target: oil_breather", "target: oil_breathr")
    root.edit(LINKS, "basis: judgement", "basis: hearsay")
    root.edit(LINKS, "oil_tank.low:", "oil_tank.lo:")
    found = {problem.path for problem in root.problems()}
    assert found == {"version", "lines.8.target", "basis", "links.oil_tank.lo"}


def test_a_source_inherited_by_a_whole_file_is_told_once(root: Root) -> None:
    root.edit(PUMP, "basis: judgement", 'basis: "published: S2"')
    root.edit(PUMP, "published: S1", "published: S3")
    told = [(p.where.line, p.value) for p in root.problems()]
    assert told == [(3, "'S2'"), (root.place(PUMP, "S3")[0], "'S3'")]


def test_a_name_is_not_missed_where_its_table_could_not_be_read(root: Root) -> None:
    root.edit("shared/cautions.yaml", "text: Hot oil burns.", "txt: Hot oil burns.")
    found = {problem.path for problem in root.problems()}
    assert found == {"cautions.0.text", "cautions.0.txt"}


def test_a_condition_may_not_have_the_id_of_an_inspection(root: Root) -> None:
    new = "{id: oil_pump_strip, title: X, states: [a, b], normal: a, leak: {}, unlisted: {}}"
    root.edit(CONDITIONS, "conditions:\n", f"conditions:\n  - {new}\n")
    problem = root.problem()
    assert (root.named(problem), problem.value) == (PUMP, "'oil_pump_strip'")
    assert (problem.where.line, problem.where.column) == root.place(PUMP, "id: strip")


def test_a_faulty_kind_used_twice_is_told_once(root: Root) -> None:
    root.edit(CIRCUIT, "kind: scavenge_pump, omit: [strip]", "kind: pump")
    root.edit(PUMP, "cautions: [hot_oil]", "cautions: [cold_oil]")
    found = [p for p in root.problems() if "caution" in p.message]
    assert len(found) == 1


@pytest.mark.parametrize(
    ("edits", "circle"),
    [
        (
            ["  pressure_filter.loaded: {main_bearing.spalled: 2}"],
            "pressure_filter.loaded -> main_bearing.spalled -> pressure_filter.loaded",
        ),
        (
            [
                "  pressure_filter.loaded: {oil_tank.low: 2}",
                "  oil_tank.low: {filter_bypass.stuck: 2}",
                "  filter_bypass.stuck: {pressure_filter.loaded: 0.5}",
            ],
            "pressure_filter.loaded -> oil_tank.low -> filter_bypass.stuck -> "
            "pressure_filter.loaded",
        ),
        (["  oil_pump.worn: {oil_pump.sheared: 2}"], "oil_pump.worn -> oil_pump.sheared"),
        (
            ["  pressure_filter.loaded: {oil_pump.sheared: 2}"],
            "pressure_filter.loaded -> oil_pump.sheared, oil_pump.worn -> pressure_filter.loaded",
        ),
    ],
)
def test_causes_may_not_run_in_a_circle(root: Root, edits: Sequence[str], circle: str) -> None:
    root.edit(LINKS, "promotes:", "promotes:\n" + "\n".join(edits))
    problem = root.problem()
    assert problem.message == f"causes run in a circle: {circle}"
    assert root.named(problem) in (LINKS, PUMP)


def test_two_circles_are_told_both(root: Root) -> None:
    root.edit(
        LINKS, "promotes:",
        "promotes:\n  oil_tank.low: {oil_tank.low: 2}\n"
        "  pressure_filter.loaded: {main_bearing.spalled: 2}",
    )  # fmt: skip
    messages = [problem.message for problem in root.problems()]
    assert len(messages) == 2
    assert any("oil_tank.low -> oil_tank.low" in message for message in messages)


def test_units_are_units_and_pint_knows_them_all() -> None:
    registry = pint.UnitRegistry()
    assert {unit for unit in get_args(Unit) if registry.Unit(unit) is None} == set()
    # Each by its dimension, after the SI Brochure (9th edition), so that none is read amiss.
    kinds = {
        "[mass] / [length] / [time] ** 2": {"psi", "bar", "mbar", "kPa", "MPa"},
        "[temperature]": {"degC", "degF"},
        "[length] ** 3": {"litre", "quart", "pint", "gallon"},
        "[length] ** 3 / [time]": {"L/min", "L/h", "quart/hour"},
        "[mass] / [time]": {"lb/h"},
        "dimensionless": {"percent", "ppm", "mg/g"},
        "[length] ** 2 / [time]": {"cSt"},
        "[length]": {"mm", "inch"},
        "1 / [time]": {"rpm"},
        "[mass] * [length] ** 2 / [current] ** 2 / [time] ** 3": {"ohm", "kohm", "Mohm"},
        "[mass] * [length] ** 2 / [current] / [time] ** 3": {"volt"},
        "[current]": {"mA"},
        "[time]": {"second", "minute", "hour"},
    }
    assert set().union(*kinds.values()) == set(get_args(Unit))
    for dimension, units in kinds.items():
        for unit in units:
            known = registry.Unit(unit).dimensionality
            wanted = {} if dimension == "dimensionless" else registry.get_dimensionality(dimension)
            assert dict(known) == dict(wanted), unit


# -- files that must not be read ----------------------------------------------------------


def test_an_alias_bomb_is_refused_at_once(root: Root) -> None:
    lines = ["a0: &a0 [lol, lol, lol, lol, lol, lol, lol, lol, lol, lol]"]
    lines += [f"a{i}: &a{i} [{', '.join([f'*a{i - 1}'] * 10)}]" for i in range(1, 12)]
    root.write(CHECKS, "\n".join(lines))
    started = time.perf_counter()
    problems = root.problems()
    assert time.perf_counter() - started < 2.0
    told = [p for p in problems if "aliases are not accepted" in p.message]
    assert (told[0].where.line, told[0].where.column) == (2, 1)
    assert root.named(told[0]) == CHECKS


def test_a_file_of_fifty_megabytes_is_refused_unread(root: Root) -> None:
    file = root.write(CHECKS, "")
    os.truncate(file, 50_000_000)
    tracemalloc.start()
    problem = root.problem()
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 10_000_000
    assert "too large" in problem.message
    assert problem.accepted == f"at most {MAX_BYTES:,} bytes"


def test_a_file_of_the_largest_size_is_still_read() -> None:
    head = b"a: 1\n# "
    assert read_document(head + b"x" * (MAX_BYTES - len(head)), "f").data == {"a": 1}
    assert read_document(head + b"x" * (MAX_BYTES - len(head) + 1), "f").data is None


HOSTILE = {
    "binary junk": (bytes(range(128, 256)), "not UTF-8"),
    "a picture": (b"\x89PNG\r\n\x1a\n\x00\x00\x00\rIHDR", "not UTF-8"),
    "another encoding": ("basis: judgement".encode("utf-16"), "not UTF-8"),
    "nul bytes": (b"basis: judge\x00ment\n", "control characters"),
    "a terminal sequence": (b"basis: judgement\nchecks: \x1b[2J\n", "control characters"),
    "a terminal sequence, escaped": (b'basis: judgement\nomit: ["\\e[2J"]', "control char"),
    "a terminal sequence in a key": (b'basis: judgement\n"\\e[2J": 1', "control char"),
    "a C1 control": ("basis: judgement\nomit: [\x9b2J]\n".encode(), "control characters"),
    "an empty file": (b"", "empty"),
    "only a comment": (b"# nothing\n", "empty"),
    "a bare word": (b"judgement", "must hold a mapping"),
    "a bare list": (b"- a\n- b\n", "must hold a mapping"),
    "two documents": (b"a: 1\n---\nb: 2\n", "not readable as YAML"),
    "an open bracket": (b"basis: [judgement\n", "not readable as YAML"),
    "tabs for blanks": (b"basis: judgement\nchecks:\n\t- id: x\n", "not readable as YAML"),
    "a list for a key": (b"basis: judgement\n? [a, b]\n: 1\n", "keys must be plain words"),
    "an undefined alias": (b"basis: *nobody\n", "not readable as YAML"),
    "an object": (
        b"basis: judgement\nchecks: !!python/object/apply:os.system [true]\n", "tags are not",
    ),
    "a named object": (b"basis: !!python/name:os.system\n", "tags are not"),
    "a tagged key": (b"basis: judgement\n!!python/name:os.system a: 1\n", "plain words"),
    "a tagged mapping": (b"basis: judgement\nchecks: !!set {a, b}\n", "tags are not"),
    "a tag of its own": (b"basis: judgement\nomit: !secret [a]\n", "tags are not"),
    "a tag of the core": (b"basis: judgement\nomit: [!!str 5]\n", "tags are not"),
    "bytes in base 64": (b"basis: judgement\nomit: [!!binary aGVsbG8=]\n", "tags are not"),
    "brackets nested deep": (b"[" * 100_000, "nest"),
    "dashes nested deep": (b"- " * 100_000 + b"a", "nest"),
    "mappings nested deep": (b"{a: " * 500 + b"1" + b"}" * 500, "nested too deeply"),
}  # fmt: skip


@pytest.mark.parametrize(("content", "message"), HOSTILE.values(), ids=HOSTILE.keys())
def test_a_hostile_file_is_refused_with_a_clear_error(
    root: Root, content: bytes, message: str
) -> None:
    root.write(CHECKS, content)
    with pytest.raises(InputError) as caught:
        root.load()
    assert caught.value.code is Exit.INPUT
    problems = [p for p in caught.value.problems if root.named(p) == CHECKS]
    assert any(message in p.message for p in problems), problems
    assert all(p.where.line >= 1 and p.where.column >= 1 for p in problems)
    assert re.sub(r"[\n]", "", str(caught.value)).isprintable()


def test_nothing_is_run_by_reading(root: Root, tmp_path: Path) -> None:
    witness = tmp_path / "witness"
    path = f"!!python/object/apply:pathlib.Path ['{witness}']"
    tag = f"!!python/object/apply:pathlib.Path.touch [{path}]"
    root.write(CHECKS, f"basis: judgement\nchecks: {tag}\n")
    assert "tags are not accepted" in root.problems()[0].message
    assert not witness.exists()


def test_the_depth_and_number_of_values_are_bounded() -> None:
    fits = b"{a: " * (MAX_DEPTH - 1) + b"1" + b"}" * (MAX_DEPTH - 1)
    assert read_document(fits, "f").problems == []
    deeper = b"{a: " + fits + b"}"
    problem = read_document(b"{a: " + deeper + b"}", "f").problems[0]
    assert "nested too deeply" in problem.message
    assert problem.where.column == len(b"{a: ") * (MAX_DEPTH + 1) + 1
    for many in (b"[" + b"1," * MAX_NODES + b"]", b"- 1\n" * 3 * MAX_NODES):
        assert "too many values" in read_document(many, "f").problems[0].message


def test_a_missing_file_is_told_with_the_others(root: Root) -> None:
    (root.path / CONDITIONS).unlink()
    (root.path / "shared/cautions.yaml").unlink()
    root.edit(CHECKS, "detects: 0.6", "detects: 6")
    found = root.problems()
    assert [(root.named(p), p.where.line) for p in found] == [
        (CHECKS, root.place(CHECKS, "detects")[0]), (CONDITIONS, 1), ("shared/cautions.yaml", 1),
    ]  # fmt: skip
    assert "cannot be read: No such file" in found[1].message


def test_problems_of_kinds_are_told_even_without_a_circuit(root: Root) -> None:
    root.edit(CIRCUIT, "id: small\n", "id: []\n")
    root.edit(PUMP, "per_million_hours: 20", "per_million_hours: -20")
    found = [(root.named(p), p.path) for p in root.problems()]
    assert found == [(CIRCUIT, "id"), (PUMP, "modes.0.rate.per_million_hours")]


def test_an_unreadable_file_is_told(root: Root) -> None:
    # A folder in its place: it cannot be read by anyone, whatever their rights.
    (root.path / CHECKS).unlink()
    (root.path / CHECKS).mkdir()
    problem = root.problem()
    assert root.named(problem) == CHECKS
    assert problem.message == "cannot be read: Is a directory"


def test_a_root_without_circuits_or_kinds_is_told(root: Root, tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"circuits cannot be listed: No such file"):
        load_circuit("small", root=tmp_path / "nowhere")
    (root.path / "kinds").rename(root.path / "sorts")
    messages = {problem.message for problem in root.problems()}
    assert "no such kind" in messages
    assert any("cannot be listed" in message for message in messages)


@pytest.mark.parametrize("name", ["smal", "", "..", "a" * 5000, "nul\0byte", "\x1b[2J"])
def test_an_unknown_circuit_is_refused_with_the_nearest_names(root: Root, name: str) -> None:
    with pytest.raises(DiagError) as caught:
        load_circuit(name, root=root.path)
    assert str(caught.value).replace("\n", "").isprintable()
    if name == "smal":
        assert isinstance(caught.value, UnknownName)
        assert caught.value.nearest == ("small",)


def test_a_circuit_goes_by_dashes_underscores_or_folder(root: Root) -> None:
    folder = root.path / "circuits"
    text = (root.path / CIRCUIT).read_text().replace("id: small", "id: small_one")
    (folder / "small").rename(folder / "small_one")
    root.write("circuits/small_one/circuit.yaml", text)
    assert circuit_names(root.path) == ["small_one"]
    for name in ("small-one", "small_one", str(folder / "small_one")):
        assert load_circuit(name, root=root.path).id == "small_one"


def test_the_content_hash_follows_what_is_said_not_how(root: Root) -> None:
    before = root.load().content_hash
    assert re.fullmatch("[0-9a-f]{64}", before)
    root.edit(CHECKS, "minutes: 4", "minutes:   4   # a remark")
    assert root.load().content_hash == before
    root.edit(CHECKS, "minutes:   4", "minutes: 5")
    assert root.load().content_hash != before


# -- fuzz ---------------------------------------------------------------------------------


@given(st.binary(max_size=200))
@settings(max_examples=200, deadline=None)
def test_reading_any_bytes_gives_data_or_problems(raw: bytes) -> None:
    document = read_document(raw, "f")
    assert document.problems or document.data is not None
    assert all(str(problem).isprintable() for problem in document.problems)


WORDS = [
    b"low", b"[]", b"{}", b"''", b"null", b"-1", b"1e999", b"1", b"0", b"true", b"worn", b": ",
    b"- ", b"\n", b"  ", b"#", b"\"", b"&a", b"*a", b"!!x ", b"\xff", b"\x1b", b"@", b"normal",
    b"oil_pump", b"oil_pump.worn", b"@hot_idle", b"any", b"published: S9", b"where", b"id",
]  # fmt: skip
spoilt = st.tuples(
    st.sampled_from(sorted(FILES)),
    st.lists(
        st.tuples(
            st.floats(0, 1), st.integers(0, 30), st.sampled_from(WORDS) | st.binary(max_size=3)
        ),
        min_size=1,
        max_size=4,
    ),
)


@given(spoilt)
@settings(max_examples=100, deadline=None)
def test_a_spoilt_file_never_raises_anything_but_its_problems(
    worn_root: Root, change: tuple[str, list[tuple[float, int, bytes]]]
) -> None:
    name, cuts = change
    raw = FILES[name].encode()
    for share, length, word in cuts:
        start = int(share * len(raw))
        raw = raw[:start] + word + raw[start + length :]
    _load_spoilt(worn_root, name, raw)


@given(st.sampled_from(sorted(FILES)), st.data())
@settings(max_examples=100, deadline=None)
def test_a_word_put_for_another_never_raises_anything_but_its_problems(
    worn_root: Root, name: str, data: st.DataObject
) -> None:
    # Whole words are swapped, so that the file stays YAML and the deeper checks are reached.
    tokens = re.split(r"([\w@.]+)", FILES[name])
    for _ in range(data.draw(st.integers(1, 3))):
        at = data.draw(st.integers(0, len(tokens) // 2 - 1)) * 2 + 1
        other = [w.decode() for w in WORDS if w.isalnum()] + tokens[1::2]
        tokens[at] = data.draw(st.sampled_from(other))
    _load_spoilt(worn_root, name, "".join(tokens).encode())


def _load_spoilt(root: Root, name: str, raw: bytes) -> None:
    root.write(name, raw)
    problems: Sequence[Problem] | None = None
    try:
        circuit = root.load()
        assert all(0.0 <= mode.probability < 0.5 for mode in circuit.modes.values())
    except InputError as error:
        problems = error.problems
    finally:
        root.write(name, FILES[name])
    assert problems is None or problems
    for problem in problems or ():
        assert str(problem).isprintable()
        assert problem.where.file
        assert problem.where.line >= 1
