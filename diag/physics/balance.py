"""The two balances that a steady state must meet: oil flow and heat.

`Balance` holds everything about a batch of samples that does not depend on the unknowns, in
SI. The unknowns are the gallery pressure (gauge, Pa) and the temperature of the oil supplied
(degC); all else follows from them explicitly. Shapes: a sample row is (N,) or (1,), a table
over feeds or chambers is (places, N) or (places, 1).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from diag.physics import elements as el
from diag.physics.faults import Severities
from diag.physics.oil import Oil
from diag.physics.parameters import Passage, Physics, Point
from diag.physics.roots import Roots, falling_roots
from diag.physics.state import Flows, Heats, PressureScale, Supplied
from diag.physics.units import (
    AIR_SPECIFIC_HEAT,
    CENTISTOKES,
    CM2,
    CM3,
    GRAVITY,
    LITRE,
    LITRE_PER_MINUTE,
    MM,
    MM2,
    PSI,
    RPM,
    Array,
)

_GAIN = LITRE_PER_MINUTE / PSI
_LEAK_DISCHARGE = 0.65
"""Discharge coefficient of a sharp-edged leak: orifice handbooks, judgement for a crack."""

_LEAST_FLOW = 1e-6
"""kg/s; below it temperatures along the circuit have no meaning and stay where they are."""


@dataclass(frozen=True, slots=True)
class Line:
    """A passage in SI."""

    bore: Array
    length: float
    losses: Array

    @staticmethod
    def of(passage: Passage, lost: Array) -> Line:
        """The passage with a share of its area lost (shape (N,))."""
        losses = passage.losses / (1.0 - lost) ** 2
        return Line(np.array([passage.bore_mm * MM]), passage.length_m, losses)


class Balance:
    """One operating point of one circuit with N samples of faults and surroundings."""

    def __init__(self, physics: Physics, point: Point, faults: Severities, day: Severities) -> None:
        self.physics = physics
        self.point = point
        self.size = max(faults.size, day.size)
        self.faults = faults
        self.oil: Oil = physics.oil.oil()
        self.thickening = faults["oil_viscosity_factor"]
        self._surroundings(day)
        self._pump(faults)
        self._relief(faults)
        self._filter(faults)
        self._feeds(faults)
        self._boost(faults)
        self._chambers(faults)
        self._tank(faults)
        self._cooling(faults)

    def _given(self, day: Severities, name: str) -> Array:
        default: float = getattr(self.physics.surroundings, name)
        return day.values.get(name, np.array([default]))

    def _surroundings(self, day: Severities) -> None:
        self.ambient_t = self._given(day, "ambient_c")
        self.ambient = self._given(day, "ambient_psi") * PSI
        self.fuel_t = self._given(day, "fuel_c")
        self.engine_speed = self.point.speed * self.faults["speed_factor"]

    def _pump(self, faults: Severities) -> None:
        pump = self.physics.pump
        self.displacement = pump.cm3_per_rev * CM3 * faults["displacement_factor"]
        self.rated_flow = pump.cm3_per_rev * CM3 * pump.rpm * RPM
        self.pump_speed = self.engine_speed * pump.rpm * RPM * faults["pump_drive"]
        self.pump_share = pump.filling * faults["pump_fill"]
        self.slip = pump.slip * faults["pump_slip"]
        self.suction = Line.of(self.physics.suction, faults["suction_blockage"])
        self.delivery = Line.of(self.physics.delivery, np.zeros(1))

    def _relief(self, faults: Severities) -> None:
        relief = self.physics.relief
        if relief is None:
            return
        crack = np.maximum(relief.crack_psi + faults["relief_crack_psi"], 0.0) * PSI
        self.crack = el.relief_crack(crack, relief.hysteresis_psi * PSI, faults["relief_closing"])
        free = 1.0 - faults["relief_stuck_shut"]
        self.relief_gain = relief.gain_l_min_psi * _GAIN * faults["relief_slope_factor"] * free
        self.full_lift = relief.full_lift_mm2 * MM2 * free
        self.held = faults["relief_hold_mm2"] * MM2

    def _filter(self, faults: Severities) -> None:
        element = self.physics.filter
        clear = (1.0 - faults["filter_clog"]) / (1.0 - faults["filter_omitted"])
        self.permeability = el.bed_permeability(element.grain_um * 1e-6, element.voidage)
        self.filter_area = element.area_cm2 * CM2 * clear
        stuck = faults["filter_bypass_stuck"]
        self.bypass_crack = element.bypass_crack_psi * PSI * (1.0 - np.maximum(stuck, 0.0))
        self.bypass_gain = element.bypass_gain_l_min_psi * _GAIN * (1.0 + np.minimum(stuck, 0.0))

    def _feeds(self, faults: Severities) -> None:
        feeds = self.physics.feeds
        names = [feed.id for feed in feeds]
        column = _column([feed.bore_mm * MM for feed in feeds])
        area = np.pi * column**2 / 4.0
        sound = _column([feed.jets for feed in feeds]) * (1.0 - faults.at("jet_blockage", names))
        sound = sound * faults.at("jet_area_factor", names)
        # An opening beside the jets counts as further jets of the same shape.
        self.jets = sound + faults.at("jet_open_mm2", names) * MM2 / area
        self.through_jets = sound / np.maximum(self.jets, 1e-12)
        self.jet_bore = column
        self.jet_length = _column([feed.length_mm * MM for feed in feeds])
        self.jet_discharge = _column([feed.discharge for feed in feeds])
        lost = faults.at("feed_restriction", names)
        self.feed_bore = _column([feed.line.bore_mm * MM for feed in feeds]) * np.sqrt(1.0 - lost)
        self.feed_length = _column([feed.line.length_m for feed in feeds])
        self.feed_losses = _column([feed.line.losses for feed in feeds])
        self.leak = faults["gallery_leak_mm2"] * MM2
        self.chamber_of = np.array([self._chamber(feed.chamber) for feed in feeds])
        heat = self.point.heat_kw * 1e3 / (self.point.metal_c - self.point.heat_at_c)
        shares = _column([feed.heat_share for feed in feeds])
        self.heated = heat * shares * faults.at("heat_factor", names)

    def _chamber(self, name: str) -> int:
        return [chamber.id for chamber in self.physics.chambers].index(name)

    def _boost(self, faults: Severities) -> None:
        boost = self.physics.boost
        if boost is None:
            return
        self.boost_speed = self.engine_speed * boost.rpm * RPM
        self.boost_share = 1.0 - faults["boost_blockage"]
        self.boost_slip = boost.slip * faults["boost_slip"]

    def _chambers(self, faults: Severities) -> None:
        chambers = self.physics.chambers
        names = [chamber.id for chamber in chambers]
        swept = _column([c.scavenge_cm3 * CM3 * c.scavenge_rpm * RPM for c in chambers])
        self.scavenged = swept * self.engine_speed * faults.at("scavenge_capacity", names)
        free = 1.0 - faults.at("scavenge_restriction", names)
        self.screen = _column([chamber.screen_mm2 * MM2 for chamber in chambers]) * free
        self.scavenge_suction = _column([chamber.suction_psi * PSI for chamber in chambers])
        self.chamber_volume = _column([chamber.volume_l * LITRE for chamber in chambers])
        self.churn = _column([c.churn_kw * 1e3 for c in chambers]) * self.engine_speed**2
        self._air(faults, names)

    def _air(self, faults: Severities, names: list[str]) -> None:
        """Seal air into each chamber, the pressure its vent leaves there, and what that does."""
        chambers, breather = self.physics.chambers, self.physics.breather
        rotor = breather.rotor_psi * self.engine_speed**2 + faults["breather_back_psi"]
        self.vent = self.ambient + rotor * PSI
        buffer = np.maximum(self.ambient * self.point.seal_air_ratio, self.vent)
        area = _column([c.seal_mm2 * MM2 for c in chambers]) * faults.at("seal_flow", names)
        found = self._vented(area, buffer, faults.at("vent_blockage", names))
        self.vented = (found.solved | found.at_end).all(axis=0)
        self.chamber_pressure = np.sqrt(found.x)
        self.seal_air = el.seal_flow(area, buffer, self.chamber_pressure, breather.seal_air_c)
        over = np.maximum(self.chamber_pressure - self.vent, 0.0) / self.ambient
        self.crowding = _column([chamber.crowding for chamber in chambers]) * over
        self.back = (self.chamber_pressure - self.ambient)[self.chamber_of]
        self.separation = breather.separation * faults["breather_separation"]
        loss = el.breather_loss(
            self.seal_air.sum(axis=0), breather.mist_g_per_kg * 1e-3, self.separation
        )
        self.mist_loss = loss / self.oil.density_15

    def _vented(self, area: Array, buffer: Array, blocked: Array) -> Roots:
        """Squares of the chamber pressures at which the vents carry the seal air away."""
        chambers, hot = self.physics.chambers, self.physics.breather.seal_air_c
        bore = _column([c.vent_bore_mm * MM for c in chambers]) * np.sqrt(1.0 - blocked)
        length = _column([chamber.vent_length_m for chamber in chambers])
        friction = _column([chamber.vent_friction for chamber in chambers])
        shape = np.broadcast_shapes(area.shape, bore.shape, buffer.shape, self.vent.shape)
        most = np.broadcast_to(buffer**2, shape).copy()
        least = np.broadcast_to(self.vent**2, shape).copy()
        scale = np.maximum(el.seal_flow(area, buffer, self.vent, hot) ** 2, 1e-18)

        def gain(square: Array) -> Array:
            # Both laws are nearly linear between the squares of flow and pressure.
            pressure = np.sqrt(square)
            entering = el.seal_flow(area, buffer, pressure, hot)
            leaving = el.vent_flow(pressure, self.vent, bore, length, friction, hot)
            return np.asarray((entering**2 - leaving**2) / scale)

        slope = -2.0 / np.maximum(most - least, 1.0)
        return falling_roots(gain, least, slope, least, most, 1e-10, most - least)

    def _tank(self, faults: Severities) -> None:
        tank = self.physics.tank
        running = self.engine_speed > 0
        lost = (faults["oil_loss_l"] - faults["oil_gain_l"]) * LITRE
        self.lost = lost + np.where(running, 0.0, faults["drained_l"] * LITRE)
        gulp = tank.gulp_l + tank.gulp_speed_l * self.engine_speed
        self.gulp = np.where(running, gulp * LITRE, 0.0)
        self.hours = faults["hours"]
        self.added_air = faults["oil_air"]
        self.tank_pressure = self.vent + (tank.pressure_psi + faults["tank_pressure_psi"]) * PSI

    def _cooling(self, faults: Severities) -> None:
        fuel, air = self.physics.fuel_cooler, self.physics.air_cooler
        if fuel is not None:
            clean = (1.0 - faults["fuel_cooler_fouling"]) * faults["cooler_factor"]
            self.fuel_ua = fuel.ua_w_k * clean
            self.fuel_rate = self.point.fuel_kg_s * fuel.fuel_heat
        if air is None:
            return
        face = 1.0 - faults["air_cooler_blockage"]
        self.tubes = 1.0 - faults["air_cooler_sludge"]
        self.air_ua = air.ua_w_k * face * self.tubes * faults["cooler_factor"]
        self.air_rate = self.point.cooler_air_kg_s * AIR_SPECIFIC_HEAT * face
        stuck = faults["cooler_bypass_stuck"]
        self.core_share = 1.0 - np.maximum(stuck, 0.0)
        self.core_crack = air.bypass_crack_psi * PSI
        self.core_gain = air.bypass_gain_l_min_psi * _GAIN * (1.0 + np.minimum(stuck, 0.0))
        self.thermostat = faults["thermostat_stuck"]

    # Oil flow

    def supply(self, t: Array) -> Supplied:
        """Properties at supply temperature `t` and the coefficients that follow."""
        rho = self.oil.raw_density(t)
        mu = self.oil.raw_kinematic(t) * self.thickening * rho
        a, b = el.jet_terms(self.jet_bore, self.jet_length, self.jet_discharge, mu, rho)
        c, d = el.line_terms(self.feed_bore, self.feed_length, self.feed_losses, mu, rho)
        element = self.physics.filter
        resistance = el.medium_resistance(
            mu, element.thickness_mm * MM, self.permeability, self.filter_area
        )
        linear, square = a / self.jets + c, b / self.jets**2 + d
        return Supplied(
            t, mu, rho, self.oil.raw_heat(t), np.asarray(linear), np.asarray(square),
            np.asarray(resistance),
        )  # fmt: skip

    def scale(self, oil: Supplied) -> PressureScale:
        """A scale of gallery pressure on which the flow balance is almost a straight line."""
        linear = 1.0 / (1.0 / oil.linear).sum(axis=0)
        square = 1.0 / ((1.0 / np.sqrt(oil.square)).sum(axis=0)) ** 2
        if self.physics.relief is None:
            return PressureScale(linear, square, *(np.array([np.inf]),) * 3)
        knee = np.asarray(el.terms_flow(self.crack, linear, square))
        rise = 1.0 / (self.relief_gain + 1.0 / (linear + 2.0 * square * knee))
        return PressureScale(linear, square, self.crack, knee, np.asarray(rise))

    def swept(self) -> Array:
        """Flow of the pump without slip, m3/s: where a search over flow may start."""
        return np.asarray(self.pump_speed * self.displacement * self.pump_share)

    def highest(self, oil: Supplied) -> Array:
        """A pressure at which slip alone takes the whole delivery, Pa."""
        free = self.pump_speed * oil.mu / np.maximum(self.slip, 1e-12)
        return np.asarray(free * 1.01 + self.tank_pressure)

    def flows(self, oil: Supplied, gallery: Array) -> Flows:
        """Every flow at a gallery pressure; `excess` is zero at the true one."""
        feeds = el.terms_flow(gallery - self.back, oil.linear, oil.square)
        leak = el.orifice_flow(self.leak, _LEAK_DISCHARGE, gallery, oil.rho)
        boost = self._boost_intake(gallery)
        supplied = feeds.sum(axis=0) + leak + boost
        drop = el.bypassed_drop(supplied, oil.element, self.bypass_crack, self.bypass_gain)
        line = self.delivery
        outlet = gallery + drop + el.line_drop(
            supplied, line.bore, line.length, line.losses, oil.mu, oil.rho
        )  # fmt: skip
        inflow, capacity, hiding = self._scavenge(feeds, boost, oil)
        overflow = np.maximum(inflow - capacity, 0.0).sum(axis=0)
        consumption = self.mist_loss + overflow * (1.0 - self.separation)
        quantity = self._quantity(hiding, consumption)
        air, inlet = self._suction(supplied, quantity, oil)
        filling = self.pump_share * el.pump_filling(air, inlet)
        rise = outlet - (inlet - self.ambient)
        slip = el.pump_slip(self.slip, self.displacement, rise, oil.mu)
        delivered = el.pump_delivery(self.pump_speed, self.displacement, filling, slip)
        spill = self._spill(gallery, outlet, oil.rho)
        excess = (delivered - spill - supplied) / self.rated_flow
        return Flows(
            gallery, feeds, leak, boost, supplied, drop, outlet, inlet, air, filling, slip,
            delivered, spill, inflow, capacity, hiding, overflow,
            consumption, quantity, excess,
        )  # fmt: skip

    def _boost_intake(self, gallery: Array) -> Array:
        boost = self.physics.boost
        if boost is None:
            return np.zeros(1)
        swept = boost.cm3_per_rev * CM3
        return el.boost_intake(
            gallery, self.boost_speed, swept, self.boost_share, boost.prime_psi * PSI
        )

    def _scavenge(self, feeds: Array, boost: Array, oil: Supplied) -> tuple[Array, Array, Array]:
        inflow = np.zeros((len(self.physics.chambers), feeds.shape[1]))
        for row, chamber in enumerate(self.chamber_of):
            inflow[chamber] += feeds[row]
        if self.physics.boost is not None:
            inflow[self._chamber(self.physics.boost.chamber)] += boost
        capacity = el.scavenge_capacity(
            self.scavenged,
            self.screen,
            _LEAK_DISCHARGE,
            self.scavenge_suction,
            oil.rho,
            self.crowding,
        )
        return inflow, capacity, el.holdup(inflow, capacity, self.chamber_volume)

    def _quantity(self, hiding: Array, consumption: Array) -> Array:
        return el.tank_quantity(
            self.physics.tank.filled_l * LITRE, self.gulp, hiding.sum(axis=0), self.lost,
            consumption, self.hours,
        )  # fmt: skip

    def _suction(self, supplied: Array, quantity: Array, oil: Supplied) -> tuple[Array, Array]:
        tank, line = self.physics.tank, self.suction
        entrained = np.minimum(tank.entrained_air + self.added_air, 0.95)
        air = el.outlet_air(
            quantity, entrained, tank.low_l * LITRE, np.maximum(tank.low_air, entrained)
        )
        loss = el.line_drop(supplied, line.bore, line.length, line.losses, oil.mu, oil.rho)
        return air, self.tank_pressure + oil.rho * GRAVITY * tank.head_m - loss

    def _spill(self, gallery: Array, outlet: Array, rho: Array) -> Array:
        relief = self.physics.relief
        if relief is None:
            return np.zeros(1)
        sensed = gallery if relief.senses == "gallery" else outlet
        return el.relief_spill(
            sensed, outlet, rho, self.crack, self.relief_gain, self.full_lift, self.held,
            relief.discharge,
        )  # fmt: skip

    # Heat

    def heats(self, oil: Supplied, flows: Flows) -> Heats:
        """Every heat flow at a state of flow; `excess` is zero at the true temperature."""
        taken = el.heat_pickup(
            self.heated, flows.feeds * oil.rho * oil.heat, self.point.metal_c - oil.t
        )
        churning = (self.churn * flows.hiding / self.chamber_volume).sum(axis=0)
        pumping = self._pumping(flows)
        # What overflows from a flooded chamber reaches the gearbox by the vent and returns too.
        arrived = flows.inflow.sum(axis=0)
        heat = taken.sum(axis=0) + churning + pumping
        per_kg = 1.0 / np.maximum(arrived * oil.rho, _LEAST_FLOW)
        scavenge_h = self.oil.enthalpy(oil.t) + heat * per_kg
        scavenge_t = self.oil.temperature_at(scavenge_h)
        fuel_duty = self._fuel_duty(scavenge_t, arrived * oil.rho)
        between_t = self.oil.temperature_at(scavenge_h - fuel_duty * per_kg)
        opening, core, air_duty = self._air_duty(between_t, arrived, oil)
        cooled_t = self.oil.temperature_at(scavenge_h - (fuel_duty + air_duty) * per_kg)
        surface = self.physics.tank.surface_w_k * (oil.t - self.ambient_t)
        excess = (heat - fuel_duty - air_duty - surface) / (self.point.heat_kw * 1e3 + 1e3)
        return Heats(
            taken, pumping, churning, fuel_duty, air_duty, surface, arrived * oil.rho,
            scavenge_t, between_t, cooled_t, opening, core, excess,
        )  # fmt: skip

    def _pumping(self, flows: Flows) -> Array:
        """Shaft power of the pumps, all of which ends as heat in the oil."""
        rise = flows.outlet - (flows.inlet - self.ambient)
        return (flows.delivered + flows.slip) * np.maximum(rise, 0.0)

    def _fuel_duty(self, hot_t: Array, returned: Array) -> Array:
        cooler = self.physics.fuel_cooler
        if cooler is None:
            return np.zeros(1)
        rate = returned * self._mean_heat(hot_t, self.fuel_t)
        return el.cooler_duty(
            self.fuel_ua, rate, self.fuel_rate, hot_t - self.fuel_t, cooler.arrangement
        )

    def _air_duty(self, hot_t: Array, arrived: Array, oil: Supplied) -> tuple[Array, Array, Array]:
        """Opening of the valve, flow through the core (m3/s) and heat to the air (W).

        The valve feels the oil that leaves the coolers for the tank, which in the steady state
        is the oil supplied.
        """
        cooler = self.physics.air_cooler
        if cooler is None:
            return np.zeros(1), np.zeros(1), np.zeros(1)
        opening = el.thermostat_opening(oil.t, cooler.opens_c, cooler.full_c, self.thermostat)
        sent = arrived * opening * self.core_share
        resistance = self.core_resistance(hot_t)
        drop = el.bypassed_drop(sent, resistance, self.core_crack, self.core_gain)
        core = drop / resistance
        rate = core * oil.rho * self._mean_heat(hot_t, self.ambient_t)
        duty = el.cooler_duty(
            self.air_ua, rate, self.air_rate, hot_t - self.ambient_t, cooler.arrangement
        )
        return opening, core, duty

    def _mean_heat(self, hot_t: Array, cold_t: Array) -> Array:
        """Specific heat over the span that a cooler can use: no more than enthalpy allows."""
        return self.oil.raw_heat(0.5 * (hot_t + cold_t))

    def core_resistance(self, t: Array) -> Array:
        """Resistance of the air cooler's core, Pa s/m3."""
        cooler = self.physics.air_cooler
        assert cooler is not None
        per_viscosity = cooler.core_psi_per_cst_l_min * PSI / (CENTISTOKES * LITRE_PER_MINUTE)
        viscosity = self.oil.raw_kinematic(t) * self.thickening
        return np.asarray(per_viscosity * viscosity / self.tubes)


def _column(values: list[float]) -> Array:
    return np.array(values, dtype=float)[:, np.newaxis]
