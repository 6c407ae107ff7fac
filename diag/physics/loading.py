"""From the bytes of a `physics.yaml` to checked parameters; every fault at once."""

from __future__ import annotations

from diag.circuit.reading import read_document, validated
from diag.errors import InputError, Problem
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
