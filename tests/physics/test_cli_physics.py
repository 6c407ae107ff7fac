"""`diag circuit derive` and `predict` on a copy of a shipped circuit."""

from __future__ import annotations

import json
import re
import shutil
from pathlib import Path
from typing import Any

import pytest
import typer

from diag.circuit.loading import knowledge_root, load_circuit
from diag.cli_physics import register
from diag.errors import UnknownName, UsageError
from diag.physics.loading import physics_problems
from tests.physics.shipped import FULL, RELIEF, value

KEPT = ("pressure_pump.worn:", "relief_valve.spring_weak:", "air_cooler.air_side_blocked:")


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """The relief-valve circuit with three of its mapped modes and no computed links."""
    place = tmp_path / "my_circuit"
    shutil.copytree(str(knowledge_root() / "circuits" / RELIEF), place)
    (place / "links_computed.yaml").unlink()
    file = place / "physics.yaml"
    head, tail = file.read_text().split("\nseverities:\n")
    kept = [line for line in tail.splitlines() if line.strip().startswith(KEPT)]
    assert len(kept) == len(KEPT)
    file.write_text(head + "\nseverities:\n" + "\n".join(kept) + "\n")
    return place


def call(*arguments: str) -> int:
    """Runs one command; its exit code."""
    app = typer.Typer()
    register(app)
    command = typer.main.get_command(app)
    with command.make_context("circuit", list(arguments)) as context:
        try:
            command.invoke(context)
        except typer.Exit as left:
            return int(left.exit_code)
    return 0


def change(file: Path, old: str, new: str) -> None:
    text = file.read_text()
    assert old in text
    file.write_text(text.replace(old, new, 1))


def test_derive_writes_what_check_then_accepts(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert call("derive", str(folder), "--samples", "64", "--seed", "5") == 0
    first = (folder / "links_computed.yaml").read_text()
    assert "# Made with 64 samples, seed 5." in first
    told = capsys.readouterr()
    assert told.out.strip().endswith("links_computed.yaml")
    assert "4 cases solved" in told.err
    assert call("derive", str(folder), "--samples", "64", "--seed", "5") == 0
    assert (folder / "links_computed.yaml").read_text() == first
    capsys.readouterr()
    assert call("derive", str(folder), "--check") == 0
    assert capsys.readouterr().out == "links_computed.yaml matches the circuit\n"
    links = load_circuit(str(folder)).nodes["gallery_pressure@hot_idle"].effects
    assert links["pressure_pump.worn"].basis == "computed"


def test_check_finds_an_edited_number_and_a_changed_circuit(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    stored = folder / "links_computed.yaml"
    assert call("derive", str(folder), "--check") == 1  # nothing is stored yet
    assert "not stored" in capsys.readouterr().out
    call("derive", str(folder), "--samples", "64")
    text = stored.read_text()
    spring = text.split("relief_valve.spring_weak:")[1]
    line = next(row for row in spring.splitlines() if "hot_idle" in row)
    change(stored, line, re.sub(r"low: [0-9.]+", "low: 0.5", line))
    capsys.readouterr()
    assert call("derive", str(folder), "--check") == 1
    out = capsys.readouterr().out
    assert "relief_valve.spring_weak gallery_pressure@hot_idle low: 0.5 stored" in out
    assert len(out.splitlines()) == 1
    stored.write_text(text)
    change(folder / "physics.yaml", "relief_crack_psi: [-30, -15]", "relief_crack_psi: [-20, -5]")
    assert call("derive", str(folder), "--check") == 1
    assert "relief_valve.spring_weak" in capsys.readouterr().out
    assert stored.read_text() == text  # a check writes nothing


def predicted(capsys: pytest.CaptureFixture[str], circuit: str, *faults: str) -> dict[str, Any]:
    options = [word for fault in faults for word in ("--fault", fault)]
    assert call("predict", circuit, *options, "--samples", "256", "--json") == 0
    found: dict[str, Any] = json.loads(capsys.readouterr().out)
    return found


def reading(data: dict[str, Any], condition: str, point: str) -> dict[str, Any]:
    rows = [
        row for row in data["readings"] if row["condition"] == condition and row["point"] == point
    ]
    assert len(rows) == 1
    return dict(rows[0])


def test_predict_shows_the_fault_beside_the_sound_engine(
    capsys: pytest.CaptureFixture[str],
) -> None:
    data = predicted(capsys, RELIEF, "pressure_pump:worn")
    hot = reading(data, "gallery_pressure", "hot_idle")
    assert hot["unit"] == "psi"
    # Reference: lumped calculation, 78 psi sound and 52 psi with four times the slip.
    assert hot["sound"]["p05"] < 78 * 1.02
    assert hot["sound"]["p95"] > 78 * 0.98
    assert hot["faulty"]["p05"] < 52 < hot["faulty"]["p95"]
    assert sum(hot["states"].values()) == pytest.approx(1.0, abs=1e-3)
    for row in data["readings"]:
        assert row["sound"]["p05"] <= row["sound"]["median"] <= row["sound"]["p95"]
    assert data["faults"] == ["pressure_pump.worn"]
    assert "approved" in data["notice"]


def test_predict_several_faults_together(capsys: pytest.CaptureFixture[str]) -> None:
    """A fouled cooler and a shut thermostatic valve: far hotter together than either alone."""
    both = ("fuel-cooler:fouled", "thermostatic_valve:stuck_closed")
    alone = [
        reading(predicted(capsys, FULL, name), "cooler_outlet_temperature", "high_power")
        for name in both
    ]
    together = reading(predicted(capsys, FULL, *both), "cooler_outlet_temperature", "high_power")
    assert together["faulty"]["p05"] > max(row["faulty"]["p95"] for row in alone)
    faults = {"thermostat_stuck": -1.0, "fuel_cooler_fouling": 0.765}
    middle = value(FULL, "high_power", "oil_temperature_c", dict(faults))
    assert together["faulty"]["median"] == pytest.approx(middle, rel=0.1)


def test_predict_in_words(capsys: pytest.CaptureFixture[str]) -> None:
    assert call("predict", RELIEF, "--fault", "relief_valve.stuck_shut", "--samples", "64") == 0
    out = capsys.readouterr().out
    assert "Oil pressure in the gallery, psi" in out
    row = next(line for line in out.splitlines() if line.startswith("  high_power"))
    assert "high 100%" in row


def test_faults_that_cannot_be_predicted() -> None:
    with pytest.raises(UnknownName, match="pressure_pump:worn"):
        call("predict", RELIEF, "--fault", "pressure_pump:wron")
    with pytest.raises(UsageError, match="does not represent"):
        call("predict", RELIEF, "--fault", "chip_detector:magnet_weak")


# Bad parameters, found by the review


@pytest.mark.parametrize(
    ("old", "new", "message", "path"),
    [
        ("bore_mm: 19", "bore_mm: -19", "out of range", "suction.bore_mm"),
        ("crack_psi: 77.5", "crack_psi: 0", "out of range", "relief.crack_psi"),
        ("cm3_per_rev: 7.0", "cm3_per_rev: 70", "does not exceed", "chambers"),
        ("pressure_pump.worn:", "pressure_pump.wron:", "pressure_pump.worn", "severities"),
        ("pump_slip: [2.5, 6]", "pump_slip: [6, 2.5]", "ends below", "severities"),
        ("circuit: relief_valve_turboprop", "circuit: other", "not the circuit", "circuit"),
        ("- {id: motoring,", "- {id: cranking,", "point of the circuit is missing", "points"),
    ],
)
def test_bad_physics_is_told_with_file_and_line(
    folder: Path, old: str, new: str, message: str, path: str
) -> None:
    change(folder / "physics.yaml", old, new)
    found = physics_problems(load_circuit(str(folder)), folder)
    hits = [problem for problem in found if message in problem.message]
    assert hits, [str(problem) for problem in found]
    assert hits[0].path.startswith(path)
    assert hits[0].where.file.endswith("physics.yaml")
    assert hits[0].where.line > 0


def test_what_only_solving_shows_is_left_to_the_review(folder: Path) -> None:
    change(folder / "physics.yaml", "crack_psi: 77.5", "crack_psi: 900")
    circuit = load_circuit(str(folder))
    found = physics_problems(circuit, folder)
    assert any("stays shut" in problem.message for problem in found)
    assert physics_problems(circuit, folder.parent) == []


def test_physics_counts_in_the_content_hash(folder: Path) -> None:
    before = load_circuit(str(folder)).content_hash
    change(folder / "physics.yaml", "ua_w_k: 150", "ua_w_k: 151")
    assert load_circuit(str(folder)).content_hash != before
    (folder / "physics.yaml").unlink()
    assert load_circuit(str(folder)).content_hash != before
