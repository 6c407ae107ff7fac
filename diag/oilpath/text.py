"""The drawing in character cells, for a terminal.

Every plate is a name on two lines with a shade at its left edge, its probability and a dot
where findings are pinned. Supply is a heavy line, scavenge a double one, bypass and spill a
light one, vent air dashed, sense and signal dotted: nothing hangs on colour.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise

from diag.circuit.records import Medium
from diag.oilpath.boxes import DOUBLE, HEAVY, LIGHT, NONE, Arms, box
from diag.oilpath.flow import Part
from diag.oilpath.layout import Layout, Run
from diag.oilpath.marks import LEVELS, SHADES, Marks, level
from diag.oilpath.names import label_of, on_two_lines
from diag.oilpath.route import Point, lattice
from diag.oilpath.ruler import (
    LINES,
    NARROW,
    Ruler,
    bands_ruler,
    columns_ruler,
    least,
    used_lines,
)

STEPS = "①②③④⑤⑥⑦⑧⑨⑩⑪⑫⑬⑭⑮⑯⑰⑱⑲⑳"
_WEIGHT: Mapping[str, int] = {"supply": HEAVY, "scavenge": DOUBLE}
_LEVEL, _UPRIGHT = (NONE, LIGHT, NONE, LIGHT), (LIGHT, NONE, LIGHT, NONE)
_THIN: Mapping[str, Mapping[Arms, str]] = {
    "vent": {_LEVEL: "╌", _UPRIGHT: "╎"},
    "sense": {_LEVEL: "┈", _UPRIGHT: "┊"},
    "signal": {_LEVEL: "┈", _UPRIGHT: "┊"},
    "heat": {_LEVEL: "∿", _UPRIGHT: "≀"},
}
_ROUND: Mapping[Arms, str] = {
    (NONE, LIGHT, LIGHT, NONE): "╭",
    (NONE, NONE, LIGHT, LIGHT): "╮",
    (LIGHT, NONE, NONE, LIGHT): "╯",
    (LIGHT, LIGHT, NONE, NONE): "╰",
}
_ARROWS = {(1, 0): "▶", (-1, 0): "◀", (0, 1): "▼", (0, -1): "▲"}
_SMALL = {(1, 0): "▸", (-1, 0): "◂", (0, 1): "▾", (0, -1): "▴"}
_RANK: tuple[Medium, ...] = (
    "signal", "sense", "heat", "drive", "fuel", "vent", "spill", "bypass", "scavenge", "supply",
)  # fmt: skip
"""Which line shows where two lie on one another: the later one."""
ROOM = (26, 5)
"""Characters and lines of the smallest clearing worth writing in."""


@dataclass(frozen=True, slots=True)
class Cell:
    """One character and what it belongs to, for its colour.

    `style` is a medium, `plate`, `tank` or `oil`, followed by the words that apply:
    `shade0` to `shade4`, `way`, `selected`, `folded`.
    """

    char: str = " "
    style: str = ""


@dataclass(frozen=True, slots=True)
class Box:
    """A rectangle of characters: its first column and row, width and height."""

    x: int
    y: int
    width: int
    height: int


@dataclass(frozen=True, slots=True)
class Drawing:
    """Rows of cells.

    Attributes:
        boxes: where each part stands.
        clearing: the largest empty rectangle inside the ring, if there is one worth using.
    """

    rows: tuple[tuple[Cell, ...], ...]
    boxes: Mapping[str, Box]
    clearing: Box | None

    def plain(self) -> str:
        """The drawing without colour, one line a row."""
        return "\n".join("".join(cell.char for cell in row).rstrip() for row in self.rows)


def fits(layout: Layout, width: int, height: int) -> bool:
    """Whether the layout can be drawn in so many characters."""
    across, down = used_lines(layout)
    wide = least(layout.columns, across, NARROW, 1)
    high = least(layout.bands, down, LINES, 0) + bool(layout.overboard)
    return wide <= width and high <= height


def text(
    layout: Layout, marks: Marks, width: int, height: int, selected: str | None = None
) -> Drawing:
    """The circuit in at most `width` by `height` characters, where it fits them.

    Where it does not fit (see `fits`), the drawing is as small as it can be and larger than
    asked for.
    """
    across, down = used_lines(layout)
    columns = columns_ruler(layout, across, width)
    canvas = _Canvas(layout, marks, columns, bands_ruler(layout, down, height), selected)
    canvas.pipes()
    canvas.tank()
    for name in layout.parts:
        if name != layout.tank:
            canvas.plate(name)
    canvas.overboard()
    return canvas.drawing()


@dataclass(slots=True)
class _Arm:
    """Half a line through a character, from its middle to one side."""

    medium: Medium
    way: bool


@dataclass(slots=True)
class _Canvas:
    layout: Layout
    marks: Marks
    columns: Ruler
    bands: Ruler
    selected: str | None
    cells: dict[Point, Cell] = field(default_factory=dict)
    boxes: dict[str, Box] = field(default_factory=dict)

    def drawing(self) -> Drawing:
        width = max([self.columns.total, *(x + 1 for x, _ in self.cells)])
        height = max([self.bands.total, *(y + 1 for _, y in self.cells)])
        blank = Cell()
        rows = tuple(
            tuple(self.cells.get((x, y), blank) for x in range(width)) for y in range(height)
        )
        tank = self.boxes[self.layout.tank]
        inside = Box(
            tank.x + tank.width + 1,
            tank.y + LINES,
            width - tank.width - 2,
            tank.height - LINES,
        )
        return Drawing(rows, self.boxes, largest_gap(self.cells.keys(), inside))

    # -- pipes

    def pipes(self) -> None:
        joined = _joined(self.layout, self.marks)
        arms: dict[Point, list[_Arm | None]] = {}
        order = sorted(self.layout.runs, key=lambda run: _RANK.index(run.pipe.medium))
        for run in order:
            _trace(arms, self._stretch(run), run.pipe.medium, run in joined)
        for point, here in arms.items():
            self.cells[point] = _piece(here)
        for run in order:
            self._arrow(arms, run, run in joined)

    def _stretch(self, run: Run) -> list[Point]:
        """Every character that a run passes, those of its plates included.

        A pipe along a band keeps to the first line of its plates.
        """
        ends = [(self.columns.middle(x), self.bands.first(y)) for x, y in run.way]
        found = [ends[0]]
        for x, y in ends[1:]:
            while found[-1] != (x, y):
                a, b = found[-1]
                found.append((a + (x > a) - (x < a), b) if a != x else (a, b + (y > b) - (y < b)))
        return found

    def _arrow(self, arms: Mapping[Point, list[_Arm | None]], run: Run, on_way: bool) -> None:
        """A head where the run meets its target, unless it has joined a greater pipe there."""
        points = self._stretch(run)
        inside = _points(self._frame(run.pipe.target))
        outside = [p for p in points if p not in inside]
        if not outside or outside[-1] in _points(self._frame(run.pipe.source)):
            return
        last = outside[-1]
        media = {arm.medium for arm in arms[last] if arm is not None}
        if max(media, key=_RANK.index) != run.pipe.medium:
            return
        after = points[points.index(last) + 1]
        heads = _ARROWS if run.pipe.medium in ("supply", "scavenge") else _SMALL
        head = heads[after[0] - last[0], after[1] - last[1]]
        self.cells[last] = Cell(head, _style(run.pipe.medium, on_way))

    # -- plates

    def _frame(self, name: str) -> Box:
        column, band = self.layout.cells[name]
        x, width = self.columns.starts[lattice(column)], self.columns.sizes[column]
        y, height = self.bands.starts[lattice(band)], self.bands.sizes[band]
        if name == self.layout.tank:
            foot = self.bands.starts[lattice(self.layout.foot)]
            height = foot - y + self.bands.sizes[self.layout.foot]
        elif name in self.layout.inside:
            x, width = x + 1, width - 2
        return Box(x, y, width, height)

    def plate(self, name: str) -> None:
        """Shade, name, step of the way, probability and pins, on two lines."""
        part, frame = self.layout.parts[name], self._frame(name)
        self.boxes[name] = frame
        shade = level(self.marks.of(part.members))
        edge = SHADES[shade] or ("┆" if part.folded else "▏")
        step, tail = self._step(part), self._tail(part)
        room = frame.width - 1
        first, second = on_two_lines(
            label_of(part), room - len(step), room - len(tail) - bool(tail)
        )
        rows = (first.ljust(room - len(step)) + step, second.ljust(room - len(tail)) + tail)
        style = self._plate_style(part, shade)
        for dy, row in enumerate(rows):
            for dx, char in enumerate(f"{edge}{row}"[: frame.width]):
                self.cells[frame.x + dx, frame.y + dy] = Cell(char, style)

    def _plate_style(self, part: Part, shade: int) -> str:
        flags = ["tank" if part.id == self.layout.tank else "plate", f"shade{shade}"]
        flags += ["way"] if self._step(part) else []
        flags += ["selected"] if part.id == self.selected else []
        flags += ["folded"] if part.folded else []
        return " ".join(flags)

    def _step(self, part: Part) -> str:
        """The number of a part on the way of the chosen cause."""
        seen = list(dict.fromkeys(self.layout.part_of(n) for n in self.marks.way))
        if part.id not in seen or seen.index(part.id) >= len(STEPS):
            return ""
        return STEPS[seen.index(part.id)]

    def _tail(self, part: Part) -> str:
        chance, pins = self.marks.of(part.members), self.marks.pinned(part.members)
        telling = any(p.standing and not p.unremarkable for p in pins)
        dot = "●" if telling else "○" if pins else ""
        return (f"{min(99, round(100 * chance))}%" if chance >= LEVELS[0] else "") + dot

    def tank(self) -> None:
        """The tank as a vessel: its name, the surface of the oil, walls and bottom."""
        self.plate(self.layout.tank)
        frame = self.boxes[self.layout.tank]
        part = self.layout.parts[self.layout.tank]
        style = self._plate_style(part, level(self.marks.of(part.members)))
        right, end = frame.x + frame.width - 1, frame.y + frame.height - 1
        surface = frame.y + LINES
        for x, y in _points(Box(frame.x, surface, frame.width, end - surface + 1)):
            inner = "≈" if y == surface else "─" if y == end else " "
            left = "╰" if y == end else "│"
            wall = "╯" if y == end else "│"
            char = left if x == frame.x else wall if x == right else inner
            self.cells[x, y] = Cell(char, f"{style} oil" if char in "≈ " else style)

    def overboard(self) -> None:
        for name in self.layout.overboard:
            frame = self._frame(name)
            word = "▾ overboard"
            x = max(0, min(frame.x + 1, self.columns.total - len(word)))
            for index, char in enumerate(word):
                self.cells.setdefault((x + index, frame.y + frame.height), Cell(char, "vent"))


def _points(frame: Box) -> set[Point]:
    return {
        (x, y)
        for x in range(frame.x, frame.x + frame.width)
        for y in range(frame.y, frame.y + frame.height)
    }


def _trace(
    arms: dict[Point, list[_Arm | None]], points: Sequence[Point], medium: Medium, on_way: bool
) -> None:
    """Lays the arms of a run; a later medium lies on top."""
    for before, here in pairwise(points):
        out = {(0, -1): 0, (1, 0): 1, (0, 1): 2, (-1, 0): 3}[
            here[0] - before[0], here[1] - before[1]
        ]
        for point, side in ((before, out), (here, (out + 2) % 4)):
            sides = arms.setdefault(point, [None] * 4)
            old = sides[side]
            sides[side] = _Arm(medium, on_way or bool(old and old.way))


def _joined(layout: Layout, marks: Marks) -> list[Run]:
    """The pipes along the way of the chosen cause."""
    way = [layout.part_of(name) for name in marks.way]
    pairs = [(a, b) for a, b in pairwise(way) if a and b and a != b]
    return [run for a, b in pairs for run in layout.between(a, b)[:1]]


def _style(medium: Medium, on_way: bool) -> str:
    return f"{medium} way" if on_way else medium


def _piece(sides: Sequence[_Arm | None]) -> Cell:
    """The character of a point where pipes meet or pass."""
    here = [arm for arm in sides if arm is not None]
    top = max(here, key=lambda arm: _RANK.index(arm.medium))
    style = _style(top.medium, any(arm.way for arm in here))
    a, b, c, d = (_WEIGHT.get(arm.medium, LIGHT) if arm else NONE for arm in sides)
    shape: Arms = (a, b, c, d)
    if len({arm.medium for arm in here}) == 1 and top.medium in _THIN:
        thin = _THIN[top.medium].get(shape) or _ROUND.get(shape)
        if thin:
            return Cell(thin, style)
    return Cell(box(shape), style)


def largest_gap(taken: Collection[Point], inside: Box) -> Box | None:
    """The largest rectangle of free characters, one free character around it, or None.

    Row by row the free stretch above every character is a column of a histogram, and the
    largest rectangle under it is found with a stack.
    """
    best: Box | None = None
    depth = [0] * inside.width
    for y in range(inside.y, inside.y + inside.height):
        for i in range(inside.width):
            depth[i] = 0 if (inside.x + i, y) in taken else depth[i] + 1
        for left, width, height in _under(depth):
            found = Box(inside.x + left + 1, y - height + 1, width - 2, height)
            if best is None or found.width * found.height > best.width * best.height:
                best = found
    if best is None or best.width < ROOM[0] or best.height < ROOM[1]:
        return None
    return best


def _under(depth: Sequence[int]) -> list[tuple[int, int, int]]:
    """(left, width, height) of the maximal rectangles under a histogram."""
    found = []
    stack: list[int] = []
    for i, height in enumerate((*depth, 0)):
        while stack and depth[stack[-1]] >= height:
            top = depth[stack.pop()]
            left = stack[-1] + 1 if stack else 0
            found.append((left, i - left, top))
        stack.append(i)
    return found
