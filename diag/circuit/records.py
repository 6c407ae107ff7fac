"""The records that make up a circuit, as they stand in YAML.

Every record is frozen, refuses unknown keys, and remembers where it was read. Ids are
lower case with underscores; they are the words of the findings log, so they stay stable.
"""

from __future__ import annotations

from itertools import pairwise
from typing import Annotated, Any, Literal

from pydantic import (
    BaseModel,
    ConfigDict,
    Field,
    StringConstraints,
    ValidationInfo,
    model_validator,
)

from diag.errors import Origin

WORD = r"^[a-z][a-z0-9_]*$"
PLACE = r"^[a-z][a-z0-9_]*(@[a-z][a-z0-9_]*)?$"
MODE = r"^[a-z][a-z0-9_]*\.[a-z][a-z0-9_]*$"
BASIS = r"^(computed|common practice|judgement|from memory|published: [A-Za-z0-9_, ]+)$"
PATTERNS = {
    WORD: "a lower-case word with underscores",
    PLACE: "NAME or NAME@POINT in lower case",
    MODE: "COMPONENT.MODE in lower case",
    BASIS: "computed, common practice, judgement, from memory, or published: SOURCE, …",
}
"""What each pattern asks for, in words."""

Id = Annotated[str, StringConstraints(pattern=WORD, max_length=60)]
Text = Annotated[str, StringConstraints(min_length=1, max_length=2000)]
Place = Annotated[str, StringConstraints(pattern=PLACE)]
"""A condition or observation, with its operating point where it has one: `NAME@POINT`."""
ModeRef = Annotated[str, StringConstraints(pattern=MODE)]
"""A failure mode of a component: `COMPONENT.MODE`."""
Probability = Annotated[float, Field(ge=0.0, le=1.0)]
Minutes = Annotated[float, Field(ge=0.0, le=100_000.0)]
Factor = Annotated[float, Field(gt=0, le=1e4)]
Basis = Annotated[str, StringConstraints(pattern=BASIS)]
"""Where a number comes from; `published:` names ids of `knowledge/shared/sources.yaml`."""

Medium = Literal[
    "supply", "scavenge", "bypass", "spill", "vent", "sense", "signal", "heat", "drive", "fuel"
]
Engine = Literal["any", "stopped", "cold", "hot_stopped", "motoring", "idle", "high_power"]
"""State of the engine a step needs. `any` is desk work; `stopped` is cold or hot."""
Unit = Literal[
    "psi", "bar", "mbar", "kPa", "MPa", "degC", "degF", "litre", "quart", "pint", "gallon",
    "L/min", "L/h", "quart/hour", "lb/h", "percent", "ppm", "cSt", "mg/g", "mm", "inch", "rpm",
    "ohm", "kohm", "Mohm", "volt", "mA", "second", "minute", "hour",
]  # fmt: skip
"""Units an instrument of the oil circuit may be marked in, as pint writes them. A fixed list,
since asking pint itself would cost every start a good part of a second."""


class Placed(dict[str, Any]):
    """A mapping as read from a file, with the place where it stood."""

    def __init__(self, origin: Origin) -> None:
        super().__init__()
        self.origin = origin


class Record(BaseModel):
    """Base of all records: frozen, exact about its keys, and placed in its file."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)

    where: Origin = Field(default=Origin(), exclude=True, repr=False)

    @model_validator(mode="before")
    @classmethod
    def _placed(cls, data: Any, info: ValidationInfo) -> Any:
        if not isinstance(data, Placed):
            return data
        if "where" in data:
            raise ValueError("unknown key 'where'")
        own = cls._own(dict(data))
        context = info.context or {}
        if "basis" in context and "basis" in cls.model_fields and data is not context.get("file"):
            own.setdefault("basis", context["basis"])
        own["where"] = data.origin
        return own

    @classmethod
    def _own(cls, data: dict[str, Any]) -> dict[str, Any]:
        """Where a record has a short form, its long form."""
        return data


class Based(Record):
    """A record whose numbers carry their basis (inherited from the file when absent)."""

    basis: Basis
    note: str = ""


class Rate(Based):
    """How often a mode arises: per flying hour, or per event such as a servicing."""

    per_million_hours: Annotated[float, Field(gt=0, le=1e6)] | None = None
    per_event: Probability | None = None
    event: Id | None = None

    @model_validator(mode="after")
    def _one_kind(self) -> Rate:
        if (self.per_million_hours is None) == (self.per_event is None):
            raise ValueError("give either per_million_hours or per_event, not both")
        if (self.per_event is None) != (self.event is None):
            raise ValueError("per_event and event belong together")
        return self


class Signal(Based):
    """What a failed instrument does to the state it hands on.

    `shift_down` and `shift_up` are the chances of showing the next state down or up;
    `shows` gives the chances of a fixed output (`lowest`, `normal`, `highest`) whatever is
    true; what is left over passes the true state through.
    """

    shift_down: Probability = 0.0
    shift_up: Probability = 0.0
    shows: dict[Literal["lowest", "normal", "highest"], Probability] = Field(default_factory=dict)

    @model_validator(mode="after")
    def _within_one(self) -> Signal:
        if self.shift_down + self.shift_up + sum(self.shows.values()) > 1.0 + 1e-12:
            raise ValueError("shift_down, shift_up and shows add up to more than 1")
        return self


class Effect(Based):
    """What one mode, alone, does to one condition: chances of the abnormal states.

    `gives` maps abnormal states to probabilities; the remainder leaves the condition normal.
    """

    gives: Annotated[dict[Id, Probability], Field(min_length=1)]

    @classmethod
    def _own(cls, data: dict[str, Any]) -> dict[str, Any]:
        if "gives" in data:
            return data
        kept: dict[str, Any] = {key: data[key] for key in ("basis", "note") if key in data}
        return {**kept, "gives": {key: p for key, p in data.items() if key not in kept}}

    @model_validator(mode="after")
    def _within_one(self) -> Effect:
        if sum(self.gives.values()) > 1.0 + 1e-12:
            raise ValueError("the chances of one effect add up to more than 1")
        return self


class ModeRecord(Record):
    """One way a component of this kind fails."""

    id: Id
    title: Text
    mechanism: str = ""
    rate: Rate
    shows: dict[Place, Effect] = Field(default_factory=dict)
    """Effects on shared conditions; without a point, at every point the circuit has."""
    signal: Signal | None = None
    """For instruments: what the mode does to the indications that pass through it."""
    promotes: dict[ModeRef, Factor] = Field(default_factory=dict)
    """Factors on the prior odds of other modes while this one is present. Modes of components
    that a circuit lacks are passed over: kinds are shared."""


class Needs(Record):
    """State and access a step needs before it can start."""

    engine: Engine = "any"
    within_minutes: Minutes | None = None
    """Latest time after shutdown, for checks that go stale."""
    after_minutes: Minutes | None = None
    """Earliest time after shutdown."""
    opens: tuple[Id, ...] = ()
    """Openings (cowl, filter bowl, …) that must be open; each is paid once."""


class Step(Based):
    """What checks, readings and rectifications have in common."""

    id: Id
    title: Text
    minutes: Minutes
    needs: Needs = Needs()
    cautions: tuple[Id, ...] = ()
    reference: str = ""
    """The task in the operator's approved data; filled in by an overlay."""


class Scale(Based):
    """How a number on an instrument divides into the states of its condition."""

    unit: Unit
    range: tuple[float, float]
    """Ends of the instrument's range, in `unit`."""
    tolerance: Annotated[float, Field(gt=0)]
    """Half-width of the 95 % interval of one reading, in `unit`."""
    limits: dict[Id, tuple[float, ...]]
    """Per operating point (or `any`): the values between neighbouring states, rising."""

    @model_validator(mode="after")
    def _rising(self) -> Scale:
        low, high = self.range
        for point, cuts in self.limits.items():
            edges = (low, *cuts, high)
            if any(b <= a for a, b in pairwise(edges)):
                raise ValueError(f"limits at {point} must rise strictly inside the range")
        return self

    def limits_example(self) -> str:
        """A number as it may be given, for error messages."""
        return f"{sum(self.range) / 2:.3g}{self.unit}"


class Observation(Step):
    """An indication or a check: something that yields a finding."""

    question: str = ""
    reads: Place | None = None
    """The condition it looks at; without a point, the finding's own point applies."""
    sees: dict[Id, Probability] = Field(default_factory=dict)
    """Only in a kind: own modes and the chance that each leaves a trace to be found."""
    points: tuple[Id, ...] = ()
    """Points at which the finding can be taken; empty when it has none."""
    detects: Probability
    """P(the true abnormal state is reported)."""
    false_alarm: Probability
    """P(some abnormal state is reported | the condition is normal)."""
    outcomes: dict[Id, tuple[Id, ...]] = Field(default_factory=dict)
    """Outcome to the states it reports, where they differ: `{on: [low], off: [normal, high]}`.
    The outcome that holds the normal state is the unremarkable one."""
    words: dict[Id, Text] = Field(default_factory=dict)
    """Per outcome, how the answer reads to a person."""
    scale: Scale | None = None
    through: tuple[Id, ...] = ()
    """Instrument components between the condition and the eye, in order."""
    noise: Literal["fresh", "persistent"] = "persistent"
    """Whether a repeat errs independently of the first look."""

    @model_validator(mode="after")
    def _one_subject(self) -> Observation:
        if (self.reads is None) == (not self.sees):
            raise ValueError("give either reads (a condition) or sees (own modes)")
        return self


class Indication(Observation):
    """What an instrument of the engine shows."""

    kind: Literal["indication"] = "indication"
    synonyms: tuple[Text, ...] = ()
    """Words crews use for it, for reading a complaint."""


class Check(Observation):
    """Something a technician does that yields a finding."""

    kind: Literal["check"] = "check"


class Rectification(Step):
    """Something that restores a component."""

    kind: Literal["rectification"] = "rectification"
    restores: Annotated[tuple[Id, ...], Field(min_length=1)]
    """Modes of the component that it removes."""
    parts_minutes: Minutes = 0.0
    """Cost of the parts, expressed in minutes at the circuit's rate."""
    success: Probability = 0.98
    """P(the mode is gone afterwards)."""
    verify: Place
    """The observation that proves the fix, normal when it holds."""


class Kind(Record):
    """A reusable description of a component that circuits instantiate."""

    id: Id
    title: Text
    basis: Basis
    description: str = ""
    role: Literal[
        "tank", "pump", "filter", "valve", "line", "gallery", "jet", "bearing", "gear",
        "chamber", "seal", "cooler", "vent", "instrument", "detector", "oil", "servicing",
        "consumer",
    ]  # fmt: skip
    modes: Annotated[tuple[ModeRecord, ...], Field(min_length=1)]
    checks: tuple[Check, ...] = ()
    rectifications: tuple[Rectification, ...] = ()


class Condition(Based):
    """A true state of the oil circuit, at each operating point where it is told apart."""

    id: Id
    title: Text
    states: Annotated[tuple[Id, ...], Field(min_length=2, max_length=6)]
    """In order; two-sided conditions run from low to high."""
    normal: Id
    points: tuple[Id, ...] = ()
    leak: dict[Id, Probability]
    """P(abnormal state without any listed cause), per abnormal state."""
    unlisted: dict[Id, Probability]
    """Chances of each abnormal state when a cause that is not listed is present."""
    at: tuple[Id, ...] = ()
    """Components of the circuit where the condition holds (set by the circuit)."""
    carried_by: tuple[Medium, ...] = ()
    """Line types along which causes reach it; empty means any."""

    @model_validator(mode="after")
    def _states_known(self) -> Condition:
        if len(set(self.states)) != len(self.states):
            raise ValueError("states repeat")
        if self.normal not in self.states:
            raise ValueError(f"normal must be one of {', '.join(self.states)}")
        for name in (*self.leak, *self.unlisted):
            if name not in self.states or name == self.normal:
                raise ValueError(f"{name} is not an abnormal state of this condition")
        for chances in (self.leak, self.unlisted):
            if sum(chances.values()) > 1.0 + 1e-12:
                raise ValueError("chances add up to more than 1")
        return self


class ComponentUse(Record):
    """A component of the circuit: an instance of a kind."""

    id: Id
    kind: Id
    title: str = ""
    omit: tuple[Id, ...] = ()
    """Modes, checks and rectifications of the kind that this instance does not have."""
    rates: dict[Id, Rate] = Field(default_factory=dict)


class Line(Record):
    """A connection that carries oil, air, pressure, a signal, heat or drive."""

    source: Id
    target: Id
    carries: Medium


class Opening(Based):
    """Something opened for access and closed again; paid once while it stays open."""

    id: Id
    title: Text
    open_minutes: Minutes
    close_minutes: Minutes
    needs: Engine = "stopped"
    inside: tuple[Id, ...] = ()
    """Openings that must be open first."""
    cautions: tuple[Id, ...] = ()


class EngineState(Based):
    """Minutes to bring the engine into a state and out of it."""

    id: Engine
    reach_minutes: Minutes
    leave_minutes: Minutes
    cautions: tuple[Id, ...] = ()


class Exposure(Based):
    """How long and how often the engine was exposed since it was last known good."""

    hours: Annotated[float, Field(gt=0)]
    events: dict[Id, Annotated[float, Field(ge=0)]] = Field(default_factory=dict)
    worked_on_factor: Annotated[float, Field(ge=1)] = 10.0
    """Factor on the odds of a component that was worked on last."""


class Unlisted(Based):
    """How often the cause of a complaint is none that the circuit lists."""

    share: Annotated[float, Field(ge=0, le=0.5)]


class Costs(Based):
    """Rates that turn everything into minutes."""

    escalate_minutes: Minutes
    """Expected minutes when the case is handed to engineering."""
    wrong_removal_minutes: Minutes = 0.0


class CircuitFile(Record):
    """`circuit.yaml`: identity, components and lines."""

    id: Id
    title: Text
    version: Text
    basis: Basis
    description: str = ""
    points: Annotated[tuple[Id, ...], Field(min_length=1)]
    components: Annotated[tuple[ComponentUse, ...], Field(min_length=1)]
    lines: tuple[Line, ...]
    exposure: Exposure
    unlisted: Unlisted
    costs: Costs
    engine_states: tuple[EngineState, ...]
    openings: tuple[Opening, ...]


class ConditionUse(Record):
    """A shared condition as one circuit has it."""

    id: Id
    points: tuple[Id, ...] = ()
    at: Annotated[tuple[Id, ...], Field(min_length=1)]


class ConditionsFile(Record):
    """`conditions.yaml` of a circuit: which shared conditions it has, and its own."""

    basis: Basis
    use: tuple[ConditionUse, ...] = ()
    conditions: tuple[Condition, ...] = ()


class LinksFile(Record):
    """`links*.yaml`: what modes do to conditions and to other modes, in this circuit.

    An entry replaces the kind's own for the same mode and target.
    """

    basis: Basis
    links: dict[ModeRef, dict[Place, Effect]] = Field(default_factory=dict)
    promotes: dict[ModeRef, dict[ModeRef, Factor]] = Field(default_factory=dict)
    """Factors on the prior odds of other modes while the first one is present."""


class ObservationsFile(Record):
    """`indications.yaml` and `checks.yaml` of a circuit or of the shared folder."""

    basis: Basis
    indications: tuple[Indication, ...] = ()
    checks: tuple[Check, ...] = ()
    omit: tuple[Id, ...] = ()
    """Shared checks that this circuit does not have."""


class SharedConditionsFile(Record):
    """`shared/conditions.yaml`: the vocabulary of conditions that kinds may refer to."""

    basis: Basis
    conditions: tuple[Condition, ...]


class Caution(Based):
    """A caution and how it reads at the step."""

    id: Id
    text: Text


class CautionsFile(Record):
    """`shared/cautions.yaml`."""

    basis: Basis
    cautions: tuple[Caution, ...]


class SourcesFile(Record):
    """`shared/sources.yaml`: what the ids in `published: …` stand for."""

    sources: dict[str, Text]


Fields = dict[str, Any]
"""Fields of a record as written, checked once they are laid over it."""
Changes = dict[Id, Fields]


class Overlay(Record):
    """An operator's own values laid over a circuit, by id.

    Each table maps an id to the fields it changes, e.g. `checks: {oil_smell: {minutes: 8}}`.
    """

    overlay: Id
    circuit: Id | None = None
    basis: Basis
    checks: Changes = Field(default_factory=dict)
    indications: Changes = Field(default_factory=dict)
    rectifications: Changes = Field(default_factory=dict)
    openings: Changes = Field(default_factory=dict)
    engine_states: Changes = Field(default_factory=dict)
    rates: dict[ModeRef, Fields] = Field(default_factory=dict)
    links: dict[ModeRef, dict[Place, Effect]] = Field(default_factory=dict)
    costs: Fields = Field(default_factory=dict)
    exposure: Fields = Field(default_factory=dict)
    unlisted: Fields = Field(default_factory=dict)
