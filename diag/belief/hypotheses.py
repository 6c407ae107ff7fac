"""Weighted hypotheses: the circuit's posterior over sets of modes present together.

Candidates are generated in order of plausibility (de Kleer & Williams 1987): the empty set,
all singles, all pairs, then further modes added to whatever carries weight. Given a
hypothesis the conditions are independent of each other, while findings that read the same
condition share its state, so each condition contributes the log of one small sum.

Only components that a finding bears on (directly, through an instrument or by promotion)
take part. The others keep their prior and are summed over in closed form, which is exact.
"""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from diag.belief.evidence import Finding, state_likelihood
from diag.belief.exact import log_evidence
from diag.belief.frame import Array, Frame, Indices, World, state_chances
from diag.circuit.model import UNLISTED, Circuit
from diag.errors import DiagError

MAX_FAULTS = 6
BEAM = 200
TOLERANCE = 4e-5
SPARE = 25.0
"""Times the tolerance: share of a layer's weight that need not be grown further."""
EXACT_BUDGET = 50_000
"""Terms of the closed sum that a step can afford."""
_FLOOR = 1e-12
"""Search keeps impossible hypotheses growable: a further mode may make them possible."""


View = tuple[str, World]
"""A condition as it stood in one world; findings of one view share its state."""


class Contradiction(DiagError):
    """No hypothesis allows the findings as given."""


@dataclass(frozen=True, slots=True)
class Sight:
    """One finding as arrays: which node, through which instruments, how likely per state."""

    node: str
    world: World
    digit: Indices
    table: Array
    """(signatures, states) P(finding | true state, instrument signature)."""


@dataclass(frozen=True, slots=True)
class Coverage:
    """How much of P(findings) the enumerated hypotheses account for, and how that is known."""

    value: float
    method: str
    """`enumerated` (all of them), `exact sum`, or `last layer` (estimated, cautious)."""


@dataclass(frozen=True, slots=True)
class Layer:
    """Hypotheses with the same number of modes.

    Attributes:
        modes: (hypotheses, size) mode indices, rising along a row.
        log_joint: (hypotheses,) log P(hypothesis, findings).
        score: (hypotheses,) the same with impossible findings softened, to steer the search.
    """

    modes: Indices
    log_joint: Array
    score: Array


class Engine:
    """Posterior of one circuit for any findings; caches what does not depend on them.

    Args:
        circuit: the circuit.
        worked_on: components touched at the last maintenance; their odds are raised.
        odds: prior odds per mode (modes + 1,) in place of the circuit's own.
    """

    def __init__(
        self, circuit: Circuit, worked_on: Collection[str] = (), odds: Array | None = None
    ) -> None:
        self.circuit = circuit
        self.frame = Frame(circuit)
        self.odds = self.frame.odds(worked_on) if odds is None else odds
        self._chances: dict[View, tuple[Array, Array, Array]] = {}

    @cached_property
    def normaliser(self) -> Array:
        return self.frame.normaliser(self.odds)

    @cached_property
    def prior(self) -> Array:
        """(modes,) prior probability of each mode, promotion by others left out."""
        component = self.frame.component[:-1]
        found: Array = self.odds[:-1] / self.normaliser[component]
        return found

    @cached_property
    def log_odds(self) -> Array:
        with np.errstate(divide="ignore"):
            found: Array = np.log(self.odds)
        return found

    def sights(self, findings: Sequence[Finding]) -> tuple[Sight, ...]:
        """The findings as arrays."""
        found = []
        for finding in findings:
            transfer = self.frame.through(finding.observable, finding.world)
            table = transfer.matrices @ state_likelihood(finding)
            node = finding.observable.node
            found.append(Sight(node, finding.world, transfer.digit, table))
        return tuple(found)

    @cached_property
    def pairs(self) -> tuple[Indices, Indices]:
        """All singles (modes, 1) and all pairs on different components (pairs, 2)."""
        count = len(self.frame.refs)
        first, second = np.triu_indices(count, 1)
        apart = self.frame.component[first] != self.frame.component[second]
        pairs = np.stack([first[apart], second[apart]], axis=1).astype(np.int64)
        return np.arange(count, dtype=np.int64)[:, None], pairs

    def chances(self, view: View) -> tuple[Array, Array, Array]:
        """State chances of one node for the empty set (1, s), singles and pairs."""
        if view not in self._chances:
            none = np.zeros((1, 0), dtype=np.int64)
            groups = (none, *self.pairs)
            one, two, three = (self._states(view, modes) for modes in groups)
            self._chances[view] = (one, two, three)
        return self._chances[view]

    def _states(self, view: View, modes: Indices) -> Array:
        side, table = self.frame.sides[view[0]], self.frame.table(view[1])
        columns = slice(side.down.start, side.up.stop)
        product = np.repeat(self.frame.leak[None, columns], len(modes), axis=0)
        for k in range(modes.shape[1]):
            product *= table[modes[:, k], columns]
        split = side.down.stop - side.down.start
        return state_chances(product[:, :split], product[:, split:], side.normal)

    def posterior(
        self,
        findings: Sequence[Finding],
        tolerance: float = TOLERANCE,
        beam: int = BEAM,
        max_faults: int = MAX_FAULTS,
    ) -> Posterior:
        """Weighs hypotheses until a whole layer adds less than `tolerance` of the total.

        Raises:
            Contradiction: every hypothesis gives the findings probability zero.
        """
        search = _Search(self, self.sights(findings), beam, max_faults)
        layers = search.run(tolerance)
        return Posterior(self, tuple(findings), search.sights, search.relevant, layers, search)


class _Search:
    """Layer-wise growth of the hypotheses for one set of findings."""

    def __init__(
        self, engine: Engine, sights: tuple[Sight, ...], beam: int, max_faults: int
    ) -> None:
        self.engine = engine
        self.frame = engine.frame
        self.sights = sights
        self.by_view: dict[View, list[Sight]] = {}
        for sight in sights:
            self.by_view.setdefault((sight.node, sight.world), []).append(sight)
        self.relevant = self._relevant()
        self.modes = np.flatnonzero(self.relevant[:-1] & (engine.odds[:-1] > 0))
        self.beam = beam
        self.max_faults = max_faults
        self.expanded: list[float] = []
        """Per layer grown from: share of its weight that was expanded."""
        self.complete = False

    def _relevant(self) -> NDArray[np.bool_]:
        instruments = [
            self.frame.refs[m].split(".")[0]
            for sight in self.sights
            for m in np.flatnonzero(sight.digit)
        ]
        return self.frame.bearing_on({node for node, _ in self.by_view}, instruments)

    def run(self, tolerance: float) -> tuple[Layer, ...]:
        layers = list(self._base())
        total = np.logaddexp.reduce(np.concatenate([layer.log_joint for layer in layers]))
        while True:
            if layers[-1].modes.shape[1] >= min(self.max_faults, len(self.frame.components)):
                break
            grown = self._grow(layers[-1], SPARE * tolerance)
            if grown is None:
                self.complete = all(share >= 1.0 for share in self.expanded)
                break
            layers.append(grown)
            added = np.logaddexp.reduce(grown.log_joint)
            total = np.logaddexp(total, added)
            if np.isfinite(total) and added - total < np.log(tolerance or 1e-300):
                break
        if not np.isfinite(total):
            raise Contradiction("the findings contradict each other: no cause allows all of them")
        return tuple(layers)

    def _base(self) -> tuple[Layer, ...]:
        singles, pairs = self.engine.pairs
        keep = self.relevant & np.append(self.engine.odds[:-1] > 0, False)
        rows = [np.array([True]), keep[singles[:, 0]], keep[pairs].all(axis=1)]
        groups = (np.zeros((1, 0), dtype=np.int64), singles, pairs)
        layers = []
        for number, (modes, kept) in enumerate(zip(groups, rows, strict=True)):
            kept_modes = modes[kept]
            true, soft = self._likelihood(
                len(kept_modes),
                lambda view, n=number, k=kept: self.engine.chances(view)[n][k],
                lambda digit, m=kept_modes: digit[m].sum(axis=1),
            )
            layers.append(self._layer(kept_modes, true, soft))
        return tuple(layers)

    def _layer(self, modes: Indices, true: Array, soft: Array) -> Layer:
        prior = self.log_prior(modes)
        return Layer(modes, prior + true, prior + soft)

    def log_prior(self, modes: Indices) -> Array:
        """(hypotheses,) log P(these modes and no other of the components that take part)."""
        engine = self.engine
        numbers = np.unique(self.frame.component[:-1][self.relevant[:-1]])
        base = -np.log(engine.normaliser[numbers]).sum()
        prior: Array = base + engine.log_odds[modes].sum(axis=1)
        table, promoters = self.frame.promotions
        for row in _rows_with(modes, promoters):
            present = np.isin(promoters, modes[row])
            prior[row] += self._promoted(modes[row], table[present].sum(axis=0))
        return prior

    def _promoted(self, modes: Indices, factors: Array) -> float:
        """Change of the log prior when the odds are multiplied by exp(`factors`)."""
        raised = self.frame.normaliser(self.engine.odds * np.exp(factors))
        return float(factors[modes].sum() - np.log(raised / self.engine.normaliser).sum())

    def _likelihood(self, count, states, signature) -> tuple[Array, Array]:  # type: ignore[no-untyped-def]
        true, soft = np.zeros(count), np.zeros(count)
        for view, sights in self.by_view.items():
            seen = np.ones(1)
            for sight in sights:
                if len(sight.table) == 1:
                    seen = seen * sight.table
                else:
                    seen = seen * sight.table[signature(sight.digit)]
            factor = np.maximum(_summed(states(view), seen), 0.0)
            with np.errstate(divide="ignore"):
                true = true + np.log(factor)
            soft = soft + np.log(np.maximum(factor, _FLOOR))
        return true, soft

    def _grow(self, layer: Layer, spare: float) -> Layer | None:
        """All hypotheses with one mode more than the weightiest of `layer`."""
        parents, share = self._parents(layer, spare)
        component = self.frame.component
        allowed = np.ones((len(parents), len(self.modes)), dtype=bool)
        for k in range(parents.shape[1]):
            allowed &= component[parents[:, k]][:, None] != component[self.modes][None, :]
        row, column = np.nonzero(allowed)
        if not len(row):
            return None
        self.expanded.append(share)
        children = np.sort(np.column_stack([parents[row], self.modes[column]]), axis=1)
        code = np.zeros(len(children), dtype=np.int64)
        for k in range(children.shape[1]):
            code = code * (self.frame.none + 1) + children[:, k]
        _, first = np.unique(code, return_index=True)
        row, column, children = row[first], column[first], children[first]
        true, soft = self._likelihood(
            len(children),
            lambda view: self._child_states(view, parents, row, column),
            lambda digit: digit[children].sum(axis=1),
        )
        return self._layer(children, true, soft)

    def _parents(self, layer: Layer, spare: float) -> tuple[Indices, float]:
        if not len(layer.modes):
            return layer.modes, 1.0
        order = np.argsort(-layer.score, kind="stable")
        weight = np.exp(layer.score[order] - layer.score[order[0]])
        held = np.cumsum(weight) / weight.sum()
        # A hypothesis passes on about as much weight as it has; the rest is not worth a look.
        enough = int(np.searchsorted(held, 1.0 - spare)) + 1 if spare else len(order)
        count = min(enough, self.beam, len(order))
        share = 1.0 if count == len(order) else float(held[count - 1])
        return layer.modes[np.sort(order[:count])], share

    def _child_states(self, view: View, parents: Indices, row: Indices, column: Indices) -> Array:
        frame, table = self.frame, self.frame.table(view[1])
        side = frame.sides[view[0]]
        columns = slice(side.down.start, side.up.stop)
        above = np.repeat(frame.leak[None, columns], len(parents), axis=0)
        for k in range(parents.shape[1]):
            above *= table[parents[:, k], columns]
        product = above[row] * table[self.modes[column], columns]
        split = side.down.stop - side.down.start
        return state_chances(product[:, :split], product[:, split:], side.normal)


def _summed(states: Array, seen: Array) -> Array:
    """(hypotheses,) sum over the states; one row of `seen` may serve all hypotheses."""
    if seen.ndim == 1 or len(seen) == 1:
        found: Array = states @ seen.reshape(-1)
    else:
        found = np.einsum("hs,hs->h", states, seen)
    return found


def _rows_with(modes: Indices, wanted: Indices) -> Indices:
    if not len(wanted) or not modes.size:
        return np.zeros(0, dtype=np.int64)
    return np.flatnonzero(np.isin(modes, wanted).any(axis=1))


class Posterior:
    """The weighted hypotheses for one set of findings.

    Attributes:
        modes: (hypotheses, size) mode indices, padded with `frame.none`; most likely first.
        weight: (hypotheses,) posterior probabilities, adding up to one.
        log_evidence: log P(findings) as far as enumerated, findings up to their own factor.
        coverage: share of P(findings) that was enumerated.
    """

    def __init__(
        self,
        engine: Engine,
        findings: tuple[Finding, ...],
        sights: tuple[Sight, ...],
        relevant: NDArray[np.bool_],
        layers: tuple[Layer, ...],
        search: _Search,
    ) -> None:
        self.engine, self.frame = engine, engine.frame
        self.findings, self.sights, self.relevant = findings, sights, relevant
        size = max(layer.modes.shape[1] for layer in layers)
        padded = [_padded(layer.modes, size, self.frame.none) for layer in layers]
        joint = np.concatenate([layer.log_joint for layer in layers])
        self.log_evidence = float(np.logaddexp.reduce(joint))
        order = np.argsort(-joint, kind="stable")
        order = order[np.isfinite(joint[order])]
        self.modes = np.concatenate(padded)[order]
        self.weight = np.exp(joint[order] - self.log_evidence)
        self.coverage = _coverage(self.log_evidence, layers, search)

    @cached_property
    def marginals(self) -> Array:
        """(modes,) probability of each mode given the findings."""
        count = self.frame.none + 1
        flat = np.bincount(
            self.modes.ravel(),
            weights=np.repeat(self.weight, self.modes.shape[1]),
            minlength=count,
        )[:-1]
        found: Array = np.where(self.relevant[:-1], flat, self.engine.prior)
        return found

    def probability(self, ref: str) -> float:
        """Posterior probability of one mode (or `unlisted.present`)."""
        return float(self.marginals[self.frame.index[ref]])

    @property
    def nothing_wrong(self) -> float:
        """Probability that no mode which the findings bear on is present."""
        empty = (self.modes == self.frame.none).all(axis=1)
        return float(self.weight[empty].sum())

    @property
    def unlisted(self) -> float:
        return self.probability(UNLISTED)

    def causes(self) -> list[tuple[str, float]]:
        """Listed modes with their probabilities, most likely first, ties by name."""
        pairs = zip(self.frame.refs[:-1], self.marginals[:-1].tolist(), strict=True)
        return sorted(pairs, key=lambda pair: (-pair[1], pair[0]))

    def hypotheses(self, count: int) -> list[tuple[tuple[str, ...], float]]:
        """The likeliest hypotheses as mode references with their probabilities."""
        refs = self.frame.refs
        return [
            (tuple(refs[m] for m in row if m != self.frame.none), float(weight))
            for row, weight in zip(self.modes[:count], self.weight[:count], strict=True)
        ]


def _padded(modes: Indices, size: int, none: int) -> Indices:
    missing = size - modes.shape[1]
    return np.pad(modes, ((0, 0), (0, missing)), constant_values=none)


def _coverage(enumerated: float, layers: Sequence[Layer], search: _Search) -> Coverage:
    """Exact where the closed sum is cheap, otherwise from the size of the last layer."""
    if search.complete:
        return Coverage(1.0, "enumerated")
    sights = {n: [(s.digit, s.table) for s in group] for n, group in search.by_view.items()}
    exact = log_evidence(search.frame, search.engine.odds, sights, EXACT_BUDGET)
    if exact is None:
        return _estimated(layers, search)
    return Coverage(min(float(np.exp(enumerated - exact)), 1.0), "exact sum")


def _estimated(layers: Sequence[Layer], search: _Search) -> Coverage:
    """Coverage from how fast the layers shrink; cautious in both of its terms."""
    total = np.logaddexp.reduce(np.concatenate([layer.log_joint for layer in layers]))
    share = [float(np.exp(np.logaddexp.reduce(la.log_joint) - total)) for la in layers]
    rest = 0.0
    for depth, expanded in enumerate(search.expanded, start=2):
        rest += share[depth + 1] * (1.0 - expanded) / max(expanded, 1e-9)
    ratio = min(share[-1] / max(share[-2], 1e-300), 0.5)
    rest += share[-1] * ratio / (1.0 - ratio)
    return Coverage(1.0 / (1.0 + rest), "last layer")
