"""How much of a circuit to show where there is little room."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass, field

from diag.circuit.model import Circuit
from diag.circuit.records import Medium
from diag.oilpath.flow import DRAWN, flow_of, parts_of, pipes_of
from diag.oilpath.fold import Section, folded, sections
from diag.oilpath.layout import Layout, arranged
from diag.oilpath.marks import LEVELS, Marks
from diag.oilpath.text import fits


@dataclass(slots=True)
class Sheets:
    """The layouts of one circuit; each is made once and kept.

    Args:
        circuit: the circuit that is drawn.
        media: lines that are drawn.
    """

    circuit: Circuit
    media: Collection[Medium] = DRAWN
    _made: dict[frozenset[str], Layout] = field(default_factory=dict)
    _sections: tuple[Section, ...] | None = None

    @property
    def sections(self) -> tuple[Section, ...]:
        """All sections that can be folded."""
        if self._sections is None:
            parts, pipes = parts_of(self.circuit), pipes_of(self.circuit, DRAWN)
            self._sections = sections(flow_of(parts, pipes))
        return self._sections

    def section_of(self, component: str) -> Section | None:
        """The section that a component belongs to."""
        return next((s for s in self.sections if component in s.members), None)

    def layout(self, closed: Iterable[str] = ()) -> Layout:
        """The layout with the sections of these ids folded."""
        key = frozenset(closed)
        if key not in self._made:
            shut = [s for s in self.sections if s.id in key]
            parts = parts_of(self.circuit)
            self._made[key] = arranged(*folded(parts, pipes_of(self.circuit, self.media), shut))
        return self._made[key]

    def closed(
        self, marks: Marks, width: int, height: int, wanted: Mapping[str, bool] | None = None
    ) -> frozenset[str]:
        """The sections to fold so that the drawing fits into so many characters.

        Everything is open where that fits. Otherwise all are folded but those that are
        suspected, the most suspected first, as long as they fit.

        Args:
            marks: what is suspected.
            width: characters in a line.
            height: lines.
            wanted: sections that the person opened (True) or folded (False); they stay so.
        """
        told = dict(wanted or {})
        ids = [s.id for s in self.sections]
        if not told and fits(self.layout(), width, height):
            return frozenset()
        shut = {name for name in ids if not told.get(name, False)}
        for section in sorted(self.sections, key=lambda s: -marks.of(s.members)):
            if section.id in told or marks.of(section.members) < LEVELS[1]:
                continue
            if not fits(self.layout(shut - {section.id}), width, height):
                break
            shut.discard(section.id)
        return frozenset(shut)
