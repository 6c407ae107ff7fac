"""The commands on findings logs, as they are typed."""

from __future__ import annotations

import csv
import importlib.util
import io
import json
import shutil
from collections.abc import Iterable, Sequence
from datetime import timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import typer
from click.testing import Result
from typer.testing import CliRunner

from diag import cli_record
from diag.advice.steps import NOTICE
from diag.circuit.loading import load_circuit
from diag.circuit.model import Circuit
from diag.errors import DiagError, InputError, UsageError
from diag.record import keep
from diag.record.events import Acknowledged, AnyEvent, HandedOver
from diag.record.journal import read_journal
from diag.session import Session
from tests.record import fleet
from tests.record.cases import NAME, START, head, loaded, numbered, worked_case, written


def command() -> typer.Typer:
    app, log_app = typer.Typer(), typer.Typer()
    app.add_typer(log_app, name="log")
    cli_record.register(log_app, app)
    return app


APP = command()


@pytest.fixture(autouse=True)
def loaded_once(monkeypatch: pytest.MonkeyPatch) -> None:
    """The shipped circuit as it stands is read once for all commands."""

    def load(name: str, overlays: Sequence[Path] = (), root: Any = None) -> Circuit:
        plain = name == NAME and not overlays and root is None
        return loaded(name) if plain else load_circuit(name, overlays, root)

    for module in (keep, cli_record):
        monkeypatch.setattr(module, "load_circuit", load)


def run(*words: object) -> Result:
    """Runs a command; what diag raises on purpose comes through."""
    result = CliRunner().invoke(APP, [str(word) for word in words])
    if isinstance(result.exception, DiagError):
        raise result.exception
    assert result.exception is None or isinstance(result.exception, SystemExit), result.exception
    return result


def worked(path: Path, events: Iterable[AnyEvent] | None = None) -> Path:
    return written(path, worked_case() if events is None else events)


@pytest.fixture(scope="module")
def weighed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A short open case that the session itself has written."""
    path = tmp_path_factory.mktemp("weighed") / "case.jsonl"
    session = Session(loaded(NAME))
    events = [
        session.add(head(after=None)),
        session.find(START, "oil_pressure", "hot_idle", "52psi", complaint=True),
    ]
    return written(path, events)


# Reports and tables


def test_a_report_goes_where_it_is_sent(tmp_path: Path) -> None:
    log, page = worked(tmp_path / "case.jsonl"), tmp_path / "case.html"
    done = run("log", "report", log, "--to", page)
    assert done.exit_code == 0
    assert done.stdout == ""
    assert page.read_text().startswith("<!DOCTYPE html>")
    assert NOTICE in page.read_text()
    assert run("log", "report", log).stdout.startswith("# Fault isolation report")
    assert run("log", "report", log, "--format", "html").stdout == page.read_text()
    with pytest.raises(UsageError, match="--overwrite"):
        run("log", "report", log, "--to", page)
    run("log", "report", log, "--to", page, "--format", "md", "--overwrite")
    assert page.read_text().startswith("# Fault isolation report")


def test_a_report_never_replaces_a_log(tmp_path: Path) -> None:
    log = worked(tmp_path / "case.jsonl")
    before = log.read_bytes()
    for target in (log, tmp_path / "other.jsonl"):
        with pytest.raises(UsageError, match="pass for a findings log"):
            run("log", "report", log, "--to", target, "--overwrite")
    assert log.read_bytes() == before
    with pytest.raises(InputError, match="cannot be written"):
        run("log", "report", log, "--to", tmp_path / "none" / "case.md")
    with pytest.raises(UsageError, match="use md or html"):
        run("log", "report", log, "--format", "pdf")


def test_a_report_of_a_damaged_log_says_so(tmp_path: Path) -> None:
    log = worked(tmp_path / "case.jsonl")
    log.write_bytes(log.read_bytes().replace(b"PP-0412", b"PP-0413") + b'{"half')
    told = run("log", "report", log).stdout
    assert "This log has a problem" in told
    assert "the line was altered" in told
    assert "was not written whole" in told
    log.write_bytes(b"junk\n")
    with pytest.raises(InputError, match="not a case that can be read"):
        run("log", "report", log)


def test_the_table_of_several_cases(tmp_path: Path) -> None:
    for name in "ab":
        worked(tmp_path / f"{name}.jsonl")
    out = tmp_path / "steps.csv"
    run("log", "csv", tmp_path, "--to", out)
    rows = list(csv.DictReader(io.StringIO(out.read_bytes().decode(), newline="")))
    assert len(rows) == 2 * len(worked_case())
    assert out.read_bytes().count(b"\r\n") == len(rows) + 1
    empty = tmp_path / "empty"
    empty.mkdir()
    with pytest.raises(UsageError, match="no findings logs"):
        run("log", "csv", empty)


# Verifying


def test_verify_answers_by_its_exit_code(weighed: Path, tmp_path: Path) -> None:
    good = run("log", "verify", weighed)
    assert (good.exit_code, good.stdout) == (0, "the log comes out\n")
    assert "What a hash chain does not prove" in good.stderr
    bad = tmp_path / "bad.jsonl"
    bad.write_bytes(weighed.read_bytes().replace(b"52psi", b"51psi"))
    told = run("log", "verify", bad)
    assert told.exit_code == 1
    assert "the line was altered" in told.stdout
    data = json.loads(run("log", "verify", bad, "--json").stdout)
    assert data["problems"]
    assert data["notice"] == NOTICE


def test_verify_uses_the_copy_that_was_kept(weighed: Path, tmp_path: Path) -> None:
    log = Path(shutil.copy(weighed, tmp_path / "case.jsonl"))
    place = Path(run("log", "keep", log).stdout.strip())
    assert place.parent == tmp_path / "circuits"
    # The copy is read where the present circuit is another one.
    told = run("log", "verify", log, "--circuit", place, "--forward")
    assert (told.exit_code, told.stdout) == (0, "the log comes out\n")
    limits = tmp_path / "site.yaml"
    limits.write_text(
        f"overlay: site\ncircuit: {NAME}\nbasis: judgement\n"
        "rates: {pressure_pump.worn: {per_million_hours: 900}}\n"
    )
    forward = run("log", "verify", log, "--forward", "--overlay", limits)
    assert forward.exit_code == 0
    assert "carried forward, moved: pressure_pump.worn: probability" in forward.stdout
    assert "using the copy" in forward.stderr
    with pytest.raises(InputError, match="nothing to keep"):
        run("log", "keep", worked(tmp_path / "old.jsonl", [head(content_hash="0" * 64)]))


# Handing over


def test_a_hand_over_is_printed_recorded_and_acknowledged(weighed: Path, tmp_path: Path) -> None:
    log = Path(shutil.copy(weighed, tmp_path / "case.jsonl"))
    shown = run("log", "handover", log).stdout
    assert "1. " in shown.split("## To do next")[1]
    assert len(read_journal(log).events) == 2
    run("log", "handover", log, "--to", "B. Fitter", "--by", "A. Fitter", "--record")
    given = read_journal(log).events[-1]
    assert isinstance(given, HandedOver)
    assert (given.to, given.by) == ("B. Fitter", "A. Fitter")
    assert given.summary.startswith("# Hand-over: E-17")
    assert given.before == given.after
    taken = run("log", "acknowledge", log, "--by", "C. Fitter")
    assert "handed over to B. Fitter; C. Fitter has taken it" in taken.stderr
    assert isinstance(read_journal(log).events[-1], Acknowledged)
    with pytest.raises(UsageError, match="no hand-over waits"):
        run("log", "acknowledge", log, "--by", "C. Fitter")
    with pytest.raises(UsageError, match="needs the name"):
        run("log", "handover", log, "--record")
    assert run("log", "verify", log).exit_code == 0


def test_a_hand_over_without_its_circuit_names_no_steps(tmp_path: Path) -> None:
    log = worked(tmp_path / "case.jsonl", numbered([head(circuit="unknown_engine")]))
    assert "ask the bench" in run("log", "handover", log).stdout


# Repeats


def test_repeats_are_shown_with_their_fix(tmp_path: Path) -> None:
    worked(tmp_path / "before.jsonl")
    log = worked(tmp_path / "now.jsonl", worked_case(closed=False, at=START + timedelta(days=3)))
    told = run("log", "repeats", log).stdout
    assert "before.jsonl: closed 3.0 days before: oil_pressure" in told
    assert "cause then: Pressure pump" in told
    assert ", verified" in told
    assert "SAME SWAP AGAIN" in told
    assert "the fix not holding: odds of Pressure pump" in told
    (row,) = json.loads(run("log", "repeats", log, "--json").stdout)["repeats"]
    assert row["same_swap"] == ["pressure_pump_replace"]
    assert 0.0 < row["prior_factors"]["pressure_pump.worn"] < 0.5
    assert "no closed case" in run("log", "repeats", log, "--days", "1").stdout
    other = tmp_path / "other"
    other.mkdir()
    assert "no closed case" in run("log", "repeats", log, "--folder", other).stdout


# Learning


@pytest.fixture(scope="module")
def logs(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("logs")
    fleet.Fleet(loaded(NAME), np.random.default_rng(6)).logs(folder, 60_000.0)
    return folder


def test_learning_writes_an_overlay_and_tells_what_moved(logs: Path, tmp_path: Path) -> None:
    count = len(list(logs.glob("*.jsonl")))
    overlay = tmp_path / "learned.yaml"
    done = run(
        "learn", logs, "--to", overlay, "--hours", 60000, "--event", "servicing=240", "--jobs", 1
    )
    assert done.exit_code == 0
    assert f"{count} cases count, 0 do not" in done.stdout
    assert "per_million_hours" in done.stdout
    assert load_circuit(NAME, [overlay]).overlays == ("learned",)
    with pytest.raises(UsageError, match="exists already"):
        run("learn", logs, "--to", overlay)
    again = tmp_path / "again.yaml"
    with pytest.raises(UsageError, match="no log counts"):
        run("learn", logs, "--to", again, "--overlay", overlay, "--jobs", 1)
    assert not again.exists()


def test_learning_as_json(logs: Path, tmp_path: Path) -> None:
    worked(tmp_path / "open.jsonl", worked_case(closed=False))
    words: list[Any] = ["learn", logs, tmp_path, "--to", tmp_path / "x.yaml", "--jobs", 1]
    data = json.loads(run(*words, "--json", "--circuit", NAME, "--name", "site_b").stdout)
    assert data["hours_given"] is False
    assert [left["reason"] for left in data["left_out"]] == ["not closed"]
    assert {"kind", "name", "item", "before", "after", "moved"} <= set(data["numbers"][0])
    assert "overlay: site_b" in (tmp_path / "x.yaml").read_text()


@pytest.mark.parametrize(
    ("words", "reason"),
    [
        (["--hours", "-1"], "positive"),
        (["--event", "servicing"], "NAME=COUNT"),
        (["--event", "prayers=3"], "unknown event"),
        (["--name", "No Word"], "lower-case word"),
    ],
)
def test_learning_refuses(logs: Path, tmp_path: Path, words: list[str], reason: str) -> None:
    with pytest.raises(UsageError, match=reason):
        run("learn", logs, "--to", tmp_path / "x.yaml", "--jobs", "1", *words)
    assert not (tmp_path / "x.yaml").exists()


def test_verify_of_what_is_no_log(tmp_path: Path) -> None:
    log = tmp_path / "case.jsonl"
    log.write_bytes(b"junk\nmore\n")
    told = run("log", "verify", log, "--forward")
    assert told.exit_code == 1
    assert f"{log}:1:1: not JSON" in told.stdout


if importlib.util.find_spec("distributed"):

    def test_learning_on_a_cluster(
        logs: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        from distributed import LocalCluster

        here, there = tmp_path / "here.yaml", tmp_path / "there.yaml"
        run("learn", logs, "--to", here, "--jobs", 1)
        with LocalCluster(n_workers=1, processes=False, dashboard_address=None) as cluster:
            address = cluster.scheduler_address
            run("learn", logs, "--to", there, "--cluster", address)
        assert there.read_text() == here.read_text()
        monkeypatch.setattr(cli_record, "CLUSTER_SECONDS", 0.2)
        with pytest.raises(InputError, match="cannot be reached"):
            run("learn", logs, "--to", tmp_path / "x.yaml", "--cluster", "tcp://127.0.0.1:9")


def test_every_command_shows_an_example() -> None:
    for words in (
        ["log", "report"], ["log", "verify"], ["log", "keep"], ["log", "handover"],
        ["log", "acknowledge"], ["log", "csv"], ["log", "repeats"], ["learn"],
    ):  # fmt: skip
        told = run(*words, "--help").stdout
        assert f"diag {' '.join(words)} " in told
        assert "Example:" in told
