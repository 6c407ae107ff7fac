"""Questions that take more than one slip, from the first to the last."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from diag.advice.steps import titled
from diag.circuit.model import UNLISTED, Circuit, Observable
from diag.record.narrate import NOTHING, OUTCOMES, cause_title, percent
from diag.tui.dialogs.asking import AskFinding, Given
from diag.tui.dialogs.slip import Fields, Line, Pick, PickMany, Row

if TYPE_CHECKING:
    from textual.app import App

    from diag.session import Taken
    from diag.tui.desk import Look


async def ask_any_finding(app: App[Any], circuit: Circuit) -> tuple[Observable, Given] | None:
    """A finding that nobody asked for: which one, then what was found."""
    rows = [Row(o.id, titled(o), o.record.kind) for o in circuit.observables.values()]
    name = await app.push_screen_wait(Pick("WHICH FINDING", rows, search=True))
    if name is None:
        return None
    observable = circuit.observables[name]
    given = await app.push_screen_wait(AskFinding(observable))
    return None if given is None else (observable, given)


@dataclass(frozen=True, slots=True)
class Closing:
    """How a case ends."""

    outcome: str
    causes: tuple[str, ...]
    verification: int | None
    not_verified_because: str


async def ask_closing(app: App[Any], look: Look) -> Closing | None:
    """How it ends, which causes were confirmed, and what proves it."""
    rows = [Row(name, title) for name, title in OUTCOMES.items()]
    outcome = await app.push_screen_wait(Pick("HOW DOES IT END", rows))
    if outcome is None:
        return None
    causes: tuple[str, ...] = ()
    if outcome == "cause_confirmed":
        picked = await app.push_screen_wait(
            PickMany("WHICH CAUSES WERE CONFIRMED", _cause_rows(look), _expected(look))
        )
        if picked is None:
            return None
        causes = picked
    proof = await _proof(app, look)
    return None if proof is None else Closing(outcome, causes, *proof)


def _cause_rows(look: Look) -> list[Row]:
    listed = [row for row in look.causes if row.ref != NOTHING][:9]
    rows = [Row(row.ref, row.title, percent(row.chance)) for row in listed]
    known = {row.id for row in rows}
    fixed = [ref for ref, _ in look.state.world if ref not in known]
    rows += [Row(ref, cause_title(look.circuit, ref)) for ref in dict.fromkeys(fixed)]
    if UNLISTED not in {row.id for row in rows}:
        rows.append(Row(UNLISTED, cause_title(look.circuit, UNLISTED)))
    return rows


def _expected(look: Look) -> Iterable[str]:
    """The causes of the likeliest hypothesis, where it is more likely than not."""
    best, chance = look.assessment.posterior.hypotheses(1)[0]
    return best if chance > 0.5 else ()


async def _proof(app: App[Any], look: Look) -> tuple[int | None, str] | None:
    """The finding that proves it, or why there is none; None to leave the case open."""
    rows = [Row(str(t.number), str(t.finding), "finding") for t in fresh(look)][-8:]
    rows.append(Row("none", "nothing proves it: say why"))
    picked = await app.push_screen_wait(Pick("WHAT PROVES IT", rows))
    if picked is None:
        return None
    if picked != "none":
        return int(picked), ""
    line = Line("why", "why was it not verified", needed=True)
    said = await app.push_screen_wait(Fields("NOT VERIFIED", [line]))
    return None if said is None else (None, said["why"])


def fresh(look: Look) -> Sequence[Taken]:
    """Findings taken since the last rectification."""
    state = look.state
    return [t for t in state.taken if t.finding.world == state.world and not t.superseded]
