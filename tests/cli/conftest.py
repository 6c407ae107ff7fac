"""The command within the test's own process, in a folder and a home of its own."""

from __future__ import annotations

import io
import sys
from pathlib import Path

import pytest

from diag import cli
from tests.cli.running import Diag, Told, loaded


@pytest.fixture
def diag(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> Diag:
    """Runs one command; `typed` is what its standard input holds."""
    for name in ("HOME", "XDG_DATA_HOME", "LOCALAPPDATA"):
        monkeypatch.setenv(name, str(tmp_path / "home"))
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(cli, "load_circuit", loaded)

    def run(*arguments: str, typed: str = "") -> Told:
        monkeypatch.setattr(sys, "stdin", io.StringIO(typed))
        capsys.readouterr()
        for stream in (sys.stdout, sys.stderr):  # as in `cli.main`
            stream.reconfigure(errors="backslashreplace")
        code = cli.run(arguments)
        told = capsys.readouterr()
        return Told(code, told.out, told.err)

    return run
