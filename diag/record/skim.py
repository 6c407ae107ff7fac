"""Reading many finished logs fast: the hashes are checked, the records are not.

`read_journal` checks every field and says what is wrong with each line; a fleet's worth of
logs only needs to know which of them are sound. A line whose hashes fit was written by
`Journal`, which had read it back first, so its fields are taken as they are.
"""

from __future__ import annotations

import hashlib
import json
import os
import re
from dataclasses import dataclass
from datetime import datetime
from typing import Any, get_args

from diag.errors import InputError
from diag.record import events as ev
from diag.record.events import AnyEvent, Event, Opened, Standing
from diag.record.journal import MAX_LINE, START

MAX_LOG = 50_000_000
"""Bytes in one log."""

_KINDS: dict[str, type[Event]] = {
    str(get_args(kind.model_fields["event"].annotation)[0]): kind
    for kind in Event.__subclasses__()
    if kind.__module__ == ev.__name__
}
_TUPLES = {"worked_on", "overlays", "causes", "opened", "closed", "because"}
_OWN = re.compile(rb'"hash":"([0-9a-f]{64})",')
_BEFORE = re.compile(rb'"hash_before":"([0-9a-f]{64})",')


@dataclass(frozen=True, slots=True)
class Skimmed:
    """A sound log."""

    events: tuple[AnyEvent, ...]
    identity: str
    """Hash of its first line: copies share it, and so does a copy that was carried on."""


def skim(path: str | os.PathLike[str]) -> Skimmed:
    """Reads one log.

    Raises:
        InputError: it cannot be read, or is not sound from the first to the last line.
    """
    try:
        with open(path, "rb") as stream:
            content = stream.read(MAX_LOG + 1)
    except (OSError, ValueError) as error:
        raise InputError(f"cannot be read: {getattr(error, 'strerror', None) or error}") from None
    if len(content) > MAX_LOG:
        raise InputError("too long for a log")
    lines = content.splitlines(keepends=True)
    if not lines:
        raise InputError("empty")
    before, found = START, []
    for number, raw in enumerate(lines):
        found.append(_event(raw, number, before))
        before = hashlib.sha256(raw).hexdigest()
    return Skimmed(tuple(found), hashlib.sha256(lines[0]).hexdigest())


def _event(raw: bytes, number: int, before: str) -> AnyEvent:
    line = number + 1
    if not raw.endswith(b"\n") or len(raw) > MAX_LINE:
        raise InputError(f"line {line} is not whole")
    own, link = _OWN.search(raw), _BEFORE.search(raw)
    if own is None or link is None:
        raise InputError(f"line {line} carries no hashes")
    if link[1].decode() != before:
        raise InputError(f"line {line} does not follow from the line before")
    # The line is canonical JSON, so without its own hash it is what that hash was made of.
    body = raw[: own.start()] + raw[own.end() : -1]
    if hashlib.sha256(body).hexdigest() != own[1].decode():
        raise InputError(f"line {line} was altered")
    try:
        return _made(json.loads(body), number)
    except (ValueError, KeyError, TypeError, AttributeError, RecursionError):
        raise InputError(f"line {line} is not an event") from None


def _made(data: dict[str, Any], number: int) -> AnyEvent:
    kind = _KINDS[data["event"]]
    if data["number"] != number or (kind is Opened) != (number == 0):
        raise ValueError("out of order")
    data["at"] = datetime.fromisoformat(data["at"])
    for name in ("before", "after"):
        if name in data:
            causes = tuple(map(tuple, data[name].get("causes", ())))
            data[name] = Standing.model_construct(**{**data[name], "causes": causes})
    for name in _TUPLES & data.keys():
        data[name] = tuple(data[name])
    made: Any = kind.model_construct(None, **data)
    return made  # type: ignore[no-any-return]
