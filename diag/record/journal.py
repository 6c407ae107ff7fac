"""The journal: the findings log on disk, append only, one JSON object a line.

A line is the canonical JSON of an event (`event_to_data`; keys sorted, no spaces, UTF-8)
with two more keys, and ends with one line feed:

- `hash_before`: SHA-256, in hex, of the bytes of the line before, its line feed included;
  64 zeros in the first line. Any change to a line shows in the line that follows.
- `hash`: SHA-256, in hex, of the canonical JSON of the line without this key. A change to
  the last line, which nothing follows, shows here.

What this does not prove: the hashes take no secret, so whoever rewrites the whole file can
rewrite the chain with it; and whole lines taken off the end leave a shorter log that is
sound in itself. The chain shows accidents and careless edits. Against a forger, a copy (or
the hash of the last line) must be kept where the forger cannot reach it.

A log that is being made has one writer, held by a lock that the system drops with the
process, however that ends. Readers take no lock.
"""

from __future__ import annotations

import contextlib
import errno
import hashlib
import itertools
import json
import os
import re
import stat
import sys
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from types import TracebackType
from typing import Any, BinaryIO, NoReturn, Self

from pydantic import ValidationError

from diag.circuit.reading import brief, dotted
from diag.errors import DiagError, Exit, InputError, Origin, Problem, UsageError
from diag.record.events import AnyEvent, Opened, event_from_data, event_to_data

MAX_LINE = 1_000_000
"""Bytes in one line, its line feed included."""
MAX_PROBLEMS = 1000
"""After so many problems in one log, the rest is not read."""
START = "0" * 64
"""`hash_before` of the first line."""
MODE = 0o644

_CONTROL = re.compile(r"[\x00-\x1f\x7f-\x9f]")
_CONTROL_IN_TEXT = re.compile(r"[\x00-\x08\x0b-\x1f\x7f-\x9f]")
_BINARY = getattr(os, "O_BINARY", 0)
_NO_FOLDER_SYNC = {errno.EINVAL, errno.EACCES, errno.EPERM, errno.ENOSYS, errno.EOPNOTSUPP}
_REASONS = {
    errno.EACCES: "no permission",
    errno.EPERM: "no permission",
    errno.EROFS: "the file system is read-only",
    errno.ENOSPC: "the disk is full",
    errno.EDQUOT: "the disk quota is used up",
    errno.EFBIG: "the file may not grow any further",
    errno.EIO: "the disk reports a fault",
    errno.ESTALE: "the network folder has gone",
    errno.ENOENT: "there is no such file or folder",
    errno.ENOTDIR: "a part of the path is not a folder",
    errno.EISDIR: "it is a folder",
    errno.EEXIST: "a file of that name is in the way",
    errno.ENAMETOOLONG: "the name is too long",
}

Entry = tuple[AnyEvent, bytes]


class JournalError(DiagError):
    """The log cannot be read, written, created or locked; one line says why."""

    code = Exit.INPUT


@dataclass(frozen=True, slots=True)
class Replay:
    """What a log says. With problems, `events` are those that could still be read."""

    events: tuple[AnyEvent, ...]
    notices: tuple[str, ...]
    """What a person should know but nothing is wrong with: a torn end, a clock set back."""
    problems: tuple[Problem, ...]
    torn: bytes = b""
    """The last line, when it was not written whole; it does not count."""


def read_journal(path: str | os.PathLike[str]) -> Replay:
    """Reads and verifies a log without changing or locking it.

    While somebody is writing, the last line may be seen half written, hence as torn.

    Raises:
        JournalError: no such file, not a file, or no permission.
    """
    place = _placed(path)
    reader = _Reader(_shown(place))
    with _told(f"the log {_shown(place)} cannot be read"):
        _require_file(place)
        with place.open("rb") as handle:
            reader.read(handle)
    if reader.torn:
        reader.notices.append(f"{reader.tear()}; it does not count")
    events = tuple(event for event, _ in reader.entries)
    return Replay(events, tuple(reader.notices), tuple(reader.problems), reader.torn)


class Journal:
    """One case's log, open for appending; not to be shared between threads.

    Made by `create` or `open`; a context manager that closes the file.
    """

    def __init__(self, path: Path, handle: int, entries: list[Entry], notices: list[str]) -> None:
        self.path = path
        self.notices = notices
        """What the person should be told; grows as events are appended."""
        self._handle = handle
        self._entries = entries
        # One tuple, so that an interrupt cannot fall between the two: lines and bytes on disk.
        self._saved = (len(entries), sum(len(line) for _, line in entries))
        self._dirty = False

    @classmethod
    def create(cls, path: str | os.PathLike[str], opened: Opened) -> Self:
        """A new log with `opened` as its head; missing folders are made.

        The file appears under its name only when the head is whole and on the disk.

        Raises:
            JournalError: the file exists, or the place does not take it.
            InputError: the event could not be read back.
        """
        place = _placed(path)
        _, line, _ = _sealed(_shown(place), [], opened)
        _publish(place, line)
        return cls.open(place)

    @classmethod
    def open(cls, path: str | os.PathLike[str]) -> Self:
        """Locks, replays and verifies a log, to carry on where it stopped.

        A torn last line is moved to a side file `PATH.torn-N`, reported in `notices`, and
        the log is cut back to its last whole line. A log with problems is left untouched.

        Raises:
            JournalError: missing, not writable, or open in another session.
            InputError: lines that are altered or not events, each with its place.
        """
        place = _placed(path)
        name = _shown(place)
        with _told(f"the log {name} cannot be opened for writing"):
            _require_file(place)
            handle = os.open(place, os.O_RDWR | _BINARY)
            try:
                return cls._opened(place, name, handle)
            except BaseException:
                os.close(handle)
                raise

    @classmethod
    def _opened(cls, place: Path, name: str, handle: int) -> Self:
        notices = _lock(handle, name)
        _require_same(place, handle)
        reader = _Reader(name)
        with os.fdopen(handle, "rb", closefd=False) as stream:
            reader.read(stream)
        if reader.problems:
            raise InputError(f"the log {name} cannot be carried on", reader.problems)
        if reader.torn:
            side = _set_aside(place, reader.torn)
            reader.notices.append(f"{reader.tear()}; it does not count and is kept in {side}")
            os.ftruncate(handle, sum(len(line) for _, line in reader.entries))
        # A writer that was killed may have left whole lines that never reached the disk.
        os.fsync(handle)
        return cls(place, handle, reader.entries, notices + reader.notices)

    @property
    def events(self) -> tuple[AnyEvent, ...]:
        """Every event of the case in order, the unsaved ones included."""
        return tuple(event for event, _ in self._entries)

    @property
    def unsaved(self) -> list[AnyEvent]:
        """The events that this log could not take; they live in memory only."""
        return [event for event, _ in self._entries[self._saved[0] :]]

    def append(self, event: AnyEvent) -> AnyEvent:
        """Numbers the event, writes its line and returns it once it is on the disk.

        When the write fails the event still belongs to the case: it stands in `unsaved`,
        and goes out before the next one or with `retry`. Do not append it again.

        Raises:
            JournalError: the event is in memory only.
            InputError: the event could not be read back (control characters, too long, a
                number that is not finite, a second head); it is not taken at all.
            UsageError: the journal is closed.
        """
        if self._handle < 0:
            raise UsageError(f"the log {_shown(self.path)} is closed")
        numbered, line, notices = _sealed(_shown(self.path), self._entries, event)
        self._entries.append((numbered, line))
        self.notices.extend(notices)
        self.retry()
        return numbered

    def retry(self) -> None:
        """Writes what is unsaved, in order.

        Raises:
            JournalError: it still cannot be written.
        """
        while len(self._entries) > self._saved[0]:
            try:
                self._write(self._entries[self._saved[0]][1])
            except (OSError, JournalError) as error:
                self._cut_back()
                self._fail(error)

    def save_elsewhere(self, path: str | os.PathLike[str]) -> Path:
        """Writes the whole case, unsaved events included, as a new log; returns its path.

        This journal stays as it is; carry on with `Journal.open` of the new one.

        Raises:
            JournalError: the file exists, or the place does not take it.
        """
        place = _placed(path)
        _publish(place, b"".join(line for _, line in self._entries))
        return place

    def close(self) -> None:
        """Closes the file and so drops the lock; again is no fault."""
        if self._handle >= 0:
            handle, self._handle = self._handle, -1
            os.close(handle)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def _write(self, line: bytes) -> None:
        count, length = self._saved
        if self._dirty:
            os.ftruncate(self._handle, length)
        elif os.fstat(self._handle).st_size != length:
            raise JournalError("something else has changed the file")
        # Stays set if an interrupt falls in between: the next write then starts clean.
        self._dirty = True
        os.lseek(self._handle, length, os.SEEK_SET)
        _write_all(self._handle, line)
        os.fsync(self._handle)
        # A file whose folder was removed still takes writes; they would be lost.
        _require_same(self.path, self._handle)
        self._saved = (count + 1, length + len(line))
        self._dirty = False

    def _cut_back(self) -> None:
        if self._dirty:
            with contextlib.suppress(OSError):
                os.ftruncate(self._handle, self._saved[1])
                os.fsync(self._handle)
                self._dirty = False

    def _fail(self, error: Exception) -> NoReturn:
        count = len(self.unsaved)
        what = "1 event is" if count == 1 else f"{count} events are"
        raise JournalError(
            f"the log {_shown(self.path)} takes no more: {_reason(error)}; "
            f"{what} in memory only, save the case elsewhere"
        ) from error


class _Unreadable(Exception):
    """A line that is no JSON object; what a write that was cut short leaves behind."""

    def __init__(self, message: str, column: int = 1, value: str = "", accepted: str = "") -> None:
        super().__init__(message)
        self.column, self.value, self.accepted = column, value, accepted


@dataclass(slots=True)
class _Reader:
    """Takes lines one after the other and keeps what they say and what is wrong with them."""

    file: str
    entries: list[Entry] = field(default_factory=list)
    line: int = 0
    hash_before: str = START
    notices: list[str] = field(default_factory=list)
    problems: list[Problem] = field(default_factory=list)
    torn: bytes = b""

    def read(self, stream: BinaryIO) -> None:
        """Takes every line of a log."""
        for raw, last in _lines(stream):
            self.take(raw, last)
            if len(raw) > MAX_LINE or len(self.problems) >= MAX_PROBLEMS:
                self.fault("the rest of the log was not read")
                break
        if self.line == 0:
            self.line = 1
            self.fault("the log is empty", accepted="a line that opens the case")
        elif self.torn and self.line == 1:
            self.fault("the log holds no whole line", accepted="a line that opens the case")

    def take(self, raw: bytes, last: bool) -> None:
        """Takes one line with its line feed; never raises on bad input."""
        self.line += 1
        expected, self.hash_before = self.hash_before, _digest(raw)
        try:
            event = self._event(_parsed(raw), raw, expected)
        except _Unreadable as fault:
            if last and len(raw) <= MAX_LINE:
                self.torn = raw
            else:
                self.fault(str(fault), "", fault.value, fault.accepted, fault.column)
        except RecursionError:
            self.fault("nested too deeply")
        else:
            self._keep(event, raw)

    def fault(
        self, message: str, path: str = "", value: str = "", accepted: str = "", column: int = 1
    ) -> None:
        """Notes a problem with the line at hand."""
        where = Origin(self.file, self.line, column)
        self.problems.append(Problem(where, path, message, value, accepted))

    def tear(self) -> str:
        """The torn end in words."""
        return f"line {self.line} was not written whole ({len(self.torn)} bytes)"

    def _event(self, data: Any, raw: bytes, expected: str) -> AnyEvent | None:
        if not isinstance(data, dict):
            self.fault("not a JSON object", value=brief(data))
            return None
        if found := next(filter(None, map(_CONTROL_IN_TEXT.search, _texts(data))), None):
            # Written as an escape it is sound JSON, but would work on a terminal when shown.
            shown = f"U+{ord(found[0]):04X}"
            self.fault("control characters are not accepted", "", shown, "plain text")
            return None
        self._check_hashes(data, raw, expected)
        content = {k: v for k, v in data.items() if k not in ("hash", "hash_before")}
        try:
            return event_from_data(content)
        except ValidationError as error:
            self.problems.extend(self._record_problems(error))
            return None

    def _check_hashes(self, data: dict[str, Any], raw: bytes, expected: str) -> None:
        body = {key: value for key, value in data.items() if key != "hash"}
        try:
            own, whole = _digest(_canonical(body)), _canonical(data) + b"\n"
        except ValueError:
            return self.fault("holds a value that cannot be written as JSON in UTF-8")
        if data.get("hash_before") != expected:
            before = "the line before" if self.line > 1 else "the start of a log"
            self.fault(f"does not follow from {before}", "hash_before")
        if data.get("hash") != own:
            self.fault("the line was altered", "hash")
        elif whole != raw:
            self.fault("the line is not as it was written", accepted="canonical JSON")

    def _record_problems(self, error: ValidationError) -> Iterator[Problem]:
        where = Origin(self.file, self.line, 1)
        for fault in error.errors(include_url=False):
            message, accepted, got = str(fault["msg"]), "", fault["input"]
            if fault["type"] == "union_tag_invalid":
                message, got = "unknown event", fault["ctx"]["tag"]
                accepted = str(fault["ctx"]["expected_tags"])
            elif fault["type"] == "union_tag_not_found":
                message = "no `event` that says what this is"
            elif fault["type"] == "extra_forbidden":
                message = "unknown key"
            shown = "" if fault["type"] == "missing" else brief(got)
            path = _shown(dotted(fault["loc"][1:])[:100]) or "event"
            yield Problem(where, path, message, shown, accepted)

    def _keep(self, event: AnyEvent | None, raw: bytes) -> None:
        if event is None:
            return
        if isinstance(event, Opened) != (self.line == 1):
            message = "a second head" if self.line > 1 else "the case is not opened first"
            self.fault(message, "event", event.event)
        if event.number != self.line - 1:
            self.fault("out of order", "number", str(event.number), str(self.line - 1))
        if self.entries and event.at < (before := self.entries[-1][0].at):
            back = before - event.at
            self.notices.append(f"line {self.line}: the clock was set back by {back}")
        self.entries.append((event, raw))


def _sealed(file: str, entries: list[Entry], event: AnyEvent) -> tuple[AnyEvent, bytes, list[str]]:
    """The event with its number, its line, and notices; tried by reading it back.

    Raises:
        InputError: reading the line would not give the same event.
    """
    numbered = event.model_copy(update={"number": len(entries)})
    before = _digest(entries[-1][1]) if entries else START
    reader = _Reader(file, entries[-1:], len(entries), before)
    what = f"the {event.event} event cannot be recorded"
    try:
        body = {**event_to_data(numbered), "hash_before": before}
        line = _canonical({**body, "hash": _digest(_canonical(body))}) + b"\n"
    except ValueError as error:
        raise InputError(f"{what}: it holds a value that JSON has no form for") from error
    reader.take(line, last=False)
    if reader.problems:
        raise InputError(what, reader.problems)
    if reader.entries[-1][0] != numbered:
        raise InputError(f"{what}: it would not read back the same")
    return numbered, line, reader.notices


def _parsed(raw: bytes) -> Any:
    if len(raw) > MAX_LINE:
        limit = f"at most {MAX_LINE} bytes"
        raise _Unreadable("the line is too long", accepted=limit)
    if not raw.endswith(b"\n"):
        raise _Unreadable("the line has no end", accepted="a line feed")
    try:
        text = raw[:-1].decode("utf-8")
    except UnicodeDecodeError as error:
        shown = f"0x{raw[error.start]:02X}"
        raise _Unreadable("not UTF-8 text", error.start + 1, shown, "UTF-8") from None
    if found := _CONTROL.search(text):
        shown = f"U+{ord(found[0]):04X}"
        message = "control characters are not accepted"
        raise _Unreadable(message, found.start() + 1, shown, "printable text")
    try:
        return json.loads(text, parse_constant=_no_constant)
    except json.JSONDecodeError as error:
        raise _Unreadable(f"not JSON: {error.msg}", error.colno, brief(text)) from None
    except ValueError:
        raise _Unreadable("not JSON: a number out of range", 1, brief(text)) from None


def _no_constant(word: str) -> NoReturn:
    raise ValueError(word)


def _lines(stream: BinaryIO) -> Iterator[tuple[bytes, bool]]:
    """Lines with their line feed, and whether each is the last; none read past `MAX_LINE`."""
    line = stream.readline(MAX_LINE + 1)
    while line:
        following = stream.readline(MAX_LINE + 1)
        yield line, not following
        line = following


def _texts(value: Any) -> Iterator[str]:
    """Every string in plain JSON data, keys included."""
    if isinstance(value, str):
        yield value
    elif isinstance(value, dict):
        for key, inner in value.items():
            yield key
            yield from _texts(inner)
    elif isinstance(value, list):
        for inner in value:
            yield from _texts(inner)


def _canonical(data: dict[str, Any]) -> bytes:
    text = json.dumps(
        data, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False
    )
    return text.encode("utf-8")


def _digest(content: bytes) -> str:
    return hashlib.sha256(content).hexdigest()


def _placed(path: str | os.PathLike[str]) -> Path:
    """The path made absolute, so that a later change of folder does not move the log."""
    name = os.fspath(path)
    with _told(f"the log {_shown(name)} cannot be placed"):
        try:
            if b"\0" in os.fsencode(name):
                raise JournalError(f"{_shown(name)} cannot be a file name")
        except UnicodeEncodeError:
            raise JournalError(f"{_shown(name)} cannot be a file name") from None
        return Path(name).absolute()


def _shown(path: str | Path) -> str:
    """A path for a one-line message, whatever is in its name."""
    return "".join(c if c.isprintable() else "�" for c in str(path))


@contextlib.contextmanager
def _told(what: str) -> Iterator[None]:
    try:
        yield
    except OSError as error:
        raise JournalError(f"{what}: {_reason(error)}") from error


def _reason(error: Exception) -> str:
    if isinstance(error, OSError):
        return _REASONS.get(error.errno or 0) or error.strerror or type(error).__name__
    return str(error)


def _require_file(place: Path) -> None:
    """Refuses folders, and pipes and devices, which would block or never end."""
    mode = os.stat(place).st_mode
    if stat.S_ISDIR(mode):
        raise IsADirectoryError(errno.EISDIR, os.strerror(errno.EISDIR))
    if not stat.S_ISREG(mode):
        raise JournalError(f"{_shown(place)} is not a file that can hold a log")


def _require_same(place: Path, handle: int) -> None:
    try:
        there = os.stat(place)
    except FileNotFoundError:
        raise JournalError("the file has been removed or its folder has gone") from None
    if not os.path.samestat(there, os.fstat(handle)):
        raise JournalError("another file has taken its place")


if sys.platform == "win32":
    import msvcrt

    # Far past the end of any log: Windows keeps readers away from bytes that are locked.
    _LOCK_AT = 0x7FFF_0000

    def _lock(handle: int, name: str) -> list[str]:
        os.lseek(handle, _LOCK_AT, os.SEEK_SET)
        try:
            msvcrt.locking(handle, msvcrt.LK_NBLCK, 1)
        except OSError:
            raise JournalError(f"the log {name} is open in another session") from None
        os.lseek(handle, 0, os.SEEK_SET)
        return []

else:
    import fcntl

    def _lock(handle: int, name: str) -> list[str]:
        """Takes the log for this process; returns notices.

        The lock is on the log itself and ends with the process, so none is ever left over.
        """
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except (BlockingIOError, PermissionError):
            raise JournalError(f"the log {name} is open in another session") from None
        except OSError as error:
            return [
                f"no lock could be taken ({_reason(error)}); "
                f"make sure that nobody else writes to {name}"
            ]
        return []


def _write_all(handle: int, content: bytes) -> None:
    rest = memoryview(content)
    while rest:
        rest = rest[os.write(handle, rest) :]


def _set_aside(place: Path, content: bytes) -> str:
    """Keeps a torn line in a new side file and returns the name to show."""
    handle, side = _new_file(place, "torn")
    try:
        _write_all(handle, content)
        os.fsync(handle)
    finally:
        os.close(handle)
    _sync_folder(place.parent)
    return _shown(side)


def _new_file(place: Path, kind: str) -> tuple[int, Path]:
    """The first free `PATH.kind-N`, open for writing; never follows a link put there."""
    for n in itertools.count(1):
        side = place.with_name(f"{place.name}.{kind}-{n}")
        with contextlib.suppress(FileExistsError):
            return os.open(side, os.O_WRONLY | os.O_CREAT | os.O_EXCL | _BINARY, MODE), side
    raise AssertionError  # pragma: no cover


def _publish(place: Path, content: bytes) -> None:
    """Puts a whole new file under its name, on the disk, or nothing at all."""
    with _told(f"the log {_shown(place)} cannot be created"):
        if os.path.lexists(place):
            raise JournalError(f"{_shown(place)} exists already; nothing was written to it")
        _make_folders(place.parent)
        handle, draft = _new_file(place, "new")
        try:
            try:
                _write_all(handle, content)
                os.fsync(handle)
            finally:
                os.close(handle)
            _rename_new(draft, place)
        finally:
            with contextlib.suppress(OSError):
                draft.unlink()
        _sync_folder(place.parent)


def _rename_new(draft: Path, place: Path) -> None:
    """Gives the draft its name, in one step and never over a file that is there."""
    try:
        os.link(draft, place)
    except FileExistsError:
        raise
    except OSError:
        # Not every file system has hard links: reserve the name, then replace the empty file.
        os.close(os.open(place, os.O_WRONLY | os.O_CREAT | os.O_EXCL, MODE))
        try:
            os.replace(draft, place)
        except BaseException:
            place.unlink()
            raise


def _make_folders(folder: Path) -> None:
    missing = [above for above in (folder, *folder.parents) if not above.exists()]
    if not missing and not folder.is_dir():
        raise NotADirectoryError(errno.ENOTDIR, os.strerror(errno.ENOTDIR))
    folder.mkdir(parents=True, exist_ok=True)
    for made in missing:
        _sync_folder(made.parent)


def _sync_folder(folder: Path) -> None:
    """Makes new names in a folder last; some systems and file systems cannot, and need not."""
    if sys.platform == "win32":
        return
    try:
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
    except OSError as error:
        if error.errno not in _NO_FOLDER_SYNC:
            raise
