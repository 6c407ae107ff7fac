"""Shipped circuits, loaded once, and a clock that stands still."""

from __future__ import annotations

from datetime import UTC, datetime
from functools import cache

import pytest

from diag.circuit.loading import load_circuit
from diag.circuit.model import Circuit

loaded = cache(load_circuit)


@pytest.fixture
def now() -> datetime:
    return datetime(2026, 3, 1, 3, 0, tzinfo=UTC)


@pytest.fixture
def turboprop() -> Circuit:
    return loaded("relief_valve_turboprop")
