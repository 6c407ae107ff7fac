"""How the causes stood, step by step, as one picture that needs nothing beside it.

Lines differ by dash and mark as well as by colour, so that a print in black still reads. The
colours are those of Okabe & Ito 2008, told apart by the colour-blind too.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from diag.circuit.model import Circuit
from diag.record.events import AnyEvent
from diag.record.narrate import cause_title, percent
from diag.record.rendering import rendered

MOST = 6
"""Causes drawn; more lines could not be told apart."""
WIDTH, HEIGHT = 720.0, 300.0
LEFT, RIGHT, TOP, BOTTOM = 48.0, 12.0, 12.0, 34.0
LABELS = 24
"""Step numbers that fit under the picture."""
_LOOKS = (
    ("#0072B2", ""),
    ("#D55E00", "7 3"),
    ("#009E73", "2 3"),
    ("#CC79A7", "9 3 2 3"),
    ("#6B6B6B", "5 5"),
    ("#000000", "12 3"),
)
_MARKS = (
    "M-3,0 a3,3 0 1,0 6,0 a3,3 0 1,0 -6,0",
    "M-3,-3 h6 v6 h-6 z",
    "M0,-4 L4,3 L-4,3 z",
    "M0,-4 L4,0 L0,4 L-4,0 z",
    "M-4,-3 L4,-3 L0,4 z",
    "M-4,-1 h3 v-3 h2 v3 h3 v2 h-3 v3 h-2 v-3 h-3 z",
)


@dataclass(frozen=True, slots=True)
class Series:
    """One cause over the steps.

    Attributes:
        chances: per step, its probability, or None where it was not among the first.
    """

    ref: str
    title: str
    chances: tuple[float | None, ...]

    @property
    def last(self) -> str:
        """Where it stands at the end, in words."""
        return percent(self.chances[-1]) if self.chances[-1] is not None else "not among the first"


def steps_of(events: Sequence[AnyEvent]) -> list[AnyEvent]:
    """The events at which the causes stood otherwise than before, the first standing included."""
    found: list[AnyEvent] = []
    for event in events:
        if event.after is not None and event.after.causes:
            changed = not found or found[-1].after is None or found[-1].after != event.after
            if changed:
                found.append(event)
    return found


def series_of(
    circuit: Circuit | None, events: Sequence[AnyEvent], most: int = MOST
) -> list[Series]:
    """The causes that stood highest at any step, the highest at the end first."""
    standings = [dict(e.after.causes) for e in steps_of(events) if e.after is not None]
    peak: dict[str, float] = {}
    for standing in standings:
        for ref, chance in standing.items():
            peak[ref] = max(peak.get(ref, 0.0), chance)
    # Who leads at the end is drawn, whatever stood higher on the way.
    final = standings[-1] if standings else {}
    leader = max(final, key=lambda ref: (final[ref], ref), default="")
    chosen = sorted(peak, key=lambda ref: (ref != leader, -peak[ref], ref))[:most]
    chosen.sort(key=lambda ref: (-final.get(ref, 0.0), -peak[ref], ref))
    return [
        Series(ref, cause_title(circuit, ref), tuple(s.get(ref) for s in standings))
        for ref in chosen
    ]


def standings_plot(circuit: Circuit | None, events: Sequence[AnyEvent]) -> str:
    """The plot as an SVG element, or an empty string when nothing was weighed."""
    steps, series = steps_of(events), series_of(circuit, events)
    if not series:
        return ""
    xs = [_x(i, len(steps)) for i in range(len(steps))]
    every = -(-len(steps) // LABELS)
    return rendered(
        "plot.svg.j2",
        {
            "width": WIDTH,
            "height": HEIGHT,
            "left": LEFT,
            "right": WIDTH - RIGHT,
            "bottom": HEIGHT - BOTTOM,
            "grid": [(f"{p} %", _y(p / 100)) for p in (0, 25, 50, 75, 100)],
            "ticks": [(x, s.number) for x, s in zip(xs, steps, strict=True)][::every],
            "lines": [_line(i, s, xs) for i, s in enumerate(series)],
            "summary": "; ".join(f"{s.title}: {s.last}" for s in series),
        },
    )


def legend(series: Sequence[Series]) -> list[dict[str, str]]:
    """Per series what a key needs: colour, dash, mark, title and where it ended."""
    return [
        {"colour": c, "dash": d, "mark": m, "title": s.title, "last": s.last}
        for s, (c, d), m in zip(series, _LOOKS, _MARKS, strict=False)
    ]


def _line(number: int, series: Series, xs: Sequence[float]) -> dict[str, object]:
    colour, dash = _LOOKS[number]
    points = [
        None if chance is None else (x, round(_y(chance), 1))
        for x, chance in zip(xs, series.chances, strict=True)
    ]
    path, pen = [], "M"
    for point in points:
        if point is not None:
            path.append(f"{pen}{point[0]},{point[1]}")
        # Where a cause was not among the first its probability is not known: the line breaks.
        pen = "M" if point is None else "L"
    marks = [point for point in points if point is not None]
    return {
        "title": series.title,
        "colour": colour,
        "dash": dash,
        "path": " ".join(path),
        "mark": _MARKS[number],
        "marks": marks,
    }


def _x(number: int, count: int) -> float:
    inner = WIDTH - LEFT - RIGHT - 20.0
    return round(LEFT + 10.0 + (inner * number / (count - 1) if count > 1 else inner / 2), 1)


def _y(chance: float) -> float:
    return round(TOP + (1.0 - chance) * (HEIGHT - TOP - BOTTOM), 1)
