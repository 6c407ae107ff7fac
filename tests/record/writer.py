"""A writer that is killed: run as a small process of its own, so that a kill costs little.

Reads one request a line on its input, `[path, wait, dribble, from_start]`, forks a writer that
carries the case on for ever, kills it after `wait` seconds, and answers with the numbers that
the writer had said were acknowledged.
"""

from __future__ import annotations

import json
import os
import signal
import sys
import time
from datetime import datetime, timedelta, timezone
from pathlib import Path
from typing import Any

from diag.record.events import Found, Opened, Standing
from diag.record.journal import Journal

NOON = datetime(2024, 6, 11, 12, 0, tzinfo=timezone(timedelta(hours=2)))


def head(**more: Any) -> Opened:
    return Opened(
        at=NOON,
        circuit="relief_valve_turboprop",
        version="1.0",
        content_hash="ab" * 32,
        complaint="pressure low at hot idle, drops after ten minutes – ±4 psi",
        **more,
    )


def found(n: int, remark: str = "") -> Found:
    standing = Standing(causes=(("relief_valve.stuck_open", 0.1 + 0.2), ("unlisted", 1e-7)))
    at = NOON + timedelta(minutes=n)
    return Found(
        at=at,
        by="µ",
        name="oil_pressure",
        point="hot_idle",
        value=f"{n}psi",
        before=standing,
        after=standing,
        remark=remark,
    )


def write_until_killed(path: Path, acknowledge: int, dribble: bool) -> None:
    """Carries the case on for ever; says each number once `append` has returned."""
    write = os.write

    def dribbled(handle: int, data: Any) -> int:
        time.sleep(0.0002)
        return write(handle, data[:40])

    if dribble:
        # Short writes are allowed to happen; they let the kill fall inside a line.
        os.write = dribbled
    journal = Journal.open(path) if path.exists() else Journal.create(path, head())
    write(acknowledge, b"ready\n")
    while True:
        n = len(journal.events)
        event = journal.append(found(n, remark="–" * (4000 if n % 5 == 0 else n % 7)))
        write(acknowledge, b"%d\n" % event.number)


def killed_once(path: Path, wait: float, dribble: bool, from_start: bool) -> list[int]:
    """The numbers acknowledged by a writer that was killed after `wait` seconds.

    The wait counts from the start of its process, or from when it has opened the log.
    """
    out, into = os.pipe()
    child = os.fork()
    if child == 0:
        os.close(out)
        try:
            write_until_killed(path, into, dribble)
        finally:
            os._exit(1)
    os.close(into)
    said = b"" if from_start else os.read(out, 6)
    time.sleep(wait)
    os.kill(child, signal.SIGKILL)
    _, status = os.waitpid(child, 0)
    assert os.waitstatus_to_exitcode(status) == -signal.SIGKILL
    with os.fdopen(out, "rb") as stream:
        said += stream.read()
    return [int(word) for word in said.split(b"\n")[:-1] if word != b"ready"]


if __name__ == "__main__":
    for line in sys.stdin:
        place, *how = json.loads(line)
        print(json.dumps(killed_once(Path(place), *how)), flush=True)
