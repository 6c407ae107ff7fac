"""The terminal screen: a front end over the session that draws and asks, and nothing else."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from diag.errors import InputError, UsageError


def run(
    circuit_name: str | None = None,
    overlays: Sequence[Path] = (),
    log_path: Path | None = None,
    findings: Sequence[str] = (),
    engine: str = "",
    aircraft: str = "",
    by: str = "",
    worked_on: Sequence[str] = (),
    resume: Path | None = None,
    theme: str = "",
) -> None:
    """Runs the terminal screen until the person leaves.

    Args:
        circuit_name: name or folder of a circuit; None to choose on the screen.
        overlays: files laid over it.
        log_path: findings log to begin; None for one in the user's data folder.
        findings: findings that are known already; with a circuit the case begins at once.
        engine, aircraft, by: identities for the log.
        worked_on: components touched at the last maintenance.
        resume: a findings log to carry on with.
        theme: `lamp`, `daylight` or `terminal`; empty for what the keys file says, or lamp.

    Raises:
        InputError: something asked for cannot be read, or entries could not be saved.
        UsageError: the keys file names something that no key can do.
    """
    from datetime import datetime

    from platformdirs import user_config_path, user_data_path

    from diag.tui.app import DiagApp
    from diag.tui.request import Request

    keymap = _keymap(user_config_path("diag", appauthor=False) / "keys")
    request = Request(
        circuit=circuit_name or "", overlays=tuple(overlays), log=log_path, resume=resume,
        findings=tuple(findings), engine=engine, aircraft=aircraft, by=by,
        worked_on=tuple(worked_on), folder=resume.absolute().parent if resume else None,
    )  # fmt: skip
    app = DiagApp(
        request,
        lambda: datetime.now().astimezone(),
        user_data_path("diag", appauthor=False) / "logs",
        keymap,
        theme or "lamp",
    )
    app.run()
    if app.farewell:
        raise InputError(app.farewell)
    if app.lost:
        raise InputError(f"entries that could not be written and are lost: {app.lost}")


def _keymap(path: Path) -> dict[str, str]:
    """The person's own keys.

    Raises:
        UsageError: the file names something that no key can do.
    """
    from diag.tui.actions import keymap_from

    try:
        return keymap_from(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        return {}
    except (OSError, ValueError) as error:
        raise UsageError(f"{path}: {error}") from None


__all__ = ["run"]
