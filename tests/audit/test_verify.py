"""A log replayed: what was altered, on another circuit, or no longer comes out is reported."""

from __future__ import annotations

import random
import re
import shutil
from collections.abc import Callable, Sequence
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from functools import cache
from pathlib import Path

import pytest

from diag.audit import CHAIN_LIMITS, Verdict, carry_forward, verify
from diag.belief.evidence import parse_finding
from diag.circuit.loading import knowledge_root, load_circuit
from diag.circuit.model import Circuit
from diag.errors import InputError, UnknownName
from diag.record.events import (
    AnyEvent,
    Closed,
    Doubted,
    Found,
    Noted,
    NotPossible,
    Opened,
    Rectified,
    RuleFired,
    Standing,
    StateChanged,
    Withdrawn,
)
from diag.record.journal import Journal, JournalError, read_journal
from diag.record.keep import find_circuit, keep_circuit, kept_place, load_kept
from diag.session import Session
from tests import support

NAME = "relief_valve_turboprop"
VERSION = r'version: "[^"]+"'
CHANGES = 1000
SEED = 20240611
START = datetime(2026, 3, 1, 3, 0, tzinfo=UTC)
loaded = cache(load_circuit)


def case(circuit: Circuit, path: Path, events: Sequence[AnyEvent]) -> Path:
    """A log made by the session itself, a minute an event."""
    times = (START + timedelta(minutes=n) for n in range(1000))
    with Journal.create(path, opened(circuit)) as journal:
        saved: list[AnyEvent] = []

        def save(event: AnyEvent) -> None:
            if not isinstance(event, Opened):
                saved.append(journal.append(event))

        session = Session(circuit, save)
        # The journal wrote the head without a standing; the session weighs it all the same.
        session.add(opened(circuit))
        for event in events:
            session.add(event.model_copy(update={"at": next(times)}))
    return path


def opened(circuit: Circuit) -> Opened:
    return Opened(
        at=START,
        circuit=circuit.id,
        version=circuit.file.version,
        content_hash=circuit.content_hash,
        overlays=circuit.overlays,
    )


def finding(circuit: Circuit, text: str, complaint: bool = False) -> Found:
    made = parse_finding(circuit, text)
    record, point = made.observable.record, made.observable.point
    return Found(at=START, name=record.id, point=point, value=made.value, complaint=complaint)


@cache
def tiny() -> Circuit:
    """Few modes, so that a case can be replayed a thousand times."""
    return support.circuit(
        [support.mode("pump", "worn", 0.02), support.mode("valve", "open", 0.01)],
        {
            "pressure": (
                ("low", "normal"),
                "normal",
                {"low": 0.01},
                {"pump.worn": {"low": 0.7}, "valve.open": {"low": 0.9}},
            ),
            "wear": (("clear", "found"), "clear", {}, {"pump.worn": {"found": 0.8}}),
        },
        {"gauge": ("pressure", 0.97, 0.02), "strip": ("wear", 0.95, 0.03)},
        unlisted=0.04,
    )


@pytest.fixture(scope="module")
def short(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("short") / "case.jsonl"
    events = [finding(tiny(), "gauge=low", True), finding(tiny(), "strip=found")]
    return case(tiny(), path, [*events, Noted(at=START, text="a remark")])


@pytest.fixture(scope="module")
def long(tmp_path_factory: pytest.TempPathFactory) -> Path:
    circuit = loaded(NAME)
    events: list[AnyEvent] = [
        finding(circuit, "oil_pressure@hot_idle=52psi", True),
        NotPossible(at=START, step="oil_spectrum", reason="laboratory shut"),
        StateChanged(at=START, engine="cold", opened=("cowl",)),
        Doubted(at=START, target=1, trust=0.5),
        Rectified(at=START, rectification="pressure_pump_replace", part_off="A1", part_on="B2"),
        finding(circuit, "oil_pressure@hot_idle=78psi"),
    ]
    return case(circuit, tmp_path_factory.mktemp("long") / "case.jsonl", events)


def rewritten(
    path: Path, target: Path, change: Callable[[list[AnyEvent]], list[AnyEvent] | None]
) -> Path:
    """The same log with other events and a sound chain: what a chain cannot show."""
    events = list(read_journal(path).events)
    events = change(events) or events
    assert isinstance(events[0], Opened)
    with Journal.create(target, events[0]) as journal:
        for event in events[1:]:
            journal.append(event)
    return target


def at(events: list[AnyEvent], number: int, **update: object) -> list[AnyEvent]:
    """Events with one of them altered."""
    return [e.model_copy(update=update) if e.number == number else e for e in events]


def told(verdict: Verdict) -> str:
    return "\n".join(map(str, verdict.problems))


# Sound logs


def test_a_log_of_the_session_comes_out_as_it_was_written(long: Path, short: Path) -> None:
    for path, load in ((long, loaded), (short, lambda name: tiny())):
        verdict = verify(path, load)
        assert verdict.problems == ()
        assert CHAIN_LIMITS in verdict.notes
        assert f"{len(read_journal(path).events)} events replayed" in "\n".join(verdict.notes)
    assert "0.0001" in "\n".join(verdict.notes)


def test_it_says_what_a_chain_does_not_prove(short: Path) -> None:
    for word in ("rewrites the whole file", "taken off the end", "who wrote", "is true"):
        assert word in CHAIN_LIMITS


# Altered logs


def test_random_single_byte_changes_are_all_detected(tmp_path: Path) -> None:
    events = [finding(tiny(), "gauge=low", True), Noted(at=START, text="±")]
    original = case(tiny(), tmp_path / "case.jsonl", events).read_bytes()
    chance, other = random.Random(SEED), tmp_path / "other.jsonl"
    for _ in range(CHANGES):
        place = chance.randrange(len(original))
        byte = chance.choice([b for b in range(256) if b != original[place]])
        other.write_bytes(original[:place] + bytes([byte]) + original[place + 1 :])
        assert verify(other, lambda name: tiny()).problems, (place, byte)


def test_a_torn_end_is_a_problem(short: Path, tmp_path: Path) -> None:
    other = tmp_path / "other.jsonl"
    other.write_bytes(short.read_bytes()[:-20])
    (problem,) = verify(other, lambda name: tiny()).problems
    assert "line 4 was not written whole" in problem.message


def test_an_answer_rewritten_with_a_sound_chain_no_longer_comes_out(
    short: Path, tmp_path: Path
) -> None:
    other = rewritten(short, tmp_path / "x.jsonl", lambda e: at(e, 1, value="normal"))
    assert read_journal(other).problems == ()
    verdict = verify(other, lambda name: tiny())
    assert "the probability of pump.worn no longer comes out at after" in told(verdict)
    assert {p.where.line for p in verdict.problems} == {2, 3, 4}


def test_a_standing_rewritten_by_little_more_than_the_tolerance(
    short: Path, tmp_path: Path
) -> None:
    events = read_journal(short).events
    after = events[1].after
    assert after is not None
    (ref, chance), *rest = after.causes
    for shift, found in ((0.9e-4, 0), (1.2e-4, 1)):
        moved = Standing(causes=((ref, chance - shift), *rest))
        target = tmp_path / f"{found}.jsonl"
        other = rewritten(short, target, lambda events, moved=moved: at(events, 1, after=moved))
        assert len(verify(other, lambda name: tiny()).problems) == found


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        (lambda e: at(e, 2, name="ouija_board"), "refuses this event: unknown finding"),
        (lambda e: at(e, 2, value="purple"), "refuses this event"),
        (lambda e: [*e, Rectified(at=START, rectification="prayer")], "unknown rectification"),
        (lambda e: [*e, StateChanged(at=START, engine="orbit")], "unknown engine state"),
        (lambda e: [*e, Withdrawn(at=START, target=99)], "cannot be withdrawn"),
        (
            lambda e: [*e, Closed(at=START, outcome="no_fault_found", verification=3)],
            "not a finding of this case",
        ),
        (
            lambda e: [*e, Closed(at=START, outcome="cause_confirmed", causes=("x.y",))],
            "refuses this event",
        ),
    ],
    ids=range(7),
)
def test_an_event_that_the_case_refuses_is_reported(
    short: Path,
    tmp_path: Path,
    change: Callable[[list[AnyEvent]], list[AnyEvent]],
    reason: str,
) -> None:
    other = rewritten(short, tmp_path / "x.jsonl", change)
    assert reason in told(verify(other, lambda name: tiny()))


def test_rules_that_fire_otherwise_are_reported(tmp_path: Path) -> None:
    circuit = loaded(NAME)
    path = case(circuit, tmp_path / "case.jsonl", [finding(circuit, "chip_look=flakes")])
    fired = [e for e in read_journal(path).events if isinstance(e, RuleFired)]
    assert "flakes_no_run" in {e.rule for e in fired}
    assert verify(path, loaded).problems == ()
    silent = rewritten(
        path,
        tmp_path / "silent.jsonl",
        lambda e: [x for x in e if getattr(x, "rule", "") != "flakes_no_run"],
    )
    assert "the rule flakes_no_run fires and was not recorded" in told(verify(silent, loaded))
    number = fired[0].number
    loud = rewritten(path, tmp_path / "loud.jsonl", lambda e: at(e, number, rule="bowl_pressure"))
    assert "the rule bowl_pressure would not fire" in told(verify(loud, loaded))


def test_other_circuits(short: Path) -> None:
    def says(circuit: Circuit) -> str:
        return told(verify(short, lambda name: circuit))

    other = replace(tiny(), content_hash="1" * 64)
    assert "the circuit has changed since the log was made" in says(other)
    newer = replace(tiny(), file=tiny().file.model_copy(update={"version": "2"}))
    assert "another version of the circuit" in says(newer)
    assert "made with other overlays" in says(replace(tiny(), overlays=("site",)))
    assert "another circuit" in says(loaded(NAME))


def test_a_circuit_that_cannot_be_loaded_is_a_problem(short: Path) -> None:
    def load(name: str) -> Circuit:
        raise UnknownName("circuit", name, ["tinier"])

    verdict = verify(short, load)
    assert "the circuit cannot be loaded: unknown circuit 'tiny'" in told(verdict)
    assert CHAIN_LIMITS in verdict.notes


def test_a_log_that_is_none(tmp_path: Path) -> None:
    with pytest.raises(JournalError, match="no such file"):
        verify(tmp_path / "none.jsonl", loaded)
    empty = tmp_path / "empty.jsonl"
    empty.write_bytes(b"")
    assert "the log is empty" in told(verify(empty, loaded))


# Copies of circuits, and going on with another one


def changed_root(folder: Path, edit: Callable[[Path], object]) -> Path:
    """The shipped knowledge, copied and changed."""
    shutil.copytree(str(knowledge_root()), folder)
    edit(folder)
    return folder


def edited(path: Path, old: str, new: str) -> None:
    text = path.read_text()
    assert re.search(old, text)
    path.write_text(re.sub(old, new, text, count=1))


def test_a_kept_copy_is_the_same_circuit(tmp_path: Path) -> None:
    overlays = []
    for n, name in enumerate(("b", "a")):
        path = tmp_path / f"{name}.yaml"
        path.write_text(
            f"overlay: {name}\nbasis: judgement\nchecks: {{oil_spectrum: {{minutes: {n + 5}}}}}\n"
        )
        overlays.append(path)
    circuit = load_circuit(NAME, overlays)
    log = tmp_path / "case.jsonl"
    place = keep_circuit(circuit, log, overlays)
    assert place == kept_place(log, NAME, circuit.content_hash)
    assert load_kept(place, NAME).content_hash == circuit.content_hash
    assert load_kept(place, NAME).overlays == ("b", "a")
    assert keep_circuit(circuit, log, overlays) == place
    with pytest.raises(InputError, match="not the circuit in use"):
        keep_circuit(replace(circuit, content_hash="2" * 64), log, overlays)
    assert [p.name for p in place.parent.iterdir()] == [place.name]


def test_a_log_of_an_older_circuit_is_verified_against_its_copy(long: Path, tmp_path: Path) -> None:
    older = changed_root(
        tmp_path / "older",
        lambda root: edited(root / "circuits" / NAME / "circuit.yaml", VERSION, 'version: "0.9"'),
    )
    circuit = load_circuit(NAME, root=older)
    log = case(circuit, tmp_path / "case.jsonl", [finding(circuit, "oil_pressure@hot_idle=52psi")])
    assert "another version of the circuit" in told(verify(log, loaded))
    keep_circuit(circuit, log, root=older)
    found, where = find_circuit(log, NAME, circuit.content_hash)
    assert found.file.version == "0.9"
    assert "copy" in where
    assert verify(log, lambda name: found).problems == ()
    assert find_circuit(long, NAME, loaded(NAME).content_hash)[1] == "the present circuit"


def test_carrying_forward_lists_what_changed(long: Path, tmp_path: Path) -> None:
    events = read_journal(long).events
    old = loaded(NAME)
    leader = next(ref for ref, _ in last_standing(events).causes if ref in old.modes)
    *low, top = old.observables["oil_pressure@hot_idle"].cuts
    overlay = tmp_path / "site.yaml"
    overlay.write_text(
        f"overlay: site\nbasis: judgement\n"
        f"rates: {{{leader}: {{per_million_hours: 900}}}}\n"
        f"indications: {{oil_pressure: {{scale: {{limits: {{hot_idle: {[*low, top + 1.5]}}}}}}}}}\n"
    )
    root = changed_root(
        tmp_path / "new",
        lambda root: edited(root / "circuits" / NAME / "circuit.yaml", VERSION, 'version: "7.7"'),
    )
    new = load_circuit(NAME, [overlay], root)
    changes = {(c.kind, c.name): c.text for c in carry_forward(events, old, new)}
    version = f"made on {NAME} {old.file.version}, carried forward to 7.7"
    assert changes["version", NAME] == version
    assert f"/{top + 1.5:g} psi" in changes["new limits", "oil_pressure@hot_idle"]
    assert changes["moved", leader].startswith("probability 0.")
    assert not [kind for kind, _ in changes if kind in ("gone", "refused")]
    assert carry_forward(events, old, old) == []


def last_standing(events: Sequence[AnyEvent]) -> Standing:
    return next(e.after for e in reversed(events) if e.after is not None)


def test_carrying_forward_names_what_the_new_circuit_lacks(short: Path) -> None:
    def without(name: str) -> Circuit:
        kept = {k: o for k, o in tiny().observables.items() if k != name}
        return replace(tiny(), observables=kept, content_hash="3" * 64)

    events = read_journal(short).events
    changes = carry_forward(events, None, without("strip"))
    assert {(c.kind, c.name) for c in changes} >= {("gone", "strip"), ("refused", "2")}
    fewer = support.circuit(
        [support.mode("pump", "worn", 0.02)],
        {"pressure": (("low", "normal"), "normal", {"low": 0.01}, {"pump.worn": {"low": 0.7}})},
        {"gauge": ("pressure", 0.97, 0.02), "strip": ("pressure", 0.95, 0.03)},
        unlisted=0.04,
    )
    gone = [c for c in carry_forward(events, tiny(), replace(fewer)) if c.kind == "gone"]
    assert [(c.name, c.text) for c in gone] == [
        ("valve.open", "the circuit no longer has this cause")
    ]
    limits = [c for c in carry_forward(events, tiny(), fewer) if c.kind == "new limits"]
    assert [c.name for c in limits] == ["strip"]
