"""The knowledge travels with the package: in a wheel, from an sdist, and in a checkout."""

from __future__ import annotations

import os
import subprocess
import sys
import tarfile
import zipfile
from pathlib import Path

import pytest

from diag.circuit.loading import circuit_names, knowledge_root

ROOT = Path(__file__).resolve().parents[2]


def run(*command: str, cwd: Path, path: str = "") -> str:
    environment = {**os.environ, "PYTHONPATH": path, "PIP_DISABLE_PIP_VERSION_CHECK": "1"}
    done = subprocess.run(
        [sys.executable, *command], cwd=cwd, env=environment, capture_output=True, text=True
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


def build(kind: str, source: Path, out: Path) -> Path:
    run("-m", "build", "--no-isolation", f"--{kind}", "--outdir", str(out), ".", cwd=source)
    (made,) = out.iterdir()
    return made


def files_of_knowledge() -> set[str]:
    return {p.relative_to(ROOT).as_posix() for p in (ROOT / "knowledge").rglob("*.yaml")}


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return build("wheel", ROOT, tmp_path_factory.mktemp("wheel"))


def circuits_seen(path: str, cwd: Path) -> str:
    return run("-m", "diag", "circuit", "list", cwd=cwd, path=path)


def test_wheel_holds_the_knowledge_and_the_type_marker(wheel: Path) -> None:
    names = set(zipfile.ZipFile(wheel).namelist())
    assert {f"diag/{name}" for name in files_of_knowledge()} <= names
    assert "diag/py.typed" in names
    assert not {n for n in names if n.startswith(("tests/", "examples/", "knowledge/"))}


def test_wheel_installed_elsewhere_runs(wheel: Path, tmp_path: Path) -> None:
    target = tmp_path / "site"
    pip = ("-m", "pip", "install", "-q", "--no-deps", "--no-index", "--target", str(target))
    run(*pip, str(wheel), cwd=tmp_path)
    assert circuits_seen(str(target), tmp_path).count("components") == len(circuit_names())


def test_wheel_runs_while_still_zipped(wheel: Path, tmp_path: Path) -> None:
    assert "full_flow_turbofan" in circuits_seen(str(wheel), tmp_path)


def test_sdist_makes_the_same_wheel(wheel: Path, tmp_path: Path) -> None:
    archive = build("sdist", ROOT, tmp_path / "sdist")
    with tarfile.open(archive) as packed:
        packed.extractall(tmp_path / "unpacked", filter="data")
    (source,) = (tmp_path / "unpacked").iterdir()
    again = build("wheel", source, tmp_path / "again")
    names = [set(zipfile.ZipFile(w).namelist()) for w in (wheel, again)]
    assert names[0] == names[1]


def test_checkout_uses_its_own_knowledge() -> None:
    assert Path(str(knowledge_root())) == ROOT / "knowledge"


def test_knowledge_holds_no_code() -> None:
    # A module there would break editable installs.
    assert list((ROOT / "knowledge").rglob("*.py")) == []


def test_top_level_is_as_agreed() -> None:
    listed = subprocess.run(
        ["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False
    ).stdout.splitlines()
    tops = {name.split("/")[0] for name in listed} or {p.name for p in ROOT.iterdir()}
    assert {name for name in tops if not name.startswith(".")} == {
        "README.md", "DEVELOPERS.md", "pyproject.toml",
        "diag", "knowledge", "tests", "examples",
    }  # fmt: skip
