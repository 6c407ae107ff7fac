"""A small knowledge root in a temporary folder, which tests spoil one word at a time."""

from __future__ import annotations

from pathlib import Path

import pytest

from diag.circuit.loading import load_circuit
from diag.circuit.model import Circuit
from diag.errors import InputError, Problem

FILES = {
    "shared/sources.yaml": """\
sources:
  S1: a handbook of oil systems
""",
    "shared/cautions.yaml": """\
basis: common practice
cautions:
  - {id: hot_oil, text: Hot oil burns.}
""",
    "shared/conditions.yaml": """\
basis: judgement
conditions:
  - id: gallery_pressure
    title: Pressure in the gallery
    states: [low, normal, high]
    normal: normal
    points: [cold_idle, hot_idle]
    leak: {low: 0.01, high: 0.01}
    unlisted: {low: 0.2, high: 0.1}
    carried_by: [supply, bypass]
  - id: chamber_oil
    title: Oil held in the chamber
    states: [normal, excess]
    normal: normal
    leak: {excess: 0.01}
    unlisted: {excess: 0.1}
    carried_by: [scavenge, vent]
  - id: cabin_smell
    title: A condition that the small circuit does not use
    states: [none, oily]
    normal: none
    leak: {oily: 0.01}
    unlisted: {oily: 0.1}
""",
    "shared/checks.yaml": """\
basis: judgement
checks:
  - id: chamber_drain
    title: Drain the chamber and measure
    minutes: 40
    needs: {engine: stopped, opens: [cowl]}
    cautions: [hot_oil]
    reads: chamber_oil
    detects: 0.9
    false_alarm: 0.05
  - id: smell
    title: Smell the cabin air
    minutes: 5
    reads: cabin_smell
    detects: 0.5
    false_alarm: 0.1
""",
    "kinds/tank.yaml": """\
id: tank
title: Oil tank
basis: judgement
role: tank
modes:
  - id: low
    title: Too little oil in the tank
    rate: {per_event: 0.002, event: servicing}
    shows:
      gallery_pressure@hot_idle: {low: 0.3}
""",
    "kinds/pump.yaml": """\
id: pump
title: Oil pump
basis: judgement
role: pump
modes:
  - id: worn
    title: Worn
    rate: {per_million_hours: 20, basis: "published: S1"}
    shows:
      gallery_pressure@hot_idle: {low: 0.9}
      gallery_pressure@cold_idle: {low: 0.1}
      cabin_smell: {oily: 0.1}
    promotes: {pressure_filter.loaded: 2, chip_probe.coated: 4}
  - id: sheared
    title: Drive sheared
    rate: {per_million_hours: 1}
    shows:
      gallery_pressure: {low: 0.95}
checks:
  - id: strip
    title: Strip the pump
    minutes: 120
    needs: {engine: stopped, opens: [cowl]}
    cautions: [hot_oil]
    sees: {worn: 0.95, sheared: 0.99}
    detects: 1.0
    false_alarm: 0.02
rectifications:
  - id: replace
    title: Replace the pump
    minutes: 200
    needs: {engine: stopped, opens: [cowl]}
    restores: [worn, sheared]
    verify: oil_pressure@hot_idle
""",
    "kinds/scavenge_pump.yaml": """\
id: scavenge_pump
title: Scavenge pump
basis: judgement
role: pump
modes:
  - id: worn
    title: Worn
    rate: {per_million_hours: 10}
checks:
  - id: strip
    title: Strip the pump
    minutes: 90
    sees: {worn: 0.9}
    detects: 1.0
    false_alarm: 0.02
""",
    "kinds/filter.yaml": """\
id: filter
title: Oil filter
basis: judgement
role: filter
modes:
  - id: loaded
    title: Element loaded
    rate: {per_million_hours: 50}
    shows:
      gallery_pressure@hot_idle: {low: 0.05}
rectifications:
  - id: element
    title: Replace the element
    minutes: 45
    restores: [loaded]
    verify: oil_pressure@hot_idle
""",
    "kinds/bypass.yaml": """\
id: bypass
title: Bypass valve
basis: judgement
role: valve
modes:
  - id: stuck
    title: Stuck
    rate: {per_million_hours: 1}
""",
    "kinds/bearing.yaml": """\
id: bearing
title: Bearing
basis: judgement
role: bearing
modes:
  - id: spalled
    title: Spalled
    rate: {per_million_hours: 5}
""",
    "kinds/chamber.yaml": """\
id: chamber
title: Bearing chamber
basis: judgement
role: chamber
modes:
  - id: seal_worn
    title: Air seal worn
    rate: {per_million_hours: 8}
    shows:
      chamber_oil: {excess: 0.2}
""",
    "kinds/breather.yaml": """\
id: breather
title: Breather
basis: judgement
role: vent
modes:
  - id: blocked
    title: Blocked
    rate: {per_million_hours: 2}
    shows:
      chamber_oil: {excess: 0.6}
""",
    "kinds/gauge.yaml": """\
id: gauge
title: Pressure gauge
basis: judgement
role: instrument
modes:
  - id: reads_low
    title: Reads low
    rate: {per_million_hours: 30}
    signal: {shift_down: 0.9}
""",
    "circuits/small/circuit.yaml": """\
id: small
title: A small circuit
version: "1"
basis: judgement
points: [cold_idle, hot_idle]
components:
  - {id: oil_tank, kind: tank}
  - {id: oil_pump, kind: pump, title: Pressure pump}
  - {id: return_pump, kind: scavenge_pump, omit: [strip]}
  - {id: pressure_filter, kind: filter}
  - {id: filter_bypass, kind: bypass}
  - {id: main_bearing, kind: bearing}
  - {id: main_chamber, kind: chamber}
  - {id: oil_breather, kind: breather}
  - {id: oil_gauge, kind: gauge}
lines:
  - {source: oil_tank, target: oil_pump, carries: supply}
  - {source: oil_pump, target: pressure_filter, carries: supply}
  - {source: oil_pump, target: filter_bypass, carries: bypass}
  - {source: filter_bypass, target: main_bearing, carries: bypass}
  - {source: pressure_filter, target: main_bearing, carries: supply}
  - {source: main_bearing, target: main_chamber, carries: scavenge}
  - {source: main_chamber, target: return_pump, carries: scavenge}
  - {source: return_pump, target: oil_tank, carries: scavenge}
  - {source: main_chamber, target: oil_breather, carries: vent}
  - {source: pressure_filter, target: oil_gauge, carries: sense}
  - {source: main_bearing, target: oil_pump, carries: drive}
exposure:
  hours: 500
  events: {servicing: 10}
unlisted: {share: 0.04}
costs: {escalate_minutes: 400}
engine_states:
  - {id: stopped, reach_minutes: 0, leave_minutes: 0}
  - {id: idle, reach_minutes: 10, leave_minutes: 5}
openings:
  - {id: cowl, title: Cowl, open_minutes: 5, close_minutes: 6, cautions: [hot_oil]}
  - {id: bowl, title: Filter bowl, open_minutes: 9, close_minutes: 12, inside: [cowl]}
""",
    "circuits/small/conditions.yaml": """\
basis: judgement
use:
  - {id: gallery_pressure, at: [pressure_filter, filter_bypass]}
  - {id: chamber_oil, at: [main_chamber]}
conditions:
  - id: tank_sound
    title: Sound of the tank
    states: [quiet, gurgling]
    normal: quiet
    leak: {gurgling: 0.02}
    unlisted: {gurgling: 0.1}
""",
    "circuits/small/indications.yaml": """\
basis: judgement
indications:
  - id: oil_pressure
    title: Oil pressure gauge
    minutes: 1
    needs: {engine: idle}
    points: [cold_idle, hot_idle]
    reads: gallery_pressure
    detects: 0.98
    false_alarm: 0.02
    through: [oil_gauge]
    words: {low: below the green arc}
    scale:
      unit: psi
      range: [0, 150]
      tolerance: 2
      limits: {cold_idle: [50, 120], any: [45, 100]}
""",
    "circuits/small/checks.yaml": """\
basis: judgement
checks:
  - id: tank_listen
    title: Listen at the tank
    minutes: 4
    reads: tank_sound
    detects: 0.6
    false_alarm: 0.1
    outcomes: {yes: [gurgling], no: [quiet]}
omit: [smell]
""",
    "circuits/small/links.yaml": """\
basis: judgement
links:
  oil_tank.low:
    tank_sound: {gurgling: 0.5}
  return_pump.worn:
    chamber_oil: {excess: 0.8}
promotes:
  main_bearing.spalled: {pressure_filter.loaded: 3}
""",
}


class Root:
    """A knowledge root on disk."""

    def __init__(self, path: Path) -> None:
        self.path = path
        for name, text in FILES.items():
            self.write(name, text)

    def write(self, name: str, content: str | bytes) -> Path:
        """Writes one file of the root, or an overlay beside it; its path."""
        file = self.path / name
        file.parent.mkdir(parents=True, exist_ok=True)
        file.write_bytes(content.encode() if isinstance(content, str) else content)
        return file

    def edit(self, name: str, old: str, new: str) -> None:
        """Puts `new` in the place of `old`, which must stand exactly once in the file."""
        text = (self.path / name).read_text()
        assert text.count(old) == 1, f"{old!r} stands {text.count(old)} times in {name}"
        self.write(name, text.replace(old, new))

    def place(self, name: str, mark: str, word: str = "") -> tuple[int, int]:
        """Line and column, from 1, of `word` (or of `mark`) on the line where `mark` stands."""
        text = (self.path / name).read_text()
        assert text.count(mark) == 1, f"{mark!r} stands {text.count(mark)} times in {name}"
        start = text.index(mark)
        line_start = text.rfind("\n", 0, start) + 1
        column = text.index(word, line_start) if word else start
        return text.count("\n", 0, start) + 1, column - line_start + 1

    def load(self, *overlays: Path) -> Circuit:
        return load_circuit("small", overlays, self.path)

    def problems(self, *overlays: Path) -> tuple[Problem, ...]:
        """The problems that keep the circuit from loading."""
        with pytest.raises(InputError) as caught:
            self.load(*overlays)
        return caught.value.problems

    def problem(self, *overlays: Path) -> Problem:
        """The only problem that keeps the circuit from loading."""
        found = self.problems(*overlays)
        assert len(found) == 1, "\n".join(map(str, found))
        return found[0]

    def named(self, problem: Problem) -> str:
        """The file of a problem, from the root."""
        return str(Path(problem.where.file).relative_to(self.path))


@pytest.fixture
def root(tmp_path: Path) -> Root:
    """A fresh root whose circuit `small` loads clean."""
    return Root(tmp_path)


@pytest.fixture(scope="session")
def worn_root(tmp_path_factory: pytest.TempPathFactory) -> Root:
    """A root for property tests, which put back what they change."""
    return Root(tmp_path_factory.mktemp("knowledge"))
