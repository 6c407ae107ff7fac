"""Settings of the tests of the terminal screen."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import pytest

from diag.belief.evidence import Finding
from diag.belief.hypotheses import Engine, Posterior
from diag.session import Session
from tests.tui.stage import read_once

_ENGINES: dict[tuple[object, ...], Engine] = {}
_POSTERIORS: dict[tuple[object, ...], Posterior] = {}
_posterior = Engine.posterior


@pytest.fixture(autouse=True)
def _remembered(monkeypatch: pytest.MonkeyPatch) -> None:
    """Circuits are read once, and what was weighed in one test is remembered in the next."""

    def engine(self: Session, worked_on: tuple[str, ...], raised: Any) -> Engine:
        key = (self.circuit.content_hash, worked_on, raised)
        if key not in _ENGINES:
            _ENGINES[key] = Engine(self.circuit, worked_on, raised=raised)
        return _ENGINES[key]

    def posterior(self: Engine, findings: Iterable[Finding], *more: Any, **named: Any) -> Posterior:
        taken = list(findings)
        key = (id(self), *((f.key, f.value, f.trust, f.world) for f in taken))
        if more or named:
            return _posterior(self, taken, *more, **named)
        if key not in _POSTERIORS:
            _POSTERIORS[key] = _posterior(self, taken)
        return _POSTERIORS[key]

    read_once(monkeypatch)
    monkeypatch.setattr(Session, "_engine", engine)
    monkeypatch.setattr(Engine, "posterior", posterior)
    monkeypatch.delenv("NO_COLOR", raising=False)
