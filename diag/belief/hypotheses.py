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
from diag.belief.frame import Array, Frame, Indices, Raised, World, state_chances
from diag.circuit.model import UNLISTED, Circuit
from diag.errors import DiagError

MAX_FAULTS = 6
BEAM = 500
TOLERANCE = 2e-5
ENOUGH = 0.9999
"""Estimated coverage below which the search is made once more, twice as wide."""
SPARE = 25.0
"""Times the tolerance: share of a layer's weight that need not be grown further."""
EXACT_BUDGET = 20_000_000
"""Numbers in the closed sum that certifies a coverage; some tenths of a second."""
_TRIFLING = np.log(1e-5)
"""Log share of the tolerance below which a hypothesis is left out unweighed."""
_NEGLIGIBLE = np.log(1e-14)
"""Log share below which a hypothesis is not kept."""
PAIRS = 2
"""Hypotheses up to this size are all weighed."""
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
    """Posterior of one circuit for any findings.

    Args:
        circuit: the circuit.
        worked_on: components touched at the last maintenance; their odds are raised.
        raised: components with further factors on their odds.
        odds: prior odds per mode (modes + 1,) in place of the circuit's own.
    """

    def __init__(
        self,
        circuit: Circuit,
        worked_on: Collection[str] = (),
        odds: Array | None = None,
        raised: Raised = (),
    ) -> None:
        self.circuit = circuit
        self.frame = Frame(circuit)
        self.odds = self.frame.odds(worked_on, raised) if odds is None else odds
        self.alone: dict[tuple[object, ...], float] = {}
        """log P(finding) of single findings, as they were asked for."""

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
        sights = self.sights(findings)
        search = _Search(self, sights, beam, max_faults)
        layers = search.run(tolerance)
        if tolerance and not search.complete and _estimated(layers, search).value < ENOUGH:
            search = _Search(self, sights, 2 * beam, max_faults)
            layers = search.run(tolerance)
        return Posterior(self, tuple(findings), search.sights, search.relevant, layers, search)


class _Scene:
    """One condition in one world with all its findings, ready to be summed over its states.

    Attributes:
        touching: (modes + 1,) modes that move the condition or the instruments looking at it.
    """

    def __init__(self, frame: Frame, view: View, sights: Sequence[Sight]) -> None:
        side = frame.sides[view[0]]
        columns = slice(side.down.start, side.up.stop)
        self.split = side.down.stop - side.down.start
        self.normal = side.normal
        self.leak = frame.leak[columns]
        self.block = frame.table(view[1])[:, columns]
        self.fixed = np.ones(side.states)
        self.varied: list[Sight] = []
        self.touching = np.asarray((self.block < 1.0).any(axis=1), dtype=np.bool_)
        for sight in sights:
            if len(sight.table) == 1:
                self.fixed = self.fixed * sight.table[0]
            else:
                self.varied.append(sight)
                self.touching |= sight.digit > 0

    def above(self, parents: Indices) -> tuple[Array, list[Indices]]:
        """(parents, columns) cumulative chances, and the instruments' signatures."""
        product = np.repeat(self.leak[None, :], len(parents), axis=0)
        for k in range(parents.shape[1]):
            product *= self.block[parents[:, k]]
        return product, [sight.digit[parents].sum(axis=1) for sight in self.varied]

    def children(
        self, product: Array, signatures: list[Indices], modes: Indices
    ) -> tuple[Array, list[Indices]]:
        """The same with each of `modes` added: (parents, modes, columns)."""
        grown = product[:, None, :] * self.block[modes][None, :, :]
        added = [
            signature[:, None] + sight.digit[modes][None, :]
            for signature, sight in zip(signatures, self.varied, strict=True)
        ]
        return grown, added

    def factor(self, product: Array, signatures: list[Indices]) -> Array:
        """(…) P(findings of this condition | hypothesis)."""
        down, up = product[..., : self.split], product[..., self.split :]
        states = state_chances(down, up, self.normal)
        if not signatures:
            found: Array = states @ self.fixed
        else:
            seen = self.fixed
            for sight, signature in zip(self.varied, signatures, strict=True):
                # Two modes of one component add up to no signature; such sets are left out later.
                seen = seen * sight.table.take(signature, axis=0, mode="clip")
            found = np.einsum("...s,...s->...", states, seen)
        return np.maximum(found, 0.0)


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
        self.scenes = [_Scene(self.frame, view, group) for view, group in self.by_view.items()]
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
        layers = [self._empty()]
        sums = [float(layers[0].log_joint[0])]
        while layers[-1].modes.shape[1] < self.max_faults:
            total = float(np.logaddexp.reduce(sums))
            floor = total + np.log(tolerance) + _TRIFLING if tolerance else -np.inf
            grown = self._grow(layers[-1], SPARE * tolerance, floor)
            if grown is None:
                self.complete = all(share >= 1.0 for share in self.expanded)
                break
            layers.append(grown)
            sums.append(float(np.logaddexp.reduce(grown.log_joint)))
            if len(layers) > PAIRS and _expected_next(sums) < tolerance:
                break
        if not np.isfinite(np.logaddexp.reduce(sums)):
            raise Contradiction("the findings contradict each other: no cause allows all of them")
        return tuple(layers)

    def _empty(self) -> Layer:
        modes = np.zeros((1, 0), dtype=np.int64)
        factors = np.array([scene.factor(*scene.above(modes)) for scene in self.scenes])
        true, soft = _logs(factors.reshape(len(self.scenes), 1))
        return self._layer(modes, true.sum(axis=0), soft.sum(axis=0))

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
        if not len(promoters) or not modes.size:
            return prior
        present = np.zeros(len(modes), dtype=np.int64)
        for number, promoter in enumerate(promoters):
            present += (modes == promoter).any(axis=1).astype(np.int64) << number
        for code in np.unique(present[present > 0]).tolist():
            mine = np.flatnonzero(present == code)
            pattern = [bool(code >> number & 1) for number in range(len(promoters))]
            factors = table[pattern].sum(axis=0)
            raised = self.frame.normaliser(engine.odds * np.exp(factors))
            shared = np.log(raised / engine.normaliser).sum()
            prior[mine] += factors[modes[mine]].sum(axis=1) - shared
        return prior

    def _grow(self, layer: Layer, spare: float, floor: float) -> Layer | None:
        """All hypotheses with one mode more than the weightiest of `layer`.

        Those whose log weight certainly lies below `floor` are left out unsorted.
        """
        parents, share = self._parents(layer, spare)
        apart = self._apart(parents)
        if not apart.any():
            return None
        self.expanded.append(share)
        true, soft = self._likelihood(parents)
        if np.isfinite(floor):
            prior = self.log_prior(parents)[:, None] + self.engine.log_odds[self.modes]
            apart &= prior + true > floor - self.frame.most_promoted
        row, column = np.nonzero(apart)
        children = np.sort(np.column_stack([parents[row], self.modes[column]]), axis=1)
        code = np.zeros(len(children), dtype=np.int64)
        for k in range(children.shape[1]):
            code = code * (self.frame.none + 1) + children[:, k]
        first = _first_of_each(code)
        at = (row[first], column[first])
        return self._layer(children[first], true[at], soft[at])

    def _apart(self, parents: Indices) -> NDArray[np.bool_]:
        """(parents, modes) whether the mode sits on a component that the parent leaves sound."""
        component = self.frame.component
        apart = np.ones((len(parents), len(self.modes)), dtype=np.bool_)
        for k in range(parents.shape[1]):
            apart &= component[parents[:, k], None] != component[None, self.modes]
        return apart

    def _likelihood(self, parents: Indices) -> tuple[Array, Array]:
        """(parents, modes) log P(findings | parent and mode), and the same softened.

        A mode that leaves a condition and its instruments alone leaves the parent's factor
        as it is, so only the modes that touch a condition are summed there.
        """
        true = np.zeros((len(parents), len(self.modes)))
        soft = np.zeros_like(true)
        for scene in self.scenes:
            touching = np.flatnonzero(scene.touching[self.modes])
            above = scene.above(parents)
            own = scene.factor(*above)
            factor = np.repeat(own[:, None], len(self.modes), axis=1)
            factor[:, touching] = scene.factor(*scene.children(*above, self.modes[touching]))
            logs = _logs(factor)
            true += logs[0]
            soft += logs[1]
        return true, soft

    def _parents(self, layer: Layer, spare: float) -> tuple[Indices, float]:
        # All singles are grown: two faults together may explain what neither does alone.
        if layer.modes.shape[1] < PAIRS or len(layer.modes) <= (1 if spare else self.beam):
            return layer.modes, 1.0
        weight = np.exp(layer.score - layer.score.max())
        best = np.argpartition(-weight, min(self.beam, len(weight) - 1))[: self.beam]
        best = best[np.lexsort((best, -weight[best]))]
        held = np.cumsum(weight[best]) / weight.sum()
        # A hypothesis passes on about as much weight as it has; the rest is not worth a look.
        count = int(np.searchsorted(held, 1.0 - spare)) + 1 if spare else len(best)
        best = best[:count]
        share = 1.0 if len(best) == len(weight) else float(held[len(best) - 1])
        return layer.modes[np.sort(best)], share


def _first_of_each(code: Indices) -> Indices:
    """Indices of one row per distinct code, in the order of the codes."""
    bits = len(code).bit_length()
    if int(code.max(initial=0)).bit_length() + bits > 62:
        return np.unique(code, return_index=True)[1].astype(np.int64)
    # One sort of plain integers, code above and row below, is much faster than an argsort.
    packed = np.sort((code << bits) | np.arange(len(code)))
    fresh = np.diff(packed >> bits, prepend=-1) != 0
    found: Indices = packed[fresh] & ((1 << bits) - 1)
    return found


def _expected_next(sums: Sequence[float]) -> float:
    """Share that the next layer would add if the layers go on shrinking as they do.

    Args:
        sums: log weight of each layer so far.
    """
    total = np.logaddexp.reduce(sums)
    if not np.isfinite(total):
        return 1.0
    before, last = (float(np.exp(s - total)) for s in sums[-2:])
    return last * min(last / max(before, 1e-300), 0.5)


def _logs(factor: Array) -> tuple[Array, Array]:
    """Log of a factor, and of the factor kept above the floor of the search."""
    with np.errstate(divide="ignore"):
        return np.log(factor), np.log(np.maximum(factor, _FLOOR))


class Posterior:
    """The weighted hypotheses for one set of findings.

    Attributes:
        modes: (hypotheses, size) mode indices, padded with `frame.none`; most likely first.
        weight: (hypotheses,) posterior probabilities, adding up to one.
        log_evidence: log P(findings) as far as enumerated, findings up to their own factor.
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
        kept = np.flatnonzero(joint > self.log_evidence + _NEGLIGIBLE)
        order = kept[np.argsort(-joint[kept])]
        self.modes = np.concatenate(padded)[order]
        self.weight = np.exp(joint[order] - self.log_evidence)
        self._layers, self._search = layers, search

    @cached_property
    def coverage(self) -> Coverage:
        """Share of P(findings) that was enumerated: exact where the closed sum is affordable."""
        if self._search.complete:
            return Coverage(1.0, "enumerated")
        exact = _exact(self.log_evidence, self._search)
        return exact or _estimated(self._layers, self._search)

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


def _exact(enumerated: float, search: _Search) -> Coverage | None:
    """Coverage from the closed sum, where that is affordable."""
    sights = {n: [(s.digit, s.table) for s in group] for n, group in search.by_view.items()}
    exact = log_evidence(search.frame, search.engine.odds, sights, EXACT_BUDGET)
    if exact is None:
        return None
    return Coverage(min(float(np.exp(enumerated - exact)), 1.0), "exact sum")


def _estimated(layers: Sequence[Layer], search: _Search) -> Coverage:
    """Coverage from how fast the layers shrink; cautious, for most of what was not grown
    from one subset is grown from another."""
    total = np.logaddexp.reduce(np.concatenate([layer.log_joint for layer in layers]))
    share = [float(np.exp(np.logaddexp.reduce(la.log_joint) - total)) for la in layers]
    rest = 0.0
    for depth, expanded in enumerate(search.expanded):
        rest += share[depth + 1] * (1.0 - expanded) / max(expanded, 1e-9)
    ratio = min(share[-1] / max(share[-2], 1e-300), 0.5)
    rest += share[-1] * ratio / (1.0 - ratio)
    return Coverage(1.0 / (1.0 + rest), "last layer")
