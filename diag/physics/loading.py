"""From the bytes of a `physics.yaml` to checked parameters; every fault at once."""

from __future__ import annotations

from importlib.resources.abc import Traversable

from diag.circuit.model import Circuit
from diag.circuit.reading import MAX_BYTES, printable, read_document, validated
from diag.errors import InputError, Problem
from diag.physics.derivation import mapping_problems
from diag.physics.parameters import Physics, problems
from diag.physics.review import healthy_problems


def read_physics(raw: bytes, file: str) -> Physics:
    """The parameters in `raw`, read from `file`.

    Raises InputError listing every fault with file, line, path and value.
    """
    physics, found = review_physics(raw, file)
    if physics is None or found:
        raise InputError(f"{file} cannot be used: {len(found)} problem(s)", found)
    return physics


def review_physics(raw: bytes, file: str) -> tuple[Physics | None, list[Problem]]:
    """The parameters as far as they could be read, and all problems found."""
    document = read_document(raw, file)
    physics = validated(Physics, document)
    found = list(document.problems)
    if physics is not None:
        # Only parameters that fit together can be solved.
        found += problems(physics) or healthy_problems(physics)
    return physics, sorted(found, key=lambda problem: problem.where)


FILE = "physics.yaml"


def load_physics(circuit: Circuit, folder: Traversable) -> Physics:
    """The physics that lies in the folder of a circuit.

    Raises InputError where there is none, or with everything that is wrong with it.
    """
    file = folder / FILE
    shown = printable(str(file))
    try:
        with file.open("rb") as stream:
            raw = stream.read(MAX_BYTES + 1)
    except OSError as error:
        raise InputError(f"{shown} cannot be read: {error.strerror or error}") from error
    physics = read_physics(raw, shown)
    if found := mapping_problems(circuit, physics):
        raise InputError(f"{shown} cannot be used: {len(found)} problem(s)", found)
    return physics


def physics_problems(circuit: Circuit, folder: Traversable) -> list[Problem]:
    """Everything wrong with the physics beside a circuit; nothing where there is none."""
    if not (folder / FILE).is_file():
        return []
    try:
        load_physics(circuit, folder)
    except InputError as error:
        return list(error.problems)
    return []
