"""What the commands print, on which stream, and what can be said in a session."""

from __future__ import annotations

import json
import re
import shlex
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from diag import cli
from diag.advice.steps import NOTICE
from diag.plain import HELP, choices, outcome_named
from diag.record.events import (
    Acknowledged,
    Closed,
    Doubted,
    Event,
    Found,
    HandedOver,
    Noted,
    NotPossible,
    Opened,
    Rectified,
    StateChanged,
    Withdrawn,
)
from tests import support
from tests.cli.running import (
    COMPLAINT,
    PUMP,
    ROOT,
    Diag,
    acknowledged,
    copied,
    environment,
    events,
    lines,
    loaded,
)

# -- the ranking as JSON --------------------------------------------------------------------

KEYS = {
    "circuit": str, "findings": list, "causes": list, "hypotheses": list, "unlisted": float,
    "coverage": float, "conflict_bits": float, "next": list, "notice": str,
}  # fmt: skip
"""Keys that scripts may rely on."""
MORE_KEYS = {"version": str, "nothing_found": float, "coverage_method": str}
CAUSE = {"component": str, "mode": str, "title": str, "probability": float}
HYPOTHESIS = {"faults": list, "probability": float}
STEP = {
    "step": str, "kind": str, "title": str, "minutes": float, "expected_minutes": float,
    "information_bits": float, "needs": list, "cautions": list, "reference": str,
}  # fmt: skip
OBSERVED = ["--observe", "oil_pressure@hot_idle=52psi", "--observe", "pressure_trend=drift"]


def check_types(data: dict[str, Any], wanted: dict[str, type]) -> None:
    for key, kind in wanted.items():
        accepted = (int, float) if kind is float else kind
        assert isinstance(data[key], accepted), key
        assert not isinstance(data[key], bool), key


def strict(text: str) -> Any:
    """JSON as the standard has it, without NaN and infinities (RFC 8259, 6)."""

    def refuse(word: str) -> None:
        raise AssertionError(word)

    return json.loads(text, parse_constant=refuse)


@pytest.fixture
def ranked(diag: Diag) -> dict[str, Any]:
    told = diag("rank", PUMP, *OBSERVED, "--json", "--count", "7")
    assert (told.code, told.err) == (0, "")
    return dict(strict(told.out))


def test_rank_has_the_keys_that_scripts_rely_on(ranked: dict[str, Any]) -> None:
    assert set(KEYS) | set(MORE_KEYS) <= set(ranked)
    check_types(ranked, {**KEYS, **MORE_KEYS})
    for cause in ranked["causes"]:
        assert set(cause) == set(CAUSE)
        check_types(cause, CAUSE)
    for hypothesis in ranked["hypotheses"]:
        assert set(hypothesis) == set(HYPOTHESIS)
        check_types(hypothesis, HYPOTHESIS)
    for step in ranked["next"]:
        assert set(STEP) | {"probability"} <= set(step)
        check_types(step, {**STEP, "probability": float})
        assert all(isinstance(line, str) for line in (*step["needs"], *step["cautions"]))
        assert step["reference"]
    assert ranked["notice"] == NOTICE
    assert ranked["circuit"] == "relief_valve_turboprop"
    assert ranked["findings"] == ["oil_pressure@hot_idle=52psi", "pressure_trend=drift"]


def test_probabilities_of_a_ranking(ranked: dict[str, Any]) -> None:
    chances = [c["probability"] for c in ranked["causes"]]
    assert len(chances) == 7
    assert chances == sorted(chances, reverse=True)
    assert all(0.0 <= p <= 1.0 for p in (*chances, ranked["unlisted"], ranked["nothing_found"]))
    # Hypotheses exclude each other, "nothing found" among them; the marginals need not.
    weights = [h["probability"] for h in ranked["hypotheses"]]
    assert sum(weights) <= 1.0 + 1e-9
    assert len({frozenset(h["faults"]) for h in ranked["hypotheses"]}) == len(weights)
    nothing = [h["probability"] for h in ranked["hypotheses"] if not h["faults"]]
    assert nothing == pytest.approx([ranked["nothing_found"]] * len(nothing))
    for hypothesis in ranked["hypotheses"]:
        for fault in hypothesis["faults"]:
            assert weights[0] <= max(*chances, ranked["unlisted"]) + 1e-9
            assert fault.count(".") == 1
    assert sum(chances) + ranked["unlisted"] + ranked["nothing_found"] <= 1.0 + 1.0
    assert 0.99 < ranked["coverage"] <= 1.0


def test_every_result_comes_as_json_with_the_notice(diag: Diag, tmp_path: Path) -> None:
    diag("isolate", PUMP, "--log", "a.jsonl", "--engine", "E-1", typed=lines("low", ""))
    (tmp_path / "b.jsonl").write_bytes(b"\x00\x01")
    for command in (
        ["circuit", "list"],
        ["circuit", "review", PUMP],
        ["log", "list", "."],
        ["log", "show", "a.jsonl"],
        ["rank", PUMP],
    ):
        told = diag(*command, "--json")
        assert (told.code, told.err) == (0, "")
        assert strict(told.out)["notice"] == NOTICE
    rows = strict(diag("log", "list", "--json").out)["logs"]
    assert [row["log"] for row in rows] == ["a.jsonl", "b.jsonl"]
    assert (rows[0]["engine"], rows[0]["state"]) == ("E-1", "open")
    assert "problem" in rows[1]
    told = diag("circuit", "review", ".", "--json")
    assert told.code == 1
    assert "circuit.yaml" in strict(told.out)["problems"][0]


def test_data_on_one_stream_and_narration_on_the_other(diag: Diag, tmp_path: Path) -> None:
    told = diag("isolate", PUMP, "--log", "case.jsonl", typed=lines(*COMPLAINT, "stop"))
    assert "diag: " not in told.out
    assert told.err.strip() == "diag: case open; `diag resume case.jsonl` carries on"
    told = diag("log", "show", "case.jsonl")
    assert told.err == ""
    assert told.out.splitlines()[-1] == NOTICE
    told = diag("rank", PUMP, "--observe", "nonsense")
    assert told.out == ""


def test_the_ranking_in_words(diag: Diag) -> None:
    told = diag("rank", PUMP, *OBSERVED, "--worked-on", "relief-valve", "--count", "3")
    assert told.code == 0
    assert told.out.count(" %  ") == 5
    assert "\nNext:\n" in told.out
    assert told.out.endswith(f"{NOTICE}\n")


# -- help -----------------------------------------------------------------------------------


def commands(command: Any, path: tuple[str, ...] = ()) -> Iterator[tuple[tuple[str, ...], Any]]:
    yield path, command
    for name, inner in getattr(command, "commands", {}).items():
        yield from commands(inner, (*path, name))


ALL = dict(commands(cli.commands()))


def test_the_commands_are_those_documented() -> None:
    leaves = {" ".join(path) for path, command in ALL.items() if not hasattr(command, "commands")}
    wanted = {"isolate", "resume", "rank", "log list", "log show", "circuit list", "circuit review"}
    assert wanted <= leaves


@pytest.mark.parametrize("path", ALL, ids=lambda path: " ".join(path) or "diag")
def test_help_names_every_option_and_gives_an_example(diag: Diag, path: tuple[str, ...]) -> None:
    told = diag(*path, "--help")
    assert (told.code, told.err) == (0, "")
    for parameter in ALL[path].params:
        assert getattr(parameter, "help", ""), parameter.name
        shown = parameter.metavar if parameter.param_type_name == "argument" else parameter.opts[0]
        assert shown in told.out
    for name in getattr(ALL[path], "commands", {}):
        assert re.search(rf"^  {name} ", told.out, re.MULTILINE)
    (example,) = re.findall(r"^ +(diag .*)$", told.out, re.MULTILINE)
    words = shlex.split(example)[1:]
    assert tuple(words[: len(path)]) == path
    assert parses(words)


def parses(words: list[str]) -> bool:
    """Whether the command line library takes the words, without running the command."""
    command = cli.commands()
    while hasattr(command, "commands"):
        command, words = command.commands[words[0]], words[1:]
    command.make_context("diag", words)
    return True


# -- a session ------------------------------------------------------------------------------

SAID: dict[str, list[str]] = {
    "can't [WHY]": ["can't no ladder here", "cannot", "can’t"],
    "undo": ["undo"],
    "why": ["why"],
    "why COMPONENT.MODE": ["why pressure_pump.worn"],
    "causes": ["causes"],
    "log": ["log"],
    "add NAME@POINT=VALUE": ["add pressure_trend=drift # TASK 79-1", "add spectrum", "add"],
    "doubt N TRUST": ["doubt 1 0.9", "doubt"],
    "state STATE": ["state hot stopped", "state"],
    "people near, people clear": ["people near", "people clear"],
    "open NAME, shut NAME": ["open cowl", "shut Cowl", "open"],
    "fixed by NAME": ["fixed by", "fixed by pressure-pump-replace # TASK 79-2", "S-OFF", "S-ON"],
    "note TEXT": ["note it rains"],
    "hand over to NAME": ["hand over to the night shift"],
    "taken over": ["taken over"],
    "save FILE": ["save copy.jsonl"],
    "close": ["close", "1", "pressure_pump.worn", "the run is planned for the morning"],
    "stop": [],
}
"""Every command of the session's help, with lines that use it, in the order of the help."""


def help_commands() -> list[str]:
    return [line[2:].split("   ")[0].strip() for line in HELP.splitlines() if line[:2] == "  "]


@pytest.fixture(scope="module")
def case(tmp_path_factory: pytest.TempPathFactory) -> tuple[str, Path]:
    """One case in which everything that the help lists is said."""
    folder = tmp_path_factory.mktemp("case")
    said = [line for typed in SAID.values() for line in typed]
    typed = lines(*COMPLAINT, "1 # TASK 79-0", "help", "?", "quite unknown", *said)
    told = copied(
        "isolate", PUMP, "--log", "case.jsonl", "--by", "A. Mechanic", typed=typed, cwd=folder
    )
    assert told.code == 0, told.out + told.err
    return told.out, folder


def test_every_command_of_the_help_is_tried() -> None:
    assert help_commands() == list(SAID)


def test_every_command_leaves_its_entry(case: tuple[str, Path]) -> None:
    kept = [e for e in events(case[1] / "case.jsonl") if e.event != "rule_fired"]
    kinds: list[type[Event]] = [
        Opened, Found, Found, NotPossible, NotPossible, NotPossible, Withdrawn, Found, Doubted,
        StateChanged, StateChanged, StateChanged, StateChanged, StateChanged, Rectified, Noted,
        HandedOver, Acknowledged, Closed,
    ]  # fmt: skip
    assert [type(e) for e in kept] == kinds
    assert {e.by for e in kept} == {"A. Mechanic"}
    first, second, third = (e for e in kept if isinstance(e, Found))
    assert (first.complaint, second.complaint, third.complaint) == (True, False, False)
    assert (second.reference, third.reference) == ("TASK 79-0", "TASK 79-1")
    (fixed,) = (e for e in kept if isinstance(e, Rectified))
    assert (fixed.part_off, fixed.part_on, fixed.reference) == ("S-OFF", "S-ON", "TASK 79-2")
    assert [e.reason for e in kept if isinstance(e, NotPossible)] == ["no ladder here", "", ""]
    closed = kept[-1]
    assert isinstance(closed, Closed)
    assert closed.causes == ("pressure_pump.worn",)
    assert closed.not_verified_because == "the run is planned for the morning"


def test_every_entry_is_acknowledged_once(case: tuple[str, Path]) -> None:
    told, folder = case
    kept = events(folder / "case.jsonl")
    assert acknowledged(told) == [e.number for e in kept if not isinstance(e, Withdrawn)]
    assert told.count("taken back: ") == 1


def test_the_copy_holds_the_case_up_to_there(case: tuple[str, Path]) -> None:
    copy, kept = events(case[1] / "copy.jsonl"), events(case[1] / "case.jsonl")
    assert copy == kept[: len(copy)]
    assert len(copy) == len(kept) - 1


def test_questions_are_answered(case: tuple[str, Path]) -> None:
    told = case[0]
    assert told.count(HELP) == 2
    assert "`help` lists what else can be said" in told
    assert re.search(
        r"^answer> why\n.*: expected to tell .* bits in .* min\n  instead: ", told, re.M
    )
    assert re.search(r"^  if .* \(.* %\): .*, .* %$", told, re.M)
    assert re.search(r"^answer> why pressure_pump.worn\n.*\n  together \+.* %$", told, re.M | re.S)
    assert re.search(r"^answer> causes\n +\S+ %  .* \(\w+\.\w+\)$", told, re.M)
    assert re.search(r"^answer> log\n +0  case opened on .*\n +1  reported oil_press", told, re.M)
    assert re.search(r"^  oil_spectrum   .*: .*raised", told, re.M)
    assert "write state STATE, one of " in told
    assert "write open NAME, one of cowl, " in told
    assert re.search(r"^ +\S+ %  pressure_pump_replace   ", told, re.M)
    assert "write doubt N TRUST" in told


def blocks(told: str) -> list[str]:
    """Each question, from the causes on, with the line typed before it."""
    return re.split(r"^answer> ", told, flags=re.MULTILINE)


def test_after_an_answer_everything_is_shown_again(case: tuple[str, Path]) -> None:
    (block,) = [b for b in blocks(case[0]) if b.startswith("1 # TASK 79-0")]
    assert re.search(r"^ +\S+ %  .*  \(was \S+ %\)$", block, re.M)
    wanted = [
        "a cause that this circuit does not list",
        "\nNext: ",
        " min\n  why: ",
        "\n  reference: approved maintenance data: record the task",
        "\n    1 ",
        "\n    or: ",
    ]
    places = [block.find(text) for text in wanted]
    assert -1 not in places
    assert places == sorted(places)


def test_after_a_rectification_the_proof_is_asked_with_needs_and_cautions(
    case: tuple[str, Path],
) -> None:
    (block,) = [b for b in blocks(case[0]) if "recorded" in b and "rectified: " in b]
    assert "\n  needs: engine running at idle" in block
    assert "\n  getting there and closing up: " in block
    assert "\n  CAUTION: Engine run: " in block


def test_a_remark_does_not_repeat_the_question(case: tuple[str, Path]) -> None:
    (block,) = [b for b in blocks(case[0]) if b.startswith("note it rains")]
    assert re.fullmatch(r"note it rains\n  recorded \d+: note: it rains\n", block)


def test_a_step_that_is_not_possible_shows_the_next_one_without_the_odds(
    case: tuple[str, Path],
) -> None:
    (block,) = [b for b in blocks(case[0]) if b.startswith("can't no ladder here")]
    assert "\nNext: " in block
    assert " %  " not in block


def test_the_task_of_the_overlay_is_shown(diag: Diag, tmp_path: Path) -> None:
    first = strict(diag("rank", PUMP, *OBSERVED[:2], "--json").out)["next"][0]
    name = first["step"].partition("@")[0]
    table = "indications" if first["kind"] == "indication" else "checks"
    (tmp_path / "site.yaml").write_text(
        f"overlay: our_site\nbasis: judgement\n{table}:\n  {name}:\n    reference: OUR-TASK-7\n"
    )
    told = diag(
        "isolate", PUMP, "--overlay", "site.yaml", "--log", "case.jsonl", typed=lines(*COMPLAINT)
    )
    assert told.code == 0, told.err
    assert "\n  reference: OUR-TASK-7\n" in told.out
    told = diag("resume", "case.jsonl", typed="stop\n")
    assert "with overlays our_site" in told.err


# -- answers in words -------------------------------------------------------------------------


def test_every_answer_shown_is_taken_by_number_and_by_word() -> None:
    for observable in loaded(PUMP).observables.values():
        shown = choices(observable).split("   or a reading in ")[0].split("   ")
        assert len(shown) == len(observable.outcomes)
        for choice, outcome in zip(shown, observable.outcomes, strict=True):
            number, _, word = choice.partition(" ")
            assert outcome_named(observable, number) == outcome
            assert outcome_named(observable, f" {word.upper()} ") == outcome
        assert outcome_named(observable, "0") == ""
        assert outcome_named(observable, "") == ""


def test_no_answer_word_is_lost_to_a_command(
    diag: Diag, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """A word that a question offers is its answer, whatever else it may mean."""
    door = support.circuit(
        modes=[support.mode("door", "bent", 0.3)],
        nodes={"door": (("open", "shut"), "shut", {}, {"door.bent": {"open": 0.9}})},
        checks={"glance": ("door", 0.6, 0.2), "look": ("door", 0.9, 0.05)},
    )
    monkeypatch.setattr(cli, "load_circuit", lambda *_: door)
    told = diag("isolate", "tiny", "--log", "case.jsonl", typed=lines("glance=open", "", "open"))
    assert told.code == 0
    found = [e for e in events(tmp_path / "case.jsonl") if isinstance(e, Found)]
    assert [(e.name, e.value) for e in found] == [("glance", "open"), ("look", "open")]


def test_a_reading_in_another_unit(diag: Diag, tmp_path: Path) -> None:
    typed = lines(
        "low",
        "",
        "Oil pressure @ hot idle = 3.6 bar",
        "oil-temperature@high-power=250degF",
        "oil_quantity@static=9.5l after 20 min # TASK 79-3",
    )
    told = diag("isolate", PUMP, "--log", "case.jsonl", typed=typed)
    assert told.code == 0
    values = [e.value for e in events(tmp_path / "case.jsonl") if isinstance(e, Found)]
    assert values == ["3.6 bar", "250degF", "9.5l"]
    taken = next(e for e in reversed(events(tmp_path / "case.jsonl")) if isinstance(e, Found))
    assert (taken.minutes_after_stop, taken.reference) == (20.0, "TASK 79-3")


# -- what is loaded, and when -----------------------------------------------------------------


def modules(code: str) -> set[str]:
    text = f"{code}; import sys; print(chr(10).join(sys.modules))"
    done = subprocess.run(
        [sys.executable, "-c", text],
        capture_output=True, text=True, env=environment(), cwd=ROOT, check=True,
    )  # fmt: skip
    return set(done.stdout.split())


def test_the_command_line_loads_nothing_heavy() -> None:
    heavy = {"textual", "rich", "pint", "scipy", "pgmpy", "pandas", "networkx", "jinja2", "joblib"}
    assert not heavy & modules("import diag.cli")


def test_a_ranking_in_the_unit_of_the_gauge_loads_no_unit_library() -> None:
    code = (
        "import sys; from diag.cli import run;"
        f"run(['rank', {PUMP!r}, '--observe', 'oil_pressure@hot_idle=52psi'])"
    )
    assert not {"textual", "pint", "scipy", "pgmpy", "pandas", "jinja2"} & modules(code)


def test_the_session_knows_no_screen_and_no_command_line() -> None:
    found = modules("import diag.session")
    roots = {name.partition(".")[0] for name in found}
    assert not {"typer", "click", "rich", "textual", "pexpect", "readline", "curses"} & roots
    assert not {name for name in found if re.match(r"diag\.(cli|plain|tui|study|__main__)", name)}
