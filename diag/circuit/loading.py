"""From a folder of YAML to a circuit: reads all, reports every fault at once.

A circuit folder holds `circuit.yaml`, `conditions.yaml` and any of `links*.yaml`,
`indications.yaml`, `checks.yaml`, `physics.yaml`. Kinds and the shared vocabulary lie in the
knowledge root, beside or above it.
"""

from __future__ import annotations

import hashlib
import json
import re
from collections.abc import Iterable, Iterator, Mapping, Sequence
from importlib.resources import files
from importlib.resources.abc import Traversable
from pathlib import Path
from typing import TypeVar

from pydantic import BaseModel

from diag.circuit.assembly import Assembly, Parts
from diag.circuit.faults import Faults, nearest
from diag.circuit.graph import structure_problems
from diag.circuit.model import Circuit
from diag.circuit.reading import (
    MAX_BYTES,
    Document,
    brief,
    printable,
    read_document,
    validated,
)
from diag.circuit.records import (
    WORD,
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
from diag.circuit.rule_checks import rule_doubts
from diag.circuit.rules import RulesFile
from diag.errors import InputError, Origin, Problem, UnknownName

M = TypeVar("M", bound=BaseModel)
COMPANIONS = ("physics.yaml",)
"""Files that may lie beside a circuit for the rooms above; they count in its content hash."""


def knowledge_root() -> Traversable:
    """The shipped knowledge: inside the installed package, or beside it in a checkout."""
    packaged = files("diag") / "knowledge"
    if packaged.is_dir():
        return packaged
    return Path(__file__).resolve().parents[2] / "knowledge"


def circuit_names(root: Traversable | None = None) -> list[str]:
    """Ids of the circuits under the knowledge root.

    Raises:
        InputError: the folder of circuits cannot be listed.
    """
    folder = (root or knowledge_root()) / "circuits"
    try:
        return sorted(entry.name for entry in folder.iterdir() if entry.is_dir())
    except OSError as error:
        raise InputError(f"{_shown(folder)} cannot be listed: {_reason(error)}") from error


def load_circuit(
    name: str, overlays: Sequence[str | Path] = (), root: Traversable | None = None
) -> Circuit:
    """Loads a circuit by id (dashes or underscores) or by the path of its folder.

    Raises:
        UnknownName: no such circuit; names the nearest.
        InputError: the folder or an overlay has faults; all of them are listed.
    """
    shared = root or knowledge_root()
    names = circuit_names(shared)
    reader = _Reader(shared, names)
    circuit = reader.circuit(_circuit_folder(name, shared, names), [Path(o) for o in overlays])
    faults = _distinct(problem for problem in reader.problems() if not problem.doubt)
    if circuit is None or faults:
        count = f"{len(faults)} problem{'s' if len(faults) != 1 else ''}"
        raise InputError(f"circuit {brief(name)} cannot be used: {count}", faults)
    return circuit


def circuit_folder(name: str, root: Traversable | None = None) -> Traversable:
    """The folder of a circuit, by id or by path; raises UnknownName with the nearest."""
    shared = root or knowledge_root()
    return _circuit_folder(name, shared, circuit_names(shared))


def _distinct(problems: Iterable[Problem]) -> list[Problem]:
    """In the order of the files; what several instances of a kind share is told once."""
    told = {(p.where, p.message, p.value): p for p in reversed(list(problems))}
    return sorted(told.values(), key=lambda p: (p.where, p.path))


def _circuit_folder(name: str, root: Traversable, names: Sequence[str]) -> Traversable:
    plain = name.replace("-", "_")
    if plain in names:
        return root / "circuits" / plain
    try:
        if Path(name).is_dir():
            return Path(name)
    except (OSError, ValueError):
        # Longer than a path may be, or not a path at all: then it is no folder either.
        pass
    raise UnknownName("circuit", name, names)


class _Reader:
    """Reads the files of one circuit and gathers their problems."""

    def __init__(self, root: Traversable, names: Sequence[str]) -> None:
        self.root = root
        self.names = names
        self.documents: dict[str, Document] = {}
        self.faults = Faults(unsure=set(), locate=self._locate)
        self.digest = hashlib.sha256()

    def problems(self) -> Iterator[Problem]:
        """Everything wrong with what was read so far."""
        for document in self.documents.values():
            yield from document.problems
        yield from self.faults.problems

    def _locate(self, where: Origin, path: tuple[str | int, ...]) -> Origin:
        document = self.documents.get(where.file)
        return document.inside(where, path) if document else where

    def circuit(self, folder: Traversable, overlays: Iterable[Path]) -> Circuit | None:
        """The circuit in `folder`, or None where it cannot be put together at all."""
        shared = self.root / "shared"
        document = self.document(folder / "circuit.yaml")
        head = self.record(CircuitFile, document)
        conditions = self.read(ConditionsFile, folder / "conditions.yaml")
        parts = Parts(
            links=self.read_all(LinksFile, folder, "links"),
            observations=[
                *self.read_all(ObservationsFile, folder, "indications"),
                *self.read_all(ObservationsFile, folder, "checks"),
            ],
            shared_conditions=self.read(SharedConditionsFile, shared / "conditions.yaml"),
            shared_checks=self.read(ObservationsFile, shared / "checks.yaml"),
            cautions=self.read(CautionsFile, shared / "cautions.yaml"),
            sources=self.read(SourcesFile, shared / "sources.yaml"),
            shared_rules=self.read_all(RulesFile, shared, "rules"),
            rules=self.read_all(RulesFile, folder, "rules"),
            overlays=[o for path in overlays if (o := self.overlay(path, head))],
            kinds=self.kinds(document, folder),
        )
        for name in COMPANIONS:
            if _present(folder / name):
                self.document(folder / name)
        if head is None or conditions is None:
            return None
        if head.id != folder.name and folder.name in self.names:
            document.fault(("id",), "not the name of its folder", head.id, folder.name)
        content_hash = self.digest.hexdigest()
        circuit = Assembly(head, conditions, parts, content_hash, self.faults).circuit()
        if "components" not in self.faults.unsure:
            whole = "lines" not in self.faults.unsure
            self.faults.problems.extend(structure_problems(circuit, whole))
        if not self.faults.problems:
            self.faults.problems.extend(rule_doubts(circuit))
        return circuit

    def overlay(self, path: Path, head: CircuitFile | None) -> Overlay | None:
        """An overlay; one for another circuit is fine, one for no circuit is not."""
        document = self.document(path)
        # Its tables only change what the circuit has, so a hole in them makes nothing unsure.
        overlay = validated(Overlay, document)
        known = {*self.names, *([head.id] if head else [])}
        if overlay and overlay.circuit and overlay.circuit not in known:
            accepted = nearest(overlay.circuit, known)
            document.fault(("circuit",), "no such circuit", overlay.circuit, accepted)
        return overlay

    def read_all(self, model: type[M], folder: Traversable, stem: str) -> list[M]:
        """All files of the folder named `STEM*.yaml`."""
        found = [e for e in self._listed(folder) if e.startswith(stem) and e.endswith(".yaml")]
        return [record for name in found if (record := self.read(model, folder / name))]

    def _listed(self, folder: Traversable) -> list[str]:
        try:
            return sorted(entry.name for entry in folder.iterdir())
        except OSError as error:
            document = self.documents.setdefault(str(folder), Document(_shown(folder)))
            document.fault((), f"cannot be listed: {_reason(error)}", accepted="a folder")
            return []

    def kinds(self, head: Document, folder: Traversable) -> dict[str, Kind]:
        """The kinds that the circuit uses: its own `kinds/` first, then the shared ones.

        They are looked up in the file as written, so that the problems of kinds are found
        even when the circuit itself has some.
        """
        found: dict[str, Kind] = {}
        for path, name in _kinds_used(head):
            own = folder / "kinds" / f"{name}.yaml"
            file = own if _present(own) else self.root / "kinds" / f"{name}.yaml"
            if not _present(file):
                known = [entry.removesuffix(".yaml") for entry in self._listed(self.root / "kinds")]
                head.fault(path, "no such kind", name, nearest(name, known))
                self._doubt_kind(name)
            elif kind := self._kind(file, name):
                found[name] = kind
        return found

    def _kind(self, file: Traversable, name: str) -> Kind | None:
        document = self.document(file)
        kind = validated(Kind, document)
        if document.unsure:
            self._doubt_kind(name)
        if kind and kind.id != name:
            document.fault(("id",), "not the name of its file", kind.id, name)
        return kind

    def _doubt_kind(self, name: str) -> None:
        self.faults.unsure |= {f"kind:{name}", "checks", "rectifications"}

    def read(self, model: type[M], path: Traversable) -> M | None:
        """The record in the file, or None where nothing of it can be used."""
        return self.record(model, self.document(path))

    def record(self, model: type[M], document: Document) -> M | None:
        """The document as a record; tables that may lack entries are remembered."""
        record = validated(model, document)
        self.faults.unsure |= document.unsure
        return record

    def document(self, path: Traversable) -> Document:
        """The file as data, counted into the content hash."""
        shown = _shown(path)
        try:
            with path.open("rb") as stream:
                # One byte more than is accepted, so that no file is read to its end in vain.
                document = read_document(stream.read(MAX_BYTES + 1), shown)
        except (OSError, ValueError) as error:
            document = Document(shown)
            document.fault((), f"cannot be read: {_reason(error)}", accepted="a YAML file")
        canonical = json.dumps(document.data, sort_keys=True, default=str)
        self.digest.update(f"{path.name}\n{canonical}\n".encode())
        self.documents[shown] = document
        return document


def _kinds_used(head: Document) -> Iterator[tuple[tuple[str | int, ...], str]]:
    """Kinds by name, each once, with the place where it is first used."""
    uses = head.data.get("components") if isinstance(head.data, Mapping) else None
    told = set()
    for i, use in enumerate(uses if isinstance(uses, list) else ()):
        name = use.get("kind") if isinstance(use, Mapping) else None
        if isinstance(name, str) and re.fullmatch(WORD, name) and name not in told:
            told.add(name)
            yield ("components", i, "kind"), name


def _present(path: Traversable) -> bool:
    try:
        return path.is_file()
    except OSError:
        # Something is there; reading it will say what is wrong.
        return True


def _reason(error: Exception) -> str:
    return getattr(error, "strerror", None) or str(error)


def _shown(path: Traversable) -> str:
    """A path as short as it stays useful: relative to here where that is shorter."""
    text = printable(str(path))
    try:
        return str(Path(text).relative_to(Path.cwd()))
    except (OSError, ValueError):
        return text
