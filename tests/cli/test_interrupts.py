"""Whatever ends a session, every finding that was acknowledged is in the log, and it goes on."""

from __future__ import annotations

import os
import resource
import subprocess
import sys
import time
from pathlib import Path

import pexpect
import pytest

from diag.record.events import Found, Noted
from diag.record.journal import Journal
from diag.session import Session, ranking
from tests.cli.running import (
    COMPLAINT,
    PUMP,
    Diag,
    Forked,
    acknowledged,
    copied,
    environment,
    events,
    lines,
    loaded,
    offered,
    terminal,
)
from tests.examples import EXAMPLES

TAKEN = [*COMPLAINT, "note the trend drifts"]
"""What is typed up to the second question; three entries."""
PROMPTS = {
    "complaint> ": COMPLAINT[:2],
    "answer> ": TAKEN,
    "part off, serial .*> ": [*TAKEN, "fixed by pressure_pump_replace"],
    "part on, serial .*> ": [*TAKEN, "fixed by pressure_pump_replace", "PP-0412"],
    "outcome, .*> ": [*TAKEN, "close"],
    "causes, by number .*> ": [*TAKEN, "close", "1"],
    "verified by finding .*> ": [*TAKEN, "close", "2"],
}
"""Every prompt of a session, and what is typed to get there."""


KEYS = {"Ctrl-C": "\x03", "Ctrl-D": "\x04"}
Child = pexpect.spawn | Forked


def reach(prompt: str, typed: list[str], *children: Child) -> None:
    """Types the lines in all the sessions, up to the prompt."""
    for line in typed:
        for child in children:
            child.expect("> ")
            child.sendline(line)
    for child in children:
        child.expect(prompt)


def left(child: Child) -> str:
    """Waits for a clean end and gives what was shown last."""
    child.expect(pexpect.EOF)
    child.close()
    assert (child.exitstatus, child.signalstatus) == (0, None)
    assert "Traceback" not in child.before
    return str(child.before)


@pytest.mark.parametrize("prompt", PROMPTS)
def test_leaving_at_every_prompt(prompt: str, tmp_path: Path, diag: Diag) -> None:
    # The circuit is read here, before the copies of this process are made.
    assert diag("circuit", "review", PUMP).code == 0
    children = {
        key: Forked("isolate", PUMP, "--plain", "--log", f"{key}.jsonl", cwd=tmp_path)
        for key in KEYS
    }
    reach(prompt, PROMPTS[prompt], *children.values())
    said = ["opened", "found"] if prompt.startswith("complaint") else ["opened", "found", "noted"]
    for key, child in children.items():
        child.send(KEYS[key])
        assert f"case open; `diag resume {key}.jsonl` carries on" in left(child)
        kept = events(tmp_path / f"{key}.jsonl")
        assert [e.event for e in kept] == said
    assert diag("resume", f"{key}.jsonl", typed="stop\n").code == 0
    assert events(tmp_path / f"{key}.jsonl") == kept


def test_leaving_a_whole_process(tmp_path: Path) -> None:
    child = terminal("isolate", PUMP, "--plain", "--log", "case.jsonl", cwd=tmp_path)
    reach("answer> ", TAKEN, child)
    child.send(KEYS["Ctrl-C"])
    assert "case open; `diag resume case.jsonl` carries on" in left(child)
    kept = events(tmp_path / "case.jsonl")
    assert len(kept) == 3
    child = terminal("resume", "case.jsonl", cwd=tmp_path)
    reach("answer> ", [], child)
    child.send(KEYS["Ctrl-D"])
    assert "carries on" in left(child)
    assert events(tmp_path / "case.jsonl") == kept


@pytest.mark.parametrize("key", KEYS)
def test_leaving_before_there_is_a_case(
    key: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    # Where nothing can be drawn, the same commands ask in plain lines.
    monkeypatch.setenv("TERM", "dumb")
    for arguments, prompt in ((), "circuit> "), (("isolate", PUMP), "complaint> "):
        child = Forked(*arguments, cwd=tmp_path)
        child.expect(prompt)
        child.send(KEYS[key])
        left(child)
        assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("typed", ["", "stop\n"])
def test_a_complaint_without_a_word_makes_no_log(diag: Diag, tmp_path: Path, typed: str) -> None:
    told = diag("isolate", PUMP, "--plain", "--log", "case.jsonl", typed=typed)
    assert (told.code, told.err.strip()) == (0, "diag: stopped; nothing was recorded")
    assert list(tmp_path.iterdir()) == []


def test_resume_goes_on_with_the_same_step_and_the_same_odds(diag: Diag, tmp_path: Path) -> None:
    typed = lines(*TAKEN, "open cowl", "can't no gauge here", "oil_seen=dry", "stop")
    begun = diag("isolate", PUMP, "--plain", "--log", "case.jsonl", typed=typed)
    resumed = diag("resume", "case.jsonl", typed="stop\n")
    assert offered(resumed.out)
    assert len(offered(resumed.out)) > 6
    whole = diag("isolate", PUMP, "--plain", "--log", "other.jsonl", typed=typed)
    assert offered(whole.out) == offered(begun.out)
    # The last question before leaving is the first one after coming back.
    assert offered(resumed.out)[-5:] == offered(begun.out)[-5:]


def test_a_log_replays_to_the_same_ranking(diag: Diag, tmp_path: Path) -> None:
    case = next(example for example in EXAMPLES if example.name == "pump_wear")
    half = case.lines[:4]
    diag("isolate", case.circuit, "--plain", "--log", "case.jsonl", typed=lines(*half))
    circuit = loaded(case.circuit)
    kept = events(tmp_path / "case.jsonl")
    one, other = (Session.replay(circuit, kept) for _ in range(2))
    standing = next(e.after for e in reversed(kept) if e.after)
    assert ranking(one.assessment) == ranking(other.assessment)
    assert one.assessment.standing.causes == standing.causes
    rest = ["", *case.lines[8:9]]
    assert diag("resume", "case.jsonl", typed=lines(*rest)).code == 0
    diag("isolate", case.circuit, "--log", "straight.jsonl", typed=lines(*half, *rest))
    assert (
        events(tmp_path / "case.jsonl")[-1].after == events(tmp_path / "straight.jsonl")[-1].after
    )


# -- killed ------------------------------------------------------------------------------


def test_killed_in_the_middle(tmp_path: Path) -> None:
    """Many remarks are poured in; wherever the kill falls, none that was shown is missing."""
    child = subprocess.Popen(
        [sys.executable, "-m", "diag", "isolate", PUMP, "--plain", "--log", "case.jsonl"],
        cwd=tmp_path,
        env=environment(),
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )
    assert child.stdin is not None
    assert child.stdout is not None
    child.stdin.write(lines(*COMPLAINT, *(f"note {n}" for n in range(3000))))
    child.stdin.flush()
    shown = [child.stdout.readline()]
    while "recorded 4" not in shown[-1]:
        shown.append(child.stdout.readline())
    time.sleep(0.1)
    child.kill()
    shown.append(child.stdout.read())
    child.wait()
    child.stdin.close()
    child.stdout.close()
    seen = acknowledged("".join(shown))
    with Journal.open(tmp_path / "case.jsonl") as journal:
        assert [e.number for e in journal.events][: len(seen)] == seen
        assert len(seen) <= len(journal.events) < 3000


def test_a_last_line_half_written_is_told_and_set_aside(diag: Diag, tmp_path: Path) -> None:
    log = tmp_path / "case.jsonl"
    diag("isolate", PUMP, "--log", "case.jsonl", typed=lines(*TAKEN))
    whole = log.read_bytes()
    log.write_bytes(whole + b'{"at":"2026-03-01T03:0')
    told = diag("resume", "case.jsonl", typed="add oil_seen=dry\nstop\n")
    assert told.code == 0
    assert "was not written whole (22 bytes); it does not count" in told.err
    assert log.read_bytes().startswith(whole)
    assert [e.value for e in events(log) if isinstance(e, Found)] == ["52psi", "dry"]
    (side,) = tmp_path.glob("case.jsonl.torn-*")
    assert side.read_bytes() == b'{"at":"2026-03-01T03:0'


# -- the reader has gone -----------------------------------------------------------------


def run_with_output(out: int, *arguments: str, typed: str, cwd: Path) -> tuple[int, str]:
    done = subprocess.run(
        [sys.executable, "-m", "diag", *arguments],
        input=typed.encode(),
        stdout=out,
        stderr=subprocess.PIPE,
        cwd=cwd,
        env=environment(),
        timeout=60,
    )
    return done.returncode, done.stderr.decode()


def test_a_pipe_closed_at_once(tmp_path: Path) -> None:
    reader, writer = os.pipe()
    os.close(reader)
    assert run_with_output(writer, "rank", PUMP, "--json", typed="", cwd=tmp_path) == (0, "")
    os.close(writer)


READERS_THAT_GO = {
    "rank, one line read": '"$0" -m diag rank "$1" --json | head -1; echo "ended ${PIPESTATUS[0]}"',
    "isolate, six lines read": (
        '"$0" -m diag isolate "$1" --log case.jsonl | head -6; echo "ended ${PIPESTATUS[0]}"'
    ),
    "rank, no output": '"$0" -m diag rank "$1" --json >&-; echo "ended $?"',
    "isolate, no input": '"$0" -m diag isolate "$1" --log none.jsonl <&-; echo "ended $?"',
}


def test_streams_that_close(tmp_path: Path) -> None:
    shells = {
        name: subprocess.Popen(
            ["bash", "-c", script, sys.executable, PUMP],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
            cwd=tmp_path,
            env=environment(),
        )
        for name, script in READERS_THAT_GO.items()
    }
    typed = lines(*TAKEN, *(f"note {n}" for n in range(300)))
    told = {name: shell.communicate(typed, timeout=60) for name, shell in shells.items()}
    for name, (out, err) in told.items():
        assert out.endswith("ended 0\n"), name
        assert "Traceback" not in err, name
        assert "Exception ignored" not in err, name
    assert told["rank, one line read"] == ("{\nended 0\n", "")
    assert "carries on" in told["isolate, six lines read"][1]
    assert len(events(tmp_path / "case.jsonl")) >= 2
    assert told["isolate, no input"][1].strip() == "diag: stopped; nothing was recorded"


@pytest.mark.parametrize("command", [["rank", PUMP, "--json"], ["isolate", PUMP]])
def test_output_to_a_full_disk(command: list[str], tmp_path: Path) -> None:
    full = Path("/dev/full")
    if not full.exists():
        pytest.fail("this test needs the device /dev/full")
    with full.open("w") as out:
        code, err = run_with_output(out.fileno(), *command, typed=lines(*TAKEN), cwd=tmp_path)
    assert code == 3
    assert "the output cannot be written: No space left on device" in err
    assert "Traceback" not in err
    assert "Exception ignored" not in err


# -- the disk takes no more --------------------------------------------------------------


def limited(size: int) -> None:
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, resource.RLIM_INFINITY))


def test_a_disk_that_fills_up_and_is_cleared(tmp_path: Path) -> None:
    """The finding stays in memory, is said not to be on disk, and goes out once there is room."""
    log = tmp_path / "case.jsonl"
    child = Forked("isolate", PUMP, "--plain", "--log", log.name, cwd=tmp_path)
    reach("answer> ", COMPLAINT, child)
    size = log.stat().st_size
    resource.prlimit(child.pid, resource.RLIMIT_FSIZE, (size + 100, resource.RLIM_INFINITY))
    child.sendline("add pressure_trend=drift")
    child.expect("NOT ON DISK, kept in memory: .*the file may not grow any further")
    child.expect("save FILE")
    child.expect("answer> ")
    assert log.stat().st_size == size
    child.sendline("stop")
    child.expect("not taken: entries in memory only: 1; `save FILE` first")
    unlimited = (resource.RLIM_INFINITY, resource.RLIM_INFINITY)
    resource.prlimit(child.pid, resource.RLIMIT_FSIZE, unlimited)
    child.sendline("note there is room again")
    child.expect("the whole case is on disk now, in case.jsonl")
    child.sendline("stop")
    left(child)
    assert [type(e) for e in events(log)][-2:] == [Found, Noted]


def test_a_disk_that_stays_full_is_said_to_lose_the_rest(tmp_path: Path) -> None:
    typed = lines(*COMPLAINT, *(f"note {n} {'x' * 300}" for n in range(9)))
    told = copied(
        "isolate", PUMP, "--log", "case.jsonl",
        typed=typed, cwd=tmp_path, before=lambda: limited(3000),
    )  # fmt: skip
    assert told.code == 3
    kept = len(events(tmp_path / "case.jsonl"))
    assert 2 < kept < 11
    assert f"entries that could not be written and are lost: {11 - kept}" in told.err
    assert told.out.count("NOT ON DISK") == 11 - kept
    assert "Traceback" not in told.out + told.err


def test_a_log_that_cannot_even_begin_is_kept_until_it_is_saved(diag: Diag, tmp_path: Path) -> None:
    """The folder may be written in when the session begins, and be gone after the complaint."""
    log = tmp_path / "case.jsonl"
    told = copied(
        "isolate", PUMP, "--log", "case.jsonl",
        typed=lines(*COMPLAINT), cwd=tmp_path, before=lambda: limited(100),
    )  # fmt: skip
    assert told.code == 3
    assert "NOT ON DISK" in told.out
    assert told.err.splitlines()[-1] == "diag: the case could not be written down; it is lost"
    assert not log.exists()


class Script:
    """Standard input whose lines may do something just before they are read."""

    def __init__(self, *typed: object) -> None:
        self.typed = list(typed)

    def readline(self) -> str:
        while self.typed and callable(self.typed[0]):
            self.typed.pop(0)()  # type: ignore[operator]
        return f"{self.typed.pop(0)}\n" if self.typed else ""

    def isatty(self) -> bool:
        return False


def run_script(*typed: object, log: str, monkeypatch: pytest.MonkeyPatch) -> int:
    from diag import cli

    monkeypatch.setattr(sys, "stdin", Script(*typed))
    return cli.run(["isolate", PUMP, "--log", log])


def test_save_moves_a_case_whose_folder_has_gone(
    diag: Diag, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    away = tmp_path / "stick"
    away.mkdir()
    diag("circuit", "list")  # the folder and the circuits of this test are in place
    code = run_script(
        *TAKEN,
        lambda: away.rename(tmp_path / "pulled"),
        "add oil_seen=dry",
        "save new.jsonl",
        "note after the move",
        "stop",
        log="stick/case.jsonl",
        monkeypatch=monkeypatch,
    )
    told = capsys.readouterr()
    assert code == 0
    assert "NOT ON DISK, kept in memory" in told.out
    assert "the whole case is saved in new.jsonl" in told.out
    assert "`diag resume new.jsonl` carries on" in told.err
    kept = events(tmp_path / "new.jsonl")
    assert [e.value for e in kept if isinstance(e, Found)] == ["52psi", "dry"]
    assert isinstance(kept[-1], Noted)
    assert len(events(tmp_path / "pulled" / "case.jsonl")) == 3


def test_a_log_that_never_began_is_begun_by_save(
    diag: Diag, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    away = tmp_path / "stick"
    away.mkdir()
    diag("circuit", "list")

    def pull() -> None:
        away.rename(tmp_path / "pulled")
        away.write_text("a file in the place of the folder")

    typed = (*COMPLAINT[:2], pull, "", "add oil_seen=dry", "save new.jsonl", "note more", "stop")
    code = run_script(*typed, log="stick/case.jsonl", monkeypatch=monkeypatch)
    assert code == 0
    assert capsys.readouterr().out.count("NOT ON DISK") == 3
    kept = events(tmp_path / "new.jsonl")
    assert [e.value for e in kept if isinstance(e, Found)] == ["52psi", "dry"]
    assert [e.number for e in kept] == list(range(len(kept)))


def test_a_closed_case_is_not_left_before_it_is_on_disk(
    diag: Diag, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    away = tmp_path / "stick"
    away.mkdir()
    diag("circuit", "list")
    code = run_script(
        *TAKEN,
        lambda: away.rename(tmp_path / "pulled"),
        "close",
        "2",
        "run planned for tomorrow",
        "",
        "closed.jsonl",
        log="stick/case.jsonl",
        monkeypatch=monkeypatch,
    )
    assert code == 0
    assert "case closed; findings log closed.jsonl" in capsys.readouterr().err
    assert events(tmp_path / "closed.jsonl")[-1].event == "closed"
