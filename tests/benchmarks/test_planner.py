"""The time-bounded search against the optimum on random small problems.

Run with `python -m pytest tests/benchmarks/test_planner.py`; it takes some ten minutes.
The optimum comes from exhaustive dynamic programming, which shares the steps of a problem with
the search but not its choices. Problems with more beliefs than the solver is given are drawn
anew, and their number is printed.
"""

from __future__ import annotations

import numpy as np
import pytest

from tests.advice.ratios import NAMES, measured

PROBLEMS = 300
MEAN, WORST = 1.02, 1.10


def test_close_to_the_optimum(capsys: pytest.CaptureFixture[str]) -> None:
    rows, passed_over = measured(PROBLEMS, most=20_000)
    ratios = np.array(rows)
    with capsys.disabled():
        print(f"\n\n{len(rows)} problems, {passed_over} drawn anew; cost over the optimum")
        print(f"{'policy':28} {'mean':>7} {'95 %':>7} {'worst':>7} {'optimal':>8}")
        for name, column in zip(NAMES, ratios.T, strict=True):
            high, best = np.quantile(column, 0.95), (column < 1.0 + 1e-6).mean()
            print(
                f"{name:28} {column.mean():7.4f} {high:7.4f} {column.max():7.4f} {best:8.0%}",
                flush=True,
            )
    assert ratios[:, 0].mean() <= MEAN
    assert ratios[:, 0].max() <= WORST
    assert (ratios >= 1.0 - 1e-6).all()
