"""Ways for pipes on a lattice of plates and channels.

Plates stand where columns and bands cross; between two columns, and between two bands, lie
`CHANNELS` lines that only pipes use. A way is the cheapest chain of lattice steps (Dijkstra
1959, led by the distance left as in Hart, Nilsson & Raphael 1968), where bends, crossings
and long ways cost. Pipes that share an end may run together, which draws manifolds.
"""

from __future__ import annotations

import heapq
from collections import defaultdict
from collections.abc import Callable, Collection, Iterable
from dataclasses import dataclass, field
from itertools import pairwise

CHANNELS = 3
"""Lines for pipes between neighbouring columns and between neighbouring bands."""
STEP, BEND, CROSS, SHARED = 1.0, 2.5, 4.0, 0.35
"""Costs; chosen by eye."""
Point = tuple[int, int]
Way = tuple[Point, ...]


def lattice(number: int) -> int:
    """The lattice line on which column or band `number` (from 0) stands."""
    return CHANNELS + number * (CHANNELS + 1)


def stands_on(line: int) -> int | None:
    """Inverse of `lattice`; None for a line between columns or bands."""
    number, rest = divmod(line - CHANNELS, CHANNELS + 1)
    return number if rest == 0 and number >= 0 else None


@dataclass(slots=True)
class Lattice:
    """The lattice with the ways laid so far; ways are numbered in the order of laying."""

    columns: int
    bands: int
    blocked: set[Point]
    ways: list[Way] = field(default_factory=list)
    used: dict[Point, set[int]] = field(default_factory=lambda: defaultdict(set))
    steps: dict[tuple[Point, Point], set[int]] = field(default_factory=lambda: defaultdict(set))

    def lay(
        self,
        starts: Collection[Point],
        ends: Collection[Point],
        friend: Callable[[int], float | None],
        barred: Collection[Point] = (),
    ) -> Way | None:
        """Lays the cheapest way from any of `starts` to any of `ends`.

        Args:
            starts: plate points of the source.
            ends: plate points of the target.
            friend: per laid way, the extra cost of running together with it, or None where
                that may not be.
            barred: points that this way may not pass.

        Returns:
            The points of the way, both ends included; None where there is no way.
        """
        before, self.blocked = self.blocked, self.blocked.union(barred)
        way = self._search(set(starts), set(ends), friend)
        self.blocked = before
        if way is not None:
            number = len(self.ways)
            self.ways.append(way)
            for point in way:
                self.used[point].add(number)
            for a, b in pairwise(way):
                self.steps[_step(a, b)].add(number)
        return way

    def _search(
        self, starts: set[Point], ends: set[Point], friend: Callable[[int], float | None]
    ) -> Way | None:
        goal = _box(ends)
        best: dict[tuple[Point, int], float] = {}
        came: dict[tuple[Point, int], tuple[Point, int]] = {}
        heap: list[tuple[float, float, Point, int]] = []
        for point in sorted(starts):
            best[point, -1] = 0.0
            heapq.heappush(heap, (_left(point, goal), 0.0, point, -1))
        while heap:
            _, cost, point, heading = heapq.heappop(heap)
            if point in ends:
                return self._traced(came, (point, heading))
            if cost > best[point, heading]:
                continue
            for turn, after in enumerate(_neighbours(point)):
                extra = self._price(point, heading, after, turn, starts, ends, friend)
                if extra is None:
                    continue
                total = cost + extra
                if total < best.get((after, turn), float("inf")) - 1e-9:
                    best[after, turn] = total
                    came[after, turn] = (point, heading)
                    heapq.heappush(heap, (total + _left(after, goal), total, after, turn))
        return None

    @staticmethod
    def _traced(came: dict[tuple[Point, int], tuple[Point, int]], state: tuple[Point, int]) -> Way:
        found = [state[0]]
        while state in came:
            state = came[state]
            found.append(state[0])
        return tuple(reversed(found))

    def _price(
        self,
        point: Point,
        heading: int,
        after: Point,
        turn: int,
        starts: set[Point],
        ends: set[Point],
        friend: Callable[[int], float | None],
    ) -> float | None:
        """The cost of one step, or None where it cannot be made."""
        inside = lattice(self.columns - 1) + CHANNELS, lattice(self.bands - 1) + CHANNELS
        if not (0 <= after[0] <= inside[0] and 0 <= after[1] <= inside[1]):
            return None
        if after in starts or (after in self.blocked and after not in ends):
            return None
        if heading >= 0 and (heading + 2) % 4 == turn:
            return None
        bends = heading not in (-1, turn)
        together = self._together(_step(point, after), friend)
        if together is None:
            return None
        meets = self._meets(point, heading, turn, friend) if heading >= 0 else 0.0
        if meets is None:
            return None
        vertical_on_column = turn % 2 == 1 and stands_on(after[0]) is not None
        return (
            (SHARED if together >= 0 else STEP)
            + max(together, 0.0)
            + (BEND if bends else 0.0)
            + meets
            + (0.9 if vertical_on_column else 0.0)
        )

    def _together(
        self, step: tuple[Point, Point], friend: Callable[[int], float | None]
    ) -> float | None:
        """-1 where the step is free, else the extra cost of sharing it; None: it is taken."""
        worst = -1.0
        for number in self.steps.get(step, ()):
            extra = friend(number)
            if extra is None:
                return None
            worst = max(worst, extra)
        return worst

    def _meets(
        self, point: Point, heading: int, turn: int, friend: Callable[[int], float | None]
    ) -> float | None:
        """The cost of what other ways do at a point that is passed; None where it is barred."""
        cost = 0.0
        for number in self.used.get(point, ()):
            if friend(number) is not None:
                continue
            if heading != turn:
                return None
            # Straight across a way that goes straight too.
            dx = turn % 2 == 0
            sides = [(point[0], point[1] - 1), (point[0], point[1] + 1)]
            if not dx:
                sides = [(point[0] - 1, point[1]), (point[0] + 1, point[1])]
            if not all(number in self.steps.get(_step(point, s), ()) for s in sides):
                return None
            cost += CROSS
        return cost


def _step(a: Point, b: Point) -> tuple[Point, Point]:
    return (a, b) if a < b else (b, a)


def _neighbours(point: Point) -> Iterable[Point]:
    """Right, down, left, up."""
    x, y = point
    return ((x + 1, y), (x, y + 1), (x - 1, y), (x, y - 1))


def _box(points: Iterable[Point]) -> tuple[int, int, int, int]:
    xs, ys = zip(*points, strict=True)
    return min(xs), min(ys), max(xs), max(ys)


def _left(point: Point, box: tuple[int, int, int, int]) -> float:
    """A lower bound of the cost left."""
    x, y = point
    dx = max(box[0] - x, 0, x - box[2])
    dy = max(box[1] - y, 0, y - box[3])
    return SHARED * (dx + dy)
