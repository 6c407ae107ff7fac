"""What a state of the circuit consists of: oil as supplied, flows and heats, all in SI."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from diag.physics import elements as el
from diag.physics.units import Array


@dataclass(frozen=True, slots=True)
class Supplied:
    """Properties of the oil at the supply temperature and the restrictions it then meets."""

    t: Array
    mu: Array
    rho: Array
    heat: Array
    linear: Array
    square: Array
    """Terms of each feed, jets and line together."""
    element: Array
    """Resistance of the filter element, Pa s/m3."""


@dataclass(frozen=True, slots=True)
class PressureScale:
    """Gallery pressure by the flow that feeds and relief would roughly take at it.

    Searching over that flow instead of the pressure takes out the square root of the orifices
    and the kink where the relief valve opens. Only the search uses it, never the balance.
    """

    linear: Array
    square: Array
    crack: Array
    knee: Array
    """Flow at which the relief opens, m3/s; infinite without one."""
    rise: Array
    """Pressure per flow beyond the knee."""

    def pressure(self, flow: Array) -> Array:
        """Gallery pressure, Pa, of a flow, m3/s."""
        below = np.minimum(flow, self.knee)
        beyond = np.maximum(flow - self.knee, 0.0) * self.rise
        return np.asarray(below * (self.linear + self.square * below) + beyond)

    def flow(self, pressure: Array) -> Array:
        """Flow, m3/s, of a gallery pressure, Pa: the inverse of `pressure`."""
        below = np.minimum(pressure, self.crack)
        beyond = np.maximum(pressure - self.crack, 0.0) / self.rise
        return np.asarray(el.terms_flow(below, self.linear, self.square) + beyond)


@dataclass(frozen=True, slots=True)
class Flows:
    """All oil flows, m3/s, and pressures, Pa, at one gallery pressure."""

    gallery: Array
    feeds: Array
    leak: Array
    boost: Array
    supplied: Array
    filter_drop: Array
    outlet: Array
    inlet: Array
    """Absolute pressure at the pump inlet."""
    air: Array
    filling: Array
    slip: Array
    delivered: Array
    spill: Array
    inflow: Array
    capacity: Array
    hiding: Array
    """Oil standing in each chamber, m3."""
    overflow: Array
    """What flooded chambers send through their vents to the breather."""
    consumption: Array
    """Oil lost through the breather, m3/s."""
    quantity: Array
    """Oil in the tank, m3."""
    excess: Array
    """Delivered less spilled less supplied, over the rated swept volume: the mass balance."""


@dataclass(frozen=True, slots=True)
class Heats:
    """Heat flows, W, and temperatures, degC, at one state of flow."""

    feeds: Array
    pumping: Array
    churning: Array
    fuel_cooler: Array
    air_cooler: Array
    surface: Array
    returned: Array
    """Mass flow through the coolers, kg/s."""
    scavenge_t: Array
    between_t: Array
    cooled_t: Array
    opening: Array
    core_flow: Array
    excess: Array
    """Heat in less heat out, over the point's heat: the energy balance."""
