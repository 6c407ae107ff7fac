"""The elements of an oil circuit as small pure functions over arrays.

Everything is SI (Pa, m3/s, kg/s, W, m) except temperatures, which are degC. Arguments are
numbers or arrays of samples that broadcast against each other; nothing is remembered and
nothing is random. Flows rise with pressure drop and drops rise with flow in every element,
which is what makes the circuit as a whole solvable by bracketing.
"""

from __future__ import annotations

from typing import Literal

import numpy as np

from diag.physics.units import (
    AIR_GAS_CONSTANT,
    AIR_HEAT_RATIO,
    ATMOSPHERE,
    HOUR,
    ZERO_CELSIUS,
    Array,
    Values,
)

Arrangement = Literal["counterflow", "crossflow", "crossflow_mixed_air", "shell_and_tube"]
"""How the two streams of a cooler pass each other."""
_TINY = 1e-30


# Pumps


def pump_filling(air: Values, inlet: Values) -> Array:
    """Share of a pump's displacement that is filled with liquid, 0 to 1.

    To first order 1 - air * (1 atm / inlet): aerated oil and a starved suction both show up
    as a pump that delivers less, and no flow can pull the inlet below vacuum.
    """
    gas = air * ATMOSPHERE
    liquid = (1.0 - air) * np.maximum(inlet, 0.0)
    return np.asarray(liquid / np.maximum(gas + liquid, _TINY))


def pump_slip(slip: Values, displacement: Values, rise: Values, mu: Values) -> Array:
    """Leakage flow inside a positive-displacement pump, m3/s: C D dp / mu.

    Laminar clearance flow, the usual linear law of gear pumps; `displacement` in m3/rev.
    """
    return np.asarray(slip * displacement * np.maximum(rise, 0.0) / mu)


def pump_delivery(speed: Values, displacement: Values, filling: Values, slip_flow: Values) -> Array:
    """Net flow of a positive-displacement pump, m3/s; `speed` in rev/s, 0 with a sheared drive."""
    return np.asarray(speed * displacement * filling - slip_flow)


# Restrictions


def orifice_flow(area: Values, discharge: Values, drop: Values, rho: Values) -> Array:
    """Flow through a sharp opening, m3/s: Cd A sqrt(2 dp / rho); none against the drop."""
    return np.asarray(discharge * area * np.sqrt(2.0 * np.maximum(drop, 0.0) / rho))


def jet_terms(
    diameter: Values, length: Values, discharge: Values, mu: Values, rho: Values
) -> tuple[Array, Array]:
    """Linear and square terms of a jet's drop: dp = linear q + square q^2.

    The square term is the orifice law, the linear one the laminar loss 128 mu L/(pi d^4)
    that governs when the oil is cold and the Reynolds number low.
    """
    square = rho / (2.0 * (discharge * np.pi * diameter**2 / 4.0) ** 2)
    return _laminar(diameter, length, mu), np.asarray(square)


def line_terms(
    diameter: Values, length: Values, losses: Values, mu: Values, rho: Values
) -> tuple[Array, Array]:
    """Linear and square terms of a short laminar line with bends and fittings (sum of K)."""
    square = losses * rho / (2.0 * (np.pi * diameter**2 / 4.0) ** 2)
    return _laminar(diameter, length, mu), np.asarray(square)


def _laminar(diameter: Values, length: Values, mu: Values) -> Array:
    return np.asarray(128.0 * mu * length / (np.pi * diameter**4))


def terms_flow(drop: Values, linear: Values, square: Values) -> Array:
    """The flow at which linear q + square q^2 equals `drop`, m3/s; none against the drop."""
    push = np.maximum(drop, 0.0)
    root = np.sqrt(linear * linear + 4.0 * square * push)
    return np.asarray(2.0 * push / np.maximum(linear + root, _TINY))


def friction_factor(reynolds: Values) -> Array:
    """Darcy friction factor of a smooth pipe in every regime; Churchill 1977."""
    re = np.maximum(reynolds, 1e-4)
    rough = _sixteenth(2.457 * 0.9 * np.log(re / 7.0)) + _sixteenth(37530.0 / re)
    eighth = 8.0 / re
    fourth = eighth * eighth * eighth * eighth
    twelfth_power = fourth * fourth * fourth + 1.0 / (rough * np.sqrt(rough))
    return np.asarray(8.0 * np.sqrt(np.sqrt(np.cbrt(twelfth_power))))


def _sixteenth(x: Values) -> Array:
    # Repeated squares: a general power costs ten times as much in the innermost loop.
    square = x * x
    fourth = square * square
    eighth = fourth * fourth
    return np.asarray(eighth * eighth)


def line_drop(
    flow: Values, diameter: Values, length: Values, losses: Values, mu: Values, rho: Values
) -> Array:
    """Pressure drop of a line, Pa, laminar or turbulent (Darcy-Weisbach plus fittings)."""
    speed = flow / (np.pi * diameter**2 / 4.0)
    reynolds = rho * speed * diameter / mu
    resistance = friction_factor(reynolds) * length / diameter + losses
    return np.asarray(resistance * 0.5 * rho * speed * speed)


def bed_permeability(fibre: Values, voidage: Values) -> Array:
    """Permeability of a filter medium, m2, from grain or fibre size; Carman-Kozeny (180)."""
    return np.asarray(fibre**2 * voidage**3 / (180.0 * (1.0 - voidage) ** 2))


def medium_resistance(mu: Values, thickness: Values, permeability: Values, area: Values) -> Array:
    """Pressure drop per flow of a filter element, Pa s/m3; Darcy's law mu t / (k A)."""
    return np.asarray(mu * thickness / (permeability * area))


def bypassed_drop(flow: Values, resistance: Values, crack: Values, gain: Values) -> Array:
    """Drop over a laminar restriction with a spring-loaded bypass beside it, Pa.

    The bypass opens at `crack` and passes `gain` (m3/s per Pa) above it; gain 0 is a bypass
    that is stuck shut or not there. Serves the pressure filter and the core of a cooler.
    """
    alone = flow * resistance
    open_ = (flow + gain * crack) * resistance / (1.0 + gain * resistance)
    return np.asarray(np.where(alone > crack, open_, alone))


def bypass_flow(drop: Values, crack: Values, gain: Values) -> Array:
    """Flow through the bypass at a drop, m3/s."""
    return np.asarray(gain * np.maximum(drop - crack, 0.0))


def relief_spill(
    sensed: Values, across: Values, rho: Values, crack: Values, gain: Values,
    full_lift: Values, held: Values, discharge: Values,
) -> Array:  # fmt: skip
    """Flow through a relief valve, m3/s.

    The lift follows the sensed pressure above `crack` (gain in m3/s per Pa) until full lift,
    an orifice of area `full_lift`. `held` is the area that debris keeps open at any pressure.
    """
    lifted = np.minimum(
        gain * np.maximum(sensed - crack, 0.0), orifice_flow(full_lift, discharge, across, rho)
    )
    return np.asarray(np.maximum(lifted, orifice_flow(held, discharge, across, rho)))


def relief_crack(crack: Values, hysteresis: Values, closing: Values) -> Array:
    """Pressure at which the valve seats, Pa: lower when it comes from above (closing = 1)."""
    return np.asarray(crack - hysteresis * closing)


# Heat


def effectiveness(ntu: Values, ratio: Values, arrangement: Arrangement) -> Array:
    """Effectiveness of a cooler from its transfer units and C_min/C_max.

    Kays and London's relations; crossflow with both streams unmixed uses the usual power
    approximation (within 1 %), `crossflow_mixed_air` takes the mixed stream as C_max.
    """
    if arrangement == "counterflow":
        return _counterflow(ntu, ratio)
    if arrangement == "shell_and_tube":
        root = np.sqrt(1.0 + ratio * ratio)
        fall = np.exp(-ntu * root)
        rest = root * (1.0 + fall) / (-np.expm1(-ntu * root) + _TINY)
        return np.asarray(2.0 / (1.0 + ratio + rest))
    safe = np.maximum(ratio, 1e-9)
    if arrangement == "crossflow_mixed_air":
        return np.asarray(-np.expm1(safe * np.expm1(-ntu)) / safe)
    power = np.maximum(ntu, 1e-12) ** 0.22
    return np.asarray(-np.expm1(power / safe * np.expm1(-safe * ntu / power)))


def _counterflow(ntu: Values, ratio: Values) -> Array:
    # At equal capacity rates the general form is 0/0; its limit is NTU / (1 + NTU).
    gap = np.where(np.abs(1.0 - ratio) < 1e-9, 1e-9, 1.0 - ratio)
    fall = np.expm1(-ntu * gap)
    return np.asarray(-fall / (gap - ratio * fall))


def cooler_duty(
    ua: Values, hot_rate: Values, cold_rate: Values, difference: Values, arrangement: Arrangement
) -> Array:
    """Heat passed in a cooler, W: eps C_min (T_hot,in - T_cold,in).

    `ua` in W/K, rates (mass flow times specific heat) in W/K, `difference` in K.
    """
    least = np.maximum(np.minimum(hot_rate, cold_rate), 1e-9)
    most = np.maximum(np.maximum(hot_rate, cold_rate), 1e-9)
    return np.asarray(effectiveness(ua / least, least / most, arrangement) * least * difference)


def thermostat_opening(temperature: Values, opens: Values, full: Values, stuck: Values) -> Array:
    """Opening of a thermostatic valve, 0 to 1; `stuck` from -1 (shut) over 0 to 1 (open)."""
    free = np.clip((temperature - opens) / (full - opens), 0.0, 1.0)
    return np.asarray(np.clip(free * (1.0 - np.abs(stuck)) + np.maximum(stuck, 0.0), 0.0, 1.0))


def heat_pickup(conductance: Values, rate: Values, difference: Values) -> Array:
    """Heat that oil takes up from hot metal, W: a heat exchanger with one even temperature.

    `rate` is the oil's mass flow times specific heat, `difference` metal minus oil inlet. With
    little oil the outlet nears the metal's temperature and the heat falls with the flow.
    """
    safe = np.maximum(rate, 1e-9)
    return np.asarray(-np.expm1(-conductance / safe) * safe * difference)


# Boost pump of a torquemeter


def boost_pressure(
    wanted: Values, speed: Values, slip: Values, mu: Values, filling: Values
) -> Array:
    """Torque pressure, Pa: what the torque asks for, as far as the pump's leakage allows."""
    return np.asarray(np.minimum(wanted, filling * speed * mu / np.maximum(slip, _TINY)))


def boost_intake(
    gallery: Values, speed: Values, displacement: Values, filling: Values, prime: Values
) -> Array:
    """Oil that a boost pump draws from the gallery, m3/s; it starves below `prime`."""
    return np.asarray(speed * displacement * filling * np.clip(gallery / prime, 0.0, 1.0))


# Scavenge, seal air and vent


def scavenge_capacity(
    swept: Values, screen: Values, discharge: Values, suction: Values, rho: Values, crowding: Values
) -> Array:
    """Oil that a scavenge pump can draw, m3/s.

    The lesser of the swept volume (m3/s), thinned by the air that chamber overpressure presses
    through it (`crowding`, 0 for none), and what the open screen passes at the available
    suction (Pa): a restriction therefore bites at high flow only.
    """
    passed = orifice_flow(screen, discharge, suction, rho)
    return np.asarray(np.minimum(swept / (1.0 + crowding), passed))


def holdup(inflow: Values, capacity: Values, volume: Values) -> Array:
    """Oil that stands in a bearing chamber, m3 (oil hiding).

    A dry chamber's pump draws mostly air; the level rises until it draws enough oil. The fourth
    power of inflow over capacity is a judgement; at or above 1 the chamber is flooded.
    """
    share = np.minimum(inflow / np.maximum(capacity, 1e-12), 1.0)
    square = share * share
    return np.asarray(volume * square * square)


def seal_flow(area: Values, upstream: Values, downstream: Values, air_c: Values) -> Array:
    """Air through a seal clearance, kg/s: isentropic nozzle flow, choked where it must be."""
    k = AIR_HEAT_RATIO
    kelvin = air_c + ZERO_CELSIUS
    critical = (2.0 / (k + 1.0)) ** (k / (k - 1.0))
    ratio = np.clip(downstream / upstream, critical, 1.0)
    flux = ratio ** (2.0 / k) - ratio ** ((k + 1.0) / k)
    factor = 2.0 * k / ((k - 1.0) * AIR_GAS_CONSTANT * kelvin)
    return np.asarray(area * upstream * np.sqrt(factor * np.maximum(flux, 0.0)))


def vent_flow(
    upstream: Values, downstream: Values, diameter: Values, length: Values,
    friction: Values, air_c: Values,
) -> Array:  # fmt: skip
    """Air through a vent passage, kg/s: isothermal flow with friction (absolute pressures).

    The flow stops growing where the outlet reaches the isothermal speed of sound.
    """
    area = np.pi * diameter**2 / 4.0
    friction_length = friction * length / diameter
    above = np.clip(upstream / downstream, 1.0, _choked_ratio(friction_length))
    resistance = friction_length + 2.0 * np.log(above)
    square = 1.0 - 1.0 / (above * above)
    gas = AIR_GAS_CONSTANT * (air_c + ZERO_CELSIUS)
    return np.asarray(area * upstream * np.sqrt(square / (gas * resistance)))


def _choked_ratio(friction_length: Values) -> Array:
    """Inlet over outlet pressure at choking: r^2 - 1 - 2 ln r = f L / D, by Newton on r^2."""
    square = 2.0 + friction_length + np.log1p(friction_length)
    for _ in range(4):
        square = square - (square - 1.0 - friction_length - np.log(square)) / (1.0 - 1.0 / square)
    return np.asarray(np.sqrt(square))


def breather_loss(air: Values, mist: Values, separation: Values) -> Array:
    """Oil lost overboard through the breather, kg/s; `mist` is kg of oil per kg of air."""
    return np.asarray(air * mist * (1.0 - separation))


# Return line and tank


def homogeneous_void(quality: Values, rho_liquid: Values, rho_gas: Values) -> Array:
    """Volume share of gas when both phases move at one speed; `quality` is its mass share."""
    liquid = (1.0 - quality) * rho_gas / rho_liquid
    return np.asarray(quality / np.maximum(quality + liquid, _TINY))


def two_phase_drop(
    mass_flow: Values, quality: Values, diameter: Values, length: Values,
    liquid: tuple[Values, Values], gas: tuple[Values, Values],
) -> Array:  # fmt: skip
    """Pressure drop of oil with air in a return line, Pa; Mueller-Steinhagen and Heck 1986.

    `liquid` and `gas` are (density, dynamic viscosity); friction factors are those of a smooth
    pipe.
    """
    flux = mass_flow / (np.pi * diameter**2 / 4.0)
    a = _phase_gradient(flux, diameter, *liquid)
    b = _phase_gradient(flux, diameter, *gas)
    rising = (a + 2.0 * (b - a) * quality) * np.cbrt(1.0 - quality)
    return np.asarray(length * (rising + b * quality**3))


def _phase_gradient(flux: Values, diameter: Values, rho: Values, mu: Values) -> Array:
    factor = friction_factor(flux * diameter / mu)
    return np.asarray(factor * flux * flux / (2.0 * rho * diameter))


def outlet_air(quantity: Values, entrained: Values, low: Values, drawn: Values) -> Array:
    """Air share (at 1 atm) of the oil leaving the tank.

    Above `low` (m3) only what the de-aerator leaves; below it the outlet begins to draw air,
    up to `drawn` when the tank is empty.
    """
    short = np.clip(1.0 - quantity / low, 0.0, 1.0)
    return np.asarray(np.clip(entrained + (drawn - entrained) * short, 0.0, 0.95))


def tank_quantity(
    filled: Values, gulp: Values, hiding: Values, lost: Values, consumption: Values, hours: Values
) -> Array:
    """Oil in the tank, m3, never below zero.

    `gulp` fills lines and galleries while the pump turns, `hiding` stands in the chambers,
    `lost` has left the circuit, `consumption` (m3/s) has gone on for `hours`.
    """
    return np.asarray(np.maximum(filled - gulp - hiding - lost - consumption * hours * HOUR, 0.0))


def air_density(pressure: Values, air_c: Values) -> Array:
    """Density of air as an ideal gas, kg/m3."""
    return np.asarray(pressure / (AIR_GAS_CONSTANT * (air_c + ZERO_CELSIUS)))
