"""How oil runs round a circuit: what feeds, what is fed, what brings the oil back.

Everything is read off the lines: a part that is handed supply oil and hands it on feeds; one
that is handed supply oil and hands on scavenge oil is fed; what only sees scavenge oil brings
it back. Parts whose oil lines are all bypass or spill stand beside the way and are shunts.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass, field

from diag.circuit.graph import OIL
from diag.circuit.model import Circuit
from diag.circuit.records import Medium

SIDEWAYS: frozenset[Medium] = frozenset({"bypass", "spill"})
DRAWN: frozenset[Medium] = OIL | {"vent", "sense", "signal"}
"""Lines that are drawn unless others are asked for."""


@dataclass(frozen=True, slots=True)
class Part:
    """A component, or several folded into one."""

    id: str
    title: str
    role: str
    kind: str
    members: tuple[str, ...]
    """Components; more than one where it is folded."""

    @property
    def folded(self) -> bool:
        return len(self.members) > 1


@dataclass(frozen=True, slots=True)
class Pipe:
    """One line between two parts."""

    source: str
    target: str
    medium: Medium


@dataclass(frozen=True, slots=True)
class Flow:
    """The parts sorted by what they do for the oil.

    Attributes:
        feed: parts between tank and users, with the longest way from the tank in steps.
        users: parts at which supply turns into scavenge, in the order of the circuit.
        back: users and what follows them, with the longest way from a user.
        onward: per part of `back`, the next part on its way home; absent before the tank.
        trunk: the longest way from the tank through `feed`, the tank left out.
        home: parts of `back` that the oil of every user passes.
        shunts: parts beside the way, with what they take from and give to.
        vents: parts that only carry air, in the order in which the air passes them.
    """

    parts: Mapping[str, Part]
    pipes: tuple[Pipe, ...]
    tank: str
    feed: Mapping[str, int]
    users: tuple[str, ...]
    back: Mapping[str, int]
    onward: Mapping[str, str]
    trunk: tuple[str, ...]
    home: frozenset[str]
    shunts: Mapping[str, tuple[str, str]]
    vents: tuple[str, ...]
    before: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    """Per part of the loop, the parts of the loop that hand it oil."""

    @property
    def loop(self) -> set[str]:
        """Everything that the oil passes, the tank included."""
        return {self.tank, *self.feed, *self.back, *self.shunts}


def parts_of(circuit: Circuit) -> dict[str, Part]:
    """The components of a circuit as parts, nothing folded."""
    return {c.id: Part(c.id, c.title, c.role, c.kind, (c.id,)) for c in circuit.components.values()}


def pipes_of(circuit: Circuit, media: Collection[Medium] = DRAWN) -> tuple[Pipe, ...]:
    """The lines of a circuit that carry one of `media` and join two of its components."""
    known = circuit.components
    return tuple(
        Pipe(line.source, line.target, line.carries)
        for line in circuit.lines
        if line.carries in media and line.source in known and line.target in known
    )


def flow_of(parts: Mapping[str, Part], pipes: Sequence[Pipe]) -> Flow:
    """Sorts parts by what they do for the oil; any set of parts and pipes gives some order."""
    oil = [p for p in pipes if p.medium in OIL and p.source != p.target]
    tank = _tank(parts, oil)
    loop = _loop(oil, tank)
    shunts = _shunts(oil, loop - {tank})
    way = _without_rings([p for p in oil if not {p.source, p.target} & shunts.keys()], tank, loop)
    fed = {p.target for p in way if p.medium == "supply"}
    feeds = {p.source for p in way if p.medium == "supply"}
    feed = _ranks([p for p in way if p.target in fed & feeds], [tank])
    users = tuple(n for n in parts if n in fed - feeds)
    rest = loop - {tank, *feed, *users, *shunts}
    back = _ranks([p for p in way if p.source not in {tank, *feed}], [*users, *rest])
    onward = _onward(way, back)
    return Flow(
        parts=parts,
        pipes=tuple(pipes),
        tank=tank,
        feed={n: r for n, r in feed.items() if n != tank},
        users=users,
        back=back,
        onward=onward,
        trunk=_longest(way, feed, parts),
        home=_home(users, back, onward),
        shunts=shunts,
        vents=_vents(parts, pipes, loop),
        before=_before(way),
    )


def _tank(parts: Mapping[str, Part], oil: Sequence[Pipe]) -> str:
    """The tank with the most oil lines; the first part where there is none."""
    ends = [name for pipe in oil for name in (pipe.source, pipe.target)]
    tanks = [n for n, part in parts.items() if part.role == "tank"] or list(parts)
    return max(tanks, key=ends.count)


def _loop(oil: Sequence[Pipe], tank: str) -> set[str]:
    """What lies on a way from the tank and back; without a way back, what it reaches."""
    ahead = _reach(oil, tank)
    behind = _reach([Pipe(p.target, p.source, p.medium) for p in oil], tank)
    both = ahead & behind
    return both if len(both) > 1 else ahead


def _reach(pipes: Iterable[Pipe], start: str) -> set[str]:
    following = defaultdict(list)
    for pipe in pipes:
        following[pipe.source].append(pipe.target)
    found, open_ = {start}, [start]
    while open_:
        for name in following[open_.pop()]:
            if name not in found:
                found.add(name)
                open_.append(name)
    return found


def _shunts(oil: Sequence[Pipe], loop: set[str]) -> dict[str, tuple[str, str]]:
    found = {}
    for name in sorted(loop):
        into = [p for p in oil if p.target == name]
        out = [p for p in oil if p.source == name]
        if into and out and all(p.medium in SIDEWAYS for p in (*into, *out)):
            found[name] = (into[0].source, out[0].target)
    return found


def _without_rings(oil: Sequence[Pipe], tank: str, loop: set[str]) -> list[Pipe]:
    """Pipes of the loop without those into the tank and those that close a ring on the way."""
    way = [p for p in oil if {p.source, p.target} <= loop and p.target != tank]
    following = defaultdict(list)
    for pipe in way:
        following[pipe.source].append(pipe)
    closing: set[Pipe] = set()
    done: set[str] = set()
    path: list[str] = []

    def walk(name: str) -> None:
        path.append(name)
        for pipe in following[name]:
            if pipe.target in path:
                closing.add(pipe)
            elif pipe.target not in done:
                walk(pipe.target)
        done.add(path.pop())

    for name in (tank, *sorted(loop)):
        if name not in done:
            walk(name)
    return [p for p in way if p not in closing]


def _ranks(way: Sequence[Pipe], starts: Iterable[str]) -> dict[str, int]:
    """Longest way from any of `starts`, in steps; the pipes form no ring."""
    rank = dict.fromkeys(starts, 0)
    moved = True
    while moved:
        moved = False
        for pipe in way:
            if pipe.source in rank and rank.get(pipe.target, -1) <= rank[pipe.source]:
                rank[pipe.target] = rank[pipe.source] + 1
                moved = True
    return rank


def _longest(
    way: Sequence[Pipe], feed: Mapping[str, int], parts: Mapping[str, Part]
) -> tuple[str, ...]:
    order = {name: i for i, name in enumerate(parts)}
    into = _before([p for p in way if p.target in feed])
    name = min(feed, key=lambda n: (-feed[n], order[n]))
    found: list[str] = []
    while feed[name]:
        found.append(name)
        ahead = [n for n in into[name] if feed.get(n) == feed[name] - 1]
        name = min(ahead, key=order.__getitem__)
    return tuple(reversed(found))


def _before(way: Iterable[Pipe]) -> dict[str, tuple[str, ...]]:
    found: dict[str, tuple[str, ...]] = {}
    for pipe in way:
        found[pipe.target] = tuple(dict.fromkeys((*found.get(pipe.target, ()), pipe.source)))
    return found


def _onward(way: Sequence[Pipe], back: Mapping[str, int]) -> dict[str, str]:
    """Where several ways lead on, the longest."""
    found: dict[str, str] = {}
    left = {n: -r for n, r in _ranks(_turned(way, back), back).items()}
    for pipe in way:
        if pipe.source in back and pipe.target in back:
            known = found.get(pipe.source)
            if known is None or left[pipe.target] < left[known]:
                found[pipe.source] = pipe.target
    return found


def _turned(way: Sequence[Pipe], back: Mapping[str, int]) -> list[Pipe]:
    return [Pipe(p.target, p.source, p.medium) for p in way if p.source in back]


def _home(
    users: Sequence[str], back: Mapping[str, int], onward: Mapping[str, str]
) -> frozenset[str]:
    passed: dict[str, set[str]] = defaultdict(set)
    for user in users:
        name: str | None = user
        while name is not None and user not in passed[name]:
            passed[name].add(user)
            name = onward.get(name)
    return frozenset(n for n in back if len(passed[n]) == len(users) > 1)


def _vents(parts: Mapping[str, Part], pipes: Sequence[Pipe], loop: set[str]) -> tuple[str, ...]:
    """Parts off the oil's way that air is led to, nearest to the chambers first."""
    air = [p for p in pipes if p.medium == "vent"]
    led = {p.target for p in air} - loop
    way = _without_rings([p for p in air if p.target in led], "", led | loop)
    rank = _ranks(way, loop)
    return tuple(sorted((n for n in parts if n in led), key=lambda n: rank.get(n, 0)))
