"""Properties of a turbine oil over temperature.

Viscosity follows ASTM D341 from two measured points; density and specific heat are
straight lines over temperature, which synthetic turbine oils follow closely.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from diag.errors import InputError
from diag.physics.units import CENTISTOKES, ZERO_CELSIUS, Array, Values

REFERENCE_C = 15.0
"""Temperature at which density and specific heat are stated, degC."""
LOWEST_CST = 0.21
"""Lower end of ASTM D341, cSt."""
_LN10 = float(np.log(10.0))


class OilError(InputError):
    """A temperature or viscosity lies outside what the oil's data cover."""


def fit_d341(
    first_c: float,
    first_cst: float,
    second_c: float,
    second_cst: float,
    zero_c: float = ZERO_CELSIUS,
) -> tuple[float, float]:
    """Constants A and B of log10 log10 Z = A - B log10 T from two points.

    Temperatures in degC, viscosities in cSt, `zero_c` the kelvin offset (older worked
    examples use 273). Z is nu + 0.7 with the standard's term for thin oils.

    Source: ASTM D341. Raises OilError for points that no oil can have.
    """
    if first_c == second_c or min(first_c, second_c) + zero_c <= 0:
        raise OilError("two different temperatures above absolute zero are needed")
    if min(first_cst, second_cst) < LOWEST_CST:
        raise OilError(f"viscosity below {LOWEST_CST} cSt is outside ASTM D341")
    if (first_c < second_c) != (first_cst > second_cst):
        raise OilError("viscosity must fall as temperature rises")
    levels = np.log10(np.log10(_z_of_viscosity(np.array([first_cst, second_cst]))))
    decades = np.log10(np.array([first_c, second_c]) + zero_c)
    slope = float((levels[0] - levels[1]) / (decades[1] - decades[0]))
    return float(levels[0] + slope * decades[0]), slope


def d341_viscosity(
    a: float, b: float, temperature_c: Values, zero_c: float = ZERO_CELSIUS
) -> Array:
    """Kinematic viscosity, cSt, at `temperature_c` (degC, any shape); ASTM D341."""
    return _viscosity_of_z(np.asarray(temperature_c, dtype=float) + zero_c, a, b)


def _z_of_viscosity(cst: Array) -> Array:
    return np.asarray(cst + 0.7 + np.exp(-1.47 - 1.84 * cst - 0.51 * cst * cst))


def _viscosity_of_z(kelvin: Array, a: float, b: float) -> Array:
    """The standard's inverse: log10 Z = 10^(A - B log10 T), then off with the thin-oil term."""
    log_z = np.exp(_LN10 * a - b * np.log(kelvin))
    z = np.exp(_LN10 * log_z) - 0.7
    thin = np.exp(-0.7487 + z * (-3.295 + z * (0.6119 - 0.3193 * z)))
    return np.asarray(z - thin)


@dataclass(frozen=True, slots=True)
class Oil:
    """An oil as the circuit model uses it; arrays of degC in, arrays of the same shape out.

    The methods check the range of validity and raise OilError; `raw_kinematic` does not,
    for solvers that keep inside the range themselves.
    """

    a: float
    b: float
    density_15: float
    """kg/m3 at 15 degC."""
    density_slope: float
    """kg/(m3 K); negative."""
    heat_15: float
    """J/(kg K) at 15 degC."""
    heat_slope: float
    """J/(kg K2)."""
    lowest_c: float
    highest_c: float
    """Range in which the data may be used, degC."""

    def raw_kinematic(self, temperature_c: Array) -> Array:
        """Kinematic viscosity, m2/s, without a range check."""
        return _viscosity_of_z(temperature_c + ZERO_CELSIUS, self.a, self.b) * CENTISTOKES

    def kinematic(self, temperature_c: Values) -> Array:
        """Kinematic viscosity, m2/s."""
        return self.raw_kinematic(self.checked(temperature_c))

    def viscosity_cst(self, temperature_c: Values) -> Array:
        """Kinematic viscosity, cSt."""
        return self.kinematic(temperature_c) / CENTISTOKES

    def density(self, temperature_c: Values) -> Array:
        """Density, kg/m3."""
        return self.raw_density(self.checked(temperature_c))

    def raw_density(self, temperature_c: Array) -> Array:
        """Density, kg/m3, without a range check."""
        return np.asarray(self.density_15 + self.density_slope * (temperature_c - REFERENCE_C))

    def specific_heat(self, temperature_c: Values) -> Array:
        """Specific heat, J/(kg K)."""
        return self.raw_heat(self.checked(temperature_c))

    def raw_heat(self, temperature_c: Array) -> Array:
        """Specific heat, J/(kg K), without a range check."""
        return np.asarray(self.heat_15 + self.heat_slope * (temperature_c - REFERENCE_C))

    def enthalpy(self, temperature_c: Values) -> Array:
        """Enthalpy above 15 degC, J/kg: the integral of the specific heat."""
        above = np.asarray(temperature_c, dtype=float) - REFERENCE_C
        return np.asarray(above * (self.heat_15 + 0.5 * self.heat_slope * above))

    def temperature_at(self, enthalpy: Values) -> Array:
        """Temperature, degC, at an enthalpy in J/kg: the inverse of `enthalpy`."""
        inside = self.heat_15 * self.heat_15 + 2.0 * self.heat_slope * np.asarray(enthalpy)
        return np.asarray(REFERENCE_C + 2.0 * enthalpy / (self.heat_15 + np.sqrt(inside)))

    def checked(self, temperature_c: Values) -> Array:
        """The temperatures as an array; raises OilError naming the first one out of range."""
        values = np.asarray(temperature_c, dtype=float)
        wrong = ~((values >= self.lowest_c) & (values <= self.highest_c))
        if np.any(wrong):
            first = float(values[wrong][0]) if values.ndim else float(values)
            span = f"{self.lowest_c:g} to {self.highest_c:g} degC"
            raise OilError(f"oil data cover {span}, asked for {first:g} degC")
        return values
