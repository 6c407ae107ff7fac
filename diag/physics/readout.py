"""What a solved state says in the units of the trade; the unit stands at the name's end."""

from __future__ import annotations

import numpy as np

from diag.physics import elements as el
from diag.physics.balance import Balance
from diag.physics.state import Flows, Heats, Supplied
from diag.physics.units import (
    HOUR,
    LITRE,
    LITRE_PER_MINUTE,
    MM,
    PSI,
    Array,
)

_AIR_VISCOSITY = 2.2e-5
"""Pa s, of air near 100 degC; handbook value, from memory."""


def quantities(balance: Balance, oil: Supplied, flows: Flows, heats: Heats) -> dict[str, Array]:
    """Every quantity of a batch by name, each of shape (N,) or (1,).

    Quantities of one feed or chamber carry its id after a dot.
    """
    return {
        **_flow(balance, flows),
        **_heat(balance, oil, heats),
        **_torque(balance, oil, flows),
        **_level(balance, flows),
        **_feeds(balance, oil, flows, heats),
        **_chambers(balance, flows),
        **_return(balance, flows, heats),
    }


def _flow(balance: Balance, flows: Flows) -> dict[str, Array]:
    bypass = el.bypass_flow(flows.filter_drop, balance.bypass_crack, balance.bypass_gain)
    return {
        "gallery_pressure_psi": flows.gallery / PSI,
        "pump_outlet_psi": flows.outlet / PSI,
        "pump_inlet_psi": (flows.inlet - balance.ambient) / PSI,
        "filter_dp_psi": flows.filter_drop / PSI,
        "filter_bypass_l_min": np.asarray(bypass / LITRE_PER_MINUTE),
        "pump_flow_l_min": flows.delivered / LITRE_PER_MINUTE,
        "slip_flow_l_min": flows.slip / LITRE_PER_MINUTE,
        "spill_flow_l_min": flows.spill / LITRE_PER_MINUTE,
        "supply_flow_l_min": flows.supplied / LITRE_PER_MINUTE,
        "jet_flow_l_min": flows.feeds.sum(axis=0) / LITRE_PER_MINUTE,
        "leak_flow_l_min": flows.leak / LITRE_PER_MINUTE,
        "boost_flow_l_min": flows.boost / LITRE_PER_MINUTE,
        "pump_filling": flows.filling,
        "supply_air": flows.air,
    }


def _heat(balance: Balance, oil: Supplied, heats: Heats) -> dict[str, Array]:
    taken = heats.feeds.sum(axis=0) + heats.pumping + heats.churning
    return {
        "supply_temperature_c": oil.t,
        "oil_temperature_c": heats.cooled_t,
        "scavenge_temperature_c": heats.scavenge_t,
        "heat_kw": taken / 1e3,
        "fuel_cooler_kw": heats.fuel_cooler / 1e3,
        "air_cooler_kw": heats.air_cooler / 1e3,
        "surface_kw": heats.surface / 1e3,
        "warming_kw": heats.excess * (balance.point.heat_kw + 1.0),
        "air_cooler_opening": heats.opening,
    }


def _torque(balance: Balance, oil: Supplied, flows: Flows) -> dict[str, Array]:
    boost = balance.physics.boost
    if boost is None:
        return {}
    primed = np.clip(flows.gallery / (boost.prime_psi * PSI), 0.0, 1.0)
    wanted = boost.full_torque_psi * PSI * balance.point.torque
    pressure = el.boost_pressure(
        wanted, balance.boost_speed, balance.boost_slip, oil.mu, balance.boost_share * primed
    )
    return {"torque_pressure_psi": np.asarray(pressure / PSI)}


def _level(balance: Balance, flows: Flows) -> dict[str, Array]:
    return {
        "tank_quantity_l": flows.quantity / LITRE,
        "hiding_l": flows.hiding.sum(axis=0) / LITRE,
        "overflow_l_min": flows.overflow / LITRE_PER_MINUTE,
        "consumption_l_h": flows.consumption * HOUR / LITRE,
        "breather_air_g_s": balance.seal_air.sum(axis=0) * 1e3,
    }


def _feeds(balance: Balance, oil: Supplied, flows: Flows, heats: Heats) -> dict[str, Array]:
    reached = flows.feeds * balance.through_jets
    warmed = heats.feeds / np.maximum(flows.feeds * oil.rho, 1e-12)
    leaving = balance.oil.temperature_at(balance.oil.enthalpy(oil.t) + warmed)
    found = {}
    for row, feed in enumerate(balance.physics.feeds):
        found[f"feed_flow_l_min.{feed.id}"] = reached[row] / LITRE_PER_MINUTE
        found[f"feed_temperature_c.{feed.id}"] = leaving[row]
    return found


def _chambers(balance: Balance, flows: Flows) -> dict[str, Array]:
    over = (balance.chamber_pressure - balance.ambient) / PSI
    load = flows.inflow / np.maximum(flows.capacity, 1e-12)
    found = {}
    for row, chamber in enumerate(balance.physics.chambers):
        found[f"chamber_pressure_psi.{chamber.id}"] = over[row]
        found[f"hiding_l.{chamber.id}"] = flows.hiding[row] / LITRE
        found[f"scavenge_load.{chamber.id}"] = load[row]
        found[f"seal_air_g_s.{chamber.id}"] = balance.seal_air[row] * 1e3
    return found


def _return(balance: Balance, flows: Flows, heats: Heats) -> dict[str, Array]:
    """Pressure behind the scavenge pumps and air in the oil that they return to the tank."""
    scavenged = np.minimum(flows.inflow, flows.capacity)
    density = el.air_density(balance.chamber_pressure, heats.scavenge_t)
    air = (np.maximum(balance.scavenged - scavenged, 0.0) * density).sum(axis=0)
    total = np.maximum(air + heats.returned, 1e-12)
    quality = air / total
    rho = balance.oil.raw_density(heats.scavenge_t)
    mu = balance.oil.raw_kinematic(heats.scavenge_t) * balance.thickening * rho
    gas = density.mean(axis=0)
    line = balance.physics.return_line
    drop = el.two_phase_drop(
        total, quality, line.bore_mm * MM, line.length_m, (rho, mu), (gas, _AIR_VISCOSITY)
    )
    void = el.homogeneous_void(quality, rho, gas)
    flux = total / (np.pi * (line.bore_mm * MM) ** 2 / 4.0)
    drop = drop + line.losses * flux**2 / (2.0 * (void * gas + (1.0 - void) * rho))
    if balance.physics.air_cooler is not None:
        drop = drop + heats.core_flow * balance.core_resistance(heats.between_t)
    return {"return_psi": drop / PSI, "return_air": void}
