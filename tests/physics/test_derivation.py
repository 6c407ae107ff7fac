"""Computed links: chances against closed forms and bigger samples, and the file they go to."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from scipy.optimize import brentq

from diag.circuit.loading import load_circuit
from diag.circuit.model import Circuit
from diag.circuit.reading import read_document, validated
from diag.circuit.records import LinksFile
from diag.physics.computed import differences, links_text, made_with
from diag.physics.derivation import (
    Derived,
    chances,
    derive,
    known_conditions,
    mapping_problems,
    sample,
)
from diag.physics.parameters import Physics, problems
from diag.physics.spread import SCRAMBLES, Ranges, Severity, draws, usable_samples
from tests.physics.shipped import BOTH, FULL, RELIEF, physics, value

FEW = ("pressure_pump.worn", "suction_line.drawing_air", "oil_tank.outlet_obstructed")


@cache
def circuit(name: str) -> Circuit:
    return load_circuit(name)


def with_modes(name: str, *refs: str) -> Physics:
    """The shipped physics with some of its modes only."""
    kept = {ref: physics(name).severities[ref] for ref in refs}
    return physics(name).model_copy(update={"severities": kept})


@cache
def derived(name: str, samples: int, seed: int = 1, refs: tuple[str, ...] = FEW) -> Derived:
    return derive(circuit(name), with_modes(name, *refs), samples, seed)


# Draws


def test_draws_stay_within_their_parts_and_fill_them_evenly() -> None:
    found = draws({"a": ((2.0, 4.0),), "b": ((-2.0, -1.0), (1.0, 2.0))}, 512, seed=3)
    assert found["a"].min() >= 2
    assert found["a"].max() <= 4
    assert np.all(np.abs(found["b"]) >= 1)
    # A Sobol sequence puts the same number of points into every dyadic interval.
    assert np.histogram(found["a"], bins=16, range=(2, 4))[0].tolist() == [32] * 16
    assert (found["b"] > 0).sum() == 256


def test_draws_integrate_far_better_than_chance() -> None:
    # The mean of the product of six uniform numbers is 2^-6; plain sampling errs by
    # sqrt(3^-6 - 4^-6) / sqrt(N), about 0.00074 here.
    names = {str(i): ((0.0, 1.0),) for i in range(6)}
    errors = []
    for seed in range(8):
        found = draws(names, 2048, seed)
        errors.append(np.prod(list(found.values()), axis=0).mean() - 2.0**-6)
    assert float(np.sqrt(np.mean(np.square(errors)))) < 0.00074 / 3


def test_the_same_seed_gives_the_same_draws_and_another_gives_others() -> None:
    ranges = {"a": ((0.0, 1.0),)}
    assert np.array_equal(draws(ranges, 64, 5)["a"], draws(ranges, 64, 5)["a"])
    assert not np.array_equal(draws(ranges, 64, 5)["a"], draws(ranges, 64, 6)["a"])


@pytest.mark.parametrize(("asked", "given"), [(1, 8), (64, 64), (65, 128), (4096, 4096)])
def test_samples_are_raised_to_what_the_sequence_takes(asked: int, given: int) -> None:
    assert usable_samples(asked) == given


# Chances


def test_chance_is_the_share_of_the_severities_beyond_the_limit() -> None:
    """With nothing else varying the chance has a closed form: a root found apart from it."""
    low, high = 2.0, 8.0
    severity = Severity(basis="judgement", ranges={"pump_slip": ((low, high),)})
    bare = physics(RELIEF).model_copy(
        update={"spread": None, "severities": {"pressure_pump.worn": severity}}
    )
    node = "gallery_pressure@hot_idle"
    known = {node: known_conditions(circuit(RELIEF), bare)[node]}
    found = chances(known[node], sample(bare, known, ["pressure_pump.worn"], 512, seed=1))
    limit = known[node].cuts[1]
    at = brentq(
        lambda slip: value(RELIEF, "hot_idle", "gallery_pressure_psi", {"pump_slip": slip}) - limit,
        low,
        high,
        xtol=1e-6,
    )
    normal = known[node].node.normal
    assert found.shares[normal] == pytest.approx((at - low) / (high - low), abs=2 / 512)
    assert found.errors[normal] < 3 / 512


@pytest.mark.parametrize("name", BOTH)
def test_a_sound_engine_is_normal_everywhere(name: str) -> None:
    found = derived(name, 512, refs=())
    assert len(found.healthy) >= 14
    for node, known in found.healthy.items():
        normal = circuit(name).nodes[node].normal
        assert known.shares[normal] >= 0.99, (node, known.shares)


@pytest.mark.parametrize("name", BOTH)
def test_shares_add_up_and_nothing_is_left_unsolved(name: str) -> None:
    found = derived(name, 128)
    assert found.unsolved == 0
    for nodes in found.modes.values():
        for known in nodes.values():
            assert known.shares.sum() == pytest.approx(1.0)
            assert np.all(known.errors > 0)


def test_standard_errors_are_honest() -> None:
    """Small samples differ from a big one by about as much as their errors say."""
    big = derived(FULL, 4096, 99)
    ratios = []
    for seed in (2, 3, 4):
        small = derived(FULL, 128, seed)
        for ref, nodes in small.modes.items():
            for node, known in nodes.items():
                wide = big.modes[ref][node]
                open_ = (wide.shares > 0.02) & (wide.shares < 0.98)
                scale = np.hypot(known.errors, wide.errors)
                ratios += list(((known.shares - wide.shares) / scale)[open_])
    assert len(ratios) > 25
    assert 0.4 < float(np.sqrt(np.mean(np.square(ratios)))) < 2.0
    assert float(np.max(np.abs(ratios))) < 5.0


def test_errors_shrink_with_more_samples() -> None:
    node, ref = "gallery_pressure@hot_idle", "pressure_pump.worn"
    small, big = (derived(FULL, n, 99).modes[ref][node].errors.max() for n in (128, 4096))
    assert big < small / 3


def test_a_stopped_engine_keeps_its_hidden_oil() -> None:
    """Oil that hides when the engine is shut down is missing from the tank afterwards."""
    refs = ("rear_scavenge_pump.drive_failed",)
    known = known_conditions(circuit(FULL), physics(FULL))
    sound = sample(physics(FULL), known, (), 64, 1).values["tank_level@static"]
    flooded = sample(physics(FULL), known, refs, 64, 1).values["tank_level@static"]
    assert np.mean(sound - flooded) == pytest.approx(4.0, abs=0.5)  # the chamber's volume, L


# The file


def test_the_text_is_deterministic_and_reads_back() -> None:
    text = links_text(circuit(RELIEF), derived(RELIEF, 128))
    again = derive(circuit(RELIEF), with_modes(RELIEF, *FEW), 128, 1)
    assert links_text(circuit(RELIEF), again) == text
    assert made_with(text) == (128, 1)
    document = read_document(text.encode(), "links_computed.yaml")
    links = validated(LinksFile, document)
    assert not document.problems
    assert links is not None
    effect = links.links["pressure_pump.worn"]["gallery_pressure@hot_idle"]
    assert effect.basis == "computed"
    assert "128 samples, standard error" in effect.note
    assert differences(links, circuit(RELIEF), derived(RELIEF, 128)) == []


def edited(text: str, old: str, new: str) -> LinksFile | None:
    assert old in text
    document = read_document(text.replace(old, new, 1).encode(), "links_computed.yaml")
    return validated(LinksFile, document)


def test_an_edited_removed_or_added_number_is_a_difference() -> None:
    found = derived(RELIEF, 128)
    text = links_text(circuit(RELIEF), found)
    line = next(row for row in text.splitlines() if "gallery_pressure@hot_idle: {low" in row)
    number = line.split("low: ")[1].split(",")[0]
    changed = edited(text, f"low: {number}", f"low: {float(number) - 0.005:g}")
    assert len(differences(changed, circuit(RELIEF), found)) == 1
    assert number in differences(changed, circuit(RELIEF), found)[0]
    assert len(differences(edited(text, line + "\n", ""), circuit(RELIEF), found)) == 1
    added = edited(text, line, line + "\n    filter_pressure_drop@hot_idle: {high: 0.3}")
    assert len(differences(added, circuit(RELIEF), found)) == 1
    assert len(differences(None, circuit(RELIEF), found)) > 5


@pytest.mark.parametrize("name", BOTH)
def test_shipped_links_hold_what_a_small_sample_gives(name: str) -> None:
    """The stored chances, from many samples, against few with another seed."""
    found = derived(name, 256, 7)
    for ref, nodes in found.modes.items():
        for node, known in nodes.items():
            effect = circuit(name).nodes[node].effects.get(ref)
            record = circuit(name).nodes[node].record
            for state, share, error in zip(record.states, known.shares, known.errors, strict=True):
                if state != record.normal:
                    stored = effect.gives.get(state, 0.0) if effect else 0.0
                    assert stored == pytest.approx(share, abs=0.01 + 5 * error), (ref, node)


@pytest.mark.parametrize("name", BOTH)
def test_what_physics_knows_is_computed_and_judged_nowhere(name: str) -> None:
    known, mapped = physics(name).conditions, physics(name).severities
    assert set(mapped) <= set(circuit(name).modes)
    computed = 0
    for node in circuit(name).nodes.values():
        for ref, effect in node.effects.items():
            silent = mapped[ref].not_on if ref in mapped else known
            if node.record.id in known and node.record.id not in silent:
                assert effect.basis == "computed", (ref, node.id, str(effect.where))
                computed += 1
    assert computed > 150


# Bad mappings


def changed(**update: object) -> Physics:
    return physics(RELIEF).model_copy(update=update)


def test_a_mapping_that_fits_nothing_is_a_problem_with_its_place() -> None:
    some = physics(RELIEF).severities["pressure_pump.worn"]
    wrong = changed(severities={"pressure_pump.wron": some})
    found = mapping_problems(circuit(RELIEF), wrong)
    assert [p.path for p in found] == ["severities.pressure_pump.wron"]
    assert "pressure_pump.worn" in found[0].message
    assert found[0].where == some.where
    some_readout = physics(RELIEF).conditions["sump_oil_rear"]
    wrong = changed(conditions={"sump_oil_raer": some_readout})
    assert "sump_oil_rear" in mapping_problems(circuit(RELIEF), wrong)[0].message
    wrong = changed(conditions={"sump_oil_rear": some_readout.model_copy(update={"at": ()})})
    assert "needs `at`" in mapping_problems(circuit(RELIEF), wrong)[0].message
    wrong = changed(conditions={"sump_oil_rear": some_readout.model_copy(update={"limits": ()})})
    assert "needs 1 limits" in mapping_problems(circuit(RELIEF), wrong)[0].message


@pytest.mark.parametrize(
    ("name", "part", "message"),
    [
        ("pump_slp", (1.0, 2.0), "pump_slip"),
        ("filter_clog", (0.5, 1.5), "0 to 0.9999"),
        ("fuel_cooler_fouling", (0.1, 0.2), "needs a fuel cooler"),
        ("jet_blockage.raer", (0.1, 0.2), "rear"),
    ],
)
def test_a_range_that_no_calculation_takes_is_a_problem(
    name: str, part: tuple[float, float], message: str
) -> None:
    severity = Severity(basis="judgement", ranges={name: (part,)})
    found = problems(changed(severities={"pressure_pump.worn": severity}))
    assert [p.path for p in found] == ["severities.pressure_pump.worn"]
    assert message in found[0].message


def test_a_range_that_falls_is_refused() -> None:
    with pytest.raises(ValueError, match="ends below its beginning"):
        Ranges(basis="judgement", ranges={"pump_slip": ((3.0, 2.0),)})


def test_scrambles_divide_every_usable_number() -> None:
    assert all(usable_samples(n) % SCRAMBLES == 0 for n in range(1, 300))
