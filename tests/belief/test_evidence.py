"""Findings as they are written, and the likelihoods they become.

Units are held against their definitions (international yard and pound agreement of 1959; BIPM
SI Brochure; US liquid gallon of 231 cubic inches), densities against SciPy's quadrature.
"""

from __future__ import annotations

import itertools
import math
import signal
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from functools import cache
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from diag.belief.evidence import (
    MISREAD,
    Finding,
    band_likelihood,
    make_finding,
    number_of,
    outcome_table,
    parse_finding,
    state_likelihood,
)
from diag.belief.hypotheses import Engine
from diag.circuit.loading import load_circuit
from diag.circuit.model import Circuit
from diag.circuit.records import Scale
from diag.circuit.units import in_unit
from diag.errors import Exit, UnknownName, UsageError
from tests.support import J, circuit, mode

PSI_IN_PASCAL = 0.45359237 * 9.80665 / 0.0254**2
"""Pound-force per square inch, exact by definition."""
QUART_IN_LITRE = 231 * 2.54**3 / 4 / 1000
"""US liquid quart, exact by definition."""

SCALES = {
    "pressure": Scale(
        unit="psi", range=(0, 250), tolerance=3, limits={"any": (40, 65, 95)}, basis=J
    ),
    "temperature": Scale(
        unit="degC", range=(-60, 250), tolerance=3, limits={"any": (65, 115)}, basis=J
    ),
    "quantity": Scale(
        unit="litre", range=(0, 12), tolerance=0.4, limits={"any": (7, 8.6)}, basis=J
    ),
}
STATES = {
    "pressure": ("very_low", "low", "normal", "high"),
    "temperature": ("low", "normal", "high"),
    "quantity": ("low", "normal", "high"),
}


@cache
def made() -> Circuit:
    """One worn pump behind three readings with a scale."""
    chances = {"low": 0.7, "high": 0.05}
    nodes: dict[str, Any] = {
        name: (states, "normal", {"low": 0.05, "high": 0.02}, {"pump.worn": chances})
        for name, states in STATES.items()
    }
    checks = {name: (name, 0.9, 0.06) for name in STATES}
    bare = circuit([mode("pump", "worn", 0.1)], nodes, checks)
    readings = {
        name: replace(o, record=o.record.model_copy(update={"scale": SCALES[name]}))
        for name, o in bare.observables.items()
    }
    return replace(bare, observables=readings)


def reading(text: str) -> float:
    """The number of a finding in the unit of its scale."""
    number = number_of(parse_finding(made(), text))
    assert number is not None
    return number


@contextmanager
def within(seconds: float) -> Iterator[None]:
    """Fails when the body takes longer; odd input must not keep a technician waiting."""

    def late(*_: object) -> None:
        # Not an Exception, so that no broad handler on the way swallows it.
        pytest.fail(f"took longer than {seconds:g} s")

    before = signal.signal(signal.SIGALRM, late)
    signal.setitimer(signal.ITIMER_REAL, seconds)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0)
        signal.signal(signal.SIGALRM, before)


# -- units -------------------------------------------------------------------------------

UNITS = [
    ("pressure=52psi", 52.0),
    ("pressure=52 psi", 52.0),
    ("pressure=+52psig", 52.0),
    ("pressure=3.6bar", 3.6e5 / PSI_IN_PASCAL),
    ("pressure=3.6 bar", 3.6e5 / PSI_IN_PASCAL),
    ("pressure=360kPa", 3.6e5 / PSI_IN_PASCAL),
    ("pressure=.36MPa", 3.6e5 / PSI_IN_PASCAL),
    ("pressure=3600mbar", 3.6e5 / PSI_IN_PASCAL),
    ("pressure=5.2e1psi", 52.0),
    ("temperature=121degC", 121.0),
    ("temperature=121 °C", 121.0),
    ("temperature=121C", 121.0),
    ("temperature=250degF", (250.0 - 32.0) * 5.0 / 9.0),
    ("temperature=250 °F", (250.0 - 32.0) * 5.0 / 9.0),
    ("temperature=250F", (250.0 - 32.0) * 5.0 / 9.0),
    ("temperature=-40degF", -40.0),
    ("temperature=32degF", 0.0),
    ("temperature=300K", 26.85),
    ("quantity=7l", 7.0),
    ("quantity=7 L", 7.0),
    ("quantity=7 litres", 7.0),
    ("quantity=7qt", 7.0 * QUART_IN_LITRE),
    ("quantity=7 quarts", 7.0 * QUART_IN_LITRE),
    ("quantity=7 qts", 7.0 * QUART_IN_LITRE),
    ("quantity=2gal", 8.0 * QUART_IN_LITRE),
]


@pytest.mark.parametrize(("text", "expected"), UNITS)
def test_units(text: str, expected: float) -> None:
    assert reading(text) == pytest.approx(expected, rel=1e-9, abs=1e-9)


def test_ends_of_the_range_belong_to_it() -> None:
    assert reading("pressure=0psi") == 0.0
    assert reading("pressure=250psi") == 250.0


@given(st.floats(-1e3, 1e3))
def test_temperature_scales_are_inverse(celsius: float) -> None:
    fahrenheit = in_unit(celsius, "degC", "degF", "")
    assert fahrenheit == pytest.approx(celsius * 9.0 / 5.0 + 32.0, abs=1e-9)
    assert in_unit(fahrenheit, "degF", "degC", "") == pytest.approx(celsius, abs=1e-9)


# -- what is refused ---------------------------------------------------------------------

REFUSED = [
    ("pressure=52", "needs its unit, for example 52psi"),
    ("pressure=52degC", "degC is not a unit of this reading (psi)"),
    ("pressure=52litre", "litre is not a unit of this reading (psi)"),
    ("temperature=52psi", "psi is not a unit of this reading (degC)"),
    ("temperature=10delta_degC", "not a unit of this reading"),
    ("quantity=7kg", "kg is not a unit of this reading (litre)"),
    ("quantity=60%", "not a unit of this reading (litre)"),
    ("pressure=52florps", "unknown unit 'florps'; accepted: psi"),
    ("pressure=52psi/2", "unknown unit"),
    ("pressure=52psi+1psi", "unknown unit"),
    ("pressure=52__import__('os')", "unknown unit"),
    ("pressure=52psi;rm", "unit"),
    ("pressure=251psi", "outside the range of the instrument, 0 to 250 psi"),
    ("pressure=-1psi", "outside the range of the instrument"),
    ("pressure=52bar", "outside the range of the instrument"),
    ("pressure=1e999psi", "outside the range of the instrument"),
    ("temperature=-77degF", "outside the range of the instrument"),
    ("pressure=nan", "cannot be 'nan'; it takes very_low, low, normal, high"),
    ("pressure=nanpsi", "cannot be 'nanpsi'"),
    ("pressure=inf", "cannot be 'inf'"),
    ("pressure=-inf psi", "cannot be '-inf psi'"),
    ("pressure=0x34psi", "unknown unit"),
    ("pressure=5_2psi", "unknown unit"),
    ("pressure=52,3psi", "unknown unit"),
    ("pressure=psi52", "or a number with its unit such as 125psi"),
    ("pressure=lowish", "cannot be 'lowish'"),
    ("pressure=", "is not a finding; write NAME@POINT=VALUE or NAME=VALUE"),
    ("=52psi", "is not a finding"),
    ("pressure", "is not a finding"),
    ("pressure@=low", "is not a finding"),
    ("pressure=52\npsi", "is not a finding"),
    ("1pressure=low", "is not a finding"),
    ("", "is not a finding"),
]


@pytest.mark.parametrize(("text", "told"), REFUSED)
def test_refused(text: str, told: str) -> None:
    with pytest.raises(UsageError) as caught:
        parse_finding(made(), text)
    assert told in str(caught.value)
    assert caught.value.code is Exit.USAGE


ODD = [
    "pressure=52psi#rm",
    "pressure=52psi\0",
    'pressure=52"psi',
    "pressure=52psi\x1b[2J",
    "pressure=52psi*9**9**9",
    "pressure=52psi*10**10**10",
    "pressure=５２psi",
    "pressure=٥٢psi",
    "pressure=52psi²³",
    "pressure=" + "9" * 5000 + "psi",
    "pressure=" + "0" * 100_000 + "52psi",
    "pressure=" + "9" * 20_000 + " 9",
    "pressure=52" + "psi*" * 3000 + "psi",
    "pressure=52" + "(" * 3000,
    "p" * 100_000 + "=low",
]


@pytest.mark.parametrize("text", ODD, ids=range(len(ODD)))
def test_odd_text_is_refused_at_once(text: str) -> None:
    with within(2.0), pytest.raises(UsageError):
        parse_finding(made(), text)


@pytest.mark.parametrize(
    "text",
    [
        "pressure=52psi\x1b[2J",
        "pressure=low\x1b[2J",
        "pres\x1b[2Jsure=low",
        "pressure=" + "9" * 5000 + "psi",
        "pressure=52" + "psi*" * 3000 + "psi",
        "pressure=" + "low" * 3000,
        "p" * 100_000 + "=low",
        "p" * 100_000,
    ],
    ids=range(8),
)
def test_refusals_are_one_short_printable_line(text: str) -> None:
    with within(2.0), pytest.raises(UsageError) as caught:
        parse_finding(made(), text)
    assert str(caught.value).isprintable(), "control characters would reach the terminal"
    assert len(str(caught.value)) < 1000


@settings(max_examples=300, deadline=None)
@given(st.text(max_size=40), st.sampled_from(["", "5", "52psi", "52psi*", "low"]))
def test_any_text_is_a_finding_or_a_usage_error(text: str, head: str) -> None:
    try:
        with within(2.0):
            found = parse_finding(made(), f"pressure={head}{text}")
    except UsageError:
        return
    assert np.isfinite(state_likelihood(found)).all()


def test_unknown_names_tell_the_nearest() -> None:
    with pytest.raises(UnknownName, match="nearest: pressure"):
        parse_finding(made(), "presure=low")


def test_a_word_only_reading_takes_no_number() -> None:
    plain = replace(made().observables["pressure"], record=_plain_record())
    with pytest.raises(
        UsageError, match=r"cannot be '52psi'; it takes very_low, low, normal, high$"
    ):
        make_finding(plain, "52psi")


def _plain_record() -> Any:
    return made().observables["pressure"].record.model_copy(update={"scale": None})


# -- outcome words -----------------------------------------------------------------------


@pytest.mark.parametrize(
    "written", ["very_low", "very-low", "very low", "VERY-LOW", "Very  Low", " very_LOW "]
)
def test_words_in_any_dress(written: str) -> None:
    found = parse_finding(made(), f"Pressure={written}")
    assert (found.key, found.value, number_of(found)) == ("pressure", "very_low", None)


def test_names_and_points_in_any_dress() -> None:
    turboprop = shipped()
    for text in ("oil-pressure@hot-idle=Very-Low", "OIL_PRESSURE@Hot_Idle=very low"):
        assert str(parse_finding(turboprop, text)) == "oil_pressure@hot_idle=very_low"


def test_word_likelihoods_come_from_detection_and_false_alarm() -> None:
    """Rows of P(report | state): detected or passed as normal; false alarms shared evenly."""
    table = outcome_table(made().observables["pressure"])
    expected = [
        [0.90, 0.00, 0.10, 0.00],
        [0.00, 0.90, 0.10, 0.00],
        [0.02, 0.02, 0.94, 0.02],
        [0.00, 0.00, 0.10, 0.90],
    ]
    np.testing.assert_allclose(table, expected, atol=1e-12)
    for k, word in enumerate(STATES["pressure"]):
        found = make_finding(made().observables["pressure"], word)
        np.testing.assert_allclose(state_likelihood(found), np.array(expected)[:, k], atol=1e-12)


# -- numbers as likelihoods ---------------------------------------------------------------


def by_quadrature(scale: Scale, cuts: tuple[float, ...], number: float) -> list[float]:
    """(states,) the density of a reading, by integrating over the true value in each band."""
    sigma = scale.tolerance / 2.0
    low, high = scale.range

    def error(true: float) -> float:
        z = (number - true) / sigma
        return math.exp(-z * z / 2.0) / (sigma * math.sqrt(2.0 * math.pi))

    found = []
    for a, b in itertools.pairwise((low, *cuts, high)):
        steps = sorted({a, b, *(x for k in range(-9, 10) if a < (x := number + k * sigma) < b)})
        area = sum(quad(error, u, v, epsabs=1e-13)[0] for u, v in itertools.pairwise(steps))
        found.append((1.0 - MISREAD) * area / (b - a) + MISREAD / (high - low))
    return found


def readings(scale: Scale) -> list[float]:
    """Evenly over the range, and around every edge."""
    low, high = scale.range
    steps = (-3.0, -1.0, -0.25, 0.0, 0.25, 1.0, 3.0)
    near = [e + k * scale.tolerance for e in (low, *scale.limits["any"], high) for k in steps]
    return [*np.linspace(low, high, 41).tolist(), *(x for x in near if low <= x <= high)]


@pytest.mark.parametrize("name", list(SCALES))
def test_densities_equal_quadrature(name: str) -> None:
    scale = SCALES[name]
    cuts = scale.limits["any"]
    for number in readings(scale):
        ours = band_likelihood(scale, cuts, number)
        np.testing.assert_allclose(ours, by_quadrature(scale, cuts, number), rtol=0, atol=1e-9)
        finding = make_finding(made().observables[name], f"{number!r}{scale.unit}")
        np.testing.assert_allclose(state_likelihood(finding), ours, rtol=1e-12)


@settings(max_examples=100, deadline=None)
@given(
    st.floats(0.0, 100.0), st.floats(0.05, 40.0), st.lists(st.floats(1, 99), min_size=1, max_size=4)
)
def test_densities_equal_quadrature_on_any_scale(
    number: float, tolerance: float, cuts: list[float]
) -> None:
    rising = tuple(sorted({round(c, 1) for c in cuts}))
    scale = Scale(unit="psi", range=(0, 100), tolerance=tolerance, limits={"any": rising}, basis=J)
    ours = band_likelihood(scale, rising, number)
    np.testing.assert_allclose(ours, by_quadrature(scale, rising, number), rtol=0, atol=1e-9)


def test_density_over_all_readings_is_one() -> None:
    """Away from the ends of the range, where no reading falls outside it."""
    scale = SCALES["pressure"]
    grid = np.linspace(*scale.range, 200_001)
    table = np.array([band_likelihood(scale, (40.0, 65.0, 95.0), x) for x in grid[::50]])
    area = np.trapezoid(table, grid[::50], axis=0)
    np.testing.assert_allclose(area[1:3], 1.0, atol=1e-4)


def test_a_limit_read_exactly_favours_neither_side_but_the_narrower_band() -> None:
    """On a limit both bands hold half the error; each spreads over its own width."""
    at = band_likelihood(SCALES["pressure"], (40.0, 65.0, 95.0), 65.0) - MISREAD / 250.0
    assert at[1] * 25.0 == pytest.approx(at[2] * 30.0, rel=1e-12)


def test_a_misreading_keeps_every_state_possible() -> None:
    far = band_likelihood(SCALES["pressure"], (40.0, 65.0, 95.0), 150.0)
    assert far[:3] == pytest.approx(MISREAD / 250.0, rel=1e-12)


# -- trust and order ---------------------------------------------------------------------


def posterior_odds(findings: list[Finding]) -> float:
    p = Engine(made()).posterior(findings, tolerance=0.0, beam=10**6).probability("pump.worn")
    return p / (1.0 - p)


@pytest.mark.parametrize("value", ["low", "normal", "high", "52psi", "64psi", "80psi"])
def test_half_trust_is_a_coin_between_the_finding_and_nothing(value: str) -> None:
    """With trust t the finding is as good as its kind with chance t, else it tells nothing:
    the same chance whatever the state. The mixture is enumerated here over pump and state."""
    full = make_finding(made().observables["pressure"], value)
    half = make_finding(made().observables["pressure"], value, trust=0.5)
    told = state_likelihood(full)
    flat = told.sum() / len(told)
    joint = {}
    for worn in (False, True):
        states = true_states(worn)
        prior = 0.1 if worn else 0.9
        joint[worn] = prior * float(states @ (0.5 * told + 0.5 * np.full(4, flat)))
    assert posterior_odds([half]) == pytest.approx(joint[True] / joint[False], rel=1e-9)


def true_states(worn: bool) -> np.ndarray:
    """P(very_low, low, normal, high): leak and pump as opposing causes, written out by hand."""
    low = 1.0 - (1.0 - 0.05) * (1.0 - 0.7 * worn)
    high = 1.0 - (1.0 - 0.02) * (1.0 - 0.05 * worn)
    both = low * high
    return np.array([0.0, low - both, (1.0 - low) * (1.0 - high) + both, high - both])


def effect(value: str, trust: float) -> float:
    """Shift in log-odds of two equally wide readings, by the likelihoods of their two states."""
    table = state_likelihood(make_finding(two_sided(0.5 + 0.4, 0.1), value, trust))
    return math.log(table[1] / table[0])


def two_sided(detects: float, alarm: float) -> Any:
    nodes: dict[str, Any] = {"n": (("ok", "bad"), "ok", {"bad": 0.01}, {"a.x": {"bad": 0.9}})}
    return circuit([mode("a", "x", 0.1)], nodes, {"look": ("n", detects, alarm)}).observables[
        "look"
    ]


@pytest.mark.parametrize("value", ["ok", "bad"])
def test_trust_weakens_but_never_turns_a_finding(value: str) -> None:
    shifts = [effect(value, t) for t in (0.0, 0.25, 0.5, 0.75, 1.0)]
    sign = math.copysign(1.0, shifts[-1])
    assert shifts[0] == 0.0
    assert np.all(np.diff([sign * s for s in shifts]) > 0.0)


def test_half_trust_halves_the_shift_of_weak_evidence() -> None:
    """To first order the log-odds follow the trust: 0.5 gives half the shift."""
    weak = two_sided(0.501, 0.499)
    full, half = (state_likelihood(make_finding(weak, "bad", t)) for t in (1.0, 0.5))
    ratio = math.log(half[1] / half[0]) / math.log(full[1] / full[0])
    assert ratio == pytest.approx(0.5, abs=1e-4)


def test_half_trust_bounds_the_shift_of_certain_evidence() -> None:
    """Proof at half trust is three to one between two states: (0.5 + 0.25) : 0.25."""
    proof = state_likelihood(make_finding(two_sided(1.0, 0.0), "bad", 0.5))
    assert proof[1] / proof[0] == pytest.approx(3.0, rel=1e-12)


def test_order_of_numbers_and_words_does_not_matter() -> None:
    found = [
        parse_finding(made(), text)
        for text in ("pressure=3.6bar", "temperature=250degF", "quantity=7.1qt")
    ]
    found.append(make_finding(found[0].observable, "low", trust=0.6))
    odds = [posterior_odds(list(order)) for order in itertools.permutations(found)]
    assert odds == pytest.approx([odds[0]] * len(odds), rel=1e-12)


def test_virtual_evidence_multiplies() -> None:
    """Two independent readings of one state weigh as their product (Pearl 1988, 2.2.2)."""
    observable = made().observables["pressure"]
    first, second = make_finding(observable, "52psi"), make_finding(observable, "low")
    both = state_likelihood(first) * state_likelihood(second)
    expected = 0.1 * (true_states(True) @ both) / (0.9 * (true_states(False) @ both))
    assert posterior_odds([first, second]) == pytest.approx(float(expected), rel=1e-9)


# -- findings as text --------------------------------------------------------------------


@cache
def shipped() -> Circuit:
    return load_circuit("relief_valve_turboprop")


@st.composite
def texts(draw: st.DrawFn) -> str:
    """A finding of the shipped circuit as a person may write it."""
    observable = draw(st.sampled_from(list(shipped().observables.values())))
    name = observable.id
    value = draw(st.sampled_from(observable.outcomes))
    if scale := observable.record.scale:
        number = draw(st.floats(*scale.range))
        space = draw(st.sampled_from(["", " ", "   "]))
        value = draw(st.sampled_from([value, f"{number!r}{space}{scale.unit}"]))
    if draw(st.booleans()):
        name, value = (
            name.replace("_", "-"),
            value.replace("_", "-").upper() if "_" in value else value,
        )
    return f"{name}={value}"


@settings(max_examples=300, deadline=None, suppress_health_check=list(HealthCheck))
@given(texts())
def test_findings_round_trip(text: str) -> None:
    found = parse_finding(shipped(), text)
    again = parse_finding(shipped(), str(found))
    assert (again, str(again)) == (found, str(found))
    np.testing.assert_array_equal(state_likelihood(again), state_likelihood(found))
