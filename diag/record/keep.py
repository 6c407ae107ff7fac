"""Copies of circuits beside the logs that were made on them.

A copy is a knowledge folder in little: the circuit's own folder, the kinds and the shared
files as they were, and the overlays that were laid over it. It lies in `circuits/` beside the
logs under the name of the circuit and the beginning of its content hash, so that all logs made
on one version share one copy.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterable, Sequence
from importlib.resources.abc import Traversable
from pathlib import Path

from diag.circuit.loading import knowledge_root, load_circuit
from diag.circuit.model import Circuit
from diag.errors import DiagError, InputError

DIGITS = 16
"""Hexadecimal digits of the content hash in the name of a copy."""


def kept_place(log: str | os.PathLike[str], circuit: str, content_hash: str) -> Path:
    """Where the copy for a log lies, whether or not it is there."""
    return Path(log).absolute().parent / "circuits" / f"{circuit}-{content_hash[:DIGITS]}"


def keep_circuit(
    circuit: Circuit,
    log: str | os.PathLike[str],
    overlays: Sequence[str | os.PathLike[str]] = (),
    root: Traversable | None = None,
) -> Path:
    """Copies what `circuit` was read from to the place that belongs to a log.

    A copy that is there already is left as it is.

    Args:
        overlays: the overlays it was loaded with, in their order.
        root: the knowledge it was loaded from.

    Raises:
        InputError: the copy cannot be written, or does not load as the same circuit.
    """
    place = kept_place(log, circuit.id, circuit.content_hash)
    if place.exists():
        return place
    draft = place.with_name(f"{place.name}.new-{os.getpid()}")
    try:
        _copy(circuit.id, draft, [Path(path) for path in overlays], root or knowledge_root())
        same = load_kept(draft, circuit.id).content_hash == circuit.content_hash
        if not same:
            raise InputError(f"the copy of {circuit.id} is not the circuit in use; nothing is kept")
        draft.rename(place)
    except OSError as error:
        raise InputError(f"{place}: the circuit cannot be kept: {error.strerror}") from error
    finally:
        shutil.rmtree(draft, ignore_errors=True)
    return place


def load_kept(place: str | os.PathLike[str], circuit: str) -> Circuit:
    """The circuit from a copy made by `keep_circuit`, or from a circuit's own folder.

    Raises:
        InputError, UnknownName: there is no such circuit in it, or it has faults.
    """
    folder = Path(place)
    if not (folder / "circuits").is_dir():
        return load_circuit(str(folder))
    laid = sorted((folder / "overlays").glob("*/*"), key=lambda path: int(path.parent.name))
    return load_circuit(circuit, laid, root=folder)


def _copy(name: str, draft: Path, overlays: Iterable[Path], root: Traversable) -> None:
    for part in (("circuits", name), ("kinds",), ("shared",)):
        source = root.joinpath(*part)
        _copy_folder(source, draft.joinpath(*part))
    for number, path in enumerate(overlays):
        # Their names count into the content hash and their order decides.
        folder = draft / "overlays" / str(number)
        folder.mkdir(parents=True)
        (folder / path.name).write_bytes(path.read_bytes())


def _copy_folder(source: Traversable, target: Path) -> None:
    target.mkdir(parents=True)
    for entry in source.iterdir():
        if entry.is_dir():
            _copy_folder(entry, target / entry.name)
        elif entry.name.endswith(".yaml"):
            (target / entry.name).write_bytes(entry.read_bytes())


def find_circuit(
    log: str | os.PathLike[str],
    circuit: str,
    content_hash: str,
    overlays: Sequence[str | os.PathLike[str]] = (),
) -> tuple[Circuit, str]:
    """The circuit that a log was made on: the present one, or the copy beside the log.

    Returns:
        The circuit, and where it comes from in words. When neither is the one, the present
        circuit comes back; its hash tells.

    Raises:
        DiagError: neither can be loaded.
    """
    place = kept_place(log, circuit, content_hash)
    try:
        present = load_circuit(circuit, [Path(path) for path in overlays])
        if present.content_hash == content_hash:
            return present, "the present circuit"
    except DiagError:
        if not place.is_dir():
            raise
        return load_kept(place, circuit), f"the copy in {place.name}"
    if place.is_dir():
        return load_kept(place, circuit), f"the copy in {place.name}"
    return present, "the present circuit"
