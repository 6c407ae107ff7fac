"""The command as a process, in a terminal, and within the test's own process."""

from __future__ import annotations

import os
import pty
import re
import subprocess
import sys
import termios
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from tempfile import TemporaryFile
from typing import Any, NoReturn

import pexpect
from pexpect.fdpexpect import fdspawn

from diag import cli
from diag.circuit.loading import circuit_names, load_circuit
from diag.circuit.model import Circuit
from diag.record.events import AnyEvent
from diag.record.journal import read_journal

ROOT = Path(__file__).resolve().parents[2]
PUMP = "relief-valve-turboprop"
SHIPPED = circuit_names()
COMPLAINT = ["Oil pressure low at hot idle", "oil_pressure@hot_idle=52psi", ""]
"""What is typed up to the first question; three events."""
ACKNOWLEDGED = re.compile(r"^  recorded (\d+): ", re.MULTILINE)

NOT_INHERITED = ("PYTHONUNBUFFERED", "PYTHONDONTWRITEBYTECODE")


def environment() -> dict[str, str]:
    """As a shell would give it, with this checkout in front."""
    kept = {k: v for k, v in os.environ.items() if k not in NOT_INHERITED}
    return {**kept, "PYTHONPATH": str(ROOT)}


@dataclass(frozen=True)
class Told:
    """What a command answered."""

    code: int
    out: str
    err: str

    @property
    def line(self) -> str:
        """The one line on stderr."""
        assert "Traceback" not in self.out + self.err
        (only,) = self.err.splitlines()
        return only


Diag = Callable[..., Told]
Action = Callable[[], object] | None


def process(*arguments: str, typed: str = "", cwd: Path, **more: Any) -> Told:
    """Runs the real command."""
    done = subprocess.run(
        [sys.executable, "-m", "diag", *arguments],
        input=typed,
        capture_output=True,
        text=True,
        cwd=cwd,
        env=environment(),
        timeout=60,
        **more,
    )
    return Told(done.returncode, done.stdout, done.stderr)


def terminal(*arguments: str, cwd: Path, **more: Any) -> pexpect.spawn[str]:
    """The real command in a pseudo-terminal."""
    return pexpect.spawn(
        sys.executable,
        ["-m", "diag", *arguments],
        cwd=str(cwd),
        env=environment(),
        encoding="utf-8",
        timeout=60,
        echo=False,
        **more,
    )


def copied(*arguments: str, typed: str | bytes = "", cwd: Path, before: Action = None) -> Told:
    """The command in a copy of this process, with streams of its own.

    It skips the start of Python and the reading of the circuit, nothing else. `before` runs in
    the copy, before the command.
    """
    raw = typed if isinstance(typed, bytes) else typed.encode()
    with TemporaryFile() as given:
        given.write(raw)
        given.seek(0)
        out, err = os.pipe(), os.pipe()
        if (pid := os.fork()) == 0:
            for handle, place in ((given.fileno(), 0), (out[1], 1), (err[1], 2)):
                os.dup2(handle, place)
            for handle in (*out, *err):
                os.close(handle)
            _be_the_command(arguments, cwd, before)
    os.close(out[1])
    os.close(err[1])
    with open(out[0], encoding="utf-8") as shown, open(err[0], encoding="utf-8") as told:
        texts = shown.read(), told.read()
    _, status = os.waitpid(pid, 0)
    return Told(os.waitstatus_to_exitcode(status), *texts)


class Forked(fdspawn):
    """The command in a pseudo-terminal of its own, in a copy of this process."""

    def __init__(self, *arguments: str, cwd: Path) -> None:
        self.pid, handle = pty.fork()
        if self.pid == 0:
            without_echo = termios.tcgetattr(0)
            without_echo[3] &= ~termios.ECHO
            termios.tcsetattr(0, termios.TCSANOW, without_echo)
            _be_the_command(arguments, cwd)
        super().__init__(handle, encoding="utf-8", timeout=60)

    def close(self) -> None:
        """Waits for the end; `exitstatus` and `signalstatus` as in pexpect."""
        _, status = os.waitpid(self.pid, 0)
        self.signalstatus = os.WTERMSIG(status) if os.WIFSIGNALED(status) else None
        self.exitstatus = os.WEXITSTATUS(status) if os.WIFEXITED(status) else None
        super().close()


def _be_the_command(arguments: tuple[str, ...], cwd: Path, before: Action = None) -> NoReturn:
    code: object = 99
    try:
        os.chdir(cwd)
        sys.stdin, sys.stdout, sys.stderr = open(0), open(1, "w"), open(2, "w")  # noqa: SIM115
        sys.argv = ["diag", *arguments]
        cli.load_circuit = loaded
        if before:
            before()
        cli.main()
    except SystemExit as leave:
        code = leave.code
    finally:
        sys.stdout.flush()
        sys.stderr.flush()
        os._exit(code if isinstance(code, int) else 98)


def lines(*typed: str) -> str:
    """Typed lines as a text."""
    return "".join(f"{line}\n" for line in typed)


def events(log: Path) -> tuple[AnyEvent, ...]:
    """Every event of a log without problems."""
    replay = read_journal(log)
    assert replay.problems == ()
    return replay.events


def acknowledged(out: str) -> list[int]:
    """Numbers of the entries that a session said it had recorded."""
    return [int(number) for number in ACKNOWLEDGED.findall(out.replace("\r", ""))]


def offered(out: str) -> list[str]:
    """The causes and the step that a session showed last, without what they were before."""
    shown = out.replace("\r", "").rpartition("\nNext: ")
    causes = re.findall(r"^ +[<>\d.]+ %  .*$", shown[0].rpartition("\n\n")[2], re.MULTILINE)
    step = [line for line in shown[2].splitlines() if not line.startswith("answer>")]
    return [re.sub(r"  \(was .*\)$", "", line) for line in (*causes, *step)]


_once = cache(load_circuit)


def loaded(name: str, overlays: Iterable[Path] = ()) -> Circuit:
    """A circuit; one that ships is read once for all tests of this folder."""
    plain = name.replace("-", "_")
    return load_circuit(name, overlays) if overlays or plain not in SHIPPED else _once(plain)
