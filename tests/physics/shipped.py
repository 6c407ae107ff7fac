"""The two shipped circuits' parameters, read once, and single values out of solved states."""

from __future__ import annotations

from functools import cache

from numpy.typing import ArrayLike

from diag.circuit.loading import knowledge_root
from diag.physics.loading import read_physics
from diag.physics.parameters import Physics
from diag.physics.solver import steady

RELIEF = "relief_valve_turboprop"
FULL = "full_flow_turbofan"
BOTH = (RELIEF, FULL)


def raw(circuit: str) -> bytes:
    """The bytes of a shipped `physics.yaml`."""
    return (knowledge_root() / "circuits" / circuit / "physics.yaml").read_bytes()


@cache
def physics(circuit: str) -> Physics:
    """The parameters of a shipped circuit."""
    return read_physics(raw(circuit), f"{circuit}/physics.yaml")


def value(
    circuit: str,
    point: str,
    quantity: str,
    faults: dict[str, ArrayLike] | None = None,
    oil_c: float | None = None,
    day: dict[str, ArrayLike] | None = None,
) -> float:
    """One quantity of one solved state."""
    states = steady(physics(circuit), point, faults, day, oil_c)
    assert states.solved.all()
    return float(states[quantity][0])
