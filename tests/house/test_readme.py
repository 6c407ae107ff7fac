"""What the README shows is what the program does."""

from __future__ import annotations

import os
import re
import shlex
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
README = (ROOT / "README.md").read_text()


def test_real_runs_are_real(tmp_path: Path) -> None:
    shown = re.findall(r"```console\n\$ (diag [^\n]+)\n(.*?)```", README, flags=re.DOTALL)
    assert len(shown) >= 2
    for command, printed in shown:
        words, _, given = command.partition(" < ")
        arguments = [sys.executable, "-m", *shlex.split(words)]
        text = (ROOT / given).read_text() if given else None
        environment = {**os.environ, "PYTHONPATH": str(ROOT)}
        done = subprocess.run(
            arguments, cwd=tmp_path, env=environment, input=text, capture_output=True, text=True
        )
        assert done.returncode == 0, done.stderr
        for passage in printed.split("[...]\n"):
            assert passage.rstrip("\n") in done.stdout, passage


def test_two_commands_set_everything_up() -> None:
    lines = [x for x in README.splitlines() if x.startswith("python3 -m venv")]
    assert len(lines) == 2
    assert lines[0].endswith(".venv/bin/diag")
    assert lines[1].endswith(".venv/bin/python -m pytest -q")


def test_the_house_says_no_more_than_it_should() -> None:
    forbidden = re.compile(r"\b(TODO|FIXME|XXX)\b|/work\b|/tmp/")
    for folder in ("diag", "knowledge", "examples"):
        for path in (ROOT / folder).rglob("*"):
            if path.suffix in {".py", ".yaml", ".md", ".txt"}:
                assert not forbidden.search(path.read_text()), path
