"""Commands that ask the physics of a circuit: `derive` and `predict`."""

from __future__ import annotations

import json
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any

import typer

from diag.advice.steps import NOTICE
from diag.circuit.loading import circuit_folder, load_circuit
from diag.circuit.model import Circuit
from diag.circuit.reading import read_document, validated
from diag.circuit.records import LinksFile
from diag.errors import Exit, InputError, UnknownName, UsageError
from diag.physics.computed import FILE, differences, links_text, made_with
from diag.physics.derivation import SAMPLES, SEED, derive, known_conditions
from diag.physics.loading import load_physics
from diag.physics.prediction import Prediction, Reading, predict

MOST_SAMPLES = 65_536
"""Samples beyond which a derivation would take a good part of an hour."""

CircuitName = Annotated[
    str,
    typer.Argument(metavar="CIRCUIT", help="Circuit by name (`diag circuit list`), or its folder."),
]
Seed = Annotated[int, typer.Option(metavar="S", min=0, help="Seed of the samples.")]


def register(circuit_app: typer.Typer) -> None:
    """Adds the commands to `diag circuit`."""
    circuit_app.command("derive")(circuit_derive)
    circuit_app.command("predict")(circuit_predict)


def circuit_derive(
    circuit: CircuitName,
    samples: Annotated[
        int | None,
        typer.Option(
            "--samples", metavar="N", min=64, max=MOST_SAMPLES, help=f"Samples, else {SAMPLES}."
        ),
    ] = None,
    seed: Annotated[
        int | None, typer.Option("--seed", metavar="S", min=0, help=f"Seed, else {SEED}.")
    ] = None,
    check: Annotated[
        bool, typer.Option("--check", help="Only tell whether the stored links still hold.")
    ] = False,
) -> None:
    """Compute what each mode does from the physics, and write it beside the circuit.

    \b
    Example:
      diag circuit derive relief-valve-turboprop --check
    """
    known, folder = load_circuit(circuit), circuit_folder(circuit)
    physics = load_physics(known, folder)
    if not physics.severities:
        raise UsageError(f"{known.id}: physics.yaml maps no mode, so there is nothing to derive")
    stored = _stored(folder / FILE)
    size, start = made_with(stored) if check else (SAMPLES, SEED)
    size, start = samples or size, start if seed is None else seed
    derived = derive(known, physics, size, start, _progress)
    if derived.unsolved:
        print(f"diag: {derived.unsolved} samples had no steady state", file=sys.stderr)
    if not check:
        _write(folder / FILE, links_text(known, derived))
        return
    document = read_document(stored.encode(), FILE)
    found = differences(validated(LinksFile, document) if stored else None, known, derived)
    print("\n".join(found) or f"{FILE} matches the circuit")
    if found:
        raise typer.Exit(Exit.PROBLEMS)


def _stored(file: Any) -> str:
    """The stored links, empty where there are none yet."""
    try:
        return str(file.read_text(encoding="utf-8")) if file.is_file() else ""
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{file} cannot be read: {error}") from error


def _write(file: Any, text: str) -> None:
    if not isinstance(file, Path):
        raise InputError(f"{file} lies in a packed installation; copy the circuit's folder first")
    file.write_text(text, encoding="utf-8")
    print(file)


def _progress(done: int, total: int, what: str) -> None:
    """A line that overwrites itself on a terminal; nothing elsewhere but the end."""
    if sys.stderr.isatty():
        bar = "#" * (30 * done // total)
        end = "\n" if done == total else ""
        print(f"\r[{bar:<30}] {done}/{total} {what[:40]:<40}", end=end, file=sys.stderr, flush=True)
    elif done == total:
        print(f"diag: {total} cases solved", file=sys.stderr)


def circuit_predict(
    circuit: CircuitName,
    fault: Annotated[
        list[str],
        typer.Option(
            "--fault",
            metavar="COMPONENT:MODE",
            help="A fault, such as pressure_pump:worn. Repeatable: all are present together.",
        ),
    ],
    samples: Annotated[
        int, typer.Option("--samples", metavar="N", min=64, max=MOST_SAMPLES, help="Samples.")
    ] = 1024,
    seed: Seed = SEED,
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON.")] = False,
) -> None:
    """What the gauges would read with a fault, beside the sound engine.

    \b
    Example:
      diag circuit predict relief-valve-turboprop --fault pressure_pump:worn
    """
    known = load_circuit(circuit)
    physics = load_physics(known, circuit_folder(circuit))
    refs = tuple(dict.fromkeys(_mode(known, text, physics.severities) for text in fault))
    found = predict(physics, known_conditions(known, physics), refs, samples, seed)
    if as_json:
        print(json.dumps(_data(known, found), indent=2, ensure_ascii=False, allow_nan=False))
    else:
        _print_prediction(known, found)


def _mode(circuit: Circuit, text: str, mapped: Mapping[str, Any]) -> str:
    """`COMPONENT:MODE` as a mode reference.

    Raises:
        UnknownName: the circuit has no such mode.
        UsageError: physics says nothing about it.
    """
    ref = text.strip().replace("-", "_").replace(":", ".", 1)
    if ref not in circuit.modes:
        raise UnknownName("fault", text, [name.replace(".", ":") for name in circuit.modes])
    if ref not in mapped:
        title = f"{circuit.components[ref.split('.')[0]].title}: {circuit.modes[ref].title}"
        raise UsageError(f"{title}: the physics of this circuit does not represent it")
    return ref


def _data(circuit: Circuit, found: Prediction) -> dict[str, Any]:
    rows = [
        {
            "condition": reading.known.node.record.id,
            "title": reading.known.node.record.title,
            "point": reading.known.node.point,
            "unit": reading.known.unit,
            "sound": _spread(reading.sound),
            "faulty": _spread(reading.faulty),
            "states": {name: round(share, 4) for name, share in reading.states.items()},
        }
        for reading in found.readings
    ]
    return {
        "circuit": circuit.id,
        "faults": list(found.refs),
        "samples": found.samples,
        "seed": found.seed,
        "readings": rows,
        "notice": NOTICE,
    }


def _spread(values: tuple[float, float, float]) -> dict[str, float]:
    low, middle, high = (round(value, 3) for value in values)
    return {"median": middle, "p05": low, "p95": high}


def _print_prediction(circuit: Circuit, found: Prediction) -> None:
    titles = [
        f"{circuit.components[ref.split('.')[0]].title}: {circuit.modes[ref].title}"
        for ref in found.refs
    ]
    print(f"{circuit.title}\n{' and '.join(titles)}")
    print("Median, and the range that holds nine of ten; the sound engine first.")
    last = ""
    for reading in found.readings:
        record = reading.known.node.record
        if record.id != last:
            print(f"{record.title}, {reading.known.unit}")
        last = record.id
        print(f"  {_row(reading)}")
    print(NOTICE)


def _row(reading: Reading) -> str:
    sound, faulty = (
        f"{middle:.3g} ({low:.3g} to {high:.3g})"
        for low, middle, high in (reading.sound, reading.faulty)
    )
    likely = [f"{name} {share:.0%}" for name, share in reading.states.items() if share >= 0.005]
    return f"{reading.known.node.point or 'any':<11} {sound:<24} {faulty:<24} {', '.join(likely)}"
