"""The names under which faults, build tolerances and the day enter a calculation.

A fault is a named array of severities, one per sample. Names of the whole circuit stand
alone; names of one feed or chamber take its id after a dot, `jet_blockage.rear`, and most of
them without a dot mean all of them at once.
"""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from diag.errors import UnknownName, UsageError
from diag.physics.units import Array

Place = Literal["circuit", "feed", "chamber"]


@dataclass(frozen=True, slots=True)
class Fault:
    """One name: its value in a sound circuit and the range it may take."""

    name: str
    neutral: float
    least: float
    most: float
    says: str
    place: Place = "circuit"
    joined: Literal["add", "multiply", "remain"] = "add"
    """How the value for all meets the value for one: `remain` multiplies 1 - value."""
    needs: str = ""
    """The optional element that a circuit must have for it."""


_ALWAYS = (
    # Oil and tank
    Fault("oil_viscosity_factor", 1, 0.05, 20, "kinematic viscosity over the grade's own"),
    Fault("oil_air", 0, 0, 0.9, "air share (at 1 atm) added to the oil leaving the tank"),
    Fault("oil_loss_l", 0, 0, 200, "oil gone from the circuit, L"),
    Fault("oil_gain_l", 0, 0, 50, "oil or fuel added to the circuit, L"),
    Fault("drained_l", 0, 0, 50, "oil drained from the tank into the gearbox while stopped, L"),
    Fault("hours", 0, 0, 1000, "running hours since the level was set"),
    Fault("tank_pressure_psi", 0, 0, 20, "added pressure in the tank, psi"),
    # Suction and pump
    Fault("suction_blockage", 0, 0, 0.99, "share of the suction screen that is blocked"),
    Fault("pump_slip", 1, 0, 1000, "clearance leakage over a new pump's"),
    Fault("pump_fill", 1, 0, 1, "share of the normal filling that remains"),
    Fault("pump_drive", 1, 0, 1, "pump speed over normal; 0 is a sheared drive"),
    # Filter
    Fault("filter_clog", 0, 0, 0.9999, "share of the element that is blocked"),
    Fault("filter_omitted", 0, 0, 0.9999, "share of the resistance missing (no or torn element)"),
    Fault("filter_bypass_stuck", 0, -1, 1, "1 stuck open, -1 stuck shut"),
    # Distribution
    Fault("gallery_leak_mm2", 0, 0, 500, "opening from the gallery to the outside, mm2"),
    Fault("jet_blockage", 0, 0, 0.99, "share of the jets blocked", "feed", "remain"),
    Fault("jet_open_mm2", 0, 0, 500, "opening at the jets (missing jet, worn seal), mm2", "feed"),
    Fault("feed_restriction", 0, 0, 0.99, "share of the feed line's area lost", "feed", "remain"),
    Fault("heat_factor", 1, 0, 20, "heat into the oil over normal", "feed", "multiply"),
    # Scavenge and vent
    Fault("scavenge_capacity", 1, 0, 3, "swept capacity over normal", "chamber", "multiply"),
    Fault("scavenge_restriction", 0, 0, 0.999, "share of the screen blocked", "chamber", "remain"),
    Fault("vent_blockage", 0, 0, 0.99, "share of the vent's area blocked", "chamber", "remain"),
    Fault("seal_flow", 1, 0, 100, "seal clearance over normal", "chamber", "multiply"),
    Fault("breather_separation", 1, 0, 1, "separation that remains over normal"),
    Fault("breather_back_psi", 0, 0, 50, "added back pressure at the breather, psi"),
    # Build tolerance
    Fault("displacement_factor", 1, 0.5, 2, "pump displacement over nominal"),
    Fault("jet_area_factor", 1, 0.5, 2, "jet area over nominal", "feed", "multiply"),
    Fault("cooler_factor", 1, 0.2, 5, "conductance of the coolers over nominal"),
    Fault("speed_factor", 1, 0.5, 1.5, "engine speed over the point's"),
)
_OPTIONAL = {
    "relief": (
        Fault("relief_hold_mm2", 0, 0, 500, "area that debris holds open, mm2"),
        Fault("relief_crack_psi", 0, -500, 500, "change of the cracking pressure, psi"),
        Fault("relief_slope_factor", 1, 0.001, 100, "flow gain over normal; low is sticky"),
        Fault("relief_stuck_shut", 0, 0, 1, "share of the lift that is lost; 1 never opens"),
        Fault("relief_closing", 0, 0, 1, "1 when the pressure came from above (hysteresis)"),
    ),
    "boost": (
        Fault("boost_slip", 1, 0.1, 1000, "leakage of the boost pump over normal"),
        Fault("boost_blockage", 0, 0, 0.99, "share of the boost pump's filling lost"),
    ),
    "fuel_cooler": (
        Fault("fuel_cooler_fouling", 0, 0, 0.99, "share of the fuel cooler's conductance lost"),
    ),
    "air_cooler": (
        Fault("air_cooler_blockage", 0, 0, 0.99, "share of the air cooler's face blocked"),
        Fault("air_cooler_sludge", 0, 0, 0.99, "share of the air cooler's tubes blocked inside"),
        Fault("thermostat_stuck", 0, -1, 1, "1 stuck open to the air cooler, -1 stuck shut"),
        Fault("cooler_bypass_stuck", 0, -1, 1, "1 stuck open, -1 stuck shut"),
    ),
}
"""Faults of elements that not every circuit has, by the parameter record of the element."""
_FAULTS = (
    *_ALWAYS,
    *(replace(fault, needs=element) for element, own in _OPTIONAL.items() for fault in own),
)
FAULTS: Mapping[str, Fault] = {fault.name: fault for fault in _FAULTS}
"""Every name that a calculation takes, by name."""

_DAY = (
    Fault("ambient_c", 15, -60, 60, "air temperature, degC"),
    Fault("ambient_psi", 14.7, 2, 16, "air pressure, psi absolute"),
    Fault("fuel_c", 30, -50, 120, "fuel temperature at the cooler, degC"),
)
DAY: Mapping[str, Fault] = {name.name: name for name in _DAY}
"""Names of the surroundings."""


class Severities:
    """Checked severities of N samples; every value is an array of shape (N,) or (1,)."""

    def __init__(self, values: Mapping[str, Array], size: int) -> None:
        self.values = values
        self.size = size

    def __getitem__(self, name: str) -> Array:
        """The severity of a name of the whole circuit, neutral where it was not given."""
        return self.values.get(name, np.array([FAULTS[name].neutral]))

    def at(self, name: str, places: Iterable[str]) -> Array:
        """The severity at each place, shape (places, N) or (places, 1)."""
        fault = FAULTS[name]
        whole = self[name]
        rows = [_joined(fault, whole, self.values.get(f"{name}.{place}")) for place in places]
        return np.array(np.broadcast_arrays(*rows)) if rows else np.empty((0, 1))

    def take(self, rows: NDArray[np.intp]) -> Severities:
        """The samples at these positions."""
        cut = {
            name: value[rows] if value.size > 1 else value for name, value in self.values.items()
        }
        return Severities(cut, rows.size if self.size > 1 else 1)


def _joined(fault: Fault, whole: Array, own: Array | None) -> Array:
    if own is None:
        return whole
    if fault.joined == "remain":
        return np.asarray(1.0 - (1.0 - whole) * (1.0 - own))
    return np.asarray(whole * own if fault.joined == "multiply" else whole + own)


def severities(
    given: Mapping[str, ArrayLike],
    feeds: Iterable[str] = (),
    chambers: Iterable[str] = (),
    known: Mapping[str, Fault] = FAULTS,
    missing: Collection[str] = (),
) -> Severities:
    """Checks names, ranges and lengths of the severities given.

    Values are numbers or arrays of one length N; `missing` names the optional elements that
    the circuit does not have. Raises UnknownName for a name nobody has,
    UsageError for a value outside its range or arrays of different length.
    """
    places = {"feed": tuple(feeds), "chamber": tuple(chambers), "circuit": ()}
    values: dict[str, Array] = {}
    for name, value in given.items():
        fault = _fault_named(name, known, places)
        if fault.needs in missing:
            raise UsageError(
                f"{name} needs a {fault.needs.replace('_', ' ')}, this circuit has none"
            )
        values[name] = _within(name, fault, np.atleast_1d(np.asarray(value, dtype=float)))
    sizes = {value.size for value in values.values() if value.size != 1}
    if len(sizes) > 1:
        raise UsageError(f"severities differ in length: {sorted(sizes)}")
    return Severities(values, sizes.pop() if sizes else 1)


def _fault_named(
    name: str, known: Mapping[str, Fault], places: Mapping[str, tuple[str, ...]]
) -> Fault:
    stem, dot, place = name.partition(".")
    fault = known.get(stem)
    if fault is None:
        raise UnknownName("fault" if known is FAULTS else "surrounding", stem, known)
    if dot and place not in places[fault.place]:
        raise UnknownName(f"place of {stem}", place, places[fault.place])
    return fault


def _within(name: str, fault: Fault, values: Array) -> Array:
    if values.ndim != 1 or not values.size:
        raise UsageError(f"{name} must be a number or a row of numbers")
    wrong = ~((values >= fault.least) & (values <= fault.most))
    if np.any(wrong):
        span = f"{fault.least:g} to {fault.most:g}"
        raise UsageError(f"{name} must be {span} ({fault.says}), got {float(values[wrong][0]):g}")
    return values
