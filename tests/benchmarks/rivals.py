"""The same step through general-purpose libraries, in a process of its own.

    python -m tests.benchmarks.rivals {pgmpy,pyagrum} COUNT {whole,part}

Prints READY when the network is built and the findings before the last one are in, which is not
counted; then one JSON object: seconds of the step, posteriors of the modes, chances and value of
the checks. Seconds are those of the processor, with one thread, as for diag itself.

A general-purpose library knows no hypotheses; the value of a check is taken as the information
that its outcome gives about each component, added up, which is the least that a person would
compute with it.
"""

from __future__ import annotations

import json
import math
import resource
import sys
import time
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from diag.belief.evidence import Finding, state_likelihood
from diag.belief.frame import Array
from diag.belief.hypotheses import Engine
from diag.belief.network import Table, circuit_tables, safe, to_pgmpy
from diag.circuit.model import Observable
from tests.benchmarks.subject import Subject

MEMORY = 6 * 1024**3
"""Bytes of address space that the process may use."""
PATIENCE = 60
"""Seconds of the processor for getting ready, and again for the step."""
READY = "ready"
REPEATS = 5
ENOUGH = 5.0
"""Seconds after which the step is not repeated."""

Answer = tuple[dict[str, Array], dict[str, dict[str, float]], dict[str, float]]
"""Posterior per component, chances per check and outcome, and value of each check in bits."""


def main(library: str, count: int, scope: str) -> None:
    resource.setrlimit(resource.RLIMIT_AS, (MEMORY, MEMORY))
    allow(PATIENCE)
    subject = Subject(count, scope == "part")
    step = {"pgmpy": with_pgmpy, "pyagrum": with_pyagrum}[library](subject)
    print(READY, flush=True)
    seconds: list[float] = []
    while not seconds or (len(seconds) < REPEATS and sum(seconds) < ENOUGH):
        allow(PATIENCE)
        start = time.process_time()
        posterior, chances, value = step()
        seconds.append(time.process_time() - start)
    modes = {ref: _of_mode(subject, posterior, ref) for ref in subject.circuit.modes}
    found = {"seconds": seconds, "modes": modes, "chances": chances, "value": value}
    print(json.dumps(found))


def allow(seconds: int) -> None:
    """Lets the process run that much longer, by its own processor time, and no more."""
    _, most = resource.getrlimit(resource.RLIMIT_CPU)
    resource.setrlimit(resource.RLIMIT_CPU, (math.ceil(time.process_time()) + seconds, most))


def _of_mode(subject: Subject, posterior: dict[str, Array], ref: str) -> float:
    component = subject.circuit.components[ref.split(".")[0]]
    return float(posterior[component.id][[m.ref for m in component.modes].index(ref) + 1])


def information(joint: Array) -> float:
    """Bits of mutual information between the two axes of a table of joint chances."""
    apart = joint.sum(axis=1, keepdims=True) * joint.sum(axis=0, keepdims=True)
    inside = joint > 0.0
    return float((joint[inside] * np.log2(joint[inside] / apart[inside])).sum())


def soft(finding: Finding) -> Array:
    """(states,) the finding as virtual evidence, scaled to a largest value of one."""
    likelihood = state_likelihood(finding)
    scaled: Array = likelihood / likelihood.max()
    return scaled


def components(tables: Sequence[Table]) -> list[str]:
    return [t.variable for t in tables if t.variable.startswith("mode__")]


# -- pyAgrum: lazy propagation, soft evidence of its own, evidence changed one by one ------


def with_pyagrum(subject: Subject) -> Callable[[], Answer]:
    import pyagrum

    gum: Any = pyagrum
    gum.setNumberOfThreads(1)
    tables = circuit_tables(Engine(subject.circuit))
    network = _pyagrum_network(gum, tables)
    inference = gum.LazyPropagation(network)
    names = components(tables)
    inference.setTargets(set(names))
    *before, added = subject.findings
    for finding in before:
        inference.addEvidence(f"shown__{safe(finding.key)}", soft(finding).tolist())
    inference.makeInference()

    def step() -> Answer:
        shown = f"shown__{safe(added.key)}"
        if inference.hasEvidence(shown):
            inference.eraseEvidence(shown)
            inference.makeInference()
        inference.addEvidence(shown, soft(added).tolist())
        inference.makeInference()
        total = inference.evidenceProbability()
        posterior = {n: inference.posterior(n).toarray() for n in names}
        chances, value = {}, {}
        for check in subject.checks:
            given = _each_outcome(inference, check, names)
            chances[check.id] = {o: p / total for o, (p, _) in given.items()}
            value[check.id] = sum(
                information(np.array([p / total * tables[n] for p, tables in given.values()]))
                for n in names
            )
        return {n.removeprefix("mode__"): p for n, p in posterior.items()}, chances, value

    return step


def _each_outcome(
    inference: Any, check: Observable, names: Sequence[str]
) -> dict[str, tuple[float, dict[str, Array]]]:
    """Per outcome: P(findings, outcome), and the posterior of each component given both."""
    seen, found = f"seen__{safe(check.id)}", {}
    for outcome in check.outcomes:
        if inference.hasEvidence(seen):
            inference.chgEvidence(seen, outcome)
        else:
            inference.addEvidence(seen, outcome)
        inference.makeInference()
        posterior = {n: inference.posterior(n).toarray() for n in names}
        found[outcome] = (inference.evidenceProbability(), posterior)
    inference.eraseEvidence(seen)
    return found


def _pyagrum_network(gum: Any, tables: Sequence[Table]) -> Any:
    network = gum.BayesNet()
    for table in tables:
        network.add(gum.LabelizedVariable(table.variable, "", list(table.states)))
    for table in tables:
        for parent in table.parents:
            network.addArc(parent, table.variable)
    for table in tables:
        cpt = network.cpt(table.variable)
        axes = [(table.variable, *table.parents).index(name) for name in reversed(cpt.names)]
        cpt[:] = np.ascontiguousarray(table.values.transpose(axes))
    return network


# -- pgmpy: variable elimination, soft evidence as a child of what is shown ----------------


def with_pgmpy(subject: Subject) -> Callable[[], Answer]:
    from pgmpy.inference import VariableElimination

    tables = circuit_tables(Engine(subject.circuit))
    states = {t.variable: t.states for t in tables}
    given = {}
    for finding in subject.findings:
        shown, name = f"shown__{safe(finding.key)}", f"found__{safe(finding.key)}"
        values = np.stack([soft(finding), 1.0 - soft(finding)])
        tables.append(Table(name, ("yes", "no"), (shown,), values))
        given[name] = "yes"
    query = VariableElimination(to_pgmpy(tables)).query
    names = components(tables)

    def asked(*wanted: str) -> Array:
        factor = query(list(wanted), evidence=given, show_progress=False)
        order = [factor.variables.index(name) for name in wanted]
        found: Array = np.asarray(factor.values).transpose(order)
        return found

    def step() -> Answer:
        posterior = {n.removeprefix("mode__"): asked(n) for n in names}
        chances, value = {}, {}
        for check in subject.checks:
            seen = f"seen__{safe(check.id)}"
            joints = [asked(seen, n) for n in names]
            outcomes = joints[0].sum(axis=1)
            chances[check.id] = dict(zip(states[seen], outcomes.tolist(), strict=True))
            value[check.id] = sum(information(joint) for joint in joints)
        return posterior, chances, value

    return step


if __name__ == "__main__":
    main(sys.argv[1], int(sys.argv[2]), sys.argv[3])
