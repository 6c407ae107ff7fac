"""Why a cause is where it is: findings for and against, and what a second cause adds.

Weight of evidence in decibans (Good 1950, after Turing): 10 log10 of the factor by which a
finding changes the odds of a cause, each finding taken after those before it, so that the
weights add up to the whole change in the log-odds.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from diag.belief.conflict import conflict_bits
from diag.belief.evidence import Finding
from diag.belief.hypotheses import Engine, Posterior

_LEAST = 1e-300


@dataclass(frozen=True, slots=True)
class Weight:
    """What one finding says about one cause, given the findings before it."""

    finding: Finding
    decibans: float
    probability: float
    """Of the cause, with this finding and those before it."""


def decibans(odds: float) -> float:
    """10 log10 of a factor on odds."""
    return 10.0 * math.log10(max(odds, _LEAST))


def ledger(engine: Engine, findings: Sequence[Finding], ref: str) -> list[Weight]:
    """The weight of each finding for cause `ref`; they add up to the change in its log-odds."""
    before = _odds(engine.posterior([]).probability(ref))
    weights = []
    for count, finding in enumerate(findings, start=1):
        chance = engine.posterior(findings[:count]).probability(ref)
        after = _odds(chance)
        weights.append(Weight(finding, decibans(after / max(before, _LEAST)), chance))
        before = after
    return weights


def _odds(chance: float) -> float:
    return chance / max(1.0 - chance, _LEAST)


def suspect(posterior: Posterior) -> tuple[Finding, float] | None:
    """The finding without which the others hang together best, and the conflict then left.

    Leave-one-out over conf(e) (Jensen et al. 1990); None with fewer than two findings.
    """
    findings = posterior.findings
    if len(findings) < 2:
        return None
    left = [
        conflict_bits(posterior.engine.posterior(findings[:i] + findings[i + 1 :]))
        for i in range(len(findings))
    ]
    best = int(np.argmin(left))
    return findings[best], left[best]


def bayes_factor(posterior: Posterior, refs: Sequence[str]) -> float:
    """Generalised Bayes factor of "all of `refs` are present" (Yuan, Lim & Lu 2011):
    posterior odds over prior odds."""
    prior = posterior.engine.posterior([])
    return _odds(_together(posterior, refs)) / max(_odds(_together(prior, refs)), _LEAST)


def added_factor(posterior: Posterior, refs: Sequence[str], second: str) -> float:
    """What `second` explains beside `refs`: P(e | refs, second) / P(e | refs, not second)."""
    prior = posterior.engine.posterior([])
    ratios = []
    for each in (posterior, prior):
        both, first = _together(each, [*refs, second]), _together(each, refs)
        ratios.append(both / max(first - both, _LEAST))
    return ratios[0] / max(ratios[1], _LEAST)


def _together(posterior: Posterior, refs: Sequence[str]) -> float:
    """P(all of `refs` are present). Causes that no finding bears on stay independent."""
    frame, chance = posterior.frame, 1.0
    here = np.ones(len(posterior.modes), dtype=bool)
    for ref in refs:
        mode = frame.index[ref]
        if posterior.relevant[mode]:
            here &= (posterior.modes == mode).any(axis=1)
        else:
            chance *= float(posterior.marginals[mode])
    return chance * float(posterior.weight[here].sum())
