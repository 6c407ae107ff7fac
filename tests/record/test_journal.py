"""The findings log on disk: nothing acknowledged is lost, nothing altered goes unseen.

The chain is recomputed here with hashlib and json alone, and the bytes of one line are pinned;
its digests were computed with `sha256sum` of GNU coreutils. Kills, full disks, read-only
folders and locks are the operating system's own wherever it can be made to produce them.
"""

from __future__ import annotations

import errno
import hashlib
import json
import multiprocessing
import os
import random
import resource
import shutil
import signal
import subprocess
import sys
import tempfile
from collections.abc import Callable
from datetime import datetime, timedelta, timezone
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from diag.errors import Exit, InputError, UsageError
from diag.record import events as ev
from diag.record import journal as journal_module
from diag.record.events import AnyEvent, Found, Noted, Opened, Standing
from diag.record.journal import MAX_LINE, Journal, JournalError, Replay, read_journal
from tests.record import writer
from tests.record.writer import NOON, found, head

KILLS = 300
LONGEST = 0.012
"""Seconds until a writer is killed at the latest: a few lines, most of them being written."""
CHANGES = 1000
SEED = 20240611
ROOT = Path(__file__).resolve().parents[2]
FORK = multiprocessing.get_context("fork")


def made(path: Path, count: int = 4) -> Path:
    """A log of a head and `count` findings."""
    with Journal.create(path, head()) as journal:
        for n in range(count):
            journal.append(found(n))
    return path


def whole(path: Path) -> tuple[AnyEvent, ...]:
    """The events of a log that has nothing wrong with it."""
    replay = read_journal(path)
    assert replay.problems == ()
    assert replay.notices == ()
    return replay.events


def messages(replay: Replay) -> str:
    return "\n".join(map(str, replay.problems))


def digest(content: bytes) -> str:
    return hashlib.sha256(content).hexdigest()


def canonical(data: Any) -> bytes:
    text = json.dumps(data, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
    return text.encode()


def forged(path: Path, lines: list[dict[str, Any]]) -> Path:
    """A log with a sound chain over whatever the lines say."""
    raw = b""
    before = "0" * 64
    for line in lines:
        body = {**line, "hash_before": before}
        made_line = canonical({**body, "hash": digest(canonical(body))}) + b"\n"
        before = digest(made_line)
        raw += made_line
    path.write_bytes(raw)
    return path


def plain(*events: AnyEvent) -> list[dict[str, Any]]:
    return [{**ev.event_to_data(event), "number": n} for n, event in enumerate(events)]


def in_child(work: Callable[[], object]) -> Any:
    """What `work` returns, or the exception it raises, in a process of its own."""
    here, there = FORK.Pipe(duplex=False)

    def run() -> None:
        try:
            there.send(work())
        except BaseException as error:
            there.send((type(error).__name__, str(error)))

    child = FORK.Process(target=run)
    child.start()
    there.close()
    try:
        return here.recv()
    finally:
        child.join()


# What goes in comes out

text = st.text(
    st.characters(exclude_categories=("Cc", "Cs"), include_characters="\n\t"), max_size=40
)
times = st.datetimes(
    datetime(1990, 1, 1),
    datetime(2090, 1, 1),
    timezones=st.builds(
        lambda minutes: timezone(timedelta(minutes=minutes)), st.integers(-840, 840)
    ),
)
texts = st.lists(text, max_size=3).map(tuple)
standings = st.none() | st.builds(
    Standing,
    causes=st.lists(st.tuples(text, st.floats(0, 1)), max_size=3).map(tuple),
    coverage=st.none() | st.floats(0, 1),
)
common: dict[str, Any] = {"at": times, "by": text, "before": standings, "after": standings}
counts = st.integers(0, 10**6)
opened = st.builds(
    Opened,
    **common,
    circuit=text,
    version=text,
    content_hash=text,
    overlays=texts,
    engine=text,
    aircraft=text,
    complaint=text,
    worked_on=texts,
)
LATER: dict[type[ev.Event], st.SearchStrategy[Any]] = {
    ev.Found: st.builds(
        Found,
        **common,
        name=text,
        point=st.none() | text,
        value=text,
        complaint=st.booleans(),
        reference=text,
        remark=text,
    ),
    ev.Withdrawn: st.builds(ev.Withdrawn, **common, target=counts, reason=text),
    ev.Doubted: st.builds(
        ev.Doubted, **common, target=counts, trust=st.floats(0, 1, exclude_min=True), reason=text
    ),
    ev.NotPossible: st.builds(ev.NotPossible, **common, step=text, reason=text),
    ev.StateChanged: st.builds(
        ev.StateChanged,
        **common,
        engine=st.none() | text,
        opened=texts,
        closed=texts,
        people_clear=st.none() | st.booleans(),
    ),
    ev.Rectified: st.builds(
        ev.Rectified,
        **common,
        rectification=text,
        part_off=text,
        part_on=text,
        reference=text,
        remark=text,
    ),
    ev.RuleFired: st.builds(ev.RuleFired, **common, rule=text, kind=text, because=texts, text=text),
    ev.HandedOver: st.builds(ev.HandedOver, **common, to=text, summary=text),
    ev.Acknowledged: st.builds(ev.Acknowledged, **common),
    ev.Noted: st.builds(Noted, **common, text=text),
    ev.Closed: st.builds(
        ev.Closed,
        **common,
        outcome=st.sampled_from(["cause_confirmed", "no_fault_found", "handed_to_engineering"]),
        causes=texts,
        verification=st.none() | counts,
        not_verified_because=text,
    ),
}


def test_the_round_trip_covers_every_event_there_is() -> None:
    assert {*LATER, Opened} == set(ev.Event.__subclasses__())


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(opened, st.tuples(*LATER.values()), st.randoms(use_true_random=False))
def test_a_log_gives_back_every_event(
    first: Opened, later: tuple[AnyEvent, ...], chance: random.Random
) -> None:
    order = chance.sample(later, len(later))
    expected = [e.model_copy(update={"number": n}) for n, e in enumerate([first, *order])]
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "case.jsonl"
        with Journal.create(path, first) as journal:
            for event in order[:5]:
                journal.append(event)
        with Journal.open(path) as journal:
            returned = [journal.append(event) for event in order[5:]]
            assert list(journal.events) == expected
        replay = read_journal(path)
        check_chain(path)
    assert returned == expected[6:]
    assert list(replay.events) == expected
    assert replay.problems == ()


def check_chain(path: Path) -> None:
    """The format as documented, by hashlib and json alone."""
    before = "0" * 64
    for raw in path.read_bytes().splitlines(keepends=True):
        assert raw.endswith(b"\n")
        data = json.loads(raw)
        assert canonical(data) + b"\n" == raw
        assert data["hash_before"] == before
        own = data.pop("hash")
        assert digest(canonical(data)) == own
        before = digest(raw)


def test_the_bytes_of_a_line_are_pinned(tmp_path: Path) -> None:
    path = tmp_path / "case.jsonl"
    first = Opened(at=NOON, circuit="c", version="1", content_hash="0", complaint="drückt")
    with Journal.create(path, first) as journal:
        journal.append(ev.Acknowledged(at=NOON, by="second shift"))
    lines = path.read_bytes().decode().splitlines()
    assert lines == [
        '{"aircraft":"","at":"2024-06-11T12:00:00+02:00","by":"","circuit":"c",'
        '"complaint":"drückt","content_hash":"0","engine":"","event":"opened",'
        '"hash":"c6128c878e621cb75031650c3ae66222cc1c3d7bb31482457a54750217fa38a0",'
        '"hash_before":"0000000000000000000000000000000000000000000000000000000000000000",'
        '"log_format":1,"number":0,"overlays":[],"version":"1","worked_on":[]}',
        '{"at":"2024-06-11T12:00:00+02:00","by":"second shift","event":"acknowledged",'
        '"hash":"a84a59b7d9a743a0d866e39bd1d48a83ff1e115a7e794702a676e11ca150a7a3",'
        '"hash_before":"1587f2f6683f2bef15291b4a234cb424a2d1a4c76ab012d915ca64c3edc873be",'
        '"number":1}',
    ]


# Nothing altered unseen


def test_random_single_byte_changes_are_all_detected(tmp_path: Path) -> None:
    original = made(tmp_path / "case.jsonl", 6).read_bytes()
    chance = random.Random(SEED)
    other = tmp_path / "other.jsonl"
    whole(tmp_path / "case.jsonl")
    for _ in range(CHANGES):
        place = chance.randrange(len(original))
        byte = chance.choice([b for b in range(256) if b != original[place]])
        other.write_bytes(original[:place] + bytes([byte]) + original[place + 1 :])
        replay = read_journal(other)
        assert replay.problems or replay.torn, (place, byte)


@pytest.mark.parametrize("mask", [0x01, 0x20, 0x80])
def test_a_change_anywhere_in_the_last_line_is_detected(tmp_path: Path, mask: int) -> None:
    original = made(tmp_path / "case.jsonl", 2).read_bytes()
    start = original.rstrip(b"\n").rindex(b"\n") + 1
    other = tmp_path / "other.jsonl"
    for place in range(start, len(original)):
        changed = bytes([original[place] ^ mask])
        other.write_bytes(original[:place] + changed + original[place + 1 :])
        replay = read_journal(other)
        assert replay.problems or replay.torn, place


def test_an_altered_line_is_named_and_the_log_is_left_alone(tmp_path: Path) -> None:
    path = made(tmp_path / "case.jsonl")
    altered = path.read_bytes().replace(b"1psi", b"7psi") + b'{"torn'
    path.write_bytes(altered)
    with pytest.raises(InputError) as caught:
        Journal.open(path)
    assert {(p.where.file, p.where.line) for p in caught.value.problems} == {
        (str(path), 3),
        (str(path), 4),
    }
    assert "the line was altered" in str(caught.value)
    assert path.read_bytes() == altered
    assert [p.name for p in tmp_path.iterdir()] == ["case.jsonl"]


@pytest.mark.parametrize("gone", [0, 1, 2, 3])
def test_a_line_taken_out_breaks_the_chain(tmp_path: Path, gone: int) -> None:
    path = made(tmp_path / "case.jsonl")
    lines = path.read_bytes().splitlines(keepends=True)
    path.write_bytes(b"".join(lines[:gone] + lines[gone + 1 :]))
    assert "does not follow" in messages(read_journal(path))


def test_two_lines_that_changed_places_break_the_chain(tmp_path: Path) -> None:
    path = made(tmp_path / "case.jsonl")
    one, two, *rest = path.read_bytes().splitlines(keepends=True)
    path.write_bytes(b"".join([two, one, *rest]))
    assert "does not follow" in messages(read_journal(path))


def test_other_spacing_or_a_doubled_key_in_the_last_line_is_seen(tmp_path: Path) -> None:
    path = made(tmp_path / "case.jsonl")
    original = path.read_bytes()
    for changed in (b', "number":4', b',"number":4,"number":4'):
        path.write_bytes(original.replace(b',"number":4', changed))
        assert "not as it was written" in messages(read_journal(path))


def test_what_a_chain_cannot_show_is_as_documented(tmp_path: Path) -> None:
    path = made(tmp_path / "case.jsonl")
    lines = path.read_bytes().splitlines(keepends=True)
    path.write_bytes(b"".join(lines[:-1]))
    assert len(whole(path)) == 4
    data = [ev.event_to_data(event) for event in whole(path)]
    data[2]["value"] = "99psi"
    assert len(whole(forged(path, data))) == 4


# Torn ends


def test_a_tear_at_any_byte_is_set_aside_and_the_case_goes_on(tmp_path: Path) -> None:
    original = made(tmp_path / "case.jsonl", 2).read_bytes()
    start = original.rstrip(b"\n").rindex(b"\n") + 1
    for end in range(start + 1, len(original)):
        folder = tmp_path / str(end)
        folder.mkdir()
        path = folder / "case.jsonl"
        path.write_bytes(original[:end])
        side = folder / "case.jsonl.torn-1"
        with Journal.open(path) as journal:
            assert len(journal.events) == 2
            assert [str(side) in notice for notice in journal.notices] == [True]
            assert path.read_bytes() == original[:start]
            assert side.read_bytes() == original[start:end]
            journal.append(found(1))
        assert path.read_bytes() == original


@pytest.mark.parametrize(
    "tail", [b"\0" * 300, b'{"at":"20' + b"\0" * 80 + b"\n", b"\xff\xfe\n", b"\n", b'{"a":\n']
)
def test_junk_at_the_end_counts_as_a_tear(tmp_path: Path, tail: bytes) -> None:
    path = made(tmp_path / "case.jsonl")
    original = path.read_bytes()
    path.write_bytes(original + tail)
    replay = read_journal(path)
    assert replay.torn == tail
    assert replay.problems == ()
    assert len(replay.events) == 5
    Journal.open(path).close()
    assert path.read_bytes() == original
    assert (tmp_path / "case.jsonl.torn-1").read_bytes() == tail


def test_side_files_of_earlier_tears_stay(tmp_path: Path) -> None:
    path = made(tmp_path / "case.jsonl")
    precious = tmp_path / "precious"
    precious.write_text("x")
    (tmp_path / "case.jsonl.torn-1").symlink_to(precious)
    for tail in (b"one", b"two"):
        with path.open("ab") as stream:
            stream.write(tail)
        Journal.open(path).close()
    assert precious.read_text() == "x"
    assert (tmp_path / "case.jsonl.torn-2").read_bytes() == b"one"
    assert (tmp_path / "case.jsonl.torn-3").read_bytes() == b"two"


def test_a_tear_that_cannot_be_kept_is_not_cut_off(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = made(tmp_path / "case.jsonl")
    torn = path.read_bytes() + b'{"half'
    path.write_bytes(torn)
    with monkeypatch.context() as patch:
        fill_disk(patch)
        with pytest.raises(JournalError, match="the disk is full"):
            Journal.open(path)
    assert path.read_bytes() == torn
    Journal.open(path).close()


def test_reading_changes_nothing_and_takes_no_lock(tmp_path: Path) -> None:
    path = made(tmp_path / "case.jsonl")
    with Journal.open(path):
        assert len(whole(path)) == 5
    path.write_bytes(path.read_bytes() + b'{"half')
    before = (path.read_bytes(), path.stat().st_mtime_ns)
    replay = read_journal(path)
    assert replay.torn == b'{"half'
    assert replay.notices == ("line 6 was not written whole (6 bytes); it does not count",)
    assert (path.read_bytes(), path.stat().st_mtime_ns) == before
    assert [p.name for p in tmp_path.iterdir()] == ["case.jsonl"]


# Nothing lost


class Killer:
    """Has writers killed, in a small process beside this one."""

    def __init__(self) -> None:
        self.process = subprocess.Popen(
            [sys.executable, "-m", writer.__name__],
            cwd=ROOT,
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )

    def kill(self, path: Path, wait: float, dribble: bool, from_start: bool) -> list[int]:
        """As `writer.killed_once`."""
        assert self.process.stdin is not None
        assert self.process.stdout is not None
        print(
            json.dumps([str(path), wait, dribble, from_start]), file=self.process.stdin, flush=True
        )
        numbers: list[int] = json.loads(self.process.stdout.readline())
        return numbers

    def end(self) -> None:
        _, problems = self.process.communicate()
        assert self.process.returncode == 0, problems


def test_kill_at_any_moment_loses_nothing_acknowledged(tmp_path: Path) -> None:
    chance = random.Random(SEED)
    known: list[AnyEvent] = []
    acknowledged = torn = 0
    killer = Killer()
    for n in range(KILLS):
        path = tmp_path / str(n // 10) / "case.jsonl"
        known = known if n % 10 else []
        wait = chance.uniform(0.0, LONGEST)
        said = killer.kill(path, wait, dribble=n % 2 == 1, from_start=n % 5 == 0)
        acknowledged += len(said)
        if not path.exists():
            assert not said
            continue
        replay = read_journal(path)
        torn += bool(replay.torn)
        assert replay.problems == ()
        numbers = [event.number for event in replay.events]
        assert numbers == list(range(len(numbers)))
        assert set(said) <= set(numbers)
        assert list(replay.events[: len(known)]) == known
        known = list(replay.events)
        with Journal.open(path) as journal:
            assert list(journal.events) == known
    killer.end()
    assert acknowledged > KILLS / 10
    assert torn


def test_the_line_is_on_the_disk_before_append_returns(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = made(tmp_path / "case.jsonl", 0)
    synced: list[int] = []
    with Journal.open(path) as journal, monkeypatch.context() as patch:
        patch.setattr(os, "fsync", lambda fd: synced.append(os.fstat(fd).st_size))
        journal.append(found(1))
        assert synced == [path.stat().st_size]


def test_whole_lines_that_a_killed_writer_left_reach_the_disk_on_opening(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = made(tmp_path / "case.jsonl")
    synced: list[int] = []
    with monkeypatch.context() as patch:
        patch.setattr(os, "fsync", lambda fd: synced.append(os.fstat(fd).st_ino))
        Journal.open(path).close()
    assert synced == [path.stat().st_ino]


def test_a_new_log_and_its_folders_reach_the_disk(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    synced: set[str] = set()
    fsync = os.fsync

    def noting(fd: int) -> None:
        synced.add(os.readlink(f"/proc/self/fd/{fd}"))
        fsync(fd)

    path = tmp_path / "a" / "b" / "case.jsonl"
    with monkeypatch.context() as patch:
        patch.setattr(os, "fsync", noting)
        Journal.create(path, head()).close()
    assert {str(tmp_path), str(tmp_path / "a"), str(tmp_path / "a" / "b")} <= synced
    assert [p.name for p in path.parent.iterdir()] == ["case.jsonl"]
    assert path.stat().st_mode & 0o777 == 0o644 & ~umask()


def umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def fill_disk(patch: pytest.MonkeyPatch, room: int = 0) -> None:
    """Lets `room` bytes through, then answers as a full device does."""
    write, left = os.write, [room]

    def limited(fd: int, data: Any) -> int:
        if left[0]:
            count = write(fd, bytes(data[: left[0]]))
            left[0] -= count
            return count
        device = os.open("/dev/full", os.O_WRONLY)
        try:
            return write(device, bytes(data))
        finally:
            os.close(device)

    patch.setattr(os, "write", limited)


@pytest.mark.parametrize("room", [0, 1, 150])
def test_a_full_disk_leaves_a_whole_log_and_the_case_in_memory(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, room: int
) -> None:
    path = made(tmp_path / "case.jsonl")
    before = path.read_bytes()
    with Journal.open(path) as journal:
        with monkeypatch.context() as patch:
            fill_disk(patch, room)
            with pytest.raises(JournalError, match=r"the disk is full; 1 event is in memory"):
                journal.append(found(4))
            assert path.read_bytes() == before
            with pytest.raises(JournalError, match=r"2 events are in memory") as caught:
                journal.append(found(5))
        assert "\n" not in str(caught.value)
        assert caught.value.code is Exit.INPUT
        assert [event.number for event in journal.unsaved] == [5, 6]
        assert len(journal.events) == 7
        elsewhere = journal.save_elsewhere(tmp_path / "usb" / "case.jsonl")
        assert whole(elsewhere) == journal.events
        assert elsewhere.read_bytes().startswith(before)
        journal.append(found(6))
        assert journal.unsaved == []
        assert whole(path) == journal.events
    with Journal.open(elsewhere) as other:
        assert other.append(found(7)).number == 7


def test_a_file_size_limit_of_the_system_is_survived(tmp_path: Path) -> None:
    path = made(tmp_path / "case.jsonl")
    size = path.stat().st_size

    def work() -> tuple[str, bool, int, int]:
        _, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
        with Journal.open(path) as journal:
            resource.setrlimit(resource.RLIMIT_FSIZE, (size + 100, hard))
            try:
                journal.append(found(4))
            except JournalError as error:
                said = str(error)
            cut = path.stat().st_size == size
            waiting = len(journal.unsaved)
            resource.setrlimit(resource.RLIMIT_FSIZE, (hard, hard))
            journal.retry()
            return said, cut, waiting, len(journal.unsaved)

    said, cut, waiting, left = in_child(work)
    assert "the file may not grow any further; 1 event is in memory only" in said
    assert (cut, waiting, left) == (True, 1, 0)
    assert len(whole(path)) == 6


def test_no_room_for_a_new_log_leaves_nothing_behind(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    with monkeypatch.context() as patch:
        fill_disk(patch, 20)
        with pytest.raises(JournalError, match=r"cannot be created: the disk is full"):
            Journal.create(tmp_path / "case.jsonl", head())
    assert list(tmp_path.iterdir()) == []


def test_a_disk_that_fails_to_sync_acknowledges_nothing(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = made(tmp_path / "case.jsonl")

    def failing(fd: int) -> None:
        raise OSError(errno.EIO, "Input/output error")

    with Journal.open(path) as journal:
        with monkeypatch.context() as patch:
            patch.setattr(os, "fsync", failing)
            with pytest.raises(JournalError, match="the disk reports a fault"):
                journal.append(found(4))
        assert journal.unsaved == [journal.events[-1]]
        journal.retry()
    assert len(whole(path)) == 6


@pytest.mark.parametrize("call", ["write", "fsync", "lseek"])
def test_an_interrupt_inside_append_leaves_a_log_that_goes_on(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, call: str
) -> None:
    path = made(tmp_path / "case.jsonl")
    real = getattr(os, call)

    def interrupted(fd: int, *rest: Any) -> None:
        real(fd, *rest)
        raise KeyboardInterrupt

    with Journal.open(path) as journal:
        with monkeypatch.context() as patch:
            patch.setattr(os, call, interrupted)
            with pytest.raises(KeyboardInterrupt):
                journal.append(found(4))
        journal.append(found(5))
        assert whole(path) == journal.events
    assert len(journal.events) == 7


def test_a_folder_that_vanishes_is_noticed(tmp_path: Path) -> None:
    path = made(tmp_path / "share" / "case.jsonl")
    with Journal.open(path) as journal:
        shutil.rmtree(path.parent)
        with pytest.raises(JournalError, match="its folder has gone; 1 event is in memory only"):
            journal.append(found(4))
        with pytest.raises(JournalError, match="its folder has gone"):
            journal.retry()
        assert whole(journal.save_elsewhere(tmp_path / "kept.jsonl")) == journal.events
    assert len(journal.events) == 6


def test_a_log_that_was_moved_away_keeps_no_event_the_case_calls_unsaved(tmp_path: Path) -> None:
    path = made(tmp_path / "case.jsonl")
    with Journal.open(path) as journal:
        moved = path.rename(tmp_path / "moved.jsonl")
        with pytest.raises(JournalError, match="has been removed"):
            journal.append(found(4))
        assert len(whole(moved)) == 5
        shutil.copy(moved, path)
        with pytest.raises(JournalError, match="another file has taken its place"):
            journal.retry()


def test_a_foreign_write_is_noticed_and_not_undone(tmp_path: Path) -> None:
    path = made(tmp_path / "case.jsonl")
    with Journal.open(path) as journal:
        with path.open("ab") as stream:
            stream.write(b"a remark by hand\n")
        with pytest.raises(JournalError, match="something else has changed the file"):
            journal.append(found(4))
    assert path.read_bytes().endswith(b"a remark by hand\n")


# Who may write


def test_a_second_writer_is_refused_here_and_in_another_process(tmp_path: Path) -> None:
    path = made(tmp_path / "case.jsonl")

    def attempt() -> int:
        with Journal.open(path) as journal:
            return len(journal.events)

    with Journal.open(path):
        with pytest.raises(JournalError) as caught:
            attempt()
        assert str(path) in str(caught.value)
        assert "open in another session" in str(caught.value)
        assert in_child(attempt) == ("JournalError", str(caught.value))
    assert in_child(attempt) == 5
    assert attempt() == 5
    assert [p.name for p in tmp_path.iterdir()] == ["case.jsonl"]


def test_a_file_system_without_locks_is_said_so(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = made(tmp_path / "case.jsonl")

    def none(handle: int, how: int) -> None:
        raise OSError(errno.ENOLCK, "No locks available")

    monkeypatch.setattr("fcntl.flock", none)
    with Journal.open(path) as journal:
        assert ["no lock could be taken" in notice for notice in journal.notices] == [True]
        journal.append(found(4))
    assert len(whole(path)) == 6


def test_a_closed_journal_takes_nothing(tmp_path: Path) -> None:
    journal = Journal.create(tmp_path / "case.jsonl", head())
    journal.close()
    journal.close()
    with pytest.raises(UsageError, match="is closed"):
        journal.append(found(1))
    assert len(journal.events) == 1


def test_an_existing_file_is_never_overwritten(tmp_path: Path) -> None:
    path = tmp_path / "case.jsonl"
    path.write_text("mine")
    dangling = tmp_path / "link.jsonl"
    dangling.symlink_to(tmp_path / "nowhere")
    other = made(tmp_path / "other.jsonl")
    for taken in (path, dangling):
        with pytest.raises(JournalError, match="exists already"):
            Journal.create(taken, head())
        with Journal.open(other) as journal, pytest.raises(JournalError, match="exists already"):
            journal.save_elsewhere(taken)
    assert path.read_text() == "mine"
    assert not (tmp_path / "nowhere").exists()


def no_link(source: Path, target: Path) -> None:
    raise PermissionError(errno.EPERM, "Operation not permitted")


def test_a_file_system_without_hard_links_will_do(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(os, "link", no_link)
    path = made(tmp_path / "case.jsonl")
    assert len(whole(path)) == 5
    assert [p.name for p in tmp_path.iterdir()] == ["case.jsonl"]


@pytest.mark.parametrize("links", [True, False])
def test_a_file_that_comes_up_at_the_last_moment_is_not_overwritten(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, links: bool
) -> None:
    path = tmp_path / "case.jsonl"
    path.write_text("mine")
    if not links:
        monkeypatch.setattr(os, "link", no_link)
    monkeypatch.setattr(os.path, "lexists", lambda place: False)
    with pytest.raises(JournalError, match="a file of that name is in the way"):
        Journal.create(path, head())
    assert path.read_text() == "mine"
    assert [p.name for p in tmp_path.iterdir()] == ["case.jsonl"]


# Places that will not do


@pytest.fixture
def nowhere(tmp_path: Path) -> Path:
    (tmp_path / "file").write_text("x")
    return tmp_path / "file" / "case.jsonl"


def test_a_place_that_cannot_hold_a_log_is_one_clear_line(tmp_path: Path, nowhere: Path) -> None:
    long = tmp_path / ("n" * 300)
    for place in (nowhere, Path("/proc/case.jsonl"), long, tmp_path / "a\0b"):
        with pytest.raises(JournalError) as caught:
            Journal.create(place, head())
        assert "\n" not in str(caught.value)
        assert caught.value.code is Exit.INPUT
    with pytest.raises(JournalError, match="a part of the path is not a folder"):
        Journal.create(nowhere, head())
    with pytest.raises(JournalError, match="exists already"):
        Journal.create(tmp_path, head())


def test_a_read_only_folder_and_log(tmp_path: Path) -> None:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        path = made(folder / "case.jsonl")
        path.chmod(0o444)
        folder.chmod(0o555)

        def work() -> list[str]:
            if os.geteuid() == 0:
                os.setuid(65534)  # permissions do not bind root
            said = []
            attempts: list[Callable[[], Journal]] = [
                lambda: Journal.create(folder / "new.jsonl", head()),
                lambda: Journal.create(folder / "new" / "case.jsonl", head()),
                lambda: Journal.open(path),
            ]
            for attempt in attempts:
                try:
                    attempt()
                except JournalError as error:
                    said.append(str(error))
            return [*said, str(len(read_journal(path).events))]

        said = in_child(work)
        folder.chmod(0o755)
    assert len(said) == 4
    assert all(line.endswith("no permission") for line in said[:3])
    assert said[3] == "5"


def test_missing_file_folder_pipe_and_device(tmp_path: Path, nowhere: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    for act in (read_journal, Journal.open):
        for place, reason in (
            (tmp_path / "none.jsonl", "there is no such file or folder"),
            (tmp_path / "none" / "none.jsonl", "there is no such file or folder"),
            (tmp_path, "it is a folder"),
            (nowhere, "a part of the path is not a folder"),
            (tmp_path / "pipe", "is not a file that can hold a log"),
            (Path("/dev/zero"), "is not a file that can hold a log"),
        ):
            with pytest.raises(JournalError, match=reason) as caught:
                act(place)
            assert "\n" not in str(caught.value)
    with pytest.raises(JournalError, match=r"a�b\.jsonl"):
        read_journal(tmp_path / "a\x1bb.jsonl")
    assert not (tmp_path / "none.jsonl").exists()


def test_a_file_with_no_whole_line_is_refused_and_left(tmp_path: Path) -> None:
    path = tmp_path / "case.jsonl"
    for content, reason in ((b"", "the log is empty"), (b'{"at', "holds no whole line")):
        path.write_bytes(content)
        assert reason in messages(read_journal(path))
        with pytest.raises(InputError, match=reason):
            Journal.open(path)
        assert path.read_bytes() == content
    assert [p.name for p in tmp_path.iterdir()] == ["case.jsonl"]


# Lines that are no events

JUNK = [
    (b"\xc3\x28\n", "not UTF-8 text"),
    (b'{"a":"\x1b[2J"}\n', "control characters are not accepted (got U+001B)"),
    (b'{"a":1}\r\n', "control characters are not accepted (got U+000D)"),
    ('{"a":"\x9b2J"}\n'.encode(), "control characters are not accepted (got U+009B)"),
    (b'{"a":"\\u001b[2J"}\n', "control characters are not accepted (got U+001B)"),
    (b'{"a\\u0007":1}\n', "control characters are not accepted (got U+0007)"),
    (b"\n", "not JSON"),
    (b"[1]\n", "not a JSON object"),
    (b"null\n", "not a JSON object"),
    (b'{"a":NaN}\n', "not JSON"),
    (b'{"a":' + b"9" * 5000 + b"}\n", "not JSON"),
    (b'{"a":1e999}\n', "cannot be written as JSON"),
    (b'{"a":"\\ud800"}\n', "cannot be written as JSON"),
    (b'{"a":' + b"[" * 50_000 + b"]" * 50_000 + b"}\n", "nested too deeply"),
    (b'{"a":' + b"[" * 700 + b"]" * 700 + b"}\n", ""),
    (b"{}\n", "no `event` that says what this is"),
    (b'{"event":"\xe2\x80\xae"}\n', "unknown event"),
    (b"\xef\xbb\xbf{}\n", "not JSON"),
]


@pytest.mark.parametrize(("junk", "reason"), JUNK, ids=range(len(JUNK)))
def test_a_bad_line_in_the_middle_is_a_problem_in_its_place(
    tmp_path: Path, junk: bytes, reason: str
) -> None:
    path = made(tmp_path / "case.jsonl")
    lines = path.read_bytes().splitlines(keepends=True)
    path.write_bytes(b"".join([*lines[:3], junk, *lines[3:]]))
    replay = read_journal(path)
    here = [problem for problem in replay.problems if problem.where.line == 4]
    assert here
    assert reason in "\n".join(map(str, here))
    assert str(here[0]).startswith(f"{path}:4:")
    assert len(replay.events) == 5
    assert all(str(problem).isprintable() for problem in replay.problems)
    with pytest.raises(InputError):
        Journal.open(path)


@pytest.mark.parametrize("end", [b"\n", b""])
def test_an_enormous_line_is_refused_without_reading_on(tmp_path: Path, end: bytes) -> None:
    path = made(tmp_path / "case.jsonl")
    with path.open("ab") as stream:
        stream.write(b"x" * (3 * MAX_LINE) + end)
    replay = read_journal(path)
    assert [problem.where.line for problem in replay.problems] == [6, 6]
    assert "the line is too long; accepted: at most 1000000 bytes" in messages(replay)
    assert len(replay.events) == 5
    assert replay.torn == b""


def test_a_file_of_another_kind_is_refused_in_bounded_time(tmp_path: Path) -> None:
    path = tmp_path / "case.jsonl"
    path.write_bytes(random.Random(SEED).randbytes(300_000) + b"\n" * 100_000)
    replay = read_journal(path)
    assert replay.events == ()
    assert len(replay.problems) == journal_module.MAX_PROBLEMS + 1
    assert "the rest of the log was not read" in str(replay.problems[-1])


def test_sound_lines_that_are_no_case_are_problems(tmp_path: Path) -> None:
    path = tmp_path / "case.jsonl"
    good = plain(head(), found(1), found(2))
    cases: list[tuple[list[dict[str, Any]], int, str]] = [
        ([*good[:1], {**good[1], "event": "guessed"}], 2, "unknown event at event"),
        ([*good[:1], {**good[1], "colour": "red"}], 2, "unknown key at colour"),
        ([*good[:1], {**good[1], "at": "2024-06-11T12:00:00"}], 2, "at at"),
        ([*good[:1], {k: v for k, v in good[1].items() if k != "value"}], 2, "at value"),
        ([*good[:2], {**good[2], "number": 7}], 3, "out of order at number (got 7)"),
        ([*good[:1], {**good[0], "number": 1}], 2, "a second head"),
        ([{**good[1], "number": 0}], 1, "the case is not opened first"),
    ]
    for lines, line, reason in cases:
        forged(path, lines)
        replay = read_journal(path)
        assert {problem.where.line for problem in replay.problems} == {line}
        assert reason in messages(replay)
        with pytest.raises(InputError):
            Journal.open(path)


@pytest.mark.parametrize(
    ("event", "reason"),
    [
        (Noted(at=NOON, text="\x1b]0;x"), "control characters"),
        (Noted(at=NOON, text="a\rb"), "control characters"),
        (found(1).model_copy(update={"value": "9" * MAX_LINE}), "the line is too long"),
        (found(1).model_copy(update={"value": "\ud800"}), "no form"),
        (found(1).model_copy(update={"after": Standing(coverage=float("nan"))}), "no form"),
        (head(), "a second head"),
        (
            Noted(at=NOON.replace(tzinfo=timezone(timedelta(seconds=90))), text="x"),
            "not read back the same",
        ),
    ],
)
@pytest.mark.filterwarnings("ignore::UserWarning")
def test_an_event_that_could_not_be_read_back_is_not_taken(
    tmp_path: Path, event: AnyEvent, reason: str
) -> None:
    path = made(tmp_path / "case.jsonl")
    before = path.read_bytes()
    with Journal.open(path) as journal:
        with pytest.raises(InputError, match=reason):
            journal.append(event)
        assert journal.unsaved == []
        assert path.read_bytes() == before
        assert journal.append(found(9)).number == 5


def test_a_clock_that_goes_back_is_reported_and_not_refused(tmp_path: Path) -> None:
    path = made(tmp_path / "case.jsonl", 0)
    said = "line 3: the clock was set back by 0:07:00"
    with Journal.open(path) as journal:
        for minutes in (10, 3, 4):
            journal.append(found(minutes))
        assert journal.notices == [said]
    replay = read_journal(path)
    assert replay.notices == (said,)
    assert replay.problems == ()
    with Journal.open(path) as journal:
        assert journal.notices == [said]
    utc = found(4).model_copy(update={"at": (NOON + timedelta(minutes=4)).astimezone()})
    with Journal.open(path) as journal:
        journal.append(utc)
        assert journal.notices == [said]


def test_a_log_keeps_its_place_when_the_process_changes_folder(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    with Journal.create("case.jsonl", head()) as journal:
        (tmp_path / "other").mkdir()
        monkeypatch.chdir(tmp_path / "other")
        journal.append(found(1))
    assert len(whole(tmp_path / "case.jsonl")) == 2
