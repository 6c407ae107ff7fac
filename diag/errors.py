"""Problems, the one error family, and the exit codes of every command."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from difflib import get_close_matches
from enum import IntEnum


class Exit(IntEnum):
    """What the process answers its caller; one meaning each, for scripts."""

    DONE = 0
    PROBLEMS = 1
    USAGE = 2
    INPUT = 3
    INTERNAL = 4


@dataclass(frozen=True, slots=True, order=True)
class Origin:
    """Where an object was read: file, line and column (both from 1)."""

    file: str = ""
    line: int = 0
    column: int = 0

    def __str__(self) -> str:
        if not self.line:
            return self.file or "(no file)"
        return f"{self.file}:{self.line}:{self.column}"


@dataclass(frozen=True, slots=True)
class Problem:
    """One thing wrong with an input, placed so that a person can go and mend it."""

    where: Origin
    path: str
    """Place inside the document, as `components.2.kind`."""
    message: str
    value: str = ""
    """The offending value as it was written, shortened."""
    accepted: str = ""
    """What would have been taken instead."""
    doubt: bool = False
    """A doubt deserves a look but does not stop the circuit from loading."""

    def __str__(self) -> str:
        place = f" at {self.path}" if self.path else ""
        got = f" (got {self.value})" if self.value else ""
        want = f"; accepted: {self.accepted}" if self.accepted else ""
        return f"{self.where}: {self.message}{place}{got}{want}"


class DiagError(Exception):
    """Base of everything diag raises on purpose; carries its exit code."""

    code = Exit.INPUT


class UsageError(DiagError):
    """The command or call itself is wrong."""

    code = Exit.USAGE


class InputError(DiagError):
    """An input cannot be used; `problems` lists every fault found in it."""

    def __init__(self, message: str, problems: Iterable[Problem] = ()) -> None:
        super().__init__(message)
        self.problems = tuple(problems)

    def __str__(self) -> str:
        lines = [super().__str__(), *(f"  {problem}" for problem in self.problems)]
        return "\n".join(lines)


class UnknownName(UsageError):
    """A name that the circuit does not have; says which ones come nearest."""

    def __init__(self, what: str, name: str, known: Iterable[str]) -> None:
        self.nearest = tuple(get_close_matches(name, list(known), n=3, cutoff=0.5))
        hint = f"; nearest: {', '.join(self.nearest)}" if self.nearest else ""
        super().__init__(f"unknown {what} {name!r}{hint}")
