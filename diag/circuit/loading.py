"""From a folder of YAML to a circuit: reads all, reports every fault at once.

A circuit folder holds `circuit.yaml`, `conditions.yaml` and any of `links*.yaml`,
`indications.yaml`, `checks.yaml`. Kinds and the shared vocabulary lie in the
knowledge root, beside or above it.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Sequence
from importlib.resources import files
from importlib.resources.abc import Traversable
from pathlib import Path
from typing import TypeVar

from pydantic import BaseModel

from diag.circuit.assembly import Assembly, Parts
from diag.circuit.model import Circuit
from diag.circuit.reading import Document, read_document, validated
from diag.circuit.records import (
    CautionsFile,
    CircuitFile,
    ConditionsFile,
    Kind,
    LinksFile,
    ObservationsFile,
    Overlay,
    SharedConditionsFile,
    SourcesFile,
)
from diag.errors import InputError, Problem, UnknownName

M = TypeVar("M", bound=BaseModel)


def knowledge_root() -> Traversable:
    """The shipped knowledge: inside the installed package, or beside it in a checkout."""
    packaged = files("diag") / "knowledge"
    if packaged.is_dir():
        return packaged
    return Path(__file__).resolve().parents[2] / "knowledge"


def circuit_names(root: Traversable | None = None) -> list[str]:
    """Ids of the circuits under the knowledge root."""
    folder = (root or knowledge_root()) / "circuits"
    return sorted(entry.name for entry in folder.iterdir() if entry.is_dir())


def load_circuit(
    name: str, overlays: Sequence[str | Path] = (), root: Traversable | None = None
) -> Circuit:
    """Loads a circuit by id (dashes or underscores) or by the path of its folder.

    Raises:
        UnknownName: no such circuit; names the nearest.
        InputError: the folder or an overlay has faults; all of them are listed.
    """
    shared = root or knowledge_root()
    reader = _Reader(shared)
    circuit = reader.circuit(_circuit_folder(name, shared), [Path(o) for o in overlays])
    faults = [problem for problem in reader.problems if not problem.doubt]
    if circuit is None or faults:
        count = f"{len(faults)} problem{'s' if len(faults) != 1 else ''}"
        raise InputError(f"circuit {name} cannot be used: {count}", sorted(faults, key=_order))
    return circuit


def _order(problem: Problem) -> tuple[str, int, int]:
    return (problem.where.file, problem.where.line, problem.where.column)


def _circuit_folder(name: str, root: Traversable) -> Traversable:
    known = circuit_names(root)
    plain = name.replace("-", "_")
    if plain in known:
        return root / "circuits" / plain
    if Path(name).is_dir():
        return Path(name)
    raise UnknownName("circuit", name, known)


class _Reader:
    """Reads the files of one circuit and gathers their problems."""

    def __init__(self, root: Traversable) -> None:
        self.root = root
        self.problems: list[Problem] = []
        self.digest = hashlib.sha256()

    def circuit(self, folder: Traversable, overlays: Iterable[Path]) -> Circuit | None:
        head = self.read(CircuitFile, folder / "circuit.yaml")
        conditions = self.read(ConditionsFile, folder / "conditions.yaml")
        parts = Parts(
            links=self.read_all(LinksFile, folder, "links"),
            observations=[
                *self.read_all(ObservationsFile, folder, "indications"),
                *self.read_all(ObservationsFile, folder, "checks"),
            ],
            shared_conditions=self.read(
                SharedConditionsFile, self.root / "shared" / "conditions.yaml"
            ),
            shared_checks=self.read(ObservationsFile, self.root / "shared" / "checks.yaml"),
            cautions=self.read(CautionsFile, self.root / "shared" / "cautions.yaml"),
            sources=self.read(SourcesFile, self.root / "shared" / "sources.yaml"),
            overlays=[o for path in overlays if (o := self.read(Overlay, path))],
        )
        if head is None or conditions is None:
            return None
        parts.kinds = self.kinds(head, folder)
        assembly = Assembly(head, conditions, parts, self.digest.hexdigest())
        circuit = assembly.circuit()
        self.problems += assembly.problems
        return circuit

    def read_all(self, model: type[M], folder: Traversable, stem: str) -> list[M]:
        """All files of the folder named `STEM*.yaml`."""
        if not folder.is_dir():
            return []
        found = sorted(
            (e for e in folder.iterdir() if e.name.startswith(stem) and e.name.endswith(".yaml")),
            key=lambda e: e.name,
        )
        return [record for entry in found if (record := self.read(model, entry))]

    def kinds(self, head: CircuitFile, folder: Traversable) -> dict[str, Kind]:
        """The kinds that the circuit uses: its own `kinds/` first, then the shared ones."""
        found: dict[str, Kind] = {}
        for use in head.components:
            if use.kind in found:
                continue
            own = folder / "kinds" / f"{use.kind}.yaml"
            path = own if own.is_file() else self.root / "kinds" / f"{use.kind}.yaml"
            if not path.is_file():
                known = [e.name[:-5] for e in (self.root / "kinds").iterdir()]
                problem = str(UnknownName("kind", use.kind, known))
                self.problems.append(Problem(use.where, f"components.{use.id}.kind", problem))
            elif kind := self.read(Kind, path):
                found[use.kind] = kind
        return found

    def read(self, model: type[M], path: Traversable) -> M | None:
        try:
            raw = path.read_bytes()
        except OSError as error:
            reason = error.strerror or str(error)
            document = Document(str(path))
            document.fault((), f"cannot be read: {reason}", accepted=f"a {model.__name__} in YAML")
            self.problems += document.problems
            return None
        document = read_document(raw, _shown(path))
        record = validated(model, document)
        self.problems += document.problems
        canonical = json.dumps(document.data, sort_keys=True, default=str)
        self.digest.update(f"{path.name}\n{canonical}\n".encode())
        return record


def _shown(path: Traversable) -> str:
    """A path as short as it stays useful: relative to here where that is shorter."""
    text = str(path)
    here = str(Path.cwd())
    return text[len(here) + 1 :] if text.startswith(here + "/") else text
