"""Where the work stands and what it costs to get to where a step can be done.

An opening is paid once and stays open, unless the engine goes to a state in which it has to
be shut. An engine state costs minutes to reach and minutes to leave.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from itertools import product


@dataclass(frozen=True, slots=True)
class Stand:
    """Where the work stands: engine state and what is open."""

    engine: str = ""
    opened: frozenset[str] = frozenset()


@dataclass(frozen=True, slots=True)
class Wants:
    """What a step needs before it can start."""

    engine: str = ""
    """Name of a requirement on the engine, a key of `Ground.answers`; empty for none."""
    opens: tuple[str, ...] = ()
    wait: float = 0.0
    """Minutes to wait once the engine has come into the state."""


@dataclass(frozen=True, slots=True)
class Door:
    """Something opened for access."""

    minutes: float
    """To open and to close again, paid together when it is opened."""
    inside: tuple[str, ...] = ()
    """Doors that must be open first."""
    engine: str = ""
    """Requirement on the engine while it is being opened."""
    shut_in: frozenset[str] = frozenset()
    """Engine states in which it is shut, unless the step itself wants it open."""


@dataclass(frozen=True, slots=True)
class Spell:
    """An engine state: minutes into it and out of it."""

    reach: float = 0.0
    leave: float = 0.0


@dataclass(frozen=True)
class Ground:
    """Engine states and doors, with the minutes between one stand and the next.

    Attributes:
        spells: the engine states by name.
        answers: per requirement, the engine states that meet it.
        shortcuts: (from, to) states between which the reaching costs this instead.
    """

    spells: Mapping[str, Spell] = field(default_factory=lambda: {"": Spell()})
    answers: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    shortcuts: Mapping[tuple[str, str], float] = field(default_factory=dict)
    doors: Mapping[str, Door] = field(default_factory=dict)
    _known: dict[tuple[Stand, Wants], tuple[float, Stand]] = field(
        default_factory=dict, repr=False, compare=False
    )

    def go(self, stand: Stand, wants: Wants) -> tuple[float, Stand]:
        """Minutes from `stand` to where a step that `wants` this can start, and that stand."""
        key = (stand, wants)
        if key not in self._known:
            self._known[key] = self._go(stand, wants)
        return self._known[key]

    def _go(self, stand: Stand, wants: Wants) -> tuple[float, Stand]:
        needed = self.needed(wants.opens)
        engine, minutes = stand.engine, 0.0
        for name in needed:
            if name not in stand.opened:
                door = self.doors[name]
                more, engine = self._turn(engine, door.engine)
                minutes += more + door.minutes
        more, there = self._turn(engine, wants.engine)
        minutes += more + (wants.wait if there != stand.engine else 0.0)
        kept = {n for n in stand.opened if there not in self.doors[n].shut_in}
        return minutes, Stand(there, frozenset(kept | set(needed)))

    def needed(self, opens: tuple[str, ...]) -> list[str]:
        """The doors in `opens` with those around them, outer ones first."""
        found: list[str] = []
        for name in opens:
            for each in (*self.needed(self.doors[name].inside), name):
                if each not in found:
                    found.append(each)
        return found

    def _turn(self, engine: str, required: str) -> tuple[float, str]:
        """Minutes to the cheapest engine state that meets a requirement, and that state."""
        if not required or engine in self.answers[required]:
            return 0.0, engine
        ways = [(self._between(engine, to), to) for to in self.answers[required]]
        return min(ways)

    def _between(self, start: str, end: str) -> float:
        reach = self.shortcuts.get((start, end), self.spells[end].reach)
        return self.spells[start].leave + reach

    def at_least(self, stand: Stand, wants: Wants) -> float:
        """Minutes that getting from `stand` to `wants` costs at least, whatever lies between."""
        doors = sum(
            self.doors[n].minutes for n in self.needed(wants.opens) if n not in stand.opened
        )
        return doors + self.turning(stand.engine, wants.engine)

    def turning(self, engine: str, required: str) -> float:
        """Least minutes from an engine state to one that meets a requirement, by any detour."""
        return min((self.distances[engine, to] for to in self.answers.get(required, ())), default=0)

    @cached_property
    def distances(self) -> dict[tuple[str, str], float]:
        """Least minutes between any two engine states (Floyd 1962, Warshall 1962)."""
        names = tuple(self.spells)
        found = {(a, b): 0.0 if a == b else self._between(a, b) for a in names for b in names}
        for via, a, b in product(names, repeat=3):
            found[a, b] = min(found[a, b], found[a, via] + found[via, b])
        return found

    def leave(self, stand: Stand) -> float:
        """Minutes to leave the engine as it has to be left at the end."""
        return self.spells[stand.engine].leave
