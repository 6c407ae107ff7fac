"""Oil properties against published worked values and quadrature."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.optimize import brentq

from diag.errors import InputError
from diag.physics.oil import Oil, OilError, d341_viscosity, fit_d341
from tests.physics.shipped import BOTH, physics


def oil(circuit: str = BOTH[0]) -> Oil:
    return physics(circuit).oil.oil()


def test_worked_example_of_d341() -> None:
    # Public worked example: 32 cSt at 40 degC, 5.4 at 100; constants and 80 degC as printed.
    a, b = fit_d341(40, 32.0, 100, 5.4, zero_c=273.0)
    assert (round(a, 4), round(b, 4)) == (9.5259, 3.7449)
    assert float(d341_viscosity(a, b, 80, zero_c=273.0)) == pytest.approx(8.5, abs=0.05)
    assert float(d341_viscosity(a, b, 80, zero_c=273.0)) == pytest.approx(8.533, abs=5e-4)


def test_worked_example_with_the_full_kelvin_offset() -> None:
    # The same example with 273.15, computed independently with a general-purpose library.
    a, b = fit_d341(40, 32.0, 100, 5.4)
    assert (round(a, 5), round(b, 5)) == (9.53082, 3.74658)
    assert float(d341_viscosity(a, b, 80)) == pytest.approx(8.5332, abs=5e-5)


@pytest.mark.parametrize(
    ("celsius", "centistokes"),
    [(-40, 10606), (-20, 1009), (0, 195.3), (40, 25.0), (60, 12.83), (80, 7.607), (100, 5.0),
     (120, 3.544), (150, 2.343)],
)  # fmt: skip
def test_five_centistoke_oil(celsius: float, centistokes: float) -> None:
    # The 5 cSt oil (25.0 at 40, 5.0 at 100), computed independently; four figures.
    assert float(oil().viscosity_cst(celsius)) == pytest.approx(centistokes, rel=3e-4)


def test_five_centistoke_constants() -> None:
    a, b = fit_d341(40, 25.0, 100, 5.0)
    assert (round(a, 5), round(b, 5)) == (9.02497, 3.55635)


def test_a_thicker_two_point_oil_extrapolates_beyond_the_cold_limit() -> None:
    # 27.6/5.1 gives 19,141 cSt at -40, beyond the limit of 13,000 of its class (from memory):
    # the reason why the cold end wants a measured point.
    a, b = fit_d341(40, 27.6, 100, 5.1)
    assert float(d341_viscosity(a, b, -40)) == pytest.approx(19141, rel=1e-4)


@given(st.floats(0.25, 20_000.0))
def test_inverse_of_the_standard_meets_its_forward_equation(centistokes: float) -> None:
    # The standard's forward equation solved by SciPy; its own inverse agrees to 3e-4 cSt.
    def forward(nu: float) -> float:
        return nu + 0.7 + float(np.exp(-1.47 - 1.84 * nu - 0.51 * nu * nu))

    a, b = 9.0, 3.5
    kelvin = 10 ** ((a - np.log10(np.log10(forward(centistokes)))) / b)
    exact = brentq(lambda nu: forward(nu) - forward(centistokes), 0.2, 30_000.0, xtol=1e-12)
    found = float(d341_viscosity(a, b, kelvin - 273.15))
    assert found == pytest.approx(exact, rel=1e-9, abs=3e-4)


def test_density_and_specific_heat_of_a_synthetic_oil() -> None:
    # From memory, within 5 %: 998 kg/m3 and 1.80 kJ/(kg K) at 15 degC, -0.72 and 2.2 per K.
    assert float(oil().density(15)) == pytest.approx(998, rel=0.05)
    assert float(oil().density(100)) == pytest.approx(998 - 0.72 * 85, rel=1e-12)
    assert float(oil().specific_heat(115)) == pytest.approx(2020, rel=0.05)


@given(st.floats(-40, 220), st.floats(-40, 220))
def test_enthalpy_is_the_integral_of_specific_heat(low: float, high: float) -> None:
    known = quad(lambda t: float(oil().specific_heat(t)), low, high)[0]
    found = float(oil().enthalpy(high) - oil().enthalpy(low))
    assert found == pytest.approx(known, rel=1e-9, abs=1e-6)


@given(st.floats(-40, 400))
def test_temperature_and_enthalpy_are_inverse(celsius: float) -> None:
    assert float(oil().temperature_at(oil().enthalpy(celsius))) == pytest.approx(celsius, abs=1e-9)


def test_arrays_keep_their_shape() -> None:
    grid = np.linspace(-40, 200, 12).reshape(3, 4)
    assert oil().viscosity_cst(grid).shape == (3, 4)
    assert np.all(np.diff(oil().viscosity_cst(grid).ravel()) < 0)


@pytest.mark.parametrize("celsius", [-41.0, 221.0, float("nan")])
def test_out_of_range_names_the_temperature_and_the_range(celsius: float) -> None:
    with pytest.raises(OilError, match="-40 to 220 degC") as caught:
        oil().viscosity_cst([20.0, celsius])
    assert f"{celsius:g}" in str(caught.value)
    assert isinstance(caught.value, InputError)


@pytest.mark.parametrize(
    "points",
    [(40, 25.0, 40, 5.0), (40, 5.0, 100, 25.0), (40, 25.0, 100, 0.1), (-300, 25.0, 100, 5.0)],
)
def test_points_that_no_oil_has_are_refused(points: tuple[float, float, float, float]) -> None:
    with pytest.raises(OilError):
        fit_d341(*points)
