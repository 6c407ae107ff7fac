"""The example cases: their head lines, and their answers as events or as typed lines."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

FOLDER = Path(__file__).resolve().parent.parent / "examples"


@dataclass(frozen=True)
class Example:
    """One example file."""

    name: str
    circuit: str
    truth: frozenset[str]
    excluded: tuple[str, ...]
    verification: str
    complaint: tuple[str, ...]
    """Findings of the report."""
    answers: tuple[str, ...]
    """What is typed after the complaint."""

    @property
    def lines(self) -> list[str]:
        """Everything a person types, remarks left out."""
        return [x for x in (FOLDER / f"{self.name}.txt").read_text().splitlines() if x[:1] != "#"]

    def steps(self) -> Iterator[tuple[str, str]]:
        """(`add`, finding) and (`fixed`, rectification) in their order, up to the closing."""
        for line in self.answers:
            if match := re.match(r"^(add|fixed) (?:by )?(.+)$", line):
                yield match[1], match[2]


def example(path: Path) -> Example:
    """Reads one example file."""
    lines = path.read_text().splitlines()
    head = dict(line[2:].split(": ", 1) for line in lines if line.startswith("# "))
    body = [line for line in lines if not line.startswith("#")]
    end = body.index("")
    return Example(
        name=path.stem,
        circuit=head["circuit"],
        truth=frozenset(head["truth"].split(", ")),
        excluded=tuple(head["excluded"].split(", ")),
        verification=head["verification"],
        complaint=tuple(line for line in body[:end] if "=" in line),
        answers=tuple(body[end + 1 :]),
    )


EXAMPLES = [example(path) for path in sorted(FOLDER.glob("*.txt"))]
