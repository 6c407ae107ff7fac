"""The drawing of a circuit before it has a size: parts in cells, pipes along lattice ways."""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import dataclass
from itertools import product

from diag.circuit.graph import OIL
from diag.circuit.model import Circuit
from diag.circuit.records import Medium
from diag.oilpath.flow import DRAWN, SIDEWAYS, Flow, Part, Pipe, flow_of, parts_of, pipes_of
from diag.oilpath.placing import Cell, placed
from diag.oilpath.route import CHANNELS, Lattice, Point, Way, lattice

FAR = 3
"""Cells between the ends of a signal line from which it is told by name instead of drawn."""
_ORDER: tuple[Medium, ...] = (
    "supply", "scavenge", "spill", "bypass", "vent", "sense", "signal", "heat", "fuel", "drive",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Run:
    """A pipe with its way; `also` lists other lines between the same two parts."""

    pipe: Pipe
    way: Way
    also: tuple[Medium, ...] = ()


@dataclass(frozen=True, slots=True)
class Layout:
    """Everything that a drawing needs to know.

    Attributes:
        cells: part to (column, band); bands count from 0 at the top.
        inside: parts that stand inside the tank.
        tank: the tank, which reaches over the bands `top` to `foot` of column 0.
        runs: pipes that are drawn.
        told: lines that are too long to be drawn and are told by name.
        overboard: the part that air leaves by, if there is one.
    """

    flow: Flow
    cells: Mapping[str, Cell]
    inside: frozenset[str]
    tank: str
    top: int
    foot: int
    columns: int
    bands: int
    runs: tuple[Run, ...]
    told: tuple[Pipe, ...]
    overboard: tuple[str, ...]

    @property
    def parts(self) -> Mapping[str, Part]:
        return self.flow.parts

    def part_of(self, component: str) -> str | None:
        """The part that shows a component, itself or folded."""
        if component in self.parts:
            return component
        return next((p.id for p in self.parts.values() if component in p.members), None)

    def clearing(self) -> tuple[int, int, int, int] | None:
        """The largest empty rectangle of cells inside the ring, as (column, band, columns,
        bands), at least three columns wide and two bands high."""
        taken = {_spot(cell) for cell in self.cells.values()}
        taken |= {point for run in self.runs for point in run.way}
        best: tuple[int, tuple[int, int, int, int]] | None = None
        for column, band in product(range(1, self.columns - 2), range(self.top + 1, self.foot)):
            for wide in range(3, self.columns - column + 1):
                high = self._depth(column, band, wide, taken)
                if high >= 2 and (best is None or wide * high > best[0]):
                    best = (wide * high, (column, band, wide, high))
        return best[1] if best else None

    def _depth(self, column: int, band: int, wide: int, taken: Collection[Point]) -> int:
        """How many bands down from `band` are empty over `wide` columns."""
        columns = range(lattice(column) - 1, lattice(column + wide - 1) + 2)
        high = 0
        while band + high < self.foot:
            lines = range(lattice(band + high) - 1, lattice(band + high) + CHANNELS)
            if any((x, y) in taken for x in columns for y in lines):
                break
            high += 1
        return high

    def between(self, first: str, second: str) -> list[Run]:
        """The pipes that join two parts, in either direction."""
        ends = {first, second}
        return [run for run in self.runs if {run.pipe.source, run.pipe.target} == ends]


def layout(circuit: Circuit, media: Collection[Medium] = DRAWN) -> Layout:
    """The circuit laid out, nothing folded."""
    return arranged(parts_of(circuit), pipes_of(circuit, media))


def arranged(parts: Mapping[str, Part], pipes: Sequence[Pipe]) -> Layout:
    """Any parts and pipes laid out."""
    flow = flow_of(parts, pipes)
    placing = placed(flow)
    top = min(band for _, band in placing.cells.values())
    cells = {name: (column, band - top) for name, (column, band) in placing.cells.items()}
    bands = max(band for _, band in cells.values()) + 1
    columns = placing.last + 1
    foot = placing.foot - top
    spots = {name: [_spot(cell)] for name, cell in cells.items()}
    spots[flow.tank] = [(lattice(0), y) for y in range(lattice(-top), lattice(foot) + 1)]
    told = [p for p in pipes if _far(p, cells)]
    drawn = [p for p in pipes if p not in told and not _hidden(p, placing.inside, flow)]
    return Layout(
        flow=flow,
        cells=cells,
        inside=frozenset(placing.inside),
        tank=flow.tank,
        top=-top,
        foot=foot,
        columns=columns,
        bands=bands,
        runs=tuple(_runs(drawn, cells, spots, columns, bands, flow.users)),
        told=tuple(told),
        overboard=tuple(n for n in flow.vents if not _leads_on(n, pipes)),
    )


def _spot(cell: Cell) -> Point:
    return lattice(cell[0]), lattice(cell[1])


def _far(pipe: Pipe, cells: Mapping[str, Cell]) -> bool:
    (a, b), (c, d) = cells[pipe.source], cells[pipe.target]
    return pipe.medium == "signal" and abs(a - c) + abs(b - d) >= FAR


def _hidden(pipe: Pipe, inside: Collection[str], flow: Flow) -> bool:
    ends = (pipe.source, pipe.target)
    return flow.tank in ends and any(end in inside for end in ends)


def _leads_on(name: str, pipes: Sequence[Pipe]) -> bool:
    return any(p.source == name and p.medium == "vent" for p in pipes)


def _runs(
    pipes: Sequence[Pipe],
    cells: Mapping[str, Cell],
    spots: Mapping[str, list[Point]],
    columns: int,
    bands: int,
    users: Collection[str],
) -> list[Run]:
    """Lays the pipes: short straight ones first, then by what they carry."""
    firsts, also = _merged(pipes)
    field = Lattice(columns, bands, {point for points in spots.values() for point in points})
    laid: list[Pipe] = []
    runs = []
    for pipe in sorted(firsts, key=lambda p: _turn(p, cells)):
        ends = spots[pipe.source], spots[pipe.target]
        barred = _facing_home(pipe, cells, users)
        way = field.lay(*ends, _friend(pipe, laid), barred) or field.lay(*ends, lambda _: 6.0)
        if way is not None:
            laid.append(pipe)
            runs.append(Run(pipe, way, also.get((pipe.source, pipe.target), ())))
    return runs


def _facing_home(pipe: Pipe, cells: Mapping[str, Cell], users: Collection[str]) -> set[Point]:
    """The left side of a user belongs to the oil that leaves it."""
    if pipe.medium != "supply" or pipe.target not in users:
        return set()
    x, y = _spot(cells[pipe.target])
    return {(x - 1, y)}


def _merged(pipes: Sequence[Pipe]) -> tuple[list[Pipe], dict[tuple[str, str], tuple[Medium, ...]]]:
    """One pipe for each pair of parts, and what else runs the same way."""
    firsts: dict[tuple[str, str], Pipe] = {}
    also: dict[tuple[str, str], tuple[Medium, ...]] = {}
    for pipe in sorted(pipes, key=lambda p: _ORDER.index(p.medium)):
        ends = (pipe.source, pipe.target)
        if ends in firsts:
            also[ends] = (*also.get(ends, ()), pipe.medium)
        else:
            firsts[ends] = pipe
    return list(firsts.values()), also


def _turn(pipe: Pipe, cells: Mapping[str, Cell]) -> tuple[bool, int, int, str, str]:
    """Sorts pipes: those that need no bend, then by what they carry, the short ones first."""
    (a, b), (c, d) = cells[pipe.source], cells[pipe.target]
    bent = not (b == d and abs(a - c) == 1)
    far = abs(a - c) + abs(b - d)
    return bent, _ORDER.index(pipe.medium), far, pipe.source, pipe.target


def _friend(pipe: Pipe, laid: Sequence[Pipe]) -> Callable[[int], float | None]:
    """Which laid pipes this one may run together with, and what that costs extra."""

    def cost(number: int) -> float | None:
        other = laid[number]
        if _class(pipe.medium) != _class(other.medium):
            return None
        if pipe.source == other.source or pipe.target == other.target:
            return 0.0
        joined = pipe.source == other.target or pipe.target == other.source
        sideways = pipe.medium in SIDEWAYS or other.medium in SIDEWAYS
        return 0.6 if joined and sideways else None

    return cost


def _class(medium: Medium) -> str:
    if medium in OIL:
        return "oil"
    return "sense" if medium == "signal" else medium


__all__ = ["CHANNELS", "Layout", "Run", "arranged", "layout"]
