"""From lattice lines to character positions: how wide plates and how long gaps are."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from diag.oilpath.layout import Layout
from diag.oilpath.names import fits_uncut, label_of
from diag.oilpath.route import CHANNELS, lattice, stands_on

NARROW, WIDE = 9, 22
"""Letters of a plate at least and at most, its edge included."""
LINES = 2
"""Lines of a plate."""
TAIL = 4
"""Letters kept for a probability and a pin."""


@dataclass(frozen=True, slots=True)
class Ruler:
    """Character positions along one axis.

    Attributes:
        starts: lattice line to its first character; lines that no pipe keeps to are absent.
        sizes: characters of each plate line.
        total: characters in all.
    """

    starts: Mapping[int, int]
    sizes: Sequence[int]
    total: int

    def middle(self, line: int) -> int:
        """The middle of a plate, or the one character of a channel line.

        A line without a character of its own takes the last one before it.
        """
        number = stands_on(line)
        if line in self.starts:
            return self.starts[line] + (self.sizes[number] // 2 if number is not None else 0)
        return self._before(line)

    def first(self, line: int) -> int:
        """The first character of a line; see `middle` for lines without one."""
        return self.starts[line] if line in self.starts else self._before(line)

    def _before(self, line: int) -> int:
        earlier = [other for other in self.starts if other < line]
        if not earlier:
            return 0
        nearest = max(earlier)
        number = stands_on(nearest)
        return self.starts[nearest] + (self.sizes[number] - 1 if number is not None else 0)


def used_lines(layout: Layout) -> tuple[set[int], set[int]]:
    """Channel lines that pipes run along: upright ones by x, level ones by y."""
    across: set[int] = set()
    down: set[int] = set()
    for run in layout.runs:
        for (x, y), (u, v) in zip(run.way, run.way[1:], strict=False):
            if x == u and stands_on(x) is None:
                across.add(x)
            if y == v and stands_on(y) is None:
                down.add(y)
    return across, down


def least(count: int, used: set[int], size: int, gap: int) -> int:
    """Characters that an axis takes when every plate takes `size` of them."""
    gaps = (_gap(number, count, used, gap) for number in range(count + 1))
    return count * size + sum(gaps)


def _gap(number: int, count: int, used: set[int], gap: int) -> int:
    """Characters before plate line `number`."""
    lines = sum(line in used for line in channels(number))
    return max(lines, gap if 0 < number < count else 0)


def channels(number: int) -> range:
    """The channel lines before plate line `number`."""
    first = number * (CHANNELS + 1)
    return range(first, first + CHANNELS)


def columns_ruler(layout: Layout, used: set[int], width: int) -> Ruler:
    """Plates as wide as their names ask for, as far as there is room, then wider gaps."""
    count = layout.columns
    spare = width - least(count, used, NARROW, 1)
    sizes = [NARROW] * count
    wanted = [_wanted(layout, column) for column in range(count)]
    while spare > 0 and (short := [c for c in range(count) if sizes[c] < wanted[c]]):
        sizes[max(short, key=lambda c: (wanted[c] - sizes[c], -c))] += 1
        spare -= 1
    gap = min(3, 1 + max(0, spare) // max(count - 1, 1))
    return ruler(count, used, sizes, gap)


def _wanted(layout: Layout, column: int) -> int:
    """Width that shows every name of a column uncut, with its probability."""
    found = NARROW
    for name, (where, _) in layout.cells.items():
        if where == column:
            label = label_of(layout.parts[name])
            width = next((w for w in range(4, WIDE) if fits_uncut(label, w)), WIDE)
            walls = 2 if name in layout.inside else 0
            found = max(found, min(width + 1 + walls + TAIL - 2, WIDE))
    return found


def bands_ruler(layout: Layout, used: set[int], height: int) -> Ruler:
    """Plates of `LINES` lines, with a line between the bands where there is room."""
    gap = 1 if least(layout.bands, used, LINES, 1) <= height else 0
    return ruler(layout.bands, used, [LINES] * layout.bands, gap)


def ruler(count: int, used: set[int], sizes: Sequence[int], gap: int) -> Ruler:
    """An axis of `count` plate lines with the channel lines in use between them."""
    starts: dict[int, int] = {}
    place = 0
    for number in range(count + 1):
        lines = [line for line in channels(number) if line in used]
        wide = _gap(number, count, used, gap)
        for index, line in enumerate(lines, start=(wide - len(lines)) // 2):
            starts[line] = place + index
        place += wide
        if number < count:
            starts[lattice(number)] = place
            place += sizes[number]
    return Ruler(starts, sizes, place)
