"""Arrays and the units of the trade; inside the physics everything is SI."""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

Array: TypeAlias = NDArray[np.float64]
Flags: TypeAlias = NDArray[np.bool_]
Values: TypeAlias = Array | float
"""One number or an array of samples; shapes broadcast against each other."""

PSI = 6894.757293168361
"""Pascal in one pound-force per square inch."""
ATMOSPHERE = 101_325.0
"""Standard atmosphere, Pa: the pressure at which air contents are stated."""
LITRE = 1e-3
LITRE_PER_MINUTE = 1e-3 / 60.0
MM = 1e-3
MM2 = 1e-6
CM2 = 1e-4
CM3 = 1e-6
CENTISTOKES = 1e-6
RPM = 1.0 / 60.0
HOUR = 3600.0
GRAVITY = 9.80665
AIR_GAS_CONSTANT = 287.05
"""Specific gas constant of dry air, J/(kg K)."""
AIR_HEAT_RATIO = 1.4
AIR_SPECIFIC_HEAT = 1005.0
"""Specific heat of air at constant pressure, J/(kg K)."""
ZERO_CELSIUS = 273.15
