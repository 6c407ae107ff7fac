"""What the command line asks of the screen."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path


@dataclass(frozen=True, slots=True)
class Request:
    """How a session on the screen begins.

    Attributes:
        circuit: name or folder of a circuit; empty to choose on the screen.
        overlays: files laid over it.
        log: the findings log to begin; None for one in the user's data folder.
        resume: a findings log to carry on with; nothing else counts then but `by`.
        findings: findings that are known already, `NAME@POINT=VALUE`. With a circuit and
            findings the case begins at once.
        engine, aircraft, by: identities for the log.
        worked_on: components touched at the last maintenance.
        folder: where the cases of this place are; None for the folder of the log.
    """

    circuit: str = ""
    overlays: tuple[Path, ...] = ()
    log: Path | None = None
    resume: Path | None = None
    findings: tuple[str, ...] = ()
    engine: str = ""
    aircraft: str = ""
    by: str = ""
    worked_on: tuple[str, ...] = ()
    folder: Path | None = None

    @property
    def at_once(self) -> bool:
        """Whether the case begins without the complaint screen."""
        return bool(self.circuit and self.findings)
