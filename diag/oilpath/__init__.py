"""The oil path: a circuit drawn as the oil runs, as text for a terminal and as SVG.

`layout(circuit)` places every component and lays every pipe, from the lines of the circuit
alone; `text` and `svg` draw it with `Marks` on it; `Sheets` folds sections for small screens.
"""

from diag.oilpath.fitting import Sheets
from diag.oilpath.flow import DRAWN, Part, Pipe
from diag.oilpath.layout import Layout, Run, layout
from diag.oilpath.marks import Marks, Pin, level, pins_of, suspicions, way_of
from diag.oilpath.svg import svg
from diag.oilpath.text import Box, Cell, Drawing, fits, text

__all__ = [
    "DRAWN",
    "Box",
    "Cell",
    "Drawing",
    "Layout",
    "Marks",
    "Part",
    "Pin",
    "Pipe",
    "Run",
    "Sheets",
    "fits",
    "layout",
    "level",
    "pins_of",
    "suspicions",
    "svg",
    "text",
    "way_of",
]
