"""What checks not yet made would say: chances of their outcomes and information in them.

The information of a check is the mutual information between its outcome and the hypotheses
(Lindley 1956), in bits. Components that take no part in the posterior are summed over.
"""

from __future__ import annotations

from collections.abc import Iterable
from functools import cached_property

import numpy as np

from diag.belief.evidence import outcome_table
from diag.belief.frame import Array, Indices, Transfer, World, state_chances, transfer
from diag.belief.hypotheses import Posterior
from diag.circuit.model import Observable

KEEP = 0.9999
MOST = 600


class Outlook:
    """Predictions from the weightiest hypotheses of a posterior.

    Attributes:
        world: the rectifications done by now; predictions are made for after them.
        modes: (hypotheses, size) the hypotheses kept.
        weight: (hypotheses,) their probabilities, scaled to add up to one.
    """

    def __init__(
        self, posterior: Posterior, world: World = (), keep: float = KEEP, most: int = MOST
    ) -> None:
        self.posterior, self.frame = posterior, posterior.frame
        self.world = world
        self.table = self.frame.table(world)
        total = np.cumsum(posterior.weight)
        count = min(int(np.searchsorted(total, keep)) + 1, most, len(total))
        self.modes: Indices = posterior.modes[:count]
        self.weight: Array = posterior.weight[:count] / posterior.weight[:count].sum()
        self._states: dict[str, Array] = {}

    @cached_property
    def _columns(self) -> Array:
        """(hypotheses, columns) cumulative chances of all sides of all conditions."""
        product = np.repeat(self.frame.leak[None, :], len(self.modes), axis=0)
        used = self.modes.shape[1]
        for k in range(used):
            rows = np.flatnonzero(self.modes[:, k] != self.frame.none)
            if len(rows):
                product[rows] *= self.table[self.modes[rows, k]]
        return product

    @cached_property
    def _aside(self) -> list[tuple[Indices, Array]]:
        """Components that take no part: their modes and the modes' prior probabilities."""
        frame, relevant = self.frame, self.posterior.relevant[:-1]
        component = frame.component[:-1]
        prior = self.posterior.engine.prior
        groups = (
            np.flatnonzero((component == c) & ~relevant) for c in range(len(frame.components))
        )
        return [(modes, prior[modes]) for modes in groups if len(modes)]

    def states(self, node: str) -> Array:
        """(hypotheses, states) chances of the node's states, given the findings too."""
        if node not in self._states:
            self._states[node] = self._seen(node, self._before[node])
        return self._states[node]

    @cached_property
    def _before(self) -> dict[str, Array]:
        """(hypotheses, states) of all nodes before the findings; nodes of one shape at once."""
        shapes: dict[tuple[int, int], list[str]] = {}
        for name, side in self.frame.sides.items():
            downs = side.down.stop - side.down.start
            shapes.setdefault((downs, side.states - 1 - downs), []).append(name)
        found: dict[str, Array] = {}
        for (downs, ups), names in shapes.items():
            starts = np.array([self.frame.sides[name].down.start for name in names])
            columns = starts[:, None] + np.arange(downs + ups)
            cumulative = self._columns[:, columns].transpose(1, 0, 2)
            aside = np.array([self._background(name) for name in names])[:, None]
            down, up = cumulative[..., :downs], cumulative[..., downs:]
            found |= zip(names, state_chances(down, up, downs, aside), strict=True)
        return found

    def _background(self, node: str) -> Array:
        """Expected product of cumulative chances of the components that take no part."""
        side, touched = self.frame.sides[node], self.frame.touched[node]
        downs = side.down.stop - side.down.start
        block = self.table[:, side.down.start : side.up.stop]
        total = np.ones((downs + 1, side.states - downs))
        for modes, prior in self._aside:
            if not touched[modes].any():
                continue
            rows = block[modes]
            down = np.hstack([rows[:, :downs], np.ones((len(modes), 1))])
            up = np.hstack([rows[:, downs:], np.ones((len(modes), 1))])
            joint = down[:, :, None] * up[:, None, :]
            total *= 1.0 - prior.sum() + np.tensordot(prior, joint, axes=1)
        return total

    def _seen(self, node: str, chances: Array) -> Array:
        seen = False
        for sight in self.posterior.sights:
            if sight.node == node and sight.world == self.world:
                seen = True
                chances = chances * sight.table[sight.digit[self.modes].sum(axis=1)]
        if seen:
            chances /= np.maximum(chances.sum(axis=1, keepdims=True), 1e-300)
        return chances

    def answers(self, observable: Observable) -> Array:
        """(hypotheses, outcomes) P(outcome | hypothesis, findings)."""
        states, table = self.states(observable.node), outcome_table(observable)
        passed = self._transfer(observable)
        if len(passed.matrices) == 1:
            found: Array = states @ (passed.matrices[0] @ table)
        else:
            signature = passed.digit[self.modes].sum(axis=1)
            found = np.einsum("hs,hso->ho", states, (passed.matrices @ table)[signature])
        return found

    def _transfer(self, observable: Observable) -> Transfer:
        """As the frame's, with instruments that take no part averaged over."""
        frame, relevant = self.frame, self.posterior.relevant
        fold = {
            name: self.posterior.engine.prior[modes]
            for name in observable.through
            if len(modes := frame.modes_of(name)) and not relevant[modes[0]]
        }
        return (
            transfer(frame, observable, fold, self.world)
            if fold
            else frame.through(observable, self.world)
        )

    def chances(self, observable: Observable) -> Array:
        """(outcomes,) P(outcome | findings)."""
        found: Array = self.weight @ self.answers(observable)
        return found

    def after(self, observable: Observable, outcome: int) -> Array:
        """(modes,) probability of each mode that takes part, if `outcome` were found."""
        joint = self.weight * self.answers(observable)[:, outcome]
        size = self.modes.shape[1]
        total: Array = np.bincount(
            self.modes.ravel(), weights=np.repeat(joint, size), minlength=self.frame.none + 1
        ).astype(np.float64)
        found: Array = total[:-1] / max(float(joint.sum()), 1e-300)
        return found

    def information(self, observables: Iterable[Observable]) -> Array:
        """(observables,) bits that each is expected to tell about the hypotheses."""
        wanted = list(observables)
        if not wanted:
            return np.zeros(0)
        blocks = [self.answers(observable) for observable in wanted]
        given = np.hstack(blocks)
        mean = self.weight @ given
        terms = mean_plogp(given, self.weight) - plogp(mean)
        ends = np.cumsum([0, *(block.shape[1] for block in blocks)])[:-1]
        bits: Array = np.maximum(np.add.reduceat(terms, ends), 0.0)
        return bits


def plogp(p: Array) -> Array:
    """p · log2 p, zero at zero."""
    found: Array = p * np.log2(np.maximum(p, 1e-300))
    return found


def mean_plogp(p: Array, weight: Array) -> Array:
    """Weighted mean of p · log2 p over the first axis."""
    found: Array = weight @ plogp(p)
    return found
