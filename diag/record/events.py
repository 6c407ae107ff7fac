"""The events of a case, as they stand in the findings log: one JSON object a line.

The log is the truth and the session is a fold over it. An event never changes and is never
removed; taking something back is an event of its own.
"""

from __future__ import annotations

from datetime import datetime
from typing import Annotated, Any, Literal

from pydantic import AwareDatetime, BaseModel, ConfigDict, Field, TypeAdapter

Line = Annotated[str, Field(max_length=4000)]


class Standing(BaseModel):
    """How the causes stood at one moment: the top causes and their probabilities."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    causes: tuple[tuple[str, float], ...] = ()
    """(COMPONENT.MODE or `nothing_found`/`unlisted`, probability), most likely first."""
    coverage: float | None = None


class Event(BaseModel):
    """What all events carry. `number` counts from 0 and is given by the session."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    number: int = 0
    at: AwareDatetime
    by: Line = ""
    before: Standing | None = None
    after: Standing | None = None


class Opened(Event):
    """The head of a log: whose engine, which circuit, what was reported."""

    event: Literal["opened"] = "opened"
    log_format: Literal[1] = 1
    circuit: str
    version: str
    content_hash: str
    overlays: tuple[str, ...] = ()
    engine: Line = ""
    aircraft: Line = ""
    complaint: Line = ""
    """The crew's own words."""
    worked_on: tuple[str, ...] = ()
    """Components touched at the last maintenance."""
    both_engines: bool | None = None
    """Whether the other engine shows the same after the same visit; None where nobody said."""
    flights: Annotated[int, Field(ge=0)] | None = None
    """Flights that the engine had made when the case was opened, where somebody counts them."""


class Found(Event):
    """A finding: `name[@point]` had `value`, as a state word or a number with its unit."""

    event: Literal["found"] = "found"
    name: str
    point: str | None = None
    value: str
    """As the person gave it, `low` or `52psi`."""
    complaint: bool = False
    """Part of the report, before any check was asked for."""
    minutes_after_stop: Annotated[float, Field(ge=0.0, le=1e6)] | None = None
    """When it was taken after shutdown, where the person says so."""
    reference: Line = ""
    """Task in the approved maintenance data that was followed."""
    remark: Line = ""


class Withdrawn(Event):
    """A finding that no longer counts; `target` is its number."""

    event: Literal["withdrawn"] = "withdrawn"
    target: int
    reason: Line = ""


class Doubted(Event):
    """A finding that counts for less: `trust` is P(the reading is as it should be)."""

    event: Literal["doubted"] = "doubted"
    target: int
    trust: Annotated[float, Field(gt=0.0, le=1.0)]
    reason: Line = ""


class NotPossible(Event):
    """A step that cannot be done now."""

    event: Literal["not_possible"] = "not_possible"
    step: str
    reason: Line = ""


class StateChanged(Event):
    """Engine state and openings, as the person states them."""

    event: Literal["state_changed"] = "state_changed"
    engine: str | None = None
    opened: tuple[str, ...] = ()
    closed: tuple[str, ...] = ()
    people_clear: bool | None = None


class Rectified(Event):
    """A rectification done; the world after it is another one."""

    event: Literal["rectified"] = "rectified"
    rectification: str
    part_off: Line = ""
    part_on: Line = ""
    reference: Line = ""
    remark: Line = ""


class RuleFired(Event):
    """A rule that applied, with what fired it."""

    event: Literal["rule_fired"] = "rule_fired"
    rule: str
    kind: str
    because: tuple[str, ...] = ()
    text: Line = ""


class HandedOver(Event):
    """The case passes to another person or shift."""

    event: Literal["handed_over"] = "handed_over"
    to: Line
    summary: Line = ""


class Acknowledged(Event):
    """The receiving person has read the hand-over."""

    event: Literal["acknowledged"] = "acknowledged"


class Noted(Event):
    """A remark that is evidence of nothing."""

    event: Literal["noted"] = "noted"
    text: Line


class Closed(Event):
    """The end of the case. `verification` is the number of the finding that proves the fix."""

    event: Literal["closed"] = "closed"
    outcome: Literal["cause_confirmed", "no_fault_found", "handed_to_engineering"]
    causes: tuple[str, ...] = ()
    verification: int | None = None
    not_verified_because: Line = ""


AnyEvent = Annotated[
    Opened
    | Found
    | Withdrawn
    | Doubted
    | NotPossible
    | StateChanged
    | Rectified
    | RuleFired
    | HandedOver
    | Acknowledged
    | Noted
    | Closed,
    Field(discriminator="event"),
]

EVENT: TypeAdapter[AnyEvent] = TypeAdapter(AnyEvent)


def event_from_data(data: dict[str, Any]) -> AnyEvent:
    """Inverse of `event_to_data`.

    Raises:
        pydantic.ValidationError: when `data` is not one of the events.
    """
    return EVENT.validate_python(data)


def event_to_data(event: AnyEvent) -> dict[str, Any]:
    """The event as plain JSON data; times in ISO 8601 with zone."""
    data: dict[str, Any] = EVENT.dump_python(event, mode="json", exclude_none=True)
    return data


def moment(text: str) -> datetime:
    """An ISO 8601 time with zone, as events carry them."""
    return datetime.fromisoformat(text)
