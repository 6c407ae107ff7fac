"""YAML read safely, with the place of every value, and checked against the records.

Only the JSON-like core of YAML 1.2 is taken: mappings, sequences and plain scalars. `on`,
`off`, `yes` and `no` stay words (they are answers here). Anchors, aliases and tags are
refused, so a document can never expand or construct anything.
"""

from __future__ import annotations

import re
import types
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from difflib import get_close_matches
from typing import Any, TypeVar, Union, get_args, get_origin

import yaml
from pydantic import BaseModel, ValidationError

from diag.circuit.records import Placed
from diag.errors import Origin, Problem

MAX_BYTES = 2_000_000
MAX_NODES = 200_000
Path = tuple[str | int, ...]
M = TypeVar("M", bound=BaseModel)

_INT = re.compile(r"^[-+]?(0|[1-9][0-9]*)$")
_FLOAT = re.compile(r"^[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?$")
_WORDS = {"": None, "~": None, "null": None, "true": True, "false": False}
_CONTROL = re.compile(r"[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x84\x86-\x9f\ufffe\uffff]")
_Loader: Any = getattr(yaml, "CSafeLoader", yaml.SafeLoader)


@dataclass(slots=True)
class Document:
    """One YAML file as data, with the place of each value and the faults found on the way."""

    file: str
    data: Any = None
    places: dict[Path, Origin] = field(default_factory=dict)
    problems: list[Problem] = field(default_factory=list)

    def place(self, path: Path) -> Origin:
        """The nearest known place at or above `path`."""
        for end in range(len(path), -1, -1):
            if path[:end] in self.places:
                return self.places[path[:end]]
        return Origin(self.file, 1, 1)

    def fault(self, path: Path, message: str, value: object = "", accepted: str = "") -> None:
        """Notes a problem at `path`."""
        shown = "" if value == "" else brief(value)
        where = self.place(path)
        self.problems.append(Problem(where, dotted(path), message, shown, accepted))


def dotted(path: Path) -> str:
    """A path as people write it, `components.2.kind`."""
    return ".".join(str(part) for part in path)


def brief(value: object, width: int = 60) -> str:
    """A value for an error line: one line, printable, shortened."""
    text = "".join(c if c.isprintable() else "�" for c in repr(value)[: 4 * width])
    return text if len(text) <= width else text[: width - 1] + "…"


def read_document(raw: bytes, file: str) -> Document:
    """Parses one file; never raises on bad input, the problems are in the document."""
    document = Document(file)
    text = _decoded(raw, document)
    if text is None:
        return document
    try:
        loader = _Loader(text)
        try:
            node = loader.get_single_node()
        finally:
            loader.dispose()
        if node is None:
            document.fault((), "the file is empty", accepted="a mapping")
        else:
            _Converter(document).convert_root(node)
    except yaml.YAMLError as error:
        document.problems.append(_syntax_problem(error, file))
    except RecursionError:
        document.fault((), "nested too deeply")
    return document


def _decoded(raw: bytes, document: Document) -> str | None:
    if len(raw) > MAX_BYTES:
        document.fault((), "the file is too large", len(raw), f"at most {MAX_BYTES} bytes")
        return None
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        where = Origin(document.file, line, 1)
        document.problems.append(Problem(where, "", "not UTF-8 text", accepted="UTF-8"))
        return None
    if found := _CONTROL.search(text):
        line = text.count("\n", 0, found.start()) + 1
        column = found.start() - text.rfind("\n", 0, found.start())
        where = Origin(document.file, line, column)
        shown = f"U+{ord(found[0]):04X}"
        message = "control characters are not accepted"
        document.problems.append(Problem(where, "", message, shown, "printable text"))
        return None
    return text


def _syntax_problem(error: yaml.YAMLError, file: str) -> Problem:
    mark = getattr(error, "problem_mark", None)
    where = Origin(file, mark.line + 1, mark.column + 1) if mark else Origin(file, 1, 1)
    what = getattr(error, "problem", None) or str(error).splitlines()[0]
    return Problem(where, "", f"not readable as YAML: {what}")


class _Converter:
    """Turns composed nodes into data; refuses aliases, tags and doubled keys."""

    def __init__(self, document: Document) -> None:
        self.document = document
        self.seen: set[int] = set()

    def convert_root(self, node: yaml.Node) -> None:
        self.document.data = self.convert(node, ())

    def convert(self, node: yaml.Node, path: Path) -> Any:
        where = self._place(node)
        self.document.places.setdefault(path, where)
        if id(node) in self.seen:
            self.document.fault(path, "anchors and aliases are not accepted", accepted="a value")
            return None
        self.seen.add(id(node))
        if len(self.seen) > MAX_NODES:
            raise yaml.YAMLError("too many values in one file")
        if isinstance(node, yaml.MappingNode):
            return self._mapping(node, path, where)
        if isinstance(node, yaml.SequenceNode):
            return [self.convert(item, (*path, i)) for i, item in enumerate(node.value)]
        assert isinstance(node, yaml.ScalarNode)
        return self._scalar(node, path)

    def _place(self, node: yaml.Node) -> Origin:
        mark = node.start_mark
        return Origin(self.document.file, mark.line + 1, mark.column + 1)

    def _mapping(self, node: yaml.MappingNode, path: Path, where: Origin) -> Placed:
        data = Placed(where)
        for key_node, value_node in node.value:
            if not isinstance(key_node, yaml.ScalarNode):
                self.document.fault(path, "keys must be plain words")
                continue
            key = str(key_node.value)
            inner = (*path, key)
            if key in data:
                self.document.places[inner] = self._place(key_node)
                self.document.fault(inner, f"key {brief(key)} stands twice")
                continue
            self.document.places[inner] = self._place(key_node)
            data[key] = self.convert(value_node, inner)
        return data

    def _scalar(self, node: yaml.ScalarNode, path: Path) -> Any:
        standard = node.tag.startswith("tag:yaml.org,2002:")
        if not standard or node.tag.rsplit(":", 1)[-1] in ("binary", "python"):
            self.document.fault(path, "tags are not accepted", node.tag, "a plain value")
            return None
        text: str = node.value
        if node.style is not None:
            return text
        if text in _WORDS:
            return _WORDS[text]
        if _INT.match(text):
            return int(text) if len(text) < 20 else float(text)
        return float(text) if _FLOAT.match(text) else text


def validated(model: type[M], document: Document) -> M | None:
    """The document as a record, or None with its faults added to the document.

    A `basis` at the top of the file is inherited by every record that has none of its own.
    """
    if document.data is None:
        return None
    if not isinstance(document.data, Mapping):
        document.fault((), "the file must hold a mapping", document.data)
        return None
    context = {"basis": document.data.get("basis")}
    try:
        return model.model_validate(document.data, context=context)
    except ValidationError as error:
        document.problems.extend(_record_problems(model, document, error))
        return None


def _record_problems(
    model: type[BaseModel], document: Document, error: ValidationError
) -> Iterator[Problem]:
    for fault in error.errors(include_url=False):
        path: Path = fault["loc"]
        message, accepted = str(fault["msg"]), ""
        if fault["type"] == "extra_forbidden":
            known = fields_at(model, path[:-1])
            near = get_close_matches(str(path[-1]), known, n=1)
            message, accepted = "unknown key", ", ".join(near or sorted(known))
        elif fault["type"] == "missing":
            message = "required key missing"
        elif fault["type"] == "literal_error":
            message, accepted = "not one of the words accepted here", fault["ctx"]["expected"]
        message = message.removeprefix("Value error, ")
        shown = "" if fault["type"] in ("missing", "value_error") else brief(fault["input"])
        yield Problem(document.place(path), dotted(path), message, shown, accepted)


def fields_at(model: type[BaseModel], path: Path) -> list[str]:
    """Names of the keys accepted at `path` inside `model`."""
    here: Any = model
    for part in path:
        here = _step_into(here, part)
    found = [m for m in _members(here) if isinstance(m, type) and issubclass(m, BaseModel)]
    return [name for m in found for name in m.model_fields if name not in ("where", "kind")]


def _members(annotation: Any) -> tuple[Any, ...]:
    union = get_origin(annotation) in (Union, types.UnionType)
    return get_args(annotation) if union else (annotation,)


def _step_into(annotation: Any, part: str | int) -> Any:
    for member in _members(annotation):
        if isinstance(member, type) and issubclass(member, BaseModel):
            field_ = member.model_fields.get(str(part))
            if field_ is not None:
                return field_.annotation
        elif get_origin(member) is tuple:
            return get_args(member)[0]
        elif get_origin(member) is dict:
            return get_args(member)[1]
    return None
