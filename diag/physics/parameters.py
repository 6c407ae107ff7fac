"""The numbers of one circuit's physics, as they stand in its `physics.yaml`.

Units are those of the trade and stand in the field names. Every record carries the basis of
its numbers, its own or the file's. The records refuse what no circuit can have; `problems`
looks across records.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping
from typing import Annotated, Literal

from pydantic import Field, model_validator

from diag.circuit.records import Based, Basis, Id, ModeRef, Record, Text
from diag.errors import DiagError, Problem
from diag.physics.elements import Arrangement
from diag.physics.faults import DAY, FAULTS, Fault, severities
from diag.physics.oil import Oil, OilError, fit_d341
from diag.physics.spread import Ranges, Readout, Severity, Spread, ends

Positive = Annotated[float, Field(gt=0)]
Share = Annotated[float, Field(ge=0, le=1)]
NotNegative = Annotated[float, Field(ge=0)]
Celsius = Annotated[float, Field(ge=-80, le=1500)]


class OilGrade(Based):
    """An oil: viscosity at two temperatures (ASTM D341), density and specific heat."""

    grade: Text
    cst_40: Positive
    cst_100: Positive
    density_15: Positive
    """kg/m3."""
    density_slope: Annotated[float, Field(le=0)]
    """kg/(m3 K)."""
    heat_15: Positive
    """J/(kg K)."""
    heat_slope: NotNegative
    """J/(kg K2)."""
    lowest_c: Celsius
    highest_c: Celsius

    @model_validator(mode="after")
    def _an_oil(self) -> OilGrade:
        if self.highest_c <= self.lowest_c:
            raise ValueError("highest_c must lie above lowest_c")
        try:
            self.oil()
        except OilError as error:
            raise ValueError(str(error)) from error
        if self.density_15 + self.density_slope * (self.highest_c - 15.0) <= 0:
            raise ValueError("density is not positive at highest_c")
        return self

    def oil(self) -> Oil:
        """The properties as functions of temperature."""
        a, b = fit_d341(40.0, self.cst_40, 100.0, self.cst_100)
        return Oil(
            a, b, self.density_15, self.density_slope, self.heat_15, self.heat_slope,
            self.lowest_c, self.highest_c,
        )  # fmt: skip


class Tank(Based):
    """The tank and what its outlet draws."""

    filled_l: Positive
    """Oil in the whole circuit at the full mark, settled."""
    gulp_l: NotNegative
    """Oil that fills lines and galleries while the pump turns."""
    gulp_speed_l: NotNegative
    """Oil in flight and in chambers on top of that at engine speed 1."""
    low_l: Positive
    """Running quantity below which the outlet begins to draw air."""
    low_air: Share
    """Air share (at 1 atm) drawn from an empty tank."""
    entrained_air: Share
    """Air share (at 1 atm) that the de-aerator leaves in the oil."""
    pressure_psi: NotNegative = 0.0
    """Pressure of the tank above its vent."""
    head_m: float
    """Height of the oil above the pump inlet."""
    surface_w_k: NotNegative
    """Heat loss of tank and lines to the surroundings, W/K."""


class Passage(Based):
    """A line: bore, length and the sum of its fittings' loss coefficients."""

    bore_mm: Positive
    length_m: NotNegative
    losses: NotNegative = 0.0


class Pump(Based):
    """The pressure pump, positive displacement."""

    cm3_per_rev: Positive
    rpm: Positive
    """Pump speed at engine speed 1."""
    filling: Annotated[float, Field(gt=0, le=1)]
    """Share of the swept volume that air-free oil fills."""
    slip: NotNegative
    """Clearance coefficient C of Q = C D dp / mu, new pump."""


class Relief(Based):
    """The relief valve; spills from the pump's outlet back to its inlet."""

    crack_psi: Positive
    gain_l_min_psi: Positive
    hysteresis_psi: NotNegative
    full_lift_mm2: Positive
    discharge: Annotated[float, Field(gt=0, le=1)]
    senses: Literal["gallery", "pump_outlet"]
    """Where the pressure that lifts it is taken."""

    @model_validator(mode="after")
    def _seats(self) -> Relief:
        if self.hysteresis_psi >= self.crack_psi:
            raise ValueError("the valve could never seat: hysteresis_psi reaches crack_psi")
        return self


class Filter(Based):
    """The pressure filter, its bypass and the differential pressure that warns."""

    thickness_mm: Positive
    grain_um: Positive
    """Size of the grains or fibres that the medium is made of."""
    voidage: Annotated[float, Field(gt=0, lt=1)]
    area_cm2: Positive
    bypass_crack_psi: Positive
    bypass_gain_l_min_psi: Positive
    alert_psi: Positive

    @model_validator(mode="after")
    def _warns_first(self) -> Filter:
        if self.alert_psi >= self.bypass_crack_psi:
            raise ValueError("the warning must come before the bypass opens")
        return self


class Feed(Based):
    """A group of equal jets (or a metered feed) and the line that leads to it."""

    id: Id
    chamber: Id
    """Where its oil collects."""
    jets: Positive
    bore_mm: Positive
    length_mm: NotNegative
    discharge: Annotated[float, Field(gt=0, le=1)]
    heat_share: Share
    """Share of the engine's heat that this group's oil carries away."""
    line: Passage


class Chamber(Based):
    """A bearing chamber or gearbox: its seal, its vent passage and its scavenge pump."""

    id: Id
    volume_l: Positive
    """Oil that stands in it when flooded."""
    scavenge_cm3: Positive
    scavenge_rpm: Positive
    """Speed of its scavenge pump at engine speed 1."""
    screen_mm2: Positive
    suction_psi: Positive
    """Suction that its scavenge pump can exert before it cavitates."""
    seal_mm2: NotNegative
    """Air clearance of its seals; 0 where no buffer air comes in."""
    vent_bore_mm: Positive
    vent_length_m: Positive
    vent_friction: Positive
    """Darcy friction factor of the vent passage."""
    crowding: NotNegative
    """Loss of scavenge capacity per relative overpressure of the chamber."""
    churn_kw: NotNegative
    """Heat that the shaft beats into it when flooded, at engine speed 1."""


class FuelCooler(Based):
    """The fuel-cooled cooler; all returning oil passes it."""

    ua_w_k: Positive
    arrangement: Arrangement
    fuel_heat: Positive
    """Specific heat of the fuel, J/(kg K)."""


class AirCooler(Based):
    """The air-cooled cooler behind its thermostatic valve and pressure bypass."""

    ua_w_k: Positive
    arrangement: Arrangement
    opens_c: Celsius
    """Temperature of the oil leaving the coolers at which the valve begins to open."""
    full_c: Celsius
    """The same, at which all oil passes the cooler."""
    core_psi_per_cst_l_min: Positive
    """Drop over the core per cSt and L/min."""
    bypass_crack_psi: Positive
    bypass_gain_l_min_psi: Positive

    @model_validator(mode="after")
    def _opens(self) -> AirCooler:
        if self.full_c <= self.opens_c:
            raise ValueError("full_c must lie above opens_c")
        return self


class Boost(Based):
    """The torquemeter's boost pump and the pressure that full torque asks for."""

    cm3_per_rev: Positive
    rpm: Positive
    slip: Positive
    full_torque_psi: Annotated[float, Field(gt=0, le=1000)]
    prime_psi: Positive
    """Gallery pressure below which it starves."""
    chamber: Id


class Breather(Based):
    """The centrifugal breather."""

    mist_g_per_kg: NotNegative
    """Oil mist that reaches it, g per kg of vent air."""
    separation: Share
    rotor_psi: NotNegative
    """Pressure that its rotor holds back at engine speed 1."""
    seal_air_c: Celsius


class Point(Based):
    """An operating point: speed, load and what heats and cools the oil there."""

    id: Id
    speed: Annotated[float, Field(ge=0, le=1.2)]
    """Engine speed over its rated value."""
    torque: Share = 0.0
    oil_c: Celsius | None = None
    """Oil temperature where it is not a steady state (start, warm-up, stopped)."""
    heat_kw: NotNegative = 0.0
    """Heat into plentiful oil at `heat_at_c`."""
    heat_at_c: Celsius = 90.0
    metal_c: Celsius = 350.0
    """Temperature that the heated metal would have without oil."""
    fuel_kg_s: NotNegative = 0.0
    cooler_air_kg_s: NotNegative = 0.0
    seal_air_ratio: Annotated[float, Field(ge=1)] = 1.0
    """Buffer air pressure over ambient pressure."""

    @model_validator(mode="after")
    def _heated(self) -> Point:
        if self.metal_c <= self.heat_at_c:
            raise ValueError("metal_c must lie above heat_at_c")
        if self.oil_c is None and not self.speed:
            raise ValueError("a stopped engine has no steady temperature: give oil_c")
        return self


class Surroundings(Based):
    """The day, unless a sample says otherwise."""

    ambient_c: Celsius
    ambient_psi: Positive
    fuel_c: Celsius


class Physics(Record):
    """`physics.yaml`: all parameters of one circuit."""

    circuit: Id
    topology: Literal["relief_valve", "full_flow"]
    """Whether a relief valve regulates the pressure, or all delivery goes to the jets."""
    basis: Basis
    description: str = ""
    oil: OilGrade
    surroundings: Surroundings
    tank: Tank
    suction: Passage
    pump: Pump
    relief: Relief | None = None
    """The regulating valve, or in a full-flow circuit the cold-start relief set far above it."""
    delivery: Passage
    filter: Filter
    feeds: Annotated[tuple[Feed, ...], Field(min_length=1)]
    chambers: Annotated[tuple[Chamber, ...], Field(min_length=1)]
    boost: Boost | None = None
    return_line: Passage
    fuel_cooler: FuelCooler | None = None
    air_cooler: AirCooler | None = None
    breather: Breather
    points: Annotated[tuple[Point, ...], Field(min_length=1)]
    spread: Spread | None = None
    severities: dict[ModeRef, Severity] = Field(default_factory=dict)
    """Modes of the circuit to the faults of a calculation, when they are worth a complaint."""
    conditions: dict[Id, Readout] = Field(default_factory=dict)
    """Conditions of the circuit that the physics knows."""

    @property
    def missing(self) -> tuple[str, ...]:
        """Optional elements that this circuit does not have."""
        optional = ("relief", "boost", "fuel_cooler", "air_cooler")
        return tuple(name for name in optional if getattr(self, name) is None)


def problems(physics: Physics) -> list[Problem]:
    """What is wrong across records, each with its place; empty for a usable circuit."""
    return [problem for check in _CHECKS for problem in check(physics)]


def _repeated(physics: Physics) -> Iterator[Problem]:
    groups: tuple[tuple[str, Iterable[Feed | Chamber | Point]], ...] = (
        ("feeds", physics.feeds),
        ("chambers", physics.chambers),
        ("points", physics.points),
    )
    for name, records in groups:
        seen: set[str] = set()
        for i, record in enumerate(records):
            if record.id in seen:
                yield Problem(record.where, f"{name}.{i}.id", "stands twice", record.id)
            seen.add(record.id)


def _unknown_chambers(physics: Physics) -> Iterator[Problem]:
    known = [chamber.id for chamber in physics.chambers]
    users = [(f"feeds.{i}", feed) for i, feed in enumerate(physics.feeds)]
    pairs: list[tuple[str, Feed | Boost]] = [*users]
    if physics.boost:
        pairs.append(("boost", physics.boost))
    for path, record in pairs:
        if record.chamber not in known:
            accepted = ", ".join(known)
            message = "no such chamber"
            yield Problem(record.where, f"{path}.chamber", message, record.chamber, accepted)


def _regulation(physics: Physics) -> Iterator[Problem]:
    if physics.topology == "relief_valve" and physics.relief is None:
        message = "a relief-valve circuit needs a relief valve"
        yield Problem(physics.where, "relief", message, accepted="the record `relief`")


def _heat_shares(physics: Physics) -> Iterator[Problem]:
    total = sum(feed.heat_share for feed in physics.feeds)
    if abs(total - 1.0) > 1e-6:
        where = physics.feeds[0].where
        yield Problem(where, "feeds", "heat_share must add up to 1", f"{total:g}")


def _no_heat_path(physics: Physics) -> Iterator[Problem]:
    if not physics.tank.surface_w_k and not (physics.fuel_cooler or physics.air_cooler):
        yield Problem(physics.where, "", "nothing cools the oil", accepted="a cooler")


def _temperatures_covered(physics: Physics) -> Iterator[Problem]:
    oil = physics.oil
    for i, point in enumerate(physics.points):
        if point.oil_c is not None and not oil.lowest_c <= point.oil_c <= oil.highest_c:
            span = f"{oil.lowest_c:g} to {oil.highest_c:g}"
            message = "outside the range of the oil's data"
            yield Problem(point.where, f"points.{i}.oil_c", message, f"{point.oil_c:g}", span)


def _cannot_carry(physics: Physics) -> Iterator[Problem]:
    """A chamber whose sound scavenge pump cannot keep up, or a pump smaller than its jets."""
    swept = sum(chamber.scavenge_cm3 * chamber.scavenge_rpm for chamber in physics.chambers)
    pump = physics.pump.cm3_per_rev * physics.pump.rpm
    if swept <= pump:
        got = f"{swept / 1000:.3g} against {pump / 1000:.3g} L/min"
        message = "scavenge capacity does not exceed pump delivery"
        yield Problem(physics.chambers[0].where, "chambers", message, got)
    tank = physics.tank
    if tank.gulp_l + tank.gulp_speed_l + tank.low_l >= tank.filled_l:
        message = "the running tank would be low with the circuit full"
        yield Problem(tank.where, "tank.filled_l", message, f"{tank.filled_l:g}")


def _ranges_taken(physics: Physics) -> Iterator[Problem]:
    """Every range names something that the calculation takes, and stays within its bounds."""
    feeds = [feed.id for feed in physics.feeds]
    chambers = [chamber.id for chamber in physics.chambers]
    tables: list[tuple[str, Ranges, Mapping[str, Fault]]] = [
        (f"severities.{ref}", ranges, FAULTS) for ref, ranges in physics.severities.items()
    ]
    if physics.spread:
        tables.append(("spread.build", physics.spread.build, FAULTS))
        tables.append(("spread.day", physics.spread.day, DAY))
    for path, ranges, known in tables:
        try:
            severities(ends(ranges), feeds, chambers, known, physics.missing)
        except DiagError as error:
            yield Problem(ranges.where, path, str(error))


def _readouts_placed(physics: Physics) -> Iterator[Problem]:
    known = [point.id for point in physics.points]
    for name, readout in physics.conditions.items():
        for point in (*readout.at, *([readout.stopped_from] if readout.stopped_from else [])):
            if point not in known:
                path, accepted = f"conditions.{name}", ", ".join(known)
                yield Problem(readout.where, path, "no such point", point, accepted)


_CHECKS: tuple[Callable[[Physics], Iterator[Problem]], ...] = (
    _repeated,
    _unknown_chambers,
    _regulation,
    _heat_shares,
    _no_heat_path,
    _temperatures_covered,
    _cannot_carry,
    _ranges_taken,
    _readouts_placed,
)
