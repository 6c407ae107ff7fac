"""A circuit as arrays: prior odds of the modes and what each does to each condition.

A condition has a *down* and an *up* side, each a leaky noisy-MAX (Henrion 1989; Díez 1993):
the chance that a side stays at or below a level is the product over the causes present of
the chance that each alone does. The state is `up - down`, so opposing causes cancel.
"""

from __future__ import annotations

import math
from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from diag.circuit.model import UNLISTED, Circuit, Node, Observable
from diag.circuit.records import Effect, Signal

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
Raised = tuple[tuple[str, float], ...]
"""Components with factors on the prior odds of their modes."""
World = tuple[tuple[str, float], ...]
"""Modes restored since the complaint, each with the chance that it worked; () as found."""


@dataclass(frozen=True, slots=True)
class Side:
    """Where a condition keeps its columns in the table of cumulative chances."""

    down: slice
    up: slice
    normal: int
    states: int


class Frame:
    """The arrays of one circuit; nothing here depends on findings.

    Attributes:
        refs: mode references, the unlisted cause last; index `len(refs)` means "no mode".
        component: (modes + 1,) component number of each mode, -1 for "no mode".
        cumulative: (modes + 1, columns) P(side stays at or below the column's level | mode
            alone); the last row is all ones.
        leak: (columns,) the same without any cause.
    """

    def __init__(self, circuit: Circuit) -> None:
        self.circuit = circuit
        modes = circuit.modes
        self.refs = (*modes, UNLISTED)
        self.index = {ref: i for i, ref in enumerate(self.refs)}
        names = [ref.split(".")[0] for ref in self.refs]
        self.components = tuple(dict.fromkeys(names))
        number = {name: i for i, name in enumerate(self.components)}
        self.component: Indices = np.array([*(number[n] for n in names), -1])
        self.nodes = tuple(circuit.nodes)
        self.sides: dict[str, Side] = {}
        self.cumulative, self.leak = self._tables(circuit.nodes)
        self._transfers: dict[tuple[str, World], Transfer] = {}
        self._worlds: dict[World, Array] = {(): self.cumulative}

    @property
    def none(self) -> int:
        """The index that stands for "no mode"."""
        return len(self.refs)

    def _tables(self, nodes: Mapping[str, Node]) -> tuple[Array, Array]:
        columns: list[Array] = []
        leaks: list[Array] = []
        at = 0
        for name, node in nodes.items():
            states, normal = node.record.states, node.normal
            below, above = states[:normal][::-1], states[normal + 1 :]
            self.sides[name] = Side(
                slice(at, at + len(below)),
                slice(at + len(below), at + len(states) - 1),
                normal,
                len(states),
            )
            at += len(states) - 1
            for side in (below, above):
                leaks.append(_stays(node.record.leak, side))
                columns.append(self._column(node.effects, side))
        if not columns:
            return np.ones((self.none + 1, 0)), np.ones(0)
        return np.hstack(columns), np.concatenate(leaks)

    def _column(self, effects: Mapping[str, Effect], side: tuple[str, ...]) -> Array:
        block = np.ones((self.none + 1, len(side)))
        for ref, effect in effects.items():
            block[self.index[ref]] = _stays(effect.gives, side)
        return block

    @cached_property
    def touched(self) -> dict[str, NDArray[np.bool_]]:
        """Per condition: (modes,) whether the mode moves it."""
        acts = self.cumulative[:-1] < 1.0
        return {
            name: np.asarray(acts[:, side.down.start : side.up.stop].any(axis=1))
            for name, side in self.sides.items()
        }

    @cached_property
    def promotions(self) -> tuple[Array, Indices]:
        """Log factors on odds, (promoters, modes + 1), and the promoters' mode indices."""
        found: dict[int, Array] = {}
        for ref, mode in self.circuit.modes.items():
            for target, factor in mode.record.promotes.items():
                if target in self.index:
                    row = found.setdefault(self.index[ref], np.zeros(self.none + 1))
                    row[self.index[target]] += np.log(factor)
        rows = list(found.values())
        table = np.array(rows) if rows else np.zeros((0, self.none + 1))
        return table, np.array(list(found), dtype=np.int64)

    @property
    def most_promoted(self) -> float:
        """Bound on the log by which promotion can raise a prior."""
        table, _ = self.promotions
        return float(np.maximum(table, 0.0).max(axis=1, initial=0.0).sum())

    def odds(self, worked_on: Collection[str] = (), raised: Raised = ()) -> Array:
        """(modes + 1,) prior odds of each mode against its component being sound.

        Args:
            worked_on: components touched at the last maintenance.
            raised: components with further factors on their odds.
        """
        factors = dict(raised)
        exposure = self.circuit.exposure
        odds = np.ones(self.none + 1)
        for ref, mode in self.circuit.modes.items():
            factor = exposure.worked_on_factor if mode.component in worked_on else 1.0
            odds[self.index[ref]] = mode.odds * factor * factors.get(mode.component, 1.0)
        share = self.circuit.file.unlisted.share
        odds[self.index[UNLISTED]] = share / (1.0 - share) * odds[: self.none - 1].sum()
        return odds

    def normaliser(self, odds: Array) -> Array:
        """(components,) one plus the odds of each component's modes."""
        total = np.bincount(self.component[:-1], odds[:-1], len(self.components))
        return 1.0 + total.astype(np.float64)

    @cached_property
    def coupled(self) -> Indices:
        """Components tied to another by promotion; they are never independent."""
        table, promoters = self.promotions
        modes = np.union1d(promoters, np.flatnonzero((table != 0.0).any(axis=0)))
        found: Indices = np.unique(self.component[modes.astype(np.int64)])
        return found

    def modes_of(self, component: str) -> Indices:
        """Indices of the modes of one component."""
        if component not in self.components:
            return np.zeros(0, dtype=np.int64)
        found: Indices = np.flatnonzero(self.component == self.components.index(component))
        return found

    def bearing_on(self, names: Iterable[str], through: Iterable[str]) -> NDArray[np.bool_]:
        """(modes + 1,) modes of components that bear on the nodes or instruments named.

        Components coupled by promotion always take part, so that the rest is independent.
        """
        touched = np.zeros(len(self.components), dtype=bool)
        for name in names:
            side = self.sides[name]
            columns = self.cumulative[:-1, side.down.start : side.up.stop]
            touched[self.component[:-1][(columns < 1.0).any(axis=1)]] = True
        number = {name: i for i, name in enumerate(self.components)}
        touched[[number[name] for name in through if name in number]] = True
        touched[self.coupled] = True
        return np.append(touched[self.component[:-1]], True)

    def table(self, world: World) -> Array:
        """`cumulative` after the rectifications of `world`.

        A restored mode acts as before with the chance that the rectification failed. That
        chance is taken anew for each condition, which slightly favours another cause over a
        failed rectification when several conditions stay abnormal.
        """
        if world not in self._worlds:
            table = self.cumulative.copy()
            for ref, success in world:
                row = self.index[ref]
                table[row] = success + (1.0 - success) * table[row]
            self._worlds[world] = table
        return self._worlds[world]

    def through(self, observable: Observable, world: World = ()) -> Transfer:
        """How the instruments of an observation pass its state on."""
        key = (observable.id, world)
        if key not in self._transfers:
            self._transfers[key] = transfer(self, observable, {}, world)
        return self._transfers[key]


@dataclass(frozen=True, slots=True)
class Transfer:
    """Instrument modes between a condition and the eye.

    Attributes:
        digit: (modes + 1,) what each mode adds to the signature; modes of different
            components use different places, so signatures add up.
        matrices: (signatures, states, states) P(state handed on | true state).
    """

    digit: Indices
    matrices: Array


def transfer(
    frame: Frame, observable: Observable, fold: Mapping[str, Array], world: World = ()
) -> Transfer:
    """Builds the transfer; instruments in `fold` are averaged over their modes' chances."""
    node = frame.circuit.nodes[observable.node]
    size = len(node.record.states)
    digit = np.zeros(frame.none + 1, dtype=np.int64)
    matrices = np.eye(size)[None]
    for name in observable.through:
        modes = frame.circuit.components[name].modes
        steps = [np.eye(size)]
        for mode in modes:
            step = signal_matrix(mode.record.signal, size, node.normal)
            kept = math.prod(1.0 - success for ref, success in world if ref == mode.ref)
            steps.append(kept * step + (1.0 - kept) * np.eye(size))
        if name in fold:
            chances = [1.0 - fold[name].sum(), *fold[name]]
            steps = [np.tensordot(chances, np.array(steps), axes=1)]
        else:
            for number, mode in enumerate(modes, start=1):
                digit[frame.index[mode.ref]] = number * len(matrices)
        matrices = np.concatenate([matrices @ step for step in steps])
    return Transfer(digit, matrices)


def signal_matrix(signal: Signal | None, size: int, normal: int) -> Array:
    """(size, size) P(state shown | true state) of one instrument mode."""
    matrix = np.eye(size)
    if signal is None:
        return matrix
    shown = {"lowest": 0, "normal": normal, "highest": size - 1}
    for true in range(size):
        row = np.zeros(size)
        row[max(true - 1, 0)] += signal.shift_down
        row[min(true + 1, size - 1)] += signal.shift_up
        for word, chance in signal.shows.items():
            row[shown[word]] += chance
        row[true] += 1.0 - row.sum()
        matrix[true] = row
    return matrix


def _stays(chances: Mapping[str, float], side: tuple[str, ...]) -> Array:
    """P(the side stays at or below level k), k = 0 … len(side) - 1."""
    reached = np.array([chances.get(state, 0.0) for state in side])
    return 1.0 - reached[::-1].cumsum()[::-1]


def state_chances(down: Array, up: Array, normal: int, background: Array | None = None) -> Array:
    """Chances of the states from the two sides.

    Args:
        down: (…, levels) P(down side stays at or below level k).
        up: (…, levels) the same for the up side.
        normal: index of the normal state, equal to the number of down levels.
        background: (down levels + 1, up levels + 1) expected product of the cumulative
            chances of causes that are summed over, or None.

    Returns:
        (…, states) chances that add up to one.
    """
    shape = down.shape[:-1]
    joint = np.ones((*shape, down.shape[-1] + 1, up.shape[-1] + 1))
    joint[..., :-1, :] = down[..., :, None]
    joint[..., :, :-1] *= up[..., None, :]
    if background is not None:
        joint *= background
    joint[..., 1:, :] -= joint[..., :-1, :].copy()
    joint[..., :, 1:] -= joint[..., :, :-1].copy()
    np.maximum(joint, 0.0, out=joint)
    states = np.zeros((*shape, down.shape[-1] + up.shape[-1] + 1))
    for d in range(joint.shape[-2]):
        for u in range(joint.shape[-1]):
            states[..., normal + u - d] += joint[..., d, u]
    return states
