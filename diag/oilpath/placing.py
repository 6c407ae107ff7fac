"""Where the parts of a circuit stand: columns along the flow, bands of parallel ways.

The oil runs a ring. From the tank on the left the trunk runs to the right along the top band;
at the right end it turns; the users stand there, one above the other, and their oil runs home
to the left in rows, joins, and passes the coolers along the bottom row into the tank again.
Shunts stand beneath what they lead round, air runs along the foot, instruments stand at the
part that they tap.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field

from diag.oilpath.flow import Flow

Cell = tuple[int, int]
"""Column from the tank, band from the trunk (negative above it)."""


@dataclass(slots=True)
class Placing:
    """The cells taken so far.

    Attributes:
        cells: part to cell.
        inside: parts that stand inside the tank.
        last: the column of the users, the one on the right.
        foot: the lowest band of the loop; the tank reaches down to it.
    """

    flow: Flow
    cells: dict[str, Cell] = field(default_factory=dict)
    inside: set[str] = field(default_factory=set)
    last: int = 0
    foot: int = 0
    _held: dict[int, list[tuple[float, float]]] = field(default_factory=lambda: defaultdict(list))
    """Per band, the stretches of columns that pipes of placed parts pass."""

    def free(self, cell: Cell) -> bool:
        column, band = cell
        if cell in self.cells.values():
            return False
        if column == 0 and 0 <= band <= self.foot:
            return False
        return not any(a < column < b for a, b in self._held[band])

    def clear(self, band: int, start: float, end: float) -> bool:
        """Whether a band has nothing between two columns, the ends left out."""
        crossed = any(a < end and start < b for a, b in self._held[band])
        stands = any(b == band and start < c < end for c, b in self.cells.values())
        return not (crossed or stands)

    def hold(self, band: int, start: float, end: float) -> None:
        """Keeps a stretch of a band for a pipe."""
        self._held[band].append((start, end))


def placed(flow: Flow) -> Placing:
    """The cell of every part."""
    placing = Placing(flow)
    placing.cells[flow.tank] = (0, 0)
    longest = max(flow.back.values(), default=0)
    placing.last = max([*flow.feed.values(), longest + 1, 1])
    for name in flow.trunk:
        placing.cells[name] = (flow.feed[name], 0)
    end = placing.cells[flow.trunk[-1]][0] if flow.trunk else 0
    placing.hold(0, 0, max(end, placing.last))
    lanes = _place_feed(placing)
    _place_back(placing, lanes + 1)
    _place_shunts(placing, [n for n in flow.shunts if n not in placing.cells])
    _place_vents(placing)
    _place_rest(placing)
    return placing


# -- the way out ----------------------------------------------------------------------------


def _place_feed(placing: Placing) -> int:
    """Shunts of the trunk and the feed off the trunk; returns the lowest band used."""
    flow = placing.flow
    _place_shunts(placing, [n for n in flow.shunts if _beside_trunk(placing, n)])
    for chain in _chains([n for n in flow.feed if n not in placing.cells], flow):
        ahead = [placing.cells[n][0] for n in flow.before.get(chain[0], ()) if n in placing.cells]
        after = [p.target for p in flow.pipes if p.source == chain[-1] and p.target in flow.feed]
        start = min(ahead, default=0)
        rejoins = [placing.cells[n][0] for n in after if n in placing.cells]
        end = min(rejoins) if rejoins else placing.last + 1
        shift = 0 if rejoins else max(0, (placing.last - flow.feed[chain[-1]]) // 2)
        band = next(b for b in range(1, 99) if placing.clear(b, start, end))
        placing.hold(band, start, end)
        for name in chain:
            placing.cells[name] = (flow.feed[name] + shift, band)
    return max((band for _, band in placing.cells.values()), default=0)


def _beside_trunk(placing: Placing, name: str) -> bool:
    return all(end in (*placing.flow.trunk, placing.flow.tank) for end in placing.flow.shunts[name])


def _chains(names: Sequence[str], flow: Flow) -> list[list[str]]:
    """Parts that follow one another, as far as each has one before and one after among them."""
    found: list[list[str]] = []
    for name in sorted(names, key=lambda n: flow.feed[n]):
        ahead = [n for n in flow.before.get(name, ()) if n in names]
        home = [c for c in found if c[-1] in ahead]
        if len(home) == 1:
            home[0].append(name)
        else:
            found.append([name])
    return found


def _place_shunts(placing: Placing, names: Sequence[str]) -> None:
    """Beneath the trunk, or above the bottom row, in the middle of what they lead round."""
    for name in names:
        ends = [placing.cells[n] for n in placing.flow.shunts[name] if n in placing.cells]
        if not ends:
            continue
        columns = sorted(column for column, _ in ends)
        first, final = columns[0], columns[-1]
        between = list(range(first + 1, final)) or [ends[0][0]]
        column = between[len(between) // 2] if len(between) % 2 else between[len(between) // 2 - 1]
        top = max(band for _, band in ends)
        bands = range(1, 99) if top == 0 else range(top - 1, -99, -1)
        reach = (min(first, column - 1), max(final, column))
        band = next(b for b in bands if placing.clear(b, *reach) and placing.free((column, b)))
        placing.hold(band, *reach)
        placing.cells[name] = (column, band)


# -- the way home ---------------------------------------------------------------------------


def _place_back(placing: Placing, first: int) -> None:
    """Rows from the band `first` downwards."""
    flow = placing.flow
    rows = _Rows(placing, first)
    roots = [n for n in flow.back if n not in flow.onward]
    for root in sorted(roots, key=rows.depth):
        rows.place(root)
    placing.foot = max(rows.next - 1, 0)
    for name, row in rows.row.items():
        placing.cells[name] = (placing.last - _step_home(flow, name), row)
    for name, row in rows.row.items():
        column = placing.cells[name][0]
        onward = flow.onward.get(name)
        end = placing.cells[onward][0] if onward else 0
        placing.hold(row, end, column)


def _step_home(flow: Flow, name: str) -> int:
    """Steps from the users; within its slack a part stands where others of its kind do."""
    early = flow.back[name]
    onward = flow.onward.get(name)
    late = flow.back[onward] - 1 if onward else early
    if late <= early or name in flow.users:
        return early
    kind = flow.parts[name].kind
    peers = [flow.back[n] for n in flow.back if n != name and flow.parts[n].kind == kind]
    return max(range(early, late + 1), key=lambda step: (peers.count(step), -step))


class _Rows:
    """Gives every part on the way home its row, users of the inner feeds at the top."""

    def __init__(self, placing: Placing, first: int) -> None:
        self.placing, self.flow, self.next = placing, placing.flow, first
        self.row: dict[str, int] = {}
        self._children: dict[str, list[str]] = defaultdict(list)
        for name, onward in self.flow.onward.items():
            self._children[onward].append(name)
        self._order = {name: i for i, name in enumerate(self.flow.parts)}

    def depth(self, name: str) -> tuple[float, int]:
        """What comes first has the innermost feed."""
        users = list(self._users(name))
        lanes = [self._lane(user) for user in users]
        first = min((self._order[user] for user in users), default=self._order[name])
        return -sum(lanes) / max(len(lanes), 1), first

    def _users(self, name: str) -> Iterable[str]:
        if name in self.flow.users:
            yield name
        for child in self._children[name]:
            yield from self._users(child)

    def _lane(self, user: str) -> float:
        """The band of the feed of a user; straight off the trunk is innermost of all."""
        ahead = [n for n in self.flow.before.get(user, ()) if n in self.placing.cells]
        ends = set(self.flow.trunk[-1:])
        bands = [99 if n not in ends and self.placing.cells[n][1] == 0 else
                 self.placing.cells[n][1] for n in ahead]  # fmt: skip
        return max(bands, default=0)

    def place(self, name: str) -> None:
        children = sorted(self._children[name], key=self.depth)
        if len(children) < 2 and self._hangers(name):
            self.next += 1
        for child in children:
            self.place(child)
        if not children:
            self.row[name] = self.next
            self.next += 1
            return
        chosen = children[-1] if name in self.flow.home else children[(len(children) - 1) // 2]
        self.row[name] = self.row[chosen]

    def _hangers(self, name: str) -> bool:
        """Whether a part hangs on this one that needs a cell of its own above it."""
        placed = self.flow.loop | set(self.flow.vents)
        return any(
            p.target == name and p.medium == "vent" and p.source not in placed
            for p in self.flow.pipes
        )


# -- air and instruments --------------------------------------------------------------------


def _place_vents(placing: Placing) -> None:
    """Along the foot, from beneath the chambers towards the tank."""
    flow, band, column = placing.flow, placing.foot + 1, placing.last
    for name in flow.vents:
        sources = [p.source for p in flow.pipes if p.target == name and p.medium == "vent"]
        over = [placing.cells[n][0] for n in sources if n in placing.cells and n != flow.tank]
        if len(sources) == len(over) == 1 and placing.free((over[0], band)):
            # All its air comes from one part: it stands beneath that part.
            placing.cells[name] = (over[0], band)
            continue
        column = min([column, *over])
        while column > 1 and not placing.free((column, band)):
            column -= 1
        placing.cells[name] = (max(column, 1), band)
        column -= 1


def _place_rest(placing: Placing) -> None:
    """Everything else stands at the nearest free cell to what it is joined to."""
    flow = placing.flow
    waiting = [n for n in flow.parts if n not in placing.cells]
    later = []
    for chain in _hanging(placing, waiting):
        host = _host(placing, chain)
        if host is not None and _into_tank(placing, chain, host):
            continue
        if host is None or not _above(placing, chain, host):
            later.append((chain, host))
    for chain, host in later:
        _place_chain(placing, chain, host)


def _hanging(placing: Placing, waiting: Sequence[str]) -> list[list[str]]:
    """Parts off the loop in chains, from the one that is joined to the loop outwards."""
    flow, left, found = placing.flow, list(waiting), []
    while left:
        firsts = [n for n in left if _neighbours(flow, n) & placing.cells.keys()] or left[:1]
        chains: list[list[str]] = []
        for first in firsts:
            if any(first in chain for chain in chains):
                continue
            chain = [first]
            while more := [n for n in left if n in _neighbours(flow, chain[-1])
                           and n not in chain and n not in firsts]:  # fmt: skip
                chain.append(more[0])
            chains.append(chain)
        longest = max(chains, key=len)
        found.append(longest)
        left = [n for n in left if n not in longest]
        for name in longest:
            placing.cells.setdefault(name, (-1, 0))
    for chain in found:
        for name in chain:
            del placing.cells[name]
    return found


def _neighbours(flow: Flow, name: str) -> set[str]:
    return {
        p.target if p.source == name else p.source
        for p in flow.pipes
        if name in (p.source, p.target) and p.medium not in ("drive", "heat")
    }


def _host(placing: Placing, chain: Sequence[str]) -> str | None:
    """The placed part that the chain hangs on: what its first part taps, before anything."""
    flow = placing.flow
    tapped = [p.source for p in flow.pipes if p.target == chain[0] and p.source in placing.cells]
    other = [n for n in _neighbours(flow, chain[0]) if n in placing.cells]
    return next(iter([*tapped, *sorted(other)]), None)


def _into_tank(placing: Placing, chain: Sequence[str], host: str) -> bool:
    """The oil itself and what is joined to the tank alone stand inside it, where it is tall."""
    flow = placing.flow
    supplies = any(p.source == chain[0] and p.medium == "supply" for p in flow.pipes)
    alone = len(chain) == 1 and _neighbours(flow, chain[0]) == {flow.tank}
    if host != flow.tank or not alone or (supplies and flow.parts[chain[0]].role != "oil"):
        return False
    taken = {placing.cells[n][1] for n in placing.inside}
    bands = [b for b in range(1, placing.foot) if b not in taken]
    if not bands:
        return False
    placing.cells[chain[0]] = (0, bands[len(placing.inside)] if len(bands) > 1 else bands[0])
    placing.inside.add(chain[0])
    return True


def _above(placing: Placing, chain: Sequence[str], host: str) -> bool:
    """Straight above a part of the trunk, and on to the right, where that is free."""
    column, band = placing.cells[host]
    run = [(column + k, band - 1) for k in range(len(chain))]
    if band != 0 or not all(c <= placing.last and placing.free((c, b)) for c, b in run):
        return False
    placing.cells.update(zip(chain, run, strict=True))
    return True


def _place_chain(placing: Placing, chain: Sequence[str], host: str | None) -> None:
    home = placing.cells[host] if host else (placing.last, placing.foot)
    bands = [band for _, band in placing.cells.values()]
    best: tuple[float, Cell, int] | None = None
    for band in range(min(bands) - 1, max(bands) + 2):
        new = 0.8 if not min(bands) <= band <= max(bands) else 0.0
        for column in range(placing.last + 1):
            for way in (1, -1):
                run = [(column + way * k, band) for k in range(len(chain))]
                if not all(0 <= c <= placing.last and placing.free((c, b)) for c, b in run):
                    continue
                far = abs(column - home[0]) * 1.1 + abs(band - home[1]) + new
                far += 0.0 if way == 1 else 0.05
                far += 1.5 if 0 < band <= placing.foot else 0.0
                if best is None or far < best[0] - 1e-9:
                    best = (far, (column, band), way)
    if best is None:
        best = (0.0, (0, max(bands) + 1), 1)
    _, (column, band), way = best
    for k, name in enumerate(chain):
        placing.cells[name] = (column + way * k, band)
