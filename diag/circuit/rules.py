"""Rules as they stand in YAML: when something holds, what follows for steps and findings.

A rule is data. Its `when` is a tree of plain statements joined by `all`, `any` and `not`; there
is no expression language. What a rule may look at depends on its kind: those that decide what
counts as a finding cannot look at probabilities, which depend on the findings.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Annotated, Any, Literal

from pydantic import Field, StringConstraints, model_validator

from diag.circuit.records import Based, Basis, Id, Minutes, Place, Record, Text

RuleKind = Literal["hold", "caution", "normal_here", "void", "veto", "repeat", "escalate", "shared"]
ON_FINDINGS = ("normal_here", "void", "veto", "shared")
"""Kinds that decide what counts, before any probability is known."""
Quantity = Annotated[str, StringConstraints(pattern=r"^[-+]?[0-9.]+ ?[A-Za-z/]+$", max_length=30)]
"""A number with its unit, such as `115degC`."""
Chance = Annotated[float, Field(ge=0.0, le=1.0)]


class When(Record):
    """One statement about the case. Exactly one subject, with the words that belong to it."""

    all: tuple[When, ...] = ()
    any: tuple[When, ...] = ()
    no: When | None = None
    """Holds when the statement inside does not."""
    finding: Place | None = None
    """An observation that was made; `reads` lists the outcomes that count."""
    reads: tuple[Id, ...] = ()
    reading: Place | None = None
    """An observation with a number, `above` and/or `below`."""
    above: Quantity | None = None
    below: Quantity | None = None
    taken: Place | None = None
    """When a finding was taken: minutes after stop, `later_than` and/or `sooner_than`."""
    later_than: Minutes | None = None
    sooner_than: Minutes | None = None
    age: Place | None = None
    """How old a finding is, in minutes, `later_than` and/or `sooner_than`."""
    change: Place | None = None
    """The last two readings of an observation differ `faster_than` so much a minute."""
    faster_than: Quantity | None = None
    engine: tuple[Id, ...] = ()
    """The engine is in one of these states."""
    stopped_longer_than: Minutes | None = None
    stopped_less_than: Minutes | None = None
    open: Id | None = None
    people: Literal["near", "clear"] | None = None
    worked_on: Id | None = None
    """A component touched at the last maintenance; `any` for whichever."""
    both_engines: bool | None = None
    """Whether the other engine shows the same after the same visit."""
    likely: str | None = None
    """COMPONENT.MODE, COMPONENT, `unlisted` or `nothing`; with `more_than` and/or `less_than`."""
    more_than: Chance | None = None
    less_than: Chance | None = None
    conflict_above: float | None = None
    """The findings do not hang together by more than so many bits."""
    nothing_worth: bool | None = None
    """Whether no check and no rectification is worth its minutes."""

    @model_validator(mode="after")
    def _one_subject(self) -> When:
        given = [name for name in SUBJECTS if getattr(self, name) not in (None, ())]
        if len(given) != 1:
            raise ValueError(f"give exactly one of {', '.join(SUBJECTS)}")
        allowed = SUBJECTS[given[0]]
        for name in WORDS:
            if getattr(self, name) not in (None, ()) and name not in allowed:
                raise ValueError(f"{name} does not belong to {given[0]}")
        if allowed and all(getattr(self, name) in (None, ()) for name in allowed):
            raise ValueError(f"{given[0]} needs {' or '.join(allowed)}")
        return self

    @property
    def subject(self) -> str:
        """The name of the one subject that is given."""
        return next(name for name in SUBJECTS if getattr(self, name) not in (None, ()))

    @property
    def place(self) -> str | None:
        """The observation it is about, if it is about one."""
        return self.finding or self.reading or self.taken or self.age or self.change

    def leaves(self) -> Iterator[When]:
        """All plain statements inside, this one included when it is plain."""
        inner = (*self.all, *self.any, *((self.no,) if self.no else ()))
        if not inner:
            yield self
        for when in inner:
            yield from when.leaves()


SUBJECTS: dict[str, tuple[str, ...]] = {
    "all": (),
    "any": (),
    "no": (),
    "finding": ("reads",),
    "reading": ("above", "below"),
    "taken": ("later_than", "sooner_than"),
    "age": ("later_than", "sooner_than"),
    "change": ("faster_than",),
    "engine": (),
    "stopped_longer_than": (),
    "stopped_less_than": (),
    "open": (),
    "people": (),
    "worked_on": (),
    "both_engines": (),
    "likely": ("more_than", "less_than"),
    "conflict_above": (),
    "nothing_worth": (),
}
"""Subjects of a statement and the words that belong to each."""
WORDS = tuple(dict.fromkeys(word for words in SUBJECTS.values() for word in words))
ON_ODDS = ("likely", "conflict_above", "nothing_worth")
"""Subjects that need the odds."""


class Selector(Record):
    """Steps, by the engine state they need, what they open, or their ids."""

    engine: tuple[Id, ...] = ()
    opens: tuple[Id, ...] = ()
    steps: tuple[Id, ...] = ()
    """Ids of checks and rectifications, without operating point."""

    @model_validator(mode="after")
    def _something(self) -> Selector:
        if not (self.engine or self.opens or self.steps):
            raise ValueError("give engine, opens or steps")
        return self


class Rule(Based):
    """One rule: when it holds, what it does, and how it reads to a person."""

    id: Id
    kind: RuleKind
    when: When
    text: Text
    blocks: Selector | None = None
    """hold: steps that may not be done."""
    at: Selector | None = None
    """caution: steps at which the text is shown."""
    finding: Place | None = None
    """normal_here, void, veto: the finding that does not count."""
    instead: str = ""
    """veto: what it is evidence of instead, `NAME@POINT=VALUE`."""
    again: Place | None = None
    """repeat: the observation to make again, under the conditions that the text states."""
    raises: dict[Id, Annotated[float, Field(gt=0, le=1e4)]] = Field(default_factory=dict)
    """shared: components to factors on the odds of their modes."""

    @model_validator(mode="after")
    def _fits_kind(self) -> Rule:
        wanted = EFFECTS[self.kind]
        for name in ("blocks", "at", "finding", "again", "raises"):
            given = bool(getattr(self, name))
            if given != (name == wanted):
                state = "needs" if name == wanted else "cannot have"
                raise ValueError(f"a rule of kind {self.kind} {state} {name}")
        if self.instead and self.kind != "veto":
            raise ValueError("only a veto has instead")
        if self.kind in ON_FINDINGS and any(w.subject in ON_ODDS for w in self.when.leaves()):
            raise ValueError(f"a rule of kind {self.kind} cannot look at probabilities")
        return self


EFFECTS: dict[str, str | None] = {
    "hold": "blocks",
    "caution": "at",
    "normal_here": "finding",
    "void": "finding",
    "veto": "finding",
    "repeat": "again",
    "escalate": None,
    "shared": "raises",
}
"""Kind of rule to the field that says what it acts on."""


class RulesFile(Record):
    """`rules.yaml` of a circuit or of the shared folder."""

    basis: Basis
    rules: tuple[Rule, ...]


def named_places(rule: Rule) -> Iterator[str]:
    """Observations that a rule speaks of."""
    yield from (place for when in rule.when.leaves() if (place := when.place))
    yield from (place for place in (rule.finding, rule.again) if place)
    if rule.instead:
        yield rule.instead.partition("=")[0]


def in_words(when: When) -> str:
    """A statement as a person reads it."""
    subject = when.subject
    if subject in ("all", "any"):
        inner: tuple[When, ...] = getattr(when, subject)
        return f"({(' and ' if subject == 'all' else ' or ').join(map(in_words, inner))})"
    if when.no is not None:
        return f"not {in_words(when.no)}"
    value: Any = getattr(when, subject)
    shown = " or ".join(value) if isinstance(value, tuple) else str(value)
    words = [f"{w.replace('_', ' ')} {_listed(getattr(when, w))}" for w in SUBJECTS[subject]
             if getattr(when, w) not in (None, ())]  # fmt: skip
    return " ".join([subject.replace("_", " "), shown, *words])


def _listed(value: Any) -> str:
    return " or ".join(value) if isinstance(value, tuple) else str(value)
