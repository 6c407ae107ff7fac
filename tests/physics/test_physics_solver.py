"""The steady state of the whole circuit: balances, other solvers, other libraries, reporting."""

from __future__ import annotations

import math

import fluids
import ht
import numpy as np
import pytest
from fluids.packed_bed import Carman
from numpy.typing import ArrayLike
from scipy.optimize import brentq, root

from diag.errors import UnknownName, UsageError
from diag.physics import solver
from diag.physics.faults import FAULTS
from diag.physics.oil import OilError
from diag.physics.parameters import Feed, Physics
from diag.physics.solver import balance_at, states, steady
from diag.physics.units import LITRE_PER_MINUTE, PSI
from tests.physics.shipped import BOTH, FULL, RELIEF, physics

MINUTE = LITRE_PER_MINUTE
RUNNING = ("hot_idle", "high_power")


def scattered(circuit: Physics, size: int, seed: int, chance: float) -> dict[str, ArrayLike]:
    """Faults of every kind the circuit can have, each present with a chance, any severity."""
    rng = np.random.default_rng(seed)
    found: dict[str, ArrayLike] = {}
    for name, fault in FAULTS.items():
        if fault.needs and getattr(circuit, fault.needs) is None:
            continue
        least, most = max(fault.least, fault.neutral - 60), min(fault.most, fault.neutral + 30)
        severity = rng.uniform(least, most, size)
        found[name] = np.where(rng.random(size) < chance, severity, fault.neutral)
    return found


def days(size: int, seed: int) -> dict[str, ArrayLike]:
    rng = np.random.default_rng(seed)
    return {
        "ambient_c": rng.uniform(-40, 45, size),
        "ambient_psi": rng.uniform(4, 14.7, size),
        "fuel_c": rng.uniform(-20, 60, size),
    }


# Balances


@pytest.mark.parametrize("circuit", BOTH)
@pytest.mark.parametrize("point", ["motoring", "cold_idle", *RUNNING])
def test_every_sample_of_wild_faults_is_solved_and_balanced(circuit: str, point: str) -> None:
    parameters = physics(circuit)
    found = steady(parameters, point, scattered(parameters, 3000, 7, 0.08), days(3000, 8))
    assert found.unsolved == ()
    rated = parameters.pump.cm3_per_rev * parameters.pump.rpm / 1000
    # From the quantities, not from the solver's own residuals.
    left = found["pump_flow_l_min"] - found["spill_flow_l_min"] - found["supply_flow_l_min"]
    assert np.max(np.abs(left)) / rated < 1e-8
    parts = found["jet_flow_l_min"] + found["leak_flow_l_min"] + found["boost_flow_l_min"]
    assert found["supply_flow_l_min"] == pytest.approx(parts, rel=1e-12, abs=1e-12)
    out = found["fuel_cooler_kw"] + found["air_cooler_kw"] + found["surface_kw"]
    assert found["heat_kw"] == pytest.approx(out + found["warming_kw"], rel=1e-8, abs=1e-8)
    if point in RUNNING:
        closed = ~found.at_range_end
        assert np.count_nonzero(closed) > 2500
        gap = np.abs(found["heat_kw"] - out)[closed] / np.maximum(found["heat_kw"][closed], 1.0)
        assert np.max(gap) < 1e-8


@pytest.mark.parametrize("circuit", BOTH)
def test_level_bookkeeping_closes(circuit: str) -> None:
    parameters, tank = physics(circuit), physics(circuit).tank
    found = steady(parameters, "high_power", {"oil_loss_l": [0.0, 1.0, 2.0]})
    total = found["tank_quantity_l"] + found["hiding_l"] + tank.gulp_l + tank.gulp_speed_l
    assert total == pytest.approx(tank.filled_l - np.array([0.0, 1.0, 2.0]), rel=1e-12)
    parts = sum(found[f"hiding_l.{chamber.id}"] for chamber in parameters.chambers)
    assert found["hiding_l"] == pytest.approx(parts)


@pytest.mark.parametrize("circuit", BOTH)
@pytest.mark.parametrize("point", RUNNING)
def test_seal_air_leaves_by_the_vents(circuit: str, point: str) -> None:
    parameters = physics(circuit)
    found = steady(parameters, point, {"vent_blockage": [0.0, 0.5, 0.9]})
    ambient = parameters.surroundings.ambient_psi * PSI
    where = solver.point_named(parameters, point)
    vent = ambient + parameters.breather.rotor_psi * PSI * where.speed**2
    for chamber in parameters.chambers:
        if not chamber.seal_mm2:
            continue
        inside = ambient + found[f"chamber_pressure_psi.{chamber.id}"] * PSI
        for i, blocked in enumerate((0.0, 0.5, 0.9)):
            density = inside[i] / (287.05 * (parameters.breather.seal_air_c + 273.15))
            leaving = fluids.isothermal_gas(
                rho=float(density), fd=chamber.vent_friction, P1=float(inside[i]), P2=vent,
                L=chamber.vent_length_m, D=chamber.vent_bore_mm * 1e-3 * math.sqrt(1 - blocked),
            )  # fmt: skip
            entering = found[f"seal_air_g_s.{chamber.id}"][i] / 1e3
            assert leaving == pytest.approx(entering, rel=1e-6)


# The same state by other means


def brute(circuit: str, point: str, faults: dict[str, ArrayLike]) -> tuple[float, float]:
    """Gallery pressure (Pa) and supply temperature by nested scalar root finding of SciPy."""
    balance = balance_at(physics(circuit), point, faults)

    def pressure(t: float) -> float:
        oil = balance.supply(np.array([t]))
        top = float(balance.highest(oil)[0])
        return float(
            brentq(
                lambda p: float(balance.flows(oil, np.array([p])).excess[0]), 0.0, top, xtol=1e-9
            )
        )

    def heat(t: float) -> float:
        oil = balance.supply(np.array([t]))
        flows = balance.flows(oil, np.array([pressure(t)]))
        return float(balance.heats(oil, flows).excess[0])

    t = float(brentq(heat, -40.0, 220.0, xtol=1e-11))
    return pressure(t), t


@pytest.mark.parametrize("circuit", BOTH)
@pytest.mark.parametrize("point", RUNNING)
@pytest.mark.parametrize(
    "faults",
    [{}, {"pump_slip": 4.0}, {"gallery_leak_mm2": 9.0}, {"jet_blockage": 0.4}, {"oil_air": 0.2},
     {"relief_hold_mm2": 5.0}, {"scavenge_capacity.rear_chamber": 0.2}],
)  # fmt: skip
def test_agrees_with_nested_bracketing(
    circuit: str, point: str, faults: dict[str, ArrayLike]
) -> None:
    found = steady(physics(circuit), point, faults)
    pressure, t = brute(circuit, point, faults)
    assert float(found["gallery_pressure_psi"][0]) * PSI == pytest.approx(pressure, rel=1e-8)
    assert float(found["supply_temperature_c"][0]) == pytest.approx(t, abs=1e-6)


@pytest.mark.parametrize("circuit", BOTH)
def test_agrees_with_scipy_root(circuit: str) -> None:
    balance = balance_at(physics(circuit), "high_power")

    def residual(x: np.ndarray) -> list[float]:
        oil = balance.supply(np.array([x[1] * 100.0]))
        flows = balance.flows(oil, np.array([x[0] * 1e6]))
        return [float(flows.excess[0]), float(balance.heats(oil, flows).excess[0])]

    known = root(residual, [0.5, 0.9], tol=1e-13)
    found = steady(physics(circuit), "high_power")
    assert float(found["gallery_pressure_psi"][0]) * PSI == pytest.approx(
        known.x[0] * 1e6, rel=1e-8
    )
    assert float(found["supply_temperature_c"][0]) == pytest.approx(known.x[1] * 100, rel=1e-8)


def feed_flow(feed: Feed, drop: float, rho: float, mu: float) -> float:
    """Flow of one feed, m3/s, from the library's line, fittings and orifice."""
    area = math.pi * (feed.line.bore_mm * 1e-3) ** 2 / 4

    def excess(flow: float) -> float:
        each = flow / feed.jets
        bore = feed.bore_mm * 1e-3
        line = fluids.dP_from_K(K=feed.line.losses, rho=rho, V=flow / area)
        line += 128 * mu * feed.line.length_m * flow / (math.pi * (feed.line.bore_mm * 1e-3) ** 4)
        laminar = 128 * mu * feed.length_mm * 1e-3 * each / (math.pi * bore**4)
        orifice = fluids.dP_from_K(
            K=1 / feed.discharge**2, rho=rho, V=each / (math.pi * bore**2 / 4)
        )
        return float(line + laminar + orifice - drop)

    return float(brentq(excess, 1e-9, 1e-2, xtol=1e-16))


@pytest.mark.parametrize("circuit", BOTH)
@pytest.mark.parametrize("point", RUNNING)
def test_a_solved_state_put_together_again_with_the_libraries(circuit: str, point: str) -> None:
    # Viscosity by hand from D341, feeds, filter, lines and coolers by fluids and ht.
    parameters, found = physics(circuit), steady(physics(circuit), point)
    day = parameters.surroundings
    q = {name: float(values[0]) for name, values in found.quantities.items()}
    t = q["supply_temperature_c"]
    nu = 10 ** (10 ** (9.02497 - 3.55635 * math.log10(t + 273.15))) - 0.7
    rho = 998 - 0.72 * (t - 15)
    mu = nu * 1e-6 * rho
    for feed in parameters.feeds:
        back = q[f"chamber_pressure_psi.{feed.chamber}"]
        flow = feed_flow(feed, (q["gallery_pressure_psi"] - back) * PSI, rho, mu)
        assert q[f"feed_flow_l_min.{feed.id}"] * MINUTE == pytest.approx(flow, rel=1e-4)
    supplied = q["supply_flow_l_min"] * MINUTE
    element = parameters.filter
    drop = Carman(
        dp=element.grain_um * 1e-6, voidage=element.voidage, mu=mu, rho=rho,
        vs=supplied / (element.area_cm2 * 1e-4), L=element.thickness_mm * 1e-3,
    )  # fmt: skip
    assert q["filter_dp_psi"] * PSI == pytest.approx(drop, rel=0.02)
    line = parameters.delivery
    bore = line.bore_mm * 1e-3
    loss = fluids.one_phase_dP(m=supplied * rho, rho=rho, mu=mu, D=bore, L=line.length_m)
    loss += fluids.dP_from_K(K=line.losses, rho=rho, V=supplied / (math.pi * bore**2 / 4))
    rise = q["pump_outlet_psi"] - q["gallery_pressure_psi"] - q["filter_dp_psi"]
    assert rise * PSI == pytest.approx(loss, rel=0.1)  # transition flow
    where = solver.point_named(parameters, point)
    mass = q["jet_flow_l_min"] * MINUTE * rho + q["boost_flow_l_min"] * MINUTE * rho
    if parameters.fuel_cooler:
        middle = (q["scavenge_temperature_c"] + day.fuel_c) / 2
        known = ht.effectiveness_NTU_method(
            mh=mass, mc=where.fuel_kg_s, Cph=1800 + 2.2 * (middle - 15),
            Cpc=parameters.fuel_cooler.fuel_heat, subtype="S&T", UA=parameters.fuel_cooler.ua_w_k,
            Thi=q["scavenge_temperature_c"], Tci=day.fuel_c,
        )  # fmt: skip
        assert q["fuel_cooler_kw"] * 1e3 == pytest.approx(known["Q"], rel=1e-4)
    warmed = (q["scavenge_temperature_c"] + t) / 2
    heat = mass * (1800 + 2.2 * (warmed - 15)) * (q["scavenge_temperature_c"] - t)
    assert q["heat_kw"] * 1e3 == pytest.approx(heat, rel=1e-6)


def test_bearing_rise_is_thirty_to_sixty_kelvin_hot() -> None:
    # Judgement of the reference facts for the hottest group at high power.
    for circuit in BOTH:
        found = steady(physics(circuit), "high_power")
        hottest = max(
            float(found[f"feed_temperature_c.{feed.id}"][0]) for feed in physics(circuit).feeds
        )
        assert 15 < hottest - float(found["supply_temperature_c"][0]) < 60


# Batches


@pytest.mark.parametrize("circuit", BOTH)
def test_a_sample_does_not_depend_on_its_neighbours(circuit: str) -> None:
    parameters = physics(circuit)
    faults, day = scattered(parameters, 40, 3, 0.1), days(40, 4)
    together = steady(parameters, "high_power", faults, day)
    for i in range(0, 40, 7):
        alone = steady(
            parameters, "high_power",
            {name: np.asarray(values)[i] for name, values in faults.items()},
            {name: np.asarray(values)[i] for name, values in day.items()},
        )  # fmt: skip
        for name, values in together.quantities.items():
            assert float(alone[name][0]) == pytest.approx(values[i], rel=1e-6, abs=1e-6), name


def test_many_batches_keep_their_order(monkeypatch: pytest.MonkeyPatch) -> None:
    slip = np.linspace(1, 9, 101)
    whole = steady(physics(RELIEF), "hot_idle", {"pump_slip": slip})["gallery_pressure_psi"]
    monkeypatch.setattr(solver, "BATCH", 16)
    parts = steady(physics(RELIEF), "hot_idle", {"pump_slip": slip})["gallery_pressure_psi"]
    assert parts == pytest.approx(whole, rel=1e-8)


def test_solving_twice_gives_the_same_bits() -> None:
    faults = scattered(physics(FULL), 300, 5, 0.1)
    first, second = (steady(physics(FULL), "hot_idle", faults) for _ in range(2))
    for name, values in first.quantities.items():
        assert np.array_equal(values, second[name])


def test_several_points_share_their_samples() -> None:
    found = states(physics(FULL), RUNNING, {"pump_slip": [1.0, 4.0]})
    assert list(found) == list(RUNNING)
    ratio = found["high_power"]["gallery_pressure_psi"] / found["hot_idle"]["gallery_pressure_psi"]
    assert ratio[1] < ratio[0]


def test_given_temperature_is_the_one_supplied() -> None:
    found = steady(physics(FULL), "hot_idle", oil_c=[0.0, 40.0, 90.0])
    assert found["supply_temperature_c"].tolist() == [0.0, 40.0, 90.0]
    assert np.all(np.diff(found["gallery_pressure_psi"]) < 0)


# Reporting


def test_samples_that_do_not_converge_are_named(monkeypatch: pytest.MonkeyPatch) -> None:
    slip = {"pump_slip": np.array([1.0, 30.0, 1.0])}
    hasty = solver._Effort(2, 2, 1.0, (1e-12,))
    monkeypatch.setattr(solver, "_QUICK", hasty)
    monkeypatch.setattr(solver, "_PATIENT", hasty)
    found = steady(physics(RELIEF), "hot_idle", slip)
    assert found.unsolved == (0, 1, 2)
    assert np.max(np.abs(found.heat_residual)) > 1e-8


def test_temperature_beyond_the_oils_data_is_held_at_its_end_and_flagged() -> None:
    found = steady(physics(RELIEF), "high_power", {"cooler_bypass_stuck": [0.0, 1.0]})
    assert found.at_range_end.tolist() == [False, True]
    assert found.solved.all()
    assert float(found["supply_temperature_c"][1]) == physics(RELIEF).oil.highest_c
    assert float(found["warming_kw"][1]) > 1.0
    assert abs(float(found["warming_kw"][0])) < 1e-6


def test_unknown_names_and_bad_values() -> None:
    circuit = physics(FULL)
    with pytest.raises(UnknownName, match="hot_idle"):
        steady(circuit, "hot_idel")
    with pytest.raises(UnknownName, match="gallery_pressure_psi"):
        steady(circuit, "hot_idle")["gallery_pressure"]
    with pytest.raises(UnknownName, match="ambient_c"):
        steady(circuit, "hot_idle", day={"ambient": 20.0})
    with pytest.raises(UsageError, match="boost"):
        steady(circuit, "hot_idle", {"boost_slip": 3.0})
    with pytest.raises(UsageError, match="fuel cooler"):
        steady(physics(RELIEF), "hot_idle", {"fuel_cooler_fouling": 0.3})
    with pytest.raises(UsageError, match="differ in length"):
        steady(circuit, "hot_idle", {"pump_slip": [1.0, 2.0]}, {"ambient_c": [1.0, 2.0, 3.0]})
    with pytest.raises(OilError, match="-40 to 220"):
        steady(circuit, "hot_idle", oil_c=[90.0, 300.0])


def test_altitude_takes_from_the_pump_what_the_library_says_of_pressure() -> None:
    # Ambient pressure at 3,000 m by the standard atmosphere of fluids.
    aloft = fluids.ATMOSPHERE_1976(Z=3000.0).P / PSI
    found = steady(physics(RELIEF), "hot_idle", day={"ambient_psi": [14.7, aloft]})
    fillings = found["pump_filling"]
    air = physics(RELIEF).tank.entrained_air
    assert fillings[0] - fillings[1] == pytest.approx(
        air * (14.696 / aloft - 14.696 / 14.7), rel=0.15
    )
