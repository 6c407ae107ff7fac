"""How things read on the screen."""

from __future__ import annotations

from datetime import datetime

from diag.advice.steps import NextStep
from diag.circuit.model import Circuit, Observable
from diag.record.narrate import percent

KINDS = {
    "indication": "read",
    "check": "check",
    "rectification": "put right",
    "close": "close",
    "escalate": "hand over",
}


def spoken(observable: Observable, outcome: str) -> str:
    """An outcome as it reads to a person."""
    return observable.record.words.get(outcome, outcome.replace("_", " "))


def reason(step: NextStep) -> str:
    """Why this step, in a few words."""
    if step.kind == "rectification":
        return f"its cause is present with {percent(step.probability)}"
    if step.kind == "close":
        return f"no cause is left with {percent(step.probability)}"
    if step.kind == "escalate":
        return "no step left is worth its minutes"
    return f"expected to tell {step.information_bits:.2f} bits in {minutes(step.expected_minutes)}"


def minutes(count: float) -> str:
    """Minutes as a person says them."""
    whole = round(count)
    return f"{whole} min" if whole < 120 else f"{whole // 60} h {whole % 60:02d}"


def effort(step: NextStep) -> str:
    """Minutes of a step, and what of it is access."""
    if not step.access_minutes:
        return minutes(step.expected_minutes)
    return f"{minutes(step.expected_minutes)}, {minutes(step.access_minutes)} of it access"


def since(then: datetime, now: datetime) -> str:
    """How long ago, in the two largest units."""
    total = max(0, int((now - then).total_seconds() // 60))
    days, rest = divmod(total, 24 * 60)
    hours, left = divmod(rest, 60)
    if days:
        return f"{days} d {hours} h"
    return f"{hours} h {left:02d}" if hours else f"{left} min"


def place_words(circuit: Circuit, engine: str, opened: frozenset[str], people_near: bool) -> str:
    """Who is near, the engine and what is open, in one line; what matters most stands first."""
    words = ["PEOPLE NEAR"] if people_near else []
    words.append(f"engine {engine.replace('_', ' ')}")
    if opened:
        titles = [circuit.openings[name].title.lower() for name in sorted(opened)]
        words.append(f"open: {', '.join(titles)}")
    return " · ".join(words)


def plain_id(name: str) -> str:
    """An id as people may type it."""
    return name.strip().lower().replace("-", "_").replace(" ", "_")
