"""The same knowledge as a Bayesian network in pgmpy: checked, exported, used as a witness.

Each side of a condition becomes a chain of two-parent nodes (parent divorcing, Olesen et
al. 1989), so no table grows with the number of causes. Names are plain identifiers:
`mode__COMPONENT`, `is__CONDITION__POINT`, `shown__…` for what the instrument hands on, and
`seen__…` for the finding.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from diag.belief.evidence import outcome_table
from diag.belief.frame import Array, Frame, signal_matrix
from diag.belief.hypotheses import Engine
from diag.circuit.model import UNLISTED, Observable

OK = "ok"


@dataclass(frozen=True, slots=True)
class Table:
    """A variable with its states and P(state | parents).

    `values` has shape (states, *parent states), parents in order.
    """

    variable: str
    states: tuple[str, ...]
    parents: tuple[str, ...]
    values: Array


def to_pgmpy(tables: Iterable[Table]) -> Any:
    """A pgmpy network of the tables, checked by pgmpy.

    Raises:
        ValueError: from pgmpy, when the tables do not form a proper network.
    """
    from pgmpy.factors.discrete import TabularCPD
    from pgmpy.models import DiscreteBayesianNetwork

    made = list(tables)
    states = {t.variable: list(t.states) for t in made}
    network = DiscreteBayesianNetwork([(p, t.variable) for t in made for p in t.parents])
    network.add_nodes_from(states)
    for t in made:
        cpd = TabularCPD(
            t.variable,
            len(t.states),
            t.values.reshape(len(t.states), -1),
            evidence=list(t.parents) or None,
            evidence_card=[len(states[p]) for p in t.parents] or None,
            state_names={name: states[name] for name in (t.variable, *t.parents)},
        )
        network.add_cpds(cpd)
    network.check_model()
    return network


def circuit_tables(engine: Engine, observables: Sequence[str] | None = None) -> list[Table]:
    """All tables of a circuit; `observables` limits the findings (and conditions) included."""
    circuit, frame = engine.circuit, engine.frame
    wanted = list(circuit.observables) if observables is None else list(observables)
    nodes = dict.fromkeys(circuit.observables[name].node for name in wanted)
    if observables is None:
        nodes = dict.fromkeys(circuit.nodes)
    tables = [_component_table(engine, name) for name in frame.components]
    for node in nodes:
        tables += _node_tables(frame, node)
    for name in wanted:
        tables += _observable_tables(frame, circuit.observables[name])
    return tables


def safe(name: str) -> str:
    """`NAME@POINT` as an identifier."""
    return name.replace("@", "__")


def _states_of(frame: Frame, component: str) -> tuple[str, ...]:
    return (OK, *(r.split(".")[1] for r in frame.refs if r.split(".")[0] == component))


def _modes_of(frame: Frame, component: str) -> list[int]:
    return [i for i, ref in enumerate(frame.refs) if ref.split(".")[0] == component]


def _component_table(engine: Engine, component: str) -> Table:
    frame = engine.frame
    own = _modes_of(frame, component)
    table, promoters = frame.promotions
    bearing = [k for k in range(len(promoters)) if table[k, own].any()]
    parents = tuple(dict.fromkeys(frame.refs[promoters[k]].split(".")[0] for k in bearing))
    shape = [len(_states_of(frame, p)) for p in parents]
    values = np.empty((len(own) + 1, *shape))
    for chosen in np.ndindex(*shape):
        present = {_modes_of(frame, p)[c - 1] for p, c in zip(parents, chosen, strict=True) if c}
        factors = sum((table[k, own] for k in bearing if promoters[k] in present), np.zeros(1))
        odds = np.concatenate([[1.0], engine.odds[own] * np.exp(factors)])
        values[(slice(None), *chosen)] = odds / odds.sum()
    names = tuple(f"mode__{p}" for p in parents)
    return Table(f"mode__{component}", _states_of(frame, component), names, values)


def _node_tables(frame: Frame, name: str) -> Iterator[Table]:
    side, node = frame.sides[name], frame.circuit.nodes[name]
    tails = []
    for word, columns in (("down", side.down), ("up", side.up)):
        if columns.stop > columns.start:
            chain = list(_chain(frame, f"{word}__{safe(name)}", columns))
            yield from chain
            tails.append((word, chain[-1]))
    shape = [len(t.states) for _, t in tails]
    values = np.zeros((side.states, *shape))
    for levels in np.ndindex(*shape):
        moved = sum(
            level if word == "up" else -level
            for (word, _), level in zip(tails, levels, strict=True)
        )
        values[(side.normal + moved, *levels)] = 1.0
    parents = tuple(t.variable for _, t in tails)
    yield Table(f"is__{safe(name)}", node.record.states, parents, values)


def _chain(frame: Frame, stem: str, columns: slice) -> Iterator[Table]:
    """One side of a condition: the leak, then one two-parent maximum per component."""
    levels = tuple(f"l{k}" for k in range(columns.stop - columns.start + 1))
    block = frame.cumulative[:-1, columns]
    last = Table(f"{stem}__0", levels, (), _from_cumulative(frame.leak[columns]))
    yield last
    touching = dict.fromkeys(
        frame.refs[m].split(".")[0] for m in np.flatnonzero((block < 1.0).any(axis=1))
    )
    for number, component in enumerate(touching, start=1):
        states = _states_of(frame, component)
        rows = np.vstack([np.ones(len(levels) - 1), block[_modes_of(frame, component)]])
        values = np.zeros((len(levels), len(levels), len(states)))
        for before in range(len(levels)):
            reached = (np.arange(len(levels) - 1) >= before).astype(float)
            values[:, before, :] = np.array([_from_cumulative(reached * r) for r in rows]).T
        parents = (last.variable, f"mode__{component}")
        last = Table(f"{stem}__{number}", levels, parents, values)
        yield last


def _from_cumulative(stays: Array) -> Array:
    return np.diff(np.concatenate([[0.0], stays, [1.0]]))


def _observable_tables(frame: Frame, observable: Observable) -> Iterator[Table]:
    node = frame.circuit.nodes[observable.node]
    states, size = node.record.states, len(node.record.states)
    last = f"is__{safe(observable.node)}"
    for name in observable.through:
        modes = frame.circuit.components[name].modes
        if not any(m.record.signal for m in modes):
            continue
        steps = [np.eye(size), *(signal_matrix(m.record.signal, size, node.normal) for m in modes)]
        values = np.stack(steps, axis=-1).transpose(1, 0, 2)
        variable = f"shown__{safe(observable.id)}__{name}"
        yield Table(variable, states, (last, f"mode__{name}"), values)
        last = variable
    shown = f"shown__{safe(observable.id)}"
    yield Table(shown, states, (last,), np.eye(size))
    table = outcome_table(observable).T
    yield Table(f"seen__{safe(observable.id)}", observable.outcomes, (shown,), table)


def witness(
    engine: Engine, evidence: Mapping[str, str], soft: Mapping[str, Array], refs: Sequence[str]
) -> dict[str, float]:
    """Exact posteriors of modes by pgmpy's variable elimination, for narrow networks.

    Args:
        engine: gives the circuit and the prior odds.
        evidence: observable id to outcome word.
        soft: observable id to likelihood over the states shown by the instrument.
        refs: modes whose probability is wanted.
    """
    from pgmpy.factors.discrete import TabularCPD
    from pgmpy.inference import VariableElimination

    tables = circuit_tables(engine, [*evidence, *soft])
    network = to_pgmpy(tables)
    states = {t.variable: list(t.states) for t in tables}
    virtual = []
    for name, likelihood in soft.items():
        variable = f"shown__{safe(name)}"
        column = (likelihood / likelihood.sum())[:, None]
        names = {variable: states[variable]}
        virtual.append(TabularCPD(variable, len(column), column, state_names=names))
    given = {f"seen__{safe(name)}": value for name, value in evidence.items()}
    query = VariableElimination(network).query
    found = {}
    for ref in refs:
        component, mode = ref.split(".")
        variable = f"mode__{component}"
        factor = query(
            [variable], evidence=given, virtual_evidence=virtual or None, show_progress=False
        )
        found[ref] = float(factor.values[states[variable].index(mode)])
    return found


__all__ = ["UNLISTED", "Table", "circuit_tables", "safe", "to_pgmpy", "witness"]
