"""Steady states a second, side by side with a loop of SciPy's `root` over the same problems.

Run alone on a quiet core: `python -m pytest tests/benchmarks/test_physics_speed.py -s`.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import ArrayLike
from scipy.optimize import root

from diag.physics.faults import FAULTS
from diag.physics.parameters import Physics
from diag.physics.solver import balance_at, steady
from diag.physics.units import PSI
from tests.physics.shipped import BOTH, RELIEF, physics

SIZE = 20_480
LOOPED = 120
POINTS = ("hot_idle", "high_power")
RANGES = {
    "pump_slip": (1, 8), "pump_fill": (0.6, 1), "filter_clog": (0, 0.95), "jet_blockage": (0, 0.5),
    "gallery_leak_mm2": (0, 15), "relief_hold_mm2": (0, 10), "air_cooler_blockage": (0, 0.8),
    "scavenge_capacity": (0.2, 1), "vent_blockage": (0, 0.8), "seal_flow": (1, 5),
    "oil_viscosity_factor": (0.5, 2), "suction_blockage": (0, 0.9), "heat_factor": (1, 2),
}  # fmt: skip
Problems = tuple[dict[str, ArrayLike], dict[str, ArrayLike]]


def problems(size: int, seed: int) -> Problems:
    """Engines with build tolerance, each with one fault of any severity, on any day."""
    rng = np.random.default_rng(seed)
    chosen = rng.integers(0, len(RANGES), size)
    faults: dict[str, ArrayLike] = {
        name: np.where(chosen == i, rng.uniform(least, most, size), FAULTS[name].neutral)
        for i, (name, (least, most)) in enumerate(RANGES.items())
    }
    for name in ("displacement_factor", "jet_area_factor", "cooler_factor"):
        faults[name] = np.clip(1 + 0.03 * rng.standard_normal(size), 0.9, 1.1)
    return faults, {"ambient_c": rng.uniform(-10, 40, size)}


def best(run: Callable[[], object], times: int = 3) -> float:
    """Least processor time of several runs, s."""
    spent = []
    for _ in range(times):
        start = time.process_time()
        run()
        spent.append(time.process_time() - start)
    return min(spent)


def looped(circuit: Physics, point: str, given: Problems) -> tuple[float, np.ndarray]:
    """Processor time of one `root` per sample, s, and the pressures found, psi.

    Setting up each problem is not counted; `root` starts from the healthy engine's state.
    """
    healthy = steady(circuit, point)
    first = [
        healthy["gallery_pressure_psi"][0] * PSI / 1e6,
        healthy["supply_temperature_c"][0] / 100,
    ]
    spent, pressures = 0.0, []
    for i in range(LOOPED):
        single = [{name: np.asarray(x)[i] for name, x in part.items()} for part in given]
        balance = balance_at(circuit, point, *single)

        def residual(x: np.ndarray, balance=balance) -> list[float]:  # type: ignore[no-untyped-def]
            oil = balance.supply(np.array([x[1] * 100.0]))
            flows = balance.flows(oil, np.array([x[0] * 1e6]))
            return [float(flows.excess[0]), float(balance.heats(oil, flows).excess[0])]

        start = time.process_time()
        found = root(residual, first, tol=1e-10)
        spent += time.process_time() - start
        pressures.append(found.x[0] * 1e6 / PSI if found.success else np.nan)
    return spent, np.array(pressures)


@pytest.mark.parametrize("point", POINTS)
@pytest.mark.parametrize("circuit", BOTH)
def test_states_a_second_beside_a_loop_of_root(circuit: str, point: str) -> None:
    parameters, given = physics(circuit), problems(SIZE, 1)
    rate = SIZE / best(lambda: steady(parameters, point, *given))
    spent, pressures = looped(parameters, point, given)
    loop_rate = LOOPED / spent
    found = steady(parameters, point, *given)
    same = np.isfinite(pressures)
    print(
        f"\n{circuit} {point}: batched {rate:,.0f}/s, root {loop_rate:,.0f}/s,"
        f" {rate / loop_rate:,.0f} times; root found {same.sum()} of {LOOPED}"
    )
    assert found.unsolved == ()
    assert same.mean() > 0.8
    assert pressures[same] == pytest.approx(found["gallery_pressure_psi"][:LOOPED][same], rel=1e-5)
    assert rate >= 20_000
    assert rate >= 40 * loop_rate


def test_batched_states(benchmark) -> None:  # type: ignore[no-untyped-def]
    given = problems(SIZE, 2)
    found = benchmark(lambda: steady(physics(RELIEF), "hot_idle", *given))
    assert found.unsolved == ()
