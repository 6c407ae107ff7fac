"""Rules: bad ones are told with their place; impossible and contradictory ones are found."""

from __future__ import annotations

from dataclasses import replace

import pytest

from diag.circuit.faults import Faults
from diag.circuit.loading import load_circuit
from diag.circuit.model import Circuit
from diag.circuit.reading import read_document, validated
from diag.circuit.rule_checks import rule_doubts, rules_known
from diag.circuit.rules import RulesFile, in_words
from diag.errors import Problem

HEAD = "basis: judgement\nrules:\n"
GOOD = """\
  - id: flakes
    kind: hold
    when: {all: [{finding: chip_look, reads: [flakes]}, {no: {engine: [cold]}}]}
    blocks: {engine: [idle]}
    text: No run.
"""


@pytest.fixture(scope="module")
def circuit() -> Circuit:
    return load_circuit("relief_valve_turboprop")


def problems(circuit: Circuit, text: str) -> list[Problem]:
    document = read_document((HEAD + text).encode(), "rules.yaml")
    file = validated(RulesFile, document)
    if document.problems or file is None:
        return document.problems
    faults = Faults()
    made = replace(circuit, rules=file.rules)
    rules_known(made, faults)
    return faults.problems or list(rule_doubts(made))


def rule(when: str, rest: str = "kind: escalate") -> str:
    return f"  - id: r\n    when: {when}\n    text: Said.\n    {rest}\n"


def test_a_good_rule_has_no_problem(circuit: Circuit) -> None:
    assert problems(circuit, GOOD) == []


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (rule("{finding: chip_lok, reads: [flakes]}"), "chip_look"),
        (rule("{finding: chip_look, reads: [flake]}"), "flakes"),
        (rule("{reading: oil_pressure@hot_idle, above: 52bananas}"), "unknown unit"),
        (rule("{reading: oil_pressure@hot_idle, above: 900psi}"), "outside the range"),
        (rule("{reading: chip_look, above: 52psi}"), "takes no number"),
        (rule("{engine: [flying]}"), "engine state"),
        (rule("{open: bonnet}"), "opening"),
        (rule("{worked_on: propeller}"), "component"),
        (rule("{likely: pump.worn, more_than: 0.5}"), "cause"),
        (rule("{finding: chip_look}"), "needs reads"),
        (rule("{finding: chip_look, above: 3psi, reads: [flakes]}"), "does not belong"),
        (rule("{finding: chip_look, engine: [cold], reads: [flakes]}"), "exactly one"),
        (rule("{}"), "exactly one"),
        (rule("{likely: unlisted, more_than: 1.5}"), "at most 1"),
        (rule("{engine: [cold]}", "kind: hold"), "needs blocks"),
        (rule("{engine: [cold]}", "kind: escalate\n    again: dipstick"), "cannot have again"),
        (
            rule("{likely: unlisted, more_than: 0.5}", "kind: void\n    finding: dipstick"),
            "cannot look at probabilities",
        ),
        (rule("{engine: [cold]}", "kind: forbid"), "not one of the words"),
        (
            rule("{engine: [cold]}", "kind: veto\n    finding: dipstick\n    instead: dipstick=x"),
            "no such outcome",
        ),
        (rule("{engine: [cold]}", "kind: hold\n    blocks: {steps: [dipstik]}"), "dipstick"),
    ],
)
def test_a_bad_rule_is_told_with_its_place(circuit: Circuit, text: str, words: str) -> None:
    found = problems(circuit, text)
    assert found
    assert any(words in str(problem) for problem in found), [str(p) for p in found]
    assert all(p.where.file == "rules.yaml" and p.where.line >= 3 for p in found)
    assert not any(problem.doubt for problem in found)


@pytest.mark.parametrize(
    "when",
    [
        "{all: [{finding: chip_look, reads: [flakes]}, {finding: chip_look, reads: [clean]}]}",
        "{all: [{engine: [idle]}, {engine: [cold]}]}",
        "{all: [{people: near}, {people: clear}]}",
        "{reading: oil_pressure@hot_idle, above: 80psi, below: 4bar}",
        "{any: [{taken: dipstick, later_than: 60, sooner_than: 30}]}",
        "{likely: unlisted, more_than: 0.6, less_than: 0.4}",
    ],
)
def test_a_rule_that_can_never_fire_is_doubted(circuit: Circuit, when: str) -> None:
    (doubt,) = problems(circuit, rule(when))
    assert doubt.doubt
    assert "can never fire" in str(doubt)


def test_rules_that_contradict_each_other_are_doubted(circuit: Circuit) -> None:
    when = "{taken: dipstick, later_than: 60}"
    both = rule(when, "kind: void\n    finding: dipstick") + rule(
        when, "kind: normal_here\n    finding: dipstick"
    ).replace("id: r", "id: s")
    (doubt,) = problems(circuit, both)
    assert "contradict" in str(doubt)


def test_holding_what_is_asked_for_is_a_contradiction(circuit: Circuit) -> None:
    when = "{taken: dipstick, later_than: 60}"
    both = rule(when, "kind: repeat\n    again: dipstick") + rule(
        when, "kind: hold\n    blocks: {steps: [dipstick]}"
    ).replace("id: r", "id: s")
    (doubt,) = problems(circuit, both)
    assert "asks for it" in str(doubt)


def test_a_rule_reads_as_a_sentence(circuit: Circuit) -> None:
    document = read_document((HEAD + GOOD).encode(), "rules.yaml")
    file = validated(RulesFile, document)
    assert file is not None
    assert in_words(file.rules[0].when) == "(finding chip_look reads flakes and not engine cold)"


def test_shipped_rules_raise_no_doubt() -> None:
    for name in ("relief_valve_turboprop", "full_flow_turbofan"):
        assert list(rule_doubts(load_circuit(name))) == []
