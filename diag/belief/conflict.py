"""Whether the findings hang together (Jensen, Chamberlain, Nordahl & Jensen 1990)."""

from __future__ import annotations

import math

from diag.belief.evidence import Finding
from diag.belief.exact import log_evidence
from diag.belief.hypotheses import Engine, Posterior

CHEAP = 50_000
"""Numbers in a closed sum that cost less than weighing hypotheses."""


def conflict_bits(posterior: Posterior) -> float:
    """conf(e) = log2( prod P(e_i) / P(e) ); positive when the findings do not hang together.

    A positive value means a wrong reading or a rare cause.
    """
    findings = posterior.findings
    if len(findings) < 2:
        return 0.0
    alone = sum(alone_log_evidence(posterior.engine, finding) for finding in findings)
    return (alone - posterior.log_evidence) / math.log(2.0)


def alone_log_evidence(engine: Engine, finding: Finding) -> float:
    """log P(one finding), exactly where the closed sum is cheap; kept by the engine."""
    key = (finding.key, finding.value, finding.trust, finding.world)
    if key not in engine.alone:
        (sight,) = engine.sights([finding])
        view = {(sight.node, sight.world): [(sight.digit, sight.table)]}
        exact = log_evidence(engine.frame, engine.odds, view, CHEAP)
        if exact is None:
            exact = engine.posterior([finding]).log_evidence
        engine.alone[key] = exact
    return engine.alone[key]
