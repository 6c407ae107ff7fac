"""YAML read safely, with the place of every value, and checked against the records.

Only the JSON-like core of YAML 1.2 is taken: mappings, sequences and plain scalars. `on`,
`off`, `yes` and `no` stay words (they are answers here). Aliases and tags are refused, so a
document can never expand or construct anything; so are control characters, however written,
since what is read here ends up on a terminal.
"""

from __future__ import annotations

import re
import types
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from difflib import get_close_matches
from typing import Annotated, Any, TypeVar, Union, get_args, get_origin

import yaml
from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from diag.circuit.records import BASIS, PATTERNS, Placed
from diag.errors import Origin, Problem

MAX_BYTES = 2_000_000
"""Largest file that is read; far above any circuit written by hand."""
MAX_NODES = 50_000
"""Most values in one file, some sixty times those of the largest one shipped."""
MAX_DEPTH = 40
Path = tuple[str | int, ...]
M = TypeVar("M", bound=BaseModel)

_INT = re.compile(r"^[-+]?(0|[1-9][0-9]*)$")
_FLOAT = re.compile(r"^[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?$")
_WORDS = {"": None, "~": None, "null": None, "true": True, "false": False}
_CONTROL = re.compile(r"[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x84\x86-\x9f\ud800-\udfff\ufffe\uffff]")
_PLAIN_TAGS = frozenset(
    f"tag:yaml.org,2002:{name}"
    for name in ("str", "int", "float", "bool", "null", "timestamp", "merge", "value")
)
"""What PyYAML resolves an untagged plain scalar to."""
_STR, _SEQ, _MAP = (f"tag:yaml.org,2002:{name}" for name in ("str", "seq", "map"))
_RESOLVER: Any = yaml.resolver.Resolver()
_Loader: Any = getattr(yaml, "CSafeLoader", yaml.SafeLoader)


@dataclass(slots=True)
class Document:
    """One YAML file as data, with the place of each value and the faults found on the way."""

    file: str
    data: Any = None
    places: dict[Path, Origin] = field(default_factory=dict)
    problems: list[Problem] = field(default_factory=list)
    unsure: set[str] = field(default_factory=set)
    """Tables of the record that may lack entries, as those could not be read."""

    def place(self, path: Path) -> Origin:
        """The nearest known place at or above `path`."""
        for end in range(len(path), -1, -1):
            if path[:end] in self.places:
                return self.places[path[:end]]
        return Origin(self.file, 1, 1)

    def inside(self, where: Origin, path: Path) -> Origin:
        """The place of `path` inside the mapping that stands at `where`, or the nearest above."""
        base = next((known for known, place in self.places.items() if place == where), ())
        return self.place((*base, *path))

    def written(self, path: Path) -> Path:
        """`path` inside the record as it stands in the file, which may use short forms."""
        found: Path = ()
        for part in path[:-1]:
            if (*found, part) in self.places:
                found = (*found, part)
        return (*found, *(p for p in path[-1:] if p != "[key]"))

    def fault(self, path: Path, message: str, value: object = "", accepted: str = "") -> None:
        """Notes a problem at `path`."""
        shown = "" if value == "" else brief(value)
        where = self.place(path)
        self.problems.append(Problem(where, dotted(path), message, shown, accepted))


def dotted(path: Path) -> str:
    """A path as people write it, `components.2.kind`."""
    return printable(".".join(str(part) for part in path))


def printable(text: str) -> str:
    """Text that is safe to show: what a terminal would act on becomes a mark."""
    return text if text.isprintable() else "".join(c if c.isprintable() else "�" for c in text)


def brief(value: object, width: int = 60) -> str:
    """A value for an error line: one line, printable, shortened."""
    text = printable(repr(value)[: 4 * width])
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
        if node is not None:
            _Converter(document).convert_root(node)
        if document.data is None and not document.problems:
            document.fault((), "the file is empty", accepted="a mapping")
    except yaml.YAMLError as error:
        document.problems.append(_syntax_problem(error, file))
    except RecursionError:
        document.fault((), "nested too deeply")
    return document


def _decoded(raw: bytes, document: Document) -> str | None:
    if len(raw) > MAX_BYTES:
        accepted = f"at most {MAX_BYTES:,} bytes"
        document.fault((), "the file is too large", accepted=accepted)
        return None
    if sum(raw.count(mark) for mark in b",[{:-?\n") > 2 * MAX_NODES:
        # Every value follows one of these marks. Counting them is quicker than parsing.
        document.fault((), "too many values in one file", accepted=f"at most {MAX_NODES:,}")
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
    return Problem(where, "", f"not readable as YAML: {printable(what)}")


class _Converter:
    """Turns composed nodes into data; refuses aliases, tags and doubled keys."""

    def __init__(self, document: Document) -> None:
        self.document = document
        self.seen: set[int] = set()

    def convert_root(self, node: yaml.Node) -> None:
        self.document.data = self.convert(node, (), self._place(node))

    def convert(self, node: yaml.Node, path: Path, where: Origin) -> Any:
        self.document.places[path] = where
        if id(node) in self.seen:
            self.document.fault(path, "anchors and aliases are not accepted", accepted="a value")
            return None
        self.seen.add(id(node))
        if len(self.seen) > MAX_NODES:
            raise _refused(node, "too many values in one file")
        if len(path) > MAX_DEPTH:
            raise _refused(node, "nested too deeply")
        if not _untagged(node):
            self.document.fault(path, "tags are not accepted", node.tag, "a plain value")
            return None
        if isinstance(node, yaml.MappingNode):
            return self._mapping(node, path, where)
        if isinstance(node, yaml.SequenceNode):
            return [
                self.convert(item, (*path, number), self._item_place(item, where))
                for number, item in enumerate(node.value)
            ]
        assert isinstance(node, yaml.ScalarNode)
        return self._scalar(node, path)

    def _place(self, node: yaml.Node) -> Origin:
        mark = node.start_mark
        return Origin(self.document.file, mark.line + 1, mark.column + 1)

    def _item_place(self, item: yaml.Node, within: Origin) -> Origin:
        # An alias is the node it stands for, which was written somewhere else.
        return within if id(item) in self.seen else self._place(item)

    def _mapping(self, node: yaml.MappingNode, path: Path, where: Origin) -> Placed:
        data = Placed(where)
        for key_node, value_node in node.value:
            if not isinstance(key_node, yaml.ScalarNode) or not _untagged(key_node):
                self._refuse(key_node, path, "keys must be plain words")
                continue
            key = str(key_node.value)
            inner, place = (*path, key), self._place(key_node)
            if _CONTROL.search(key):
                self._refuse(key_node, path, "control characters are not accepted")
            elif key in data:
                self._refuse(key_node, inner, f"key {brief(key)} stands twice")
            else:
                data[key] = self.convert(value_node, inner, place)
        return data

    def _refuse(self, key_node: yaml.Node, path: Path, message: str) -> None:
        value = brief(key_node.value) if isinstance(key_node, yaml.ScalarNode) else ""
        where = self._place(key_node)
        self.document.problems.append(Problem(where, dotted(path), message, value, "a new word"))

    def _scalar(self, node: yaml.ScalarNode, path: Path) -> Any:
        text: str = node.value
        if found := _CONTROL.search(text):
            shown = f"U+{ord(found[0]):04X}"
            message = "control characters are not accepted"
            self.document.fault(path, message, shown, "printable text")
            return None
        return text if node.style else _typed(text)


def _refused(node: yaml.Node, why: str) -> yaml.YAMLError:
    return yaml.error.MarkedYAMLError(problem=why, problem_mark=node.start_mark)


def _untagged(node: yaml.Node) -> bool:
    """Whether the document leaves it to the reader what a value is."""
    if isinstance(node, yaml.MappingNode):
        return bool(node.tag == _MAP)
    if isinstance(node, yaml.SequenceNode):
        return bool(node.tag == _SEQ)
    assert isinstance(node, yaml.ScalarNode)
    if node.style:
        return bool(node.tag == _STR)
    if node.tag == _STR and not isinstance(_typed(node.value), str):
        # A number of ours that PyYAML takes for a word, as 1e-6, or one tagged as a word.
        return bool(_RESOLVER.resolve(yaml.ScalarNode, node.value, (True, False)) == _STR)
    return node.tag in _PLAIN_TAGS


def _typed(text: str) -> Any:
    """What a plain scalar stands for: nothing, a truth value, a number or a word."""
    if text in _WORDS:
        return _WORDS[text]
    if text[0].isalpha():
        return text
    if _INT.match(text):
        return int(text) if len(text) < 20 else float(text)
    return float(text) if _FLOAT.match(text) else text


def validated(model: type[M], document: Document) -> M | None:
    """The document as a record, its faults added to the document.

    Entries of a table that have faults are left out, so that the names in all the others can
    still be checked; `document.unsure` names those tables. None where nothing can be kept.
    A `basis` at the top of the file is inherited by every record that has none of its own.
    """
    record = None
    if isinstance(document.data, Placed):
        record, faults = _attempt(model, document.data)
        if faults:
            told = {problem.path for problem in document.problems}
            found = _record_problems(model, document, faults)
            document.problems.extend(p for p in found if p.path not in told)
            kept = _without_faults(model, document, faults)
            record = _attempt(model, kept)[0] if kept is not None else None
    elif document.data is not None:
        document.fault((), "the file must hold a mapping", document.data, "a mapping")
    if record is None:
        document.unsure.update(model.model_fields)
    return record


def _attempt(model: type[M], data: Placed) -> tuple[M | None, list[ErrorDetails]]:
    basis = data.get("basis")
    # A wrong basis is reported where it stands, not once more for every record below it.
    inherited = basis if isinstance(basis, str) and re.match(BASIS, basis) else "judgement"
    try:
        return model.model_validate(data, context={"basis": inherited, "file": data}), []
    except ValidationError as error:
        return None, error.errors(include_url=False)


_STAND_INS = {"basis": "judgement", "title": "untitled", "version": "none"}
"""For words whose own fault is told, so that the rest of the file can be checked."""


def _without_faults(
    model: type[BaseModel], document: Document, faults: Iterable[ErrorDetails]
) -> Placed | None:
    """The data without the table entries that have faults; None when one is not in a table."""
    drop: set[Path] = set()
    kept = Placed(document.data.origin)
    for fault in faults:
        path = fault["loc"][:2]
        table = document.data.get(path[0]) if path else None
        if fault["type"] == "extra_forbidden" and len(path) == 1:
            # It may be a table under a misspelt name, so no table is known to be whole.
            document.unsure.update(model.model_fields)
        elif path and path[0] in _STAND_INS:
            kept[str(path[0])] = _STAND_INS[str(path[0])]
        elif len(path) < 2 or not isinstance(table, list | Mapping):
            return None
        drop.add(path)
        document.unsure.add(str(path[0]))
    for key, value in document.data.items():
        if (key,) not in drop:
            kept[key] = _thinned(value, {path[1] for path in drop if path[0] == key})
    return kept


def _thinned(value: Any, drop: set[str | int]) -> Any:
    if not drop:
        return value
    if isinstance(value, list):
        return [item for i, item in enumerate(value) if i not in drop]
    thin = Placed(value.origin)
    thin.update({key: item for key, item in value.items() if key not in drop})
    return thin


def _record_problems(
    model: type[BaseModel], document: Document, faults: Iterable[ErrorDetails]
) -> Iterator[Problem]:
    for fault in faults:
        path = document.written(fault["loc"])
        message, shown, accepted = wording(model, fault)
        yield Problem(document.place(path), dotted(path), message, shown, accepted)


def wording(model: type[BaseModel], fault: ErrorDetails) -> tuple[str, str, str]:
    """A fault pydantic found, in plain words: message, offending value, what is accepted."""
    kind, path = fault["type"], fault["loc"]
    shown = brief(fault["input"])
    context: Mapping[str, Any] = fault.get("ctx", {})
    message = str(fault["msg"]).removeprefix("Value error, ")
    accepted = ""
    if kind == "extra_forbidden":
        known = fields_at(model, path[:-1])
        near = get_close_matches(str(path[-1]), known, n=1)
        message, accepted = "unknown key", ", ".join(near or sorted(known))
    elif kind == "literal_error":
        message, accepted = "not one of the words accepted here", context["expected"]
    elif kind == "string_pattern_mismatch":
        message, accepted = "not written as it has to be", PATTERNS.get(context["pattern"], "")
    elif kind in _BOUNDS:
        words, key = _BOUNDS[kind]
        message, accepted = "out of range", f"{words} {context[key]:g}"
    elif kind in _TYPES:
        message, accepted = "not of the right kind", _TYPES[kind]
    elif kind == "missing":
        message, shown = "required key missing", ""
    return message, "" if kind == "value_error" else shown, accepted


_BOUNDS = {
    "greater_than": ("more than", "gt"),
    "greater_than_equal": ("at least", "ge"),
    "less_than": ("less than", "lt"),
    "less_than_equal": ("at most", "le"),
}
_TYPES = {
    **dict.fromkeys(("float_type", "float_parsing", "int_type", "int_parsing"), "a number"),
    **dict.fromkeys(("finite_number", "int_from_float"), "a finite number"),
    **dict.fromkeys(("string_type", "string_unicode"), "text"),
    **dict.fromkeys(("dict_type", "model_type", "model_attributes_type"), "a mapping"),
    **dict.fromkeys(("tuple_type", "list_type"), "a list"),
}


def fields_at(model: type[BaseModel], path: Path) -> list[str]:
    """Names of the keys accepted at `path` inside `model`."""
    here: Any = model
    for part in path:
        here = _step_into(here, part)
    found = [m for m in _members(here) if isinstance(m, type) and issubclass(m, BaseModel)]
    # `where` is given by the reader, and a `kind` with a default tells record classes apart.
    return [
        name
        for m in found
        for name, field_ in m.model_fields.items()
        if name != "where" and (name != "kind" or field_.is_required())
    ]


def _members(annotation: Any) -> tuple[Any, ...]:
    while get_origin(annotation) is Annotated:
        annotation = get_args(annotation)[0]
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
