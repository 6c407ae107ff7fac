"""The drawing as SVG, for reports: one picture that stands by itself, in print too.

Lines differ in weight and stroke, and suspicion in hatching and figures, so that a black and
white copy still reads. Symbols lean on ISO 1219-1 (circle with triangle for a pump, diamond
for a filter or cooler).
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from html import escape
from itertools import pairwise
from textwrap import wrap

from diag.circuit.records import Medium
from diag.oilpath.layout import Layout, Run
from diag.oilpath.marks import LEVELS, Marks, level
from diag.oilpath.route import CHANNELS, Point, lattice, stands_on
from diag.record.narrate import percent

PLATE, TALL = 128.0, 46.0
"""Width and height of a plate, in units of the drawing."""
GAP, RISE = 34.0, 26.0
"""Between columns and between bands."""
MARGIN, HEAD = 26.0, 74.0
FOOT = 74.0
INK, PAPER, FAINT = "#22303a", "#fbfaf6", "#8b969c"
FONT = "'DejaVu Sans', 'Liberation Sans', Arial, sans-serif"
FILLS = ("#ffffff", "#fdf0d2", "#fbd795", "#f5ac56", "#e2703a")
"""Plates by shade, lightest first."""


@dataclass(frozen=True, slots=True)
class Stroke:
    """How a line is drawn; `core` is a second, lighter stroke along its middle."""

    colour: str
    width: float
    dash: str = ""
    core: float = 0.0
    name: str = ""


STROKES: dict[Medium, Stroke] = {
    "supply": Stroke("#c07f12", 6.0, name="supply"),
    "scavenge": Stroke("#74512f", 6.0, core=2.2, name="scavenge"),
    "bypass": Stroke("#c07f12", 2.4, name="bypass, spill"),
    "spill": Stroke("#c07f12", 2.4),
    "vent": Stroke("#3f7f95", 2.2, "7 4", name="vent air"),
    "sense": Stroke("#5c5f73", 1.5, "1.5 3", name="sense, signal"),
    "signal": Stroke("#5c5f73", 1.5, "1.5 3"),
    "heat": Stroke("#b3392f", 1.8, "3 3", name="heat"),
    "fuel": Stroke("#4c7a35", 2.4, "10 3"),
    "drive": Stroke("#6d7478", 2.4, "12 3 2 3"),
}
_DEPTH: tuple[Medium, ...] = (
    "drive", "heat", "signal", "sense", "vent", "fuel", "bypass", "spill", "scavenge", "supply",
)  # fmt: skip
"""What lies beneath what."""


@dataclass(slots=True)
class Sheet:
    """Coordinates of the lattice on the page, and the elements drawn so far."""

    layout: Layout
    marks: Marks
    out: list[str] = field(default_factory=list)

    @property
    def width(self) -> float:
        return 2 * MARGIN + self.layout.columns * PLATE + (self.layout.columns + 1) * GAP

    @property
    def below(self) -> float:
        """Where the drawing ends and the legend begins."""
        return HEAD + self.layout.bands * TALL + (self.layout.bands + 1) * RISE

    @property
    def height(self) -> float:
        lines = math.ceil(len(self.marks.pins) / 4)
        return self.below + FOOT + (18 + 15 * lines if lines else 0)

    def at(self, point: Point) -> tuple[float, float]:
        """Page coordinates of a lattice point."""
        return (
            MARGIN + _offset(point[0], PLATE, GAP),
            HEAD + _offset(point[1], TALL, RISE),
        )

    def centre(self, name: str) -> tuple[float, float]:
        column, band = self.layout.cells[name]
        return self.at((lattice(column), lattice(band)))

    def put(self, text: str) -> None:
        self.out.append(text)


def svg(layout: Layout, marks: Marks, title: str = "", notice: str = "") -> str:
    """The circuit as an SVG document.

    Args:
        layout: where parts stand and pipes run.
        marks: suspicion, findings and the way of a cause.
        title: printed at the top.
        notice: printed at the foot.
    """
    sheet = Sheet(layout, marks)
    _tank(sheet)
    _halo(sheet)
    _pipes(sheet)
    _overboard(sheet)
    for name in layout.parts:
        if name != layout.tank:
            _plate(sheet, name)
    _told(sheet)
    _causes(sheet)
    _legend(sheet, notice)
    head = _heading(sheet, title)
    body = "\n".join((head, *sheet.out))
    width, height = round(sheet.width), round(sheet.height)
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width} {height}" '
        f'width="{width}" height="{height}" font-family="{FONT}" role="img">\n'
        f"<title>{escape(title or 'Oil path')}</title>\n{_defs()}\n"
        f'<rect width="{width}" height="{height}" fill="{PAPER}"/>\n{body}\n</svg>\n'
    )


def _offset(line: int, plate: float, gap: float) -> float:
    """Distance of a lattice line from the edge."""
    number = stands_on(line)
    if number is not None:
        return gap + number * (plate + gap) + plate / 2
    channel = line % (CHANNELS + 1)
    return (line // (CHANNELS + 1)) * (plate + gap) + gap * (channel + 1) / (CHANNELS + 1)


# -- text -----------------------------------------------------------------------------------


def _text(
    x: float, y: float, text: str, size: float = 11, weight: str = "normal", anchor: str = "start",
    fill: str = INK, extra: str = "",
) -> str:  # fmt: skip
    return (
        f'<text x="{x:.1f}" y="{y:.1f}" font-size="{size:g}" font-weight="{weight}" '
        f'text-anchor="{anchor}" fill="{fill}"{extra}>{escape(text)}</text>'
    )


def _heading(sheet: Sheet, title: str) -> str:
    lines = [_text(MARGIN + 8, 34, title, 20, "bold")]
    if sheet.marks.cause:
        lines.append(_text(MARGIN + 8, 56, f"Way of: {sheet.marks.cause}", 13, fill="#8c2a1c"))
    return "\n".join(lines)


def _defs() -> str:
    spacing = (0, 9, 7, 5, 4)
    hatches = [
        f'<pattern id="hatch{n}" width="{spacing[n]}" height="{spacing[n]}" '
        f'patternUnits="userSpaceOnUse" patternTransform="rotate(45)">'
        f'<rect width="{spacing[n]}" height="{spacing[n]}" fill="{FILLS[n]}"/>'
        f'<line x1="0" y1="0" x2="0" y2="{spacing[n]}" stroke="#5a2d12" '
        f'stroke-width="1.1" stroke-opacity="0.55"/></pattern>'
        for n in range(1, 5)
    ]
    return f"<defs>{''.join(hatches)}</defs>"


# -- pipes ----------------------------------------------------------------------------------


def _tank(sheet: Sheet) -> None:
    layout = sheet.layout
    x = sheet.at((lattice(0), 0))[0] - PLATE / 2
    top = sheet.at((0, lattice(layout.top)))[1] - TALL / 2
    end = sheet.at((0, lattice(layout.foot)))[1] + TALL / 2
    shade = level(sheet.marks.of(layout.parts[layout.tank].members))
    inside = layout.tank in sheet.marks.way
    surface = top + min(64.0, (end - top) / 3)
    sheet.put(
        f'<rect x="{x:.1f}" y="{top:.1f}" width="{PLATE:g}" height="{end - top:.1f}" rx="22" '
        f'fill="{_fill(shade)}" stroke="{INK}" stroke-width="{4 if inside else 2}"/>'
    )
    sheet.put(
        f'<path d="M{x + 4:.1f} {surface:.1f} q16 -7 32 0 t32 0 t32 0 t{PLATE - 104:g} 0 '
        f'V{end - 24:.1f} q0 20 -20 20 H{x + 24:.1f} q-20 0 -20 -20 Z" '
        f'fill="#dba23a" fill-opacity="0.32" stroke="#c07f12" stroke-width="1.4"/>'
    )
    part = layout.parts[layout.tank]
    centre = x + PLATE / 2
    _title_lines(sheet, part.title, centre, top + 20, 15, "middle", 3)
    _badge(sheet, layout.tank, x + PLATE, top)


def _polyline(sheet: Sheet, way: Sequence[Point], run: Run | None = None) -> str:
    """The path of a pipe with rounded bends, cut short at the plates it joins."""
    points = [sheet.at(p) for p in _corners(way)]
    if run is not None:
        points[0] = _edge(sheet, run.pipe.source, points[0], points[1])
        points[-1] = _edge(sheet, run.pipe.target, points[-1], points[-2])
    text = [f"M{points[0][0]:.1f} {points[0][1]:.1f}"]
    for before, here, after in zip(points, points[1:], points[2:], strict=False):
        r = min(7.0, math.dist(before, here) / 2, math.dist(here, after) / 2)
        a, b = _towards(here, before, r), _towards(here, after, r)
        text.append(f"L{a[0]:.1f} {a[1]:.1f}Q{here[0]:.1f} {here[1]:.1f} {b[0]:.1f} {b[1]:.1f}")
    text.append(f"L{points[-1][0]:.1f} {points[-1][1]:.1f}")
    return "".join(text)


def _corners(way: Sequence[Point]) -> list[Point]:
    found = [way[0]]
    for before, here, after in zip(way, way[1:], way[2:], strict=False):
        if (here[0] - before[0], here[1] - before[1]) != (after[0] - here[0], after[1] - here[1]):
            found.append(here)
    return [*found, way[-1]]


def _edge(
    sheet: Sheet, name: str, end: tuple[float, float], inner: tuple[float, float]
) -> tuple[float, float]:
    """Where a pipe meets the edge of its plate."""
    dx, dy = inner[0] - end[0], inner[1] - end[1]
    if abs(dx) >= abs(dy):
        return end[0] + math.copysign(PLATE / 2, dx), end[1]
    return end[0], end[1] + math.copysign(TALL / 2, dy)


def _towards(a: tuple[float, float], b: tuple[float, float], r: float) -> tuple[float, float]:
    far = math.dist(a, b) or 1.0
    return a[0] + (b[0] - a[0]) * r / far, a[1] + (b[1] - a[1]) * r / far


def _path(d: str, stroke: Stroke, colour: str = "", width: float = 0.0) -> str:
    dash = f' stroke-dasharray="{stroke.dash}"' if stroke.dash and not width else ""
    return (
        f'<path d="{d}" fill="none" stroke="{colour or stroke.colour}" '
        f'stroke-width="{width or stroke.width:g}" stroke-linejoin="round"{dash}/>'
    )


def _halo(sheet: Sheet) -> None:
    for run in _along(sheet):
        d = _polyline(sheet, run.way, run)
        sheet.put(
            f'<path d="{d}" fill="none" stroke="#d8442b" stroke-width="20" '
            f'stroke-opacity="0.38" stroke-linecap="round" stroke-linejoin="round"/>'
        )


def _along(sheet: Sheet) -> list[Run]:
    """The pipes that join neighbouring components of the way."""
    way = [sheet.layout.part_of(name) for name in sheet.marks.way]
    pairs = [(a, b) for a, b in pairwise(way) if a and b and a != b]
    return [run for a, b in pairs for run in sheet.layout.between(a, b)[:1]]


def _pipes(sheet: Sheet) -> None:
    runs = sorted(sheet.layout.runs, key=lambda run: _DEPTH.index(run.pipe.medium))
    for medium in _DEPTH:
        drawn = [(run, _polyline(sheet, run.way, run)) for run in runs if run.pipe.medium == medium]
        stroke = STROKES[medium]
        for _, d in drawn:
            if stroke.width > 2:
                sheet.put(_path(d, stroke, PAPER, stroke.width + 4))
        for _, d in drawn:
            sheet.put(_path(d, stroke))
        for _, d in drawn:
            if stroke.core:
                sheet.put(_path(d, stroke, PAPER, stroke.core))
    _arrows(sheet, runs)


def _arrows(sheet: Sheet, runs: Iterable[Run]) -> None:
    done: list[tuple[float, float]] = []
    for run in runs:
        place = _arrow_place(sheet, run)
        if place and all(math.dist(place[:2], other) > 22 for other in done):
            done.append(place[:2])
            _arrow(sheet, run, *place)


def _arrow_place(sheet: Sheet, run: Run) -> tuple[float, float, float] | None:
    """Half-way along the longest stretch, and the direction in degrees."""
    points = [sheet.at(p) for p in _corners(run.way)]
    points[0] = _edge(sheet, run.pipe.source, points[0], points[1])
    points[-1] = _edge(sheet, run.pipe.target, points[-1], points[-2])
    pairs = list(pairwise(points))
    (ax, ay), (bx, by) = max(pairs, key=lambda pair: math.dist(*pair))
    if math.dist((ax, ay), (bx, by)) < 12:
        return None
    return (ax + bx) / 2, (ay + by) / 2, math.degrees(math.atan2(by - ay, bx - ax))


def _arrow(sheet: Sheet, run: Run, x: float, y: float, turn: float) -> None:
    stroke = STROKES[run.pipe.medium]
    size = 4.0 + stroke.width * 0.75
    sheet.put(
        f'<path d="M{size:.1f} 0L{-size * 0.7:.1f} {size * 0.8:.1f}V{-size * 0.8:.1f}Z" '
        f'transform="translate({x:.1f} {y:.1f}) rotate({turn:.0f})" fill="{stroke.colour}" '
        f'stroke="{PAPER}" stroke-width="1"/>'
    )


def _overboard(sheet: Sheet) -> None:
    for name in sheet.layout.overboard:
        x, y = sheet.centre(name)
        below = y + TALL / 2
        sheet.put(_path(f"M{x:.1f} {below:.1f}v16", STROKES["vent"]))
        sheet.put(
            f'<path d="M{x - 6:.1f} {below + 14:.1f}h12l-6 9z" fill="{STROKES["vent"].colour}"/>'
        )
        sheet.put(_text(x + 10, below + 20, "overboard", 10, fill=STROKES["vent"].colour))


# -- plates ---------------------------------------------------------------------------------


def _fill(shade: int) -> str:
    return f"url(#hatch{shade})" if shade else FILLS[0]


def _plate(sheet: Sheet, name: str) -> None:
    part = sheet.layout.parts[name]
    x, y = sheet.centre(name)
    wide = PLATE - 16 if name in sheet.layout.inside else PLATE
    left, top = x - wide / 2, y - TALL / 2
    shade = level(sheet.marks.of(part.members))
    on_way = any(member in sheet.marks.way for member in part.members)
    round_ = 21 if part.role in ("instrument", "detector") else 7
    dashed = ' stroke-dasharray="5 3"' if part.folded else ""
    sheet.put(
        f'<rect x="{left:.1f}" y="{top:.1f}" width="{wide:g}" height="{TALL:g}" rx="{round_}" '
        f'fill="{PAPER if not shade else FILLS[shade]}" stroke="{"#8c2a1c" if on_way else INK}" '
        f'stroke-width="{3 if on_way else 1.3 + 0.5 * shade:g}"{dashed}/>'
    )
    if shade:
        sheet.put(
            f'<rect x="{left + 2:.1f}" y="{top + 2:.1f}" width="30" height="{TALL - 4:g}" '
            f'rx="{round_ - 2}" fill="{_fill(shade)}"/>'
        )
    _symbol(sheet, part.role, left + 17, y)
    _title_lines(sheet, part.title, left + 35, y, 15, "start", 3, centred=True)
    _badge(sheet, name, left + wide, top)


def _title_lines(
    sheet: Sheet, title: str, x: float, y: float, width: int, anchor: str, most: int,
    centred: bool = False,
) -> None:  # fmt: skip
    lines = wrap(title, width)
    if len(lines) > most:
        lines = [*lines[: most - 1], lines[most - 1][: width - 1] + "…"]
    step = 12.5
    start = y - step * (len(lines) - 1) / 2 + 3.8 if centred else y
    for number, line in enumerate(lines):
        sheet.put(_text(x, start + number * step, line, 10.5, anchor=anchor))


def _badge(sheet: Sheet, name: str, right: float, top: float) -> None:
    """Percentage and pins on the upper edge of a plate."""
    members = sheet.layout.parts[name].members
    chance = sheet.marks.of(members)
    if chance >= LEVELS[0]:
        text = percent(chance)
        width = 9 + 6.4 * len(text)
        sheet.put(
            f'<rect x="{right - width - 4:.1f}" y="{top - 9:.1f}" width="{width:.1f}" height="16" '
            f'rx="8" fill="{INK}"/>'
        )
        sheet.put(_text(right - width / 2 - 4, top + 3, text, 10.5, "bold", "middle", PAPER))
        right -= width + 6
    for pin in reversed(sheet.marks.pinned(members)):
        right -= 19
        fill, ink = (PAPER, INK) if pin.unremarkable else ("#8c2a1c", PAPER)
        faded = "" if pin.standing else ' opacity="0.45"'
        sheet.put(
            f'<g{faded}><circle cx="{right + 7:.1f}" cy="{top - 2:.1f}" r="8.5" fill="{fill}" '
            f'stroke="#8c2a1c" stroke-width="1.6"/>'
            f"{_text(right + 7, top + 1.6, str(pin.number), 9.5, 'bold', 'middle', ink)}</g>"
        )


def _told(sheet: Sheet) -> None:
    """Lines told by name: a small flag at the part that sends."""
    for pipe in sheet.layout.told:
        x, y = sheet.centre(pipe.source)
        text = f"to {sheet.layout.parts[pipe.target].title}"
        short = text if len(text) < 26 else text[:25] + "…"
        sheet.put(
            f'<rect x="{x - 66:.1f}" y="{y + TALL / 2 + 3:.1f}" width="132" height="11" '
            f'fill="{PAPER}"/>'
        )
        sheet.put(_text(x, y + TALL / 2 + 12, f"▸ {short}", 9.5, anchor="middle", fill="#5c5f73"))


# -- symbols --------------------------------------------------------------------------------


def _symbol(sheet: Sheet, role: str, x: float, y: float) -> None:
    drawn = _SYMBOLS.get(role)
    if drawn:
        sheet.put(
            f'<g transform="translate({x:.1f} {y:.1f})" fill="none" stroke="{INK}" '
            f'stroke-width="1.5" stroke-linejoin="round">{drawn}</g>'
        )


_DIAMOND = '<path fill="#fff" d="M0 -11L11 0L0 11L-11 0Z"/>'
_CIRCLE = '<circle fill="#fff" r="10"/>'
_SYMBOLS = {
    "pump": f'{_CIRCLE}<path d="M-5 -8.6L10 0L-5 8.6Z" fill="{INK}" fill-opacity="0.85"/>',
    "filter": f'{_DIAMOND}<path d="M0 -11V11" stroke-dasharray="3 2"/>',
    "cooler": f'{_DIAMOND}<path d="M0 -11V-17M0 11V17M-2.5 -14L0 -17L2.5 -14'
    'M-2.5 14L0 17L2.5 14"/>',
    "valve": '<path fill="#fff" d="M-10 -7L10 7V-7L-10 7Z"/>',
    "line": '<path d="M-11 -4H11M-11 4H11"/>',
    "gallery": '<path fill="#fff" d="M-11 -5H11V5H-11Z"/><path d="M-6 5V9M0 5V9M6 5V9"/>',
    "jet": '<path fill="#fff" d="M-10 -6H-2L3 -2V2L-2 6H-10Z"/>'
    '<path d="M5 -2L11 -6M6 0H12M5 2L11 6"/>',
    "bearing": f'{_CIRCLE}<circle r="4.5"/><path d="M0 -10V-4.5M0 10V4.5M-10 0H-4.5M10 0H4.5"/>',
    "gear": f'{_CIRCLE}<circle r="3"/><path d="M0 -10V-13M0 10V13M-10 0H-13M10 0H13'
    'M-7 -7L-9.2 -9.2M7 7L9.2 9.2M-7 7L-9.2 9.2M7 -7L9.2 -9.2"/>',
    "chamber": '<path fill="#fff" d="M-10 -8H10V3Q10 9 0 10Q-10 9 -10 3Z"/><path d="M-9.5 4H9.5"/>',
    "seal": '<path d="M-10 -7H10M-10 7H10M-6 -7V3M-2 -7V3M2 -7V3M6 -7V3"/>',
    "vent": '<path d="M-9 8Q-3 4 -6 -1T-3 -9M0 8Q6 4 3 -1T6 -9"/>',
    "instrument": f'{_CIRCLE}<path d="M0 4L5 -5"/><circle cy="4" r="1.4" fill="{INK}"/>',
    "detector": f'{_CIRCLE}<path d="M-5 6V-2A5 5 0 0 1 5 -2V6M-5 2H-2M2 2H5"/>',
    "oil": '<path fill="#fff" d="M0 -11Q9 1 8 4A8 8 0 0 1 -8 4Q-9 1 0 -11Z"/>',
    "servicing": '<path fill="#fff" d="M-9 -3H3V9H-9Z"/><path d="M3 0L11 -6M-6 -3V-7H0V-3"/>',
    "consumer": '<path fill="#fff" d="M-10 -8H10V8H-10Z"/><path d="M-5 0H5M2 -3L5 0L2 3"/>',
    "tank": '<path fill="#fff" d="M-8 -10H8V10H-8Z"/><path d="M-8 -2H8"/>',
}


# -- likely causes, in the clearing of the ring ---------------------------------------------


def _causes(sheet: Sheet) -> None:
    space = sheet.layout.clearing()
    if space is None or not sheet.marks.causes:
        return
    column, band, wide, high = space
    left = sheet.at((lattice(column), 0))[0] - PLATE / 2
    right = sheet.at((lattice(column + wide - 1), 0))[0] + PLATE / 2
    first, last = (sheet.at((0, lattice(b)))[1] for b in (band, band + high - 1))
    rows = sheet.marks.causes[: max(1, int((last - first + TALL - 24) // 24))]
    y = (first + last) / 2 - 12 * (len(rows) - 1) + 6
    sheet.put(_text(left, y - 24, "Likely now", 12.5, "bold"))
    for number, (title, chance) in enumerate(rows):
        _cause(sheet, (left, y + 24 * number), right - left, title, chance)


def _cause(
    sheet: Sheet, place: tuple[float, float], width: float, title: str, chance: float
) -> None:
    x, y = place
    full = 120.0
    sheet.put(_text(x + 46, y + 4, percent(chance), 11, "bold", "end"))
    sheet.put(
        f'<rect x="{x + 54:.1f}" y="{y - 6:.1f}" width="{full:g}" height="12" rx="2" fill="none" '
        f'stroke="{FAINT}"/><rect x="{x + 54:.1f}" y="{y - 6:.1f}" '
        f'width="{max(1.5, full * chance):.1f}" height="12" rx="2" fill="{INK}"/>'
    )
    letters = int((width - full - 66) / 6.1)
    short = title if len(title) <= letters else title[: letters - 1] + "…"
    sheet.put(_text(x + 62 + full, y + 4, short, 11))


# -- legend ---------------------------------------------------------------------------------


def _legend(sheet: Sheet, notice: str) -> None:
    y = sheet.below + 12
    x = MARGIN + 8
    used = {run.pipe.medium for run in sheet.layout.runs}
    for medium, stroke in STROKES.items():
        if medium not in used or not stroke.name:
            continue
        sheet.put(_path(f"M{x:.1f} {y:.1f}h42", stroke))
        if stroke.core:
            sheet.put(_path(f"M{x:.1f} {y:.1f}h42", stroke, PAPER, stroke.core))
        sheet.put(_text(x + 50, y + 4, stroke.name, 11))
        x += 66 + 6.6 * len(stroke.name) + 22
    x += 14
    sheet.put(_text(x, y + 4, "suspicion", 11))
    x += 64
    for shade, limit in enumerate(LEVELS, start=1):
        sheet.put(
            f'<rect x="{x:.1f}" y="{y - 8:.1f}" width="24" height="16" fill="{_fill(shade)}" '
            f'stroke="{INK}"/>'
        )
        sheet.put(_text(x + 30, y + 4, f"from {percent(limit)}", 11))
        x += 100
    y = _pin_list(sheet, y + 26)
    if notice:
        sheet.put(_text(MARGIN + 8, y + 12, notice, 11, fill=FAINT))


def _pin_list(sheet: Sheet, y: float) -> float:
    pins = sheet.marks.pins
    if not pins:
        return y
    step = (sheet.width - 2 * MARGIN) / 4
    for number, pin in enumerate(pins):
        x, line = MARGIN + 8 + (number % 4) * step, y + (number // 4) * 15
        word = "" if pin.unremarkable else " ●"
        sheet.put(_text(x, line, f"{pin.number}  {pin.text}{word}", 10.5))
    return y + math.ceil(len(pins) / 4) * 15
