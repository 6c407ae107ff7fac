"""Bad input gives one line that helps, the right exit code, and never a traceback."""

from __future__ import annotations

import ctypes
import os
import subprocess
import sys
from datetime import UTC, datetime
from pathlib import Path

import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from diag import cli
from diag.circuit.model import Circuit
from diag.record.events import Found, Noted, Opened
from diag.record.journal import Journal
from tests import support
from tests.cli.running import (
    COMPLAINT,
    PUMP,
    Diag,
    copied,
    environment,
    events,
    lines,
    loaded,
    process,
)

NOW = datetime(2026, 3, 1, 3, 0, tzinfo=UTC)


def opened(**changes: object) -> Opened:
    circuit = loaded(PUMP)
    head = Opened(
        at=NOW, circuit=circuit.id, version=circuit.file.version, content_hash=circuit.content_hash
    )
    return head.model_copy(update=changes)


def written(path: Path, *more: object, **changes: object) -> Path:
    """A log with its head and some more events."""
    with Journal.create(path, opened(**changes)) as journal:
        for event in more:
            journal.append(event)  # type: ignore[arg-type]
    return path


# -- commands and findings ---------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "code", "words"),
    [
        (["rank", "relief-valve-turbprop"], 2, "nearest: relief_valve_turboprop"),
        (["rank", "nowhere"], 2, "unknown circuit 'nowhere'"),
        (["isolate", "nowhere"], 2, "unknown circuit"),
        (["circuit", "review", "nowhere"], 2, "unknown circuit"),
        (["rank", "x" * 5000], 2, "unknown circuit"),
        (["rank", PUMP, "--observe", "oil_presure@hot_idle=52psi"], 2, "oil_pressure@hot_idle"),
        (["rank", PUMP, "--observe", "oil_pressure=52psi"], 2, "nearest: oil_pressure@"),
        (["rank", PUMP, "--observe", "oil_pressure@hot_idle=5000psi"], 2, "0 to 250 psi"),
        (["rank", PUMP, "--observe", "oil_pressure@hot_idle=-1psi"], 2, "0 to 250 psi"),
        (["rank", PUMP, "--observe", "oil_pressure@hot_idle=52degC"], 2, "not a unit of this"),
        (["rank", PUMP, "--observe", "oil_pressure@hot_idle=52"], 2, "for example 52psi"),
        (["rank", PUMP, "--observe", "oil_pressure@hot_idle=funny"], 2, "it takes very_low, low"),
        (["rank", PUMP, "--observe", "chip_warning"], 2, "write NAME@POINT=VALUE"),
        (["isolate", PUMP, "--observe", "oil_presure@hot_idle=1psi"], 2, "oil_pressure@hot_idle"),
        (["rank", PUMP, "--worked-on", "relief_valv"], 2, "nearest: relief_valve"),
        (["isolate", PUMP, "--worked-on", "relief_valv"], 2, "nearest: relief_valve"),
        (["rank", PUMP, "--count", "0"], 2, "--count"),
        (["rank", PUMP, "--count", "many"], 2, "--count"),
        (["rank", PUMP, "--nope"], 2, "--nope"),
        (["rank", PUMP, "more"], 2, "more"),
        (["rank"], 2, "CIRCUIT"),
        (["rnk", PUMP], 2, "rank"),
        (["log"], 2, "Missing command"),
        (["isolate", PUMP, "--by", "a\x1b[31mb"], 2, "printable"),
        (["isolate", PUMP, "--engine", "x" * 5000], 2, "at most 200"),
        (["log", "list", "nowhere"], 3, "not a folder"),
        (["log", "show", "nowhere.jsonl"], 3, "no such file"),
        (["resume", "nowhere.jsonl"], 3, "no such file"),
        (["log", "show", "."], 3, "it is a folder"),
        (["resume", "."], 3, "it is a folder"),
        (["resume", "x" * 5000], 3, "name is too long"),
        (["isolate", PUMP, "--log", "x" * 300], 3, "File name too long"),
        (["isolate", PUMP, "--log", os.devnull], 3, "exists already"),
        (["resume", os.devnull], 3, "not a file that can hold a log"),
    ],
)
def test_one_line_and_the_exit_code(
    diag: Diag, arguments: list[str], code: int, words: str
) -> None:
    told = diag(*arguments)
    assert told.code == code
    assert told.out == ""
    assert told.line.startswith("diag: ")
    assert words in told.line


def test_unusable_overlay_and_circuit_say_where(diag: Diag, tmp_path: Path) -> None:
    (tmp_path / "site.yaml").write_text("overlay: site\nfrobs: 1\n")
    told = diag("rank", PUMP, "--overlay", "site.yaml")
    assert told.code == 3
    assert "site.yaml:" in told.err
    assert "Traceback" not in told.err
    told = diag("circuit", "review", ".")
    assert told.code == 1
    assert "circuit.yaml:1:1: cannot be read" in told.out


def test_an_unexpected_fault_is_one_line_too(diag: Diag, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(*_: object) -> None:
        raise ZeroDivisionError("by design of this test")

    monkeypatch.setattr(cli, "ranking", broken)
    told = diag("rank", PUMP)
    assert told.code == 4
    assert "internal fault: ZeroDivisionError: by design of this test" in told.line


def certain_circuit() -> Circuit:
    """Two causes, two checks that never err: some findings cannot be true together."""
    return support.circuit(
        modes=[support.mode("pump", "worn", 0.1), support.mode("gauge", "stuck", 0.1)],
        nodes={
            "pressure": (("low", "normal"), "normal", {}, {"pump.worn": {"low": 1.0}}),
            "flow": (("low", "normal"), "normal", {}, {"pump.worn": {"low": 1.0}}),
        },
        checks={"see_pressure": ("pressure", 1.0, 0.0), "see_flow": ("flow", 1.0, 0.0)},
    )


def test_findings_that_contradict_each_other(
    diag: Diag, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    monkeypatch.setattr(cli, "load_circuit", lambda *_: certain_circuit())
    told = diag("rank", "tiny", "--observe", "see_pressure=low", "--observe", "see_flow=normal")
    assert told.code == 3
    assert told.line.startswith("diag: ")
    told = diag(
        "isolate", "tiny", "--log", "case.jsonl",
        typed=lines("see_pressure=low", "see_flow=normal", "", "note still here", "stop"),
    )  # fmt: skip
    assert told.code == 0
    assert "not taken: " in told.out
    kept = events(tmp_path / "case.jsonl")
    assert [e.name for e in kept if isinstance(e, Found)] == ["see_pressure"]
    assert isinstance(kept[-1], Noted)


ODD = [
    "", " ", "-", "--", "--observe", "--json", "--log", "case.jsonl", "--plain", "--overlay",
    "--count", "rank", "isolate", "resume", "log", "show", "list", "circuit", "review", "-1",
    "999999999999999999999", "oil_pressure@hot_idle=52psi", "a=b", "=", "@=", "oil_seen=dry#",
    "\x00", "\x1b[2J", "²", "💧", "\udcff", "../..", "/", "~", "*", "%s", "{}", "relief_valve",
    PUMP, "full_flow_turbofan", "--help", "--by", "--engine", "--worked-on", "x" * 1000,
]  # fmt: skip


@settings(max_examples=100, suppress_health_check=[HealthCheck.function_scoped_fixture])
@example(arguments=["rank", PUMP, "--observe", "oil_pressure@hot_idle=9e9999psi"], typed="")
@example(arguments=["log", "show", "\x00"], typed="")
@example(arguments=["isolate", PUMP, "--log", "a\x00b"], typed="")
@given(
    arguments=st.lists(st.one_of(st.sampled_from(ODD), st.text(max_size=12)), max_size=5),
    typed=st.sampled_from(["", "\n", "1\n", "\x1b[A\n", "²\n"]),
)
def test_odd_arguments_never_show_a_traceback(diag: Diag, arguments: list[str], typed: str) -> None:
    told = diag(*arguments, typed=typed)
    assert told.code in (0, 1, 2, 3), told.err
    assert "Traceback" not in told.out + told.err


ODD_ANSWERS = [
    "²", "1" * 4000, "x" * 9999, "=", "@=", "a=b", "a@b=c", "e1", "\x1b[A", "\x00", "-", "%s", "{}",
    "doubt", "doubt ² 1", "doubt 1 nan", "doubt 1 inf", "doubt 1 0", "doubt -1 1", "doubt 99 1",
    f"doubt {'9' * 3000} 1", "add", "add =", "add zzz", "add oil_seen=", "add oil_seen=damp",
    "oil_seen=dry after 999999 h", "low after 1e9 h", "1 after 5 min", "oil_quantity@static=5",
    "undo", "save", "save .", "save /", "save \x00", f"save {'x' * 300}", "state x", "state any",
    "people", "people x", "open", "open x", "shut x", "fixed", "fixed by", "fixed by x", "note",
    "note " + "x" * 3990, "hand over", "hand over to", "taken over", "can't", "why x", "why x.y",
    "why unlisted.present", "why nothing_found", "why", "causes", "log", "help", "?", "quitt",
]  # fmt: skip


def survived(diag: Diag, log: Path, answers: list[str]) -> str:
    log.unlink(missing_ok=True)
    told = diag("isolate", PUMP, "--log", log.name, typed=lines("low", "", *answers))
    assert told.code == 0, told.err
    assert "Traceback" not in told.out + told.err
    assert "validation error" not in told.out
    assert events(log)[0].event == "opened"
    return told.out


def test_every_odd_answer_in_one_session(diag: Diag, tmp_path: Path) -> None:
    out = survived(diag, tmp_path / "case.jsonl", ODD_ANSWERS)
    assert out.count("\nanswer> ") == len(ODD_ANSWERS) + 1
    assert out.count("not taken: ") > len(ODD_ANSWERS) / 2


@settings(max_examples=12, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    answers=st.lists(
        st.one_of(st.sampled_from([*ODD_ANSWERS, "close", "1", "2"]), st.text(max_size=8)),
        max_size=4,
    )
)
def test_odd_answers_never_end_a_session(diag: Diag, tmp_path: Path, answers: list[str]) -> None:
    survived(diag, tmp_path / "case.jsonl", answers)


# -- what is typed ------------------------------------------------------------------------


def test_typed_keys_and_control_characters_stay_out_of_the_record(
    diag: Diag, tmp_path: Path
) -> None:
    note = "note a\x1b[31mb\x1b[A\x07\x00c\x1bOPd\te\x9b1mf\u202eg\u2028h"
    told = diag("isolate", PUMP, "--log", "case.jsonl", typed=lines("low", "", note))
    assert told.code == 0
    (noted,) = [e for e in events(tmp_path / "case.jsonl") if isinstance(e, Noted)]
    assert noted.text == "abcd e1mfg h"
    assert noted.text.isprintable()


def test_bytes_that_are_no_text_are_replaced(tmp_path: Path) -> None:
    typed = b"low\n\nnote \xff\xfe\n\xc3\x28\n"
    told = copied("isolate", PUMP, "--log", "case.jsonl", typed=typed, cwd=tmp_path)
    assert told.code == 0, told.err
    (noted,) = [e for e in events(tmp_path / "case.jsonl") if isinstance(e, Noted)]
    assert noted.text == "\ufffd\ufffd"


def test_a_terminal_without_the_letters_still_shows_the_rest(tmp_path: Path) -> None:
    done = subprocess.run(
        [sys.executable, "-m", "diag", "isolate", PUMP, "--log", "case.jsonl"],
        input="low\n\nnote 30 °C — warm\n".encode(),
        capture_output=True,
        cwd=tmp_path,
        env={**environment(), "PYTHONIOENCODING": "ascii", "PYTHONUTF8": "0"},
        timeout=60,
    )
    assert done.returncode == 0, done.stderr
    assert b"Traceback" not in done.stdout + done.stderr


# -- logs ---------------------------------------------------------------------------------


def test_a_log_that_exists_is_not_written_to(diag: Diag, tmp_path: Path) -> None:
    log = written(tmp_path / "case.jsonl")
    before = log.read_bytes()
    told = diag("isolate", PUMP, "--log", "case.jsonl", typed=lines(*COMPLAINT))
    assert told.code == 3
    assert told.out == ""
    assert told.line == "diag: case.jsonl exists already; `diag resume` carries on with a log"
    assert log.read_bytes() == before


def test_a_save_over_a_file_is_refused(diag: Diag, tmp_path: Path) -> None:
    (tmp_path / "other").write_text("mine")
    typed = lines("low", "", "save other", "save .", "save none/../case.jsonl")
    told = diag("isolate", PUMP, "--log", "case.jsonl", typed=typed)
    assert told.code == 0
    assert told.out.count("not taken: ") == 3
    assert (tmp_path / "other").read_text() == "mine"


@pytest.mark.parametrize(
    "content",
    [b"", b"\x7fELF\x00\x01" * 4000, b"\xff\n" * 4000, b"not json\n", b"{}\n", b"\xff"],
    ids=["empty", "binary", "many lines", "text", "no event", "one byte"],
)
def test_a_file_that_is_no_log(diag: Diag, tmp_path: Path, content: bytes) -> None:
    log = tmp_path / "case.jsonl"
    log.write_bytes(content)
    assert diag("log", "show", "case.jsonl").code == 3
    assert "is no findings log" in diag("log", "show", "case.jsonl").line
    told = diag("resume", "case.jsonl")
    assert told.code == 3
    assert "cannot be carried on" in told.err
    assert len(told.err.splitlines()) <= cli.MAX_TOLD + 2
    assert log.read_bytes() == content
    listed = diag("log", "list", ".")
    assert listed.code == 0
    assert listed.out.startswith("case.jsonl  unreadable: ")


def test_an_altered_log_is_shown_with_its_problem_and_not_carried_on(
    diag: Diag, tmp_path: Path
) -> None:
    log = written(tmp_path / "case.jsonl", Noted(at=NOW, text="wet"), Noted(at=NOW, text="dry"))
    log.write_bytes(log.read_bytes().replace(b'"wet"', b'"dry"'))
    told = diag("log", "show", "case.jsonl")
    assert told.code == 1
    assert "case.jsonl:2:1: the line was altered at hash" in told.err
    assert "note: dry" in told.out
    assert diag("resume", "case.jsonl").code == 3


def test_a_log_of_a_circuit_that_is_not_here(diag: Diag, tmp_path: Path) -> None:
    written(tmp_path / "case.jsonl", circuit="relief_valve_turboprob")
    told = diag("resume", "case.jsonl")
    assert told.code == 3
    assert "nearest: relief_valve_turboprop; name its folder with --circuit" in told.line
    assert diag("log", "show", "case.jsonl").code == 0
    told = diag("resume", "case.jsonl", "--circuit", PUMP)
    assert told.code == 2
    assert "the case is on relief_valve_turboprob, not on relief_valve_turboprop" in told.line


def test_a_log_of_a_changed_circuit_is_carried_on_with_a_word(diag: Diag, tmp_path: Path) -> None:
    written(tmp_path / "case.jsonl", content_hash="0" * 64, version="0.9", overlays=("north",))
    told = diag("resume", "case.jsonl", typed="stop\n")
    assert told.code == 0
    assert "not as it was when this log was begun (version 0.9, with overlays north)" in told.err
    assert "\nNext: " in told.out


def test_a_log_that_does_not_fit_the_present_circuit(diag: Diag, tmp_path: Path) -> None:
    written(tmp_path / "case.jsonl", Found(at=NOW, name="oil_presure", value="low"))
    told = diag("resume", "case.jsonl")
    assert told.code == 3
    assert "does not fit the present circuit: unknown finding 'oil_presure'" in told.line


def test_a_closed_case_stays_closed(diag: Diag, tmp_path: Path) -> None:
    typed = lines("low", "", "close", "2", "weather")
    assert diag("isolate", PUMP, "--log", "case.jsonl", typed=typed).code == 0
    before = (tmp_path / "case.jsonl").read_bytes()
    told = diag("resume", "case.jsonl")
    assert told.code == 2
    assert told.line.endswith("case.jsonl: the case is closed; `diag log show` reads it")
    assert (tmp_path / "case.jsonl").read_bytes() == before


def test_a_log_is_open_in_one_session_at_a_time(diag: Diag, tmp_path: Path) -> None:
    log = written(tmp_path / "case.jsonl")
    with Journal.open(log):
        told = diag("resume", "case.jsonl")
    assert told.code == 3
    assert "is open in another session" in told.line


# -- places that take no file ---------------------------------------------------------------


def bound_by_permissions() -> None:
    """Even the superuser: drops the capabilities that let it write everywhere."""
    if os.geteuid() == 0:
        for capability in (1, 2):  # CAP_DAC_OVERRIDE, CAP_DAC_READ_SEARCH
            ctypes.CDLL(None).prctl(24, capability, 0, 0, 0)  # PR_CAPBSET_DROP


def test_a_folder_and_a_log_that_are_read_only(tmp_path: Path) -> None:
    log = written(tmp_path / "case.jsonl")
    log.chmod(0o444)
    tmp_path.chmod(0o555)
    try:
        told = process(
            "isolate", PUMP, "--log", "new.jsonl",
            typed=lines(*COMPLAINT), cwd=tmp_path, preexec_fn=bound_by_permissions,
        )  # fmt: skip
        assert (told.code, told.out) == (3, "")
        assert "the log new.jsonl cannot be begun: no file can be made in" in told.line
        told = process("resume", "case.jsonl", cwd=tmp_path, preexec_fn=bound_by_permissions)
        assert told.code == 3
        assert "cannot be opened for writing: no permission" in told.line
    finally:
        tmp_path.chmod(0o755)


def test_a_log_inside_a_file(diag: Diag, tmp_path: Path) -> None:
    (tmp_path / "plain").write_text("")
    told = diag("isolate", PUMP, "--log", "plain/case.jsonl", typed=lines(*COMPLAINT))
    assert (told.code, told.out) == (3, "")
    assert "plain is not a folder" in told.line


def test_missing_folders_are_made(diag: Diag, tmp_path: Path) -> None:
    told = diag("isolate", PUMP, "--log", "a/b/case.jsonl", typed=lines("low", ""))
    assert told.code == 0
    assert len(events(tmp_path / "a" / "b" / "case.jsonl")) == 1


# -- an interrupt outside a session ----------------------------------------------------------


def test_ctrl_c_outside_a_session_shows_no_traceback(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    import diag.__main__ as entry

    def interrupted(*_: object) -> Circuit:
        raise KeyboardInterrupt

    monkeypatch.setattr(cli, "load_circuit", interrupted)
    monkeypatch.setattr(cli, "_ready_streams", lambda: None)
    monkeypatch.setattr(sys, "argv", ["diag", "rank", PUMP])
    with pytest.raises(SystemExit) as left:
        entry.main()
    assert left.value.code == 130
    assert "Traceback" not in capsys.readouterr().err
