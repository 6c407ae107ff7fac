"""Every element against the general-purpose libraries fluids and ht, or a published value."""

from __future__ import annotations

import math

import fluids
import ht
import numpy as np
import pytest
from fluids import two_phase, two_phase_voidage
from fluids.constants import psi
from fluids.friction import Churchill_1977
from fluids.packed_bed import Carman, Ergun
from hypothesis import given
from hypothesis import strategies as st

from diag.physics import elements as el
from diag.physics.units import AIR_GAS_CONSTANT, ATMOSPHERE, LITRE_PER_MINUTE, MM2, PSI
from tests.physics.shipped import RELIEF, physics

AIR_MOLAR_MASS = 8314.462618 / AIR_GAS_CONSTANT
MINUTE = LITRE_PER_MINUTE


def test_psi_of_the_library() -> None:
    assert psi == pytest.approx(PSI, rel=1e-12)


# Lines


def test_laminar_line_is_hagen_poiseuille() -> None:
    # 10 L/min, 980 kg/m3, 24.5 mPa s, 9.5 mm, 1.5 m: 30,638.80 Pa by fluids and by hand.
    found = el.line_drop(10 * MINUTE, 0.0095, 1.5, 0.0, 0.0245, 980.0)
    library = fluids.one_phase_dP(m=10 * MINUTE * 980, rho=980, mu=0.0245, D=0.0095, L=1.5)
    assert float(found) == pytest.approx(30_638.80, abs=0.01)
    assert float(found) == pytest.approx(library, rel=1e-9)


def test_turbulent_line_of_the_library_document() -> None:
    # Document example of fluids: 10 kg/s, 1000 kg/m3, 1e-5 Pa s, 0.1 m: 63.43447 Pa per m.
    # Churchill's factor lies within 1 % of the reference solution.
    found = el.line_drop(10 / 1000, 0.1, 1.0, 0.0, 1e-5, 1000.0)
    assert float(found) == pytest.approx(63.43447, rel=0.01)


@pytest.mark.parametrize("reynolds", [0.01, 1, 50, 800, 2100, 2600, 4000, 2e4, 3e5, 1e7])
def test_friction_factor_is_churchills(reynolds: float) -> None:
    assert float(el.friction_factor(reynolds)) == pytest.approx(
        Churchill_1977(Re=reynolds, eD=0.0), rel=1e-9
    )


@pytest.mark.parametrize("reynolds", [10, 1000, 1900, 5000, 5e4, 1e6])
def test_friction_factor_meets_the_reference_outside_transition(reynolds: float) -> None:
    assert float(el.friction_factor(reynolds)) == pytest.approx(
        fluids.friction_factor(Re=reynolds, eD=0.0), rel=0.02
    )


def test_fittings_of_a_line() -> None:
    flow, bore, rho = 20 * MINUTE, 0.012, 950.0
    speed = flow / (math.pi * bore**2 / 4)
    library = fluids.dP_from_K(K=3.5, rho=rho, V=speed)
    assert float(el.line_drop(flow, bore, 0.0, 3.5, 0.005, rho)) == pytest.approx(library)


def test_short_line_terms_are_laminar_flow_plus_fittings() -> None:
    flow, bore, mu, rho = 2 * MINUTE, 0.006, 0.02, 960.0
    linear, square = el.line_terms(bore, 0.6, 4.0, mu, rho)
    library = fluids.one_phase_dP(m=flow * rho, rho=rho, mu=mu, D=bore, L=0.6)
    library += fluids.dP_from_K(K=4.0, rho=rho, V=flow / (math.pi * bore**2 / 4))
    assert float(linear * flow + square * flow**2) == pytest.approx(library, rel=1e-9)


@pytest.mark.parametrize(("celsius", "psi_known"), [(-40, 55.0), (-20, 5.3), (0, 1.0), (40, 0.13)])
def test_suction_line_from_cold_to_warm(celsius: float, psi_known: float) -> None:
    # 12 L/min through 19 mm x 0.6 m at 940 kg/m3, computed independently: at -40 degC the loss
    # is several atmospheres, so no pump can draw there.
    mu = float(physics(RELIEF).oil.oil().kinematic(celsius)) * 940.0
    found = float(el.line_drop(12 * MINUTE, 0.019, 0.6, 0.0, mu, 940.0))
    library = fluids.one_phase_dP(m=12 * MINUTE * 940, rho=940, mu=mu, D=0.019, L=0.6)
    assert found == pytest.approx(library, rel=1e-6)
    assert found / PSI == pytest.approx(psi_known, rel=0.03)


# Jets, leaks and the relief valve


def test_jet_of_one_millimetre() -> None:
    # 1 mm, 50 psi, 940 kg/m3, C 0.65: 0.0129965 kg/s by fluids and by the plain formula.
    library = fluids.flow_meter.flow_meter_discharge(
        D=0.02, Do=0.001, P1=50 * psi, P2=0.0, rho=940.0, C=0.65
    )
    _, square = el.jet_terms(0.001, 0.0, 0.65, 0.005, 940.0)
    found = float(el.terms_flow(50 * PSI, 0.0, square)) * 940
    assert found == pytest.approx(0.0129965, abs=5e-8)
    assert found == pytest.approx(library, rel=1e-5)


def test_cold_jet_adds_the_laminar_loss_of_its_bore() -> None:
    mu, rho, bore, length, flow = 0.2, 1000.0, 0.001, 0.002, 0.4 * MINUTE
    linear, square = el.jet_terms(bore, length, 0.7, mu, rho)
    library = fluids.one_phase_dP(m=flow * rho, rho=rho, mu=mu, D=bore, L=length)
    assert float(linear) * flow == pytest.approx(library, rel=1e-9)
    total = float(linear * flow + square * flow**2)
    assert float(el.terms_flow(total, linear, square)) == pytest.approx(flow, rel=1e-12)


@pytest.mark.parametrize("area", [1.0, 3.0, 12.0])
@pytest.mark.parametrize("pressure", [5.0, 60.0, 300.0])
def test_leak_orifice(area: float, pressure: float) -> None:
    bore = math.sqrt(area * MM2 * 4 / math.pi)
    library = fluids.flow_meter.flow_meter_discharge(
        D=1.0, Do=bore, P1=pressure * psi, P2=0.0, rho=930.0, C=0.65
    )
    found = float(el.orifice_flow(area * MM2, 0.65, pressure * PSI, 930.0)) * 930
    assert found == pytest.approx(library, rel=1e-6)


def test_relief_valve_at_full_lift_has_the_sizing_standards_area() -> None:
    # 0.19 kg/s, 80 psig up, 130 kPa down, K 0.65: 9.3234 mm2 by API 520 in fluids.
    up, down = 80 * PSI + ATMOSPHERE, 130e3
    library = fluids.API520_A_l(
        m=0.19, rho=940.0, P1=up, P2=down, overpressure=0.1, Kd=0.65, Kw=1.0, Kv=1.0
    )
    assert library / MM2 == pytest.approx(9.3234, abs=0.002)
    gain = 1.0  # m3/s per Pa: far past full lift
    found = el.relief_spill(80 * PSI, up - down, 940.0, 40 * PSI, gain, library, 0.0, 0.65)
    assert float(found) * 940 == pytest.approx(0.19, rel=2e-4)


def test_relief_valve_below_full_lift_follows_its_gain_and_debris_holds_it_open() -> None:
    gain = MINUTE / PSI
    spill = [
        float(el.relief_spill(p * PSI, p * PSI, 940.0, 78 * PSI, gain, 1.0, 0.0, 0.65)) / MINUTE
        for p in (70.0, 78.0, 83.0)
    ]
    assert spill == pytest.approx([0.0, 0.0, 5.0])
    held = float(el.relief_spill(50 * PSI, 50 * PSI, 940.0, 78 * PSI, gain, 1.0, 8e-6, 0.65))
    assert held == pytest.approx(float(el.orifice_flow(8e-6, 0.65, 50 * PSI, 940.0)))


def test_relief_hysteresis_lowers_the_seating_pressure() -> None:
    assert float(el.relief_crack(78 * PSI, 4 * PSI, 1.0)) == pytest.approx(74 * PSI)
    assert float(el.relief_crack(78 * PSI, 4 * PSI, 0.0)) == pytest.approx(78 * PSI)


@given(st.floats(0, 5e6), st.floats(0, 1e12), st.floats(1e12, 1e18))
def test_flow_and_drop_of_a_restriction_are_inverse(
    drop: float, linear: float, square: float
) -> None:
    flow = float(el.terms_flow(drop, linear, square))
    assert linear * flow + square * flow**2 == pytest.approx(drop, rel=1e-9, abs=1e-9)


# Filter


def test_filter_medium_is_a_carman_kozeny_bed() -> None:
    # 25 um, voidage 0.7, 3.333 mm/s, 0.5 mm: 592.59 Pa by Carman, 493.56 by Ergun (whose
    # constant is 150 in place of 180).
    mu, rho, speed, area = 0.0047, 940.0, 3.333e-3, 0.01
    permeability = el.bed_permeability(25e-6, 0.7)
    found = float(el.medium_resistance(mu, 0.5e-3, permeability, area)) * speed * area
    carman = Carman(dp=25e-6, voidage=0.7, vs=speed, rho=rho, mu=mu, L=0.5e-3)
    ergun = Ergun(dp=25e-6, voidage=0.7, vs=speed, rho=rho, mu=mu, L=0.5e-3)
    assert found == pytest.approx(592.59, rel=0.002)
    assert found == pytest.approx(carman, rel=0.02)
    assert found * 150 / 180 == pytest.approx(ergun, rel=0.02)


@given(st.floats(1e-6, 2e-3), st.floats(1e6, 1e12), st.floats(1e4, 5e5), st.floats(0, 1e-7))
def test_element_and_bypass_share_the_flow(
    flow: float, resistance: float, crack: float, gain: float
) -> None:
    drop = float(el.bypassed_drop(flow, resistance, crack, gain))
    through = drop / resistance + float(el.bypass_flow(drop, crack, gain))
    assert through == pytest.approx(flow, rel=1e-9)


# Pump


def test_pump_efficiency_is_filling_less_slip() -> None:
    # eta = f - C dp / (mu n), the linear gear-pump law, worked by hand: 0.98 - 0.0689476.
    slip = el.pump_slip(2e-8, 7e-6, 100 * PSI, 0.005)
    flow = el.pump_delivery(40.0, 7e-6, 0.98, slip)
    assert float(flow) / (40.0 * 7e-6) == pytest.approx(0.98 - 0.0689476, abs=1e-6)
    assert float(el.pump_delivery(0.0, 7e-6, 0.98, el.pump_slip(2e-8, 7e-6, 0.0, 0.005))) == 0.0


@pytest.mark.parametrize("inlet", [20e3, 60e3, 101_325.0, 150e3])
@pytest.mark.parametrize("air", [0.01, 0.05, 0.3])
def test_pump_filling_is_the_liquid_share_of_a_homogeneous_mixture(
    air: float, inlet: float
) -> None:
    celsius, rho = 90.0, 944.0
    at_atmosphere = float(el.air_density(ATMOSPHERE, celsius))
    quality = air * at_atmosphere / (air * at_atmosphere + (1 - air) * rho)
    void = two_phase_voidage.homogeneous(
        x=quality, rhol=rho, rhog=float(el.air_density(inlet, celsius))
    )
    assert float(el.pump_filling(air, inlet)) == pytest.approx(1 - void, rel=1e-9)
    if air == 0.01 and inlet > 60e3:
        assert 1 - air * ATMOSPHERE / inlet == pytest.approx(1 - void, abs=2e-4)


def test_no_flow_pulls_the_inlet_below_vacuum() -> None:
    assert float(el.pump_filling(0.03, 0.0)) == 0.0
    assert float(el.pump_filling(0.03, -5e4)) == 0.0


# Two phases


def test_homogeneous_void_of_the_table() -> None:
    # Quality 0.001075 of air in oil at about 1 atm: void 0.50021.
    rho_gas = 0.50021 / (1 - 0.50021)  # the density ratio that the table's value implies
    ratio = 0.001075 / (1 - 0.001075) / rho_gas
    found = float(el.homogeneous_void(0.001075, 940.0, 940.0 * ratio))
    assert found == pytest.approx(0.50021, abs=1e-9)


@pytest.mark.parametrize("quality", [1e-4, 0.001075, 0.01, 0.3])
def test_homogeneous_void(quality: float) -> None:
    library = two_phase_voidage.homogeneous(x=quality, rhol=940.0, rhog=1.02)
    assert float(el.homogeneous_void(quality, 940.0, 1.02)) == pytest.approx(library, rel=1e-12)


@pytest.mark.parametrize("quality", [0.0, 0.0005, 0.001075, 0.004])
@pytest.mark.parametrize("mass_flow", [0.05, 0.45, 0.9])
def test_two_phase_drop_is_mueller_steinhagen_and_heck(quality: float, mass_flow: float) -> None:
    library = two_phase.Muller_Steinhagen_Heck(
        m=mass_flow, x=quality, rhol=940.0, rhog=1.01, mul=0.0055, mug=2.2e-5, D=0.016, L=1.0
    )
    found = el.two_phase_drop(mass_flow, quality, 0.016, 1.0, (940.0, 0.0055), (1.01, 2.2e-5))
    assert float(found) == pytest.approx(library, rel=0.02)


def test_scavenge_line_of_the_table() -> None:
    # 0.186 kg/s, quality 0.001075, 16 mm: 1,879.8 Pa/m by this method, 1,545.8 by Lockhart and
    # Martinelli, about 1,170 for liquid alone; transition flow, so methods differ.
    found = float(el.two_phase_drop(0.186, 0.001075, 0.016, 1.0, (940.0, 0.0055), (1.01, 2.2e-5)))
    assert found == pytest.approx(1879.8, rel=0.1)
    other = two_phase.Lockhart_Martinelli(
        m=0.186, x=0.001075, rhol=940.0, rhog=1.01, mul=0.0055, mug=2.2e-5, D=0.016, L=1.0
    )
    assert 0.7 < other / found < 1.0


# Air


@pytest.mark.parametrize("ratio", [0.2, 0.45, 0.6, 0.8, 0.97])
def test_seal_air_is_nozzle_flow_with_choking(ratio: float) -> None:
    # The area that API 520 asks for that flow, choked or not, is the area given.
    up = 250e3
    flow = float(el.seal_flow(20 * MM2, up, ratio * up, 120.0))
    area = fluids.API520_A_g(
        m=flow, T=393.15, Z=1.0, MW=AIR_MOLAR_MASS, k=1.4, P1=up, P2=ratio * up, Kd=1.0
    )
    assert area == pytest.approx(20 * MM2, rel=2e-3)


def test_seal_air_chokes_where_the_library_says() -> None:
    assert fluids.is_critical_flow(P1=200e3, P2=100e3, k=1.4)
    choked = float(el.seal_flow(1e-5, 200e3, 100e3, 100.0))
    assert choked == pytest.approx(float(el.seal_flow(1e-5, 200e3, 20e3, 100.0)), rel=1e-12)
    assert not fluids.is_critical_flow(P1=200e3, P2=120e3, k=1.4)
    assert float(el.seal_flow(1e-5, 200e3, 120e3, 100.0)) < choked


@pytest.mark.parametrize("bore", [0.0095, 0.0135, 0.019])
@pytest.mark.parametrize("upstream", [103e3, 120e3, 180e3])
def test_vent_is_isothermal_pipe_flow(bore: float, upstream: float) -> None:
    density = upstream / (AIR_GAS_CONSTANT * 400.0)
    library = fluids.isothermal_gas(rho=density, fd=0.025, P1=upstream, P2=101_325.0, L=2.0, D=bore)
    found = float(el.vent_flow(upstream, 101_325.0, bore, 2.0, 0.025, 126.85))
    assert found == pytest.approx(library, rel=1e-9)


def test_vent_chokes_where_the_library_says() -> None:
    critical = fluids.P_isothermal_critical_flow(P=500e3, fd=0.03, D=0.008, L=1.0)
    at = float(el.vent_flow(500e3, critical, 0.008, 1.0, 0.03, 100.0))
    assert float(el.vent_flow(500e3, 0.5 * critical, 0.008, 1.0, 0.03, 100.0)) == pytest.approx(
        at, rel=1e-9
    )
    assert float(el.vent_flow(500e3, 1.2 * critical, 0.008, 1.0, 0.03, 100.0)) < at


@pytest.mark.parametrize(("bore", "drop"), [(0.019, 0.42), (0.0135, 2.63), (0.0095, 25.3)])
def test_carbon_in_a_vent_costs_the_fifth_power_of_its_bore(bore: float, drop: float) -> None:
    # 0.012 kg/s, 2 m: 0.42, 2.63 and 25.3 psi by fluids, with friction 0.03 and 1 kg/m3 at the
    # inlet (the two inputs that the three values together imply).
    upstream = ATMOSPHERE + drop * PSI
    celsius = upstream / AIR_GAS_CONSTANT - 273.15
    found = float(el.vent_flow(upstream, ATMOSPHERE, bore, 2.0, 0.03, celsius))
    assert found == pytest.approx(0.012, rel=0.01)


# Heat


PAIRS = [
    ("counterflow", "counterflow"),
    ("shell_and_tube", "S&T"),
    ("crossflow", "crossflow approximate"),
    ("crossflow_mixed_air", "crossflow, mixed Cmax"),
]


@pytest.mark.parametrize(("ours", "theirs"), PAIRS)
@pytest.mark.parametrize("ntu", [0.05, 0.5, 1.0, 2.5, 6.0])
@pytest.mark.parametrize("ratio", [0.01, 0.5, 0.9, 1.0])
def test_effectiveness(ours: el.Arrangement, theirs: str, ntu: float, ratio: float) -> None:
    library = ht.effectiveness_from_NTU(NTU=ntu, Cr=ratio, subtype=theirs)
    assert float(el.effectiveness(ntu, ratio, ours)) == pytest.approx(library, rel=1e-8)


@pytest.mark.parametrize(
    ("arrangement", "known", "within"),
    [
        ("counterflow", 0.56473, 1e-5),
        ("crossflow", 0.54749, 0.01),
        ("shell_and_tube", 0.53994, 1e-5),
    ],
)  # fmt: skip
def test_effectiveness_of_the_table(
    arrangement: el.Arrangement, known: float, within: float
) -> None:
    # NTU 1, capacity ratio 0.5, from ht; crossflow there is the exact series.
    assert float(el.effectiveness(1.0, 0.5, arrangement)) == pytest.approx(known, rel=within)


def test_cooler_of_the_book_example() -> None:
    # mh 5.2, mc 1.45 kg/s, 1860 and 1900 J/(kg K), 15 -> 85 degC against 130: effectiveness
    # 0.608696, NTU 1.10408, 192,850 W (document example of ht).
    library = ht.effectiveness_NTU_method(
        mh=5.2, mc=1.45, Cph=1860.0, Cpc=1900.0, subtype="crossflow, mixed Cmax",
        Tci=15, Tco=85, Thi=130,
    )  # fmt: skip
    assert library["NTU"] == pytest.approx(1.10408, abs=1e-5)
    duty = el.cooler_duty(library["UA"], 5.2 * 1860.0, 1.45 * 1900.0, 115.0, "crossflow_mixed_air")
    assert float(duty) == pytest.approx(192_850.0, rel=1e-6)
    assert float(duty) / (1.45 * 1900 * 115) == pytest.approx(0.608696, abs=1e-6)


def test_fuel_cooler_of_the_table() -> None:
    # 0.50/0.55 kg/s, 2000/2100 J/(kg K), 393/313 K, 520 W/K, shell and tube: 27,292.6 W.
    duty = float(el.cooler_duty(520.0, 1000.0, 1155.0, 80.0, "shell_and_tube"))
    assert duty == pytest.approx(27_292.6, abs=0.1)
    assert 393.15 - duty / 1000.0 == pytest.approx(365.86, abs=0.01)


def test_counterflow_duty_by_log_mean_difference() -> None:
    duty = float(el.cooler_duty(400.0, 900.0, 1200.0, 70.0, "counterflow"))
    mean = ht.LMTD(Thi=100, Tho=100 - duty / 900, Tci=30, Tco=30 + duty / 1200)
    assert 400.0 * mean == pytest.approx(duty, rel=1e-9)


def test_shell_and_tube_duty_by_corrected_log_mean_difference() -> None:
    duty = float(el.cooler_duty(520.0, 1000.0, 1155.0, 80.0, "shell_and_tube"))
    ends = {"Thi": 120.0, "Tho": 120 - duty / 1000, "Tci": 40.0, "Tco": 40 + duty / 1155}
    correction = ht.F_LMTD_Fakheri(**ends, shells=1)
    assert 520.0 * correction * ht.LMTD(**ends) == pytest.approx(duty, rel=1e-6)


@pytest.mark.parametrize("rate", [20.0, 150.0, 2000.0])
def test_heat_pickup_is_a_wall_of_one_temperature(rate: float) -> None:
    library = ht.effectiveness_from_NTU(NTU=120.0 / rate, Cr=0.0, subtype="boiler")
    found = float(el.heat_pickup(120.0, rate, 260.0))
    assert found == pytest.approx(library * rate * 260.0, rel=1e-9)


def test_heat_pickup_of_little_oil_ends_at_the_metals_temperature() -> None:
    assert float(el.heat_pickup(120.0, 1.0, 260.0)) == pytest.approx(260.0, rel=1e-9)


@pytest.mark.parametrize(
    ("celsius", "stuck", "opening"),
    [(50, 0, 0.0), (100, 0, 0.5), (130, 0, 1.0), (130, -1, 0.0), (50, 1, 1.0), (130, -0.6, 0.4)],
)
def test_thermostatic_valve(celsius: float, stuck: float, opening: float) -> None:
    # Linear between opening and full temperature: common practice, no source.
    assert float(el.thermostat_opening(celsius, 80.0, 120.0, stuck)) == pytest.approx(opening)


# Boost pump, scavenge, tank


def test_boost_pump_gives_what_torque_asks_until_its_leakage_takes_all() -> None:
    sound = float(el.boost_pressure(500 * PSI, 60.0, 1e-9, 0.005, 1.0))
    worn = float(el.boost_pressure(500 * PSI, 60.0, 2e-7, 0.005, 1.0))
    assert sound == pytest.approx(500 * PSI)
    # By hand: the whole displacement leaks at mu n / C = 1.5 MPa.
    assert worn == pytest.approx(0.005 * 60.0 / 2e-7)
    assert float(el.boost_intake(4 * PSI, 60.0, 1e-7, 1.0, 8 * PSI)) == pytest.approx(3e-6)


def test_scavenge_pump_is_limited_by_its_screen_at_high_flow_only() -> None:
    # The screen's share is the orifice law again, so fluids gives the limit.
    limit = (
        fluids.flow_meter.flow_meter_discharge(
            D=1.0, Do=math.sqrt(40 * MM2 * 4 / math.pi), P1=6 * psi, P2=0.0, rho=930.0, C=0.65
        )
        / 930.0
    )
    slow, fast = 0.5 * limit, 2.0 * limit
    found = el.scavenge_capacity(np.array([slow, fast]), 40 * MM2, 0.65, 6 * PSI, 930.0, 0.0)
    assert found == pytest.approx([slow, limit], rel=1e-6)
    crowded = el.scavenge_capacity(slow, 40 * MM2, 0.65, 6 * PSI, 930.0, 0.25)
    assert float(crowded) == pytest.approx(slow / 1.25)


def test_chamber_is_nearly_dry_at_twofold_capacity_and_floods_at_one() -> None:
    held = el.holdup(np.array([0.0, 0.5, 1.0, 2.0]), 1.0, 2e-3)
    assert held == pytest.approx([0.0, 2e-3 / 16, 2e-3, 2e-3])


def test_tank_bookkeeping() -> None:
    # 8 L less 1.5 gulp, 0.25 hiding, 0.5 lost and 2 h at 0.3 L/h, by hand: 5.15 L.
    left = el.tank_quantity(8e-3, 1.5e-3, 0.25e-3, 0.5e-3, 0.3e-3 / 3600, 2.0)
    assert float(left) == pytest.approx(5.15e-3)
    assert float(el.tank_quantity(8e-3, 0.0, 0.0, 9e-3, 0.0, 0.0)) == 0.0


def test_low_tank_draws_air() -> None:
    air = el.outlet_air(np.array([3e-3, 1.5e-3, 0.75e-3, 0.0]), 0.03, 1.5e-3, 0.5)
    assert air == pytest.approx([0.03, 0.03, 0.265, 0.5])


def test_breather_loses_what_it_does_not_separate() -> None:
    assert float(el.breather_loss(0.02, 0.04, 0.95)) == pytest.approx(4e-5)


def test_air_density_of_the_ideal_gas() -> None:
    library = fluids.constants.R  # J/(mol K)
    expected = 150e3 * AIR_MOLAR_MASS * 1e-3 / (library * 373.15)
    assert float(el.air_density(150e3, 100.0)) == pytest.approx(expected, rel=1e-9)
