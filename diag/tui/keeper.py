"""Keeps a case on disk while it is worked on.

What the disk does not take waits in memory and goes out before the next event; nothing is
acknowledged before it is either on the disk or said not to be.
"""

from __future__ import annotations

from contextlib import suppress
from pathlib import Path

from diag.errors import DiagError, InputError
from diag.record.events import AnyEvent, Opened
from diag.record.journal import Journal, JournalError


class Keeper:
    """The findings log of one case; it begins with the case's first event.

    Args:
        path: where the log is, or is to be begun.
        journal: the log, where it has been begun.
    """

    def __init__(self, path: Path, journal: Journal | None = None) -> None:
        self.path, self.journal = path, journal
        self._told = 0
        self._waiting: list[AnyEvent] = []

    @property
    def unsaved(self) -> int:
        """Events that are in memory only."""
        return len(self.journal.unsaved) if self.journal else len(self._waiting)

    def notices(self) -> list[str]:
        """What the person should be told since the last time."""
        if self.journal is None:
            return []
        new = self.journal.notices[self._told :]
        self._told = len(self.journal.notices)
        return new

    def save(self, event: AnyEvent) -> None:
        """Keeps one event.

        Raises:
            JournalError: it is in memory only.
            InputError: it is not taken at all.
        """
        if self.journal is not None:
            self.journal.append(event)
        else:
            self._waiting.append(event)
            self._begin(self.path)

    def _begin(self, path: Path) -> None:
        head, *rest = self._waiting
        assert isinstance(head, Opened)
        try:
            self.journal = Journal.create(path, head)
        except InputError:
            self._waiting.pop()
            raise
        self.path, self._waiting = path, []
        for event in rest:
            with suppress(JournalError):
                self.journal.append(event)
        self.journal.retry()

    def elsewhere(self, text: str) -> Path:
        """Writes the whole case to a new file; where the log takes no more, it moves there.

        Raises:
            JournalError: the file exists, or the place does not take it.
        """
        place = Path(text).expanduser()
        if self.journal is None:
            self._begin(place)
            return place
        written = self.journal.save_elsewhere(place)
        if self.journal.unsaved:
            old, self.journal = self.journal, Journal.open(written)
            old.close()
            self.path, self._told = place, len(self.journal.notices)
        return written

    def close(self) -> int:
        """Tries once more to write what is unsaved, and closes; returns what is lost."""
        with suppress(DiagError):
            if self.journal is not None:
                self.journal.retry()
            elif self._waiting:
                self._begin(self.path)
        lost = self.unsaved
        if self.journal is not None:
            self.journal.close()
        return lost
