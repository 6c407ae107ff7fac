"""The commands that make something of findings logs: `diag log …` and `diag learn`.

`register` adds them to the command line; this module knows nothing of the others.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import asdict, dataclass, field
from datetime import datetime
from importlib import import_module
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from diag.advice.steps import NOTICE, NextStep
from diag.circuit.loading import load_circuit
from diag.circuit.model import Circuit
from diag.errors import DiagError, Exit, InputError, UsageError
from diag.record.casefile import case_file
from diag.record.events import AnyEvent, Opened
from diag.record.journal import Journal, Replay, read_journal
from diag.record.narrate import cause_title
from diag.session import Session

if TYPE_CHECKING:
    from diag.audit import Change, Verdict
    from diag.record.harvest import Harvest
    from diag.record.learning import Learned
    from diag.record.repeats import Repeat

MOVES = 15
"""Numbers shown after learning; the overlay holds them all."""
STEPS = 6
"""Steps that a hand-over names."""
CLUSTER_SECONDS = 10
"""How long a cluster may take to answer."""

Log = Annotated[Path, typer.Argument(metavar="LOG", help="Findings log, such as case.jsonl.")]
Logs = Annotated[
    list[Path], typer.Argument(metavar="LOG...", help="Findings logs, or folders of them.")
]
Folder = Annotated[
    Path | None,
    typer.Option("--circuit", metavar="FOLDER", help="A stored copy of the circuit to use."),
]
Overlays = Annotated[
    list[Path] | None,
    typer.Option("--overlay", metavar="FILE", help="A site overlay (YAML). Repeatable."),
]
To = Annotated[
    Path | None, typer.Option("--to", metavar="FILE", help="File to write; else the output.")
]
Overwrite = Annotated[bool, typer.Option("--overwrite", help="Replace a file that is there.")]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON.")]


def register(log_app: typer.Typer, app: typer.Typer) -> None:
    """Adds the commands on single logs to `log_app`, and `learn` to `app`."""
    log_app.command("report")(log_report)
    log_app.command("verify")(log_verify)
    log_app.command("keep")(log_keep)
    log_app.command("handover")(log_handover)
    log_app.command("acknowledge")(log_acknowledge)
    log_app.command("csv")(log_csv)
    log_app.command("repeats")(log_repeats)
    app.command("learn")(learn)


# -- one log --------------------------------------------------------------------------------


def log_report(
    log: Log,
    to: To = None,
    form: Annotated[
        str, typer.Option("--format", metavar="md|html", help="Form; else by the file's name.")
    ] = "",
    circuit: Folder = None,
    overlay: Overlays = None,
    overwrite: Overwrite = False,
) -> None:
    """Write the report of a case, as Markdown or as one printable HTML page.

    \b
    Example:
      diag log report case.jsonl --to case.html
    """
    from diag.record.report import report

    replay = _read(log)
    known = _circuit_of(replay.events, log, circuit, overlay)
    warnings = [f"This log has a problem: {p}" for p in (*replay.problems[:5], *_torn(replay))]
    wanted = form or ("html" if to and to.suffix.lower() in (".html", ".htm") else "md")
    _write(report(wanted, known, replay.events, NOTICE, warnings=warnings), to, overwrite)


def log_verify(
    log: Log,
    circuit: Folder = None,
    overlay: Overlays = None,
    forward: Annotated[
        bool,
        typer.Option("--forward", help="Also list what changes on the present circuit."),
    ] = False,
    as_json: AsJson = False,
) -> None:
    """Replay a log on its circuit and report every difference; exit code 1 if there is one.

    Without --circuit, the present circuit is used, or else the copy that `diag log keep` laid
    beside the log.

    \b
    Example:
      diag log verify case.jsonl
    """
    from diag.audit import carry_forward, verify

    events = read_journal(log).events
    known: list[Circuit] = []

    def load(name: str) -> Circuit:
        known.append(_load(events, log, circuit, overlay))
        return known[-1]

    verdict = verify(log, load)
    changes: list[Change] = []
    if forward and events and isinstance(events[0], Opened):
        present = load_circuit(events[0].circuit, overlay or ())
        changes = carry_forward(events, known[-1] if known else None, present)
    _tell_verdict(log, verdict, changes, as_json)
    if verdict.problems:
        raise typer.Exit(Exit.PROBLEMS)


def _tell_verdict(log: Path, verdict: Verdict, changes: Sequence[Change], as_json: bool) -> None:
    if as_json:
        _print_json(
            {
                "log": str(log),
                "problems": [str(problem) for problem in verdict.problems],
                "notes": list(verdict.notes),
                "changes": [asdict(change) for change in changes],
                "notice": NOTICE,
            }
        )
        return
    for problem in verdict.problems:
        print(problem)
    for change in changes:
        print(f"carried forward, {change.kind}: {change.name}: {change.text}")
    for note in verdict.notes:
        _narrate(note)
    print("the log does not come out" if verdict.problems else "the log comes out")


def log_keep(logs: Logs, overlay: Overlays = None) -> None:
    """Store a copy of the circuit beside the logs made on it, to verify them later.

    \b
    Example:
      diag log keep case.jsonl
    """
    from diag.record.keep import keep_circuit

    for log in _spread(logs):
        head = _head(_read(log).events, log)
        known = load_circuit(head.circuit, overlay or ())
        if known.content_hash != head.content_hash:
            raise InputError(
                f"{log}: made on {head.circuit} {head.version} with other content or overlays than "
                f"the circuit at hand; there is nothing to keep"
            )
        print(keep_circuit(known, log, overlay or ()))


def log_handover(
    log: Log,
    to: Annotated[str, typer.Option("--to", metavar="NAME", help="Who takes over.")] = "",
    by: Annotated[str, typer.Option("--by", metavar="NAME", help="Who hands over.")] = "",
    record: Annotated[
        bool, typer.Option("--record", help="Write the hand-over into the log.")
    ] = False,
    circuit: Folder = None,
    overlay: Overlays = None,
) -> None:
    """Print the one page that the next shift needs, and record the hand-over if asked.

    \b
    Example:
      diag log handover case.jsonl --to "night shift" --record
    """
    from diag.record.handover import handed_over, handover_page

    if not record:
        events = _read(log).events
        case = _weighed(events, _circuit_of(events, log, circuit, overlay))
        page = handover_page(case.circuit, events, NOTICE, case.steps, case.chances, to, _now())
        print(page)
        return
    with Journal.open(log) as journal:
        known = _load(journal.events, log, circuit, overlay)
        session = _session(known, journal, log)
        case = _weighed(journal.events, known)
        page = handover_page(known, journal.events, NOTICE, case.steps, case.chances, to, _now())
        session.add(handed_over(page, to, _now(), by))
    print(page)
    _narrate(f"recorded; the next person runs `diag log acknowledge {log} --by NAME`")


def log_acknowledge(
    log: Log,
    by: Annotated[str, typer.Option("--by", metavar="NAME", help="Who takes over.")],
    circuit: Folder = None,
    overlay: Overlays = None,
) -> None:
    """Record that the hand-over was read and the case taken over.

    \b
    Example:
      diag log acknowledge case.jsonl --by "B. Fitter"
    """
    from diag.record.handover import acknowledged

    with Journal.open(log) as journal:
        event = acknowledged(journal.events, by, _now())
        known = _load(journal.events, log, circuit, overlay)
        pending = case_file(journal.events).pending
        _session(known, journal, log).add(event)
    if pending is not None and pending.to != event.by:
        _narrate(f"it was handed over to {pending.to}; {event.by} has taken it")
    print(f"{log}: taken over by {event.by}")


def log_csv(logs: Logs, to: To = None, overwrite: Overwrite = False) -> None:
    """Write the steps of cases as one flat table, comma separated.

    \b
    Example:
      diag log csv case.jsonl --to steps.csv
    """
    from diag.record.table import steps_csv

    cases = [(str(log), _read(log).events) for log in _spread(logs)]
    _write(steps_csv(cases), to, overwrite)


def log_repeats(
    log: Log,
    folder: Annotated[
        Path | None, typer.Option(metavar="FOLDER", help="Where to look; else beside the log.")
    ] = None,
    days: Annotated[float, typer.Option(metavar="N", help="How many days back.")] = 30.0,
    flights: Annotated[int | None, typer.Option(metavar="N", help="Or how many flights.")] = None,
    as_json: AsJson = False,
) -> None:
    """Show closed cases of the same engine with the same complaint, and what they say.

    \b
    Example:
      diag log repeats case.jsonl --days 60
    """
    from diag.record.repeats import find_repeats, same_swaps

    events = _read(log).events
    head, case = _head(events, log), case_file(events)
    known = _circuit_of(events, log, None, None)
    names = {found.name for found in case.complaint}
    found = find_repeats(folder or log.absolute().parent, head, names, known, days, flights)
    swaps = list(same_swaps(found.repeats, (event.rectification for event in case.rectified)))
    if as_json:
        rows = [_repeat_data(known, repeat, swaps) for repeat in found.repeats]
        _print_json({"repeats": rows, "unreadable": list(found.unreadable), "notice": NOTICE})
        return
    for text in found.unreadable:
        _narrate(f"not looked into: {text}")
    for repeat in found.repeats:
        for line in _repeat_lines(known, repeat):
            print(line)
        for name in (name for other, name in swaps if other is repeat):
            print(f"  SAME SWAP AGAIN: {_remedy_title(known, name)}")
    if not found.repeats:
        print(f"no closed case of {head.engine} with this complaint in the last {days:g} days")


def _repeat_data(
    circuit: Circuit | None, repeat: Repeat, swaps: Sequence[tuple[Repeat, str]]
) -> dict[str, Any]:
    from diag.record.repeats import prior_factors

    return {
        **asdict(repeat),
        "closed": repeat.closed.isoformat(),
        "verified": repeat.verified,
        "same_swap": [name for other, name in swaps if other is repeat],
        "prior_factors": prior_factors(circuit, repeat) if circuit else {},
    }


def _repeat_lines(circuit: Circuit | None, repeat: Repeat) -> Iterable[str]:
    from diag.record.repeats import prior_factors

    flown = f", {repeat.flights} flights" if repeat.flights is not None else ""
    yield f"{repeat.log}: closed {repeat.days:.1f} days{flown} before: {', '.join(repeat.shared)}"
    causes = "; ".join(cause_title(circuit, ref) for ref in repeat.causes) or "no cause confirmed"
    yield f"  cause then: {causes}"
    fixes = "; ".join(_remedy_title(circuit, name) for name in repeat.fixes) or "nothing done"
    yield f"  fix: {fixes}, {'verified' if repeat.verified else 'NOT verified'}"
    if circuit is not None:
        factors = prior_factors(circuit, repeat)
        for ref in repeat.causes:
            if ref in factors:
                title = cause_title(circuit, ref)
                yield f"  the fix not holding: odds of {title} times {factors[ref]:.3g}"


def _remedy_title(circuit: Circuit | None, name: str) -> str:
    known = circuit.remedies.get(name) if circuit else None
    return known.record.title if known else name.replace("_", " ")


# -- many logs --------------------------------------------------------------------------------


def learn(
    logs: Logs,
    to: Annotated[Path, typer.Option("--to", metavar="FILE", help="Overlay to write, YAML.")],
    circuit: Annotated[
        str, typer.Option(metavar="CIRCUIT", help="Circuit; else that of the first log.")
    ] = "",
    hours: Annotated[
        float | None,
        typer.Option(metavar="N", help="Flying hours of the fleet; else only proportions."),
    ] = None,
    event: Annotated[
        list[str] | None,
        typer.Option("--event", metavar="NAME=N", help="Events in them, such as servicing=900."),
    ] = None,
    name: Annotated[str, typer.Option(metavar="WORD", help="Name of the overlay.")] = "learned",
    overlay: Overlays = None,
    jobs: Annotated[int, typer.Option(metavar="N", help="Processes; -1 for every core.")] = -1,
    cluster: Annotated[
        str, typer.Option(metavar="ADDRESS", help="Scheduler of a Dask cluster to use instead.")
    ] = "",
    as_json: AsJson = False,
) -> None:
    """Learn rates and strengths from closed, confirmed and verified cases, as an overlay.

    Overlays given are part of what is learned on; cases that they were learned from are not
    counted again. The circuit itself is never touched.

    \b
    Example:
      diag learn cases/ --to learned.yaml --hours 41000
    """
    from diag.record.learning import Fleet
    from diag.record.learning import learn as learned_from
    from diag.record.lesson import counted_in, overlay_text

    if to.exists():
        raise UsageError(f"{to} exists already; name a new overlay")
    found = _spread(logs)
    known = load_circuit(circuit or _head(_read(found[0]).events, found[0]).circuit, overlay or ())
    fleet = Fleet(hours, dict(_event_count(text) for text in event or ()))
    harvest = _gathered(found, known, counted_in(overlay or ()), jobs, cluster)
    learned = learned_from(known, harvest, fleet)
    _write(overlay_text(learned, known, name), to, False)
    _tell_learned(learned, as_json)


def _event_count(text: str) -> tuple[str, float]:
    name, _, count = text.partition("=")
    try:
        return name.strip().replace("-", "_"), float(count)
    except ValueError:
        raise UsageError(f"{text!r} is not an event; write NAME=COUNT") from None


def _gathered(
    logs: Sequence[Path], circuit: Circuit, counted: Iterable[str], jobs: int, cluster: str
) -> Harvest:
    from diag.record.harvest import gather

    with (
        _on_cluster(cluster),
        typer.progressbar(length=len(logs), label="logs read", file=sys.stderr) as bar,
    ):
        return gather(logs, circuit, counted, jobs, bar.update)


@contextmanager
def _on_cluster(address: str) -> Iterator[None]:
    """Sends joblib's work to a Dask cluster; without an address it stays here."""
    if not address:
        yield
        return
    try:
        distributed = import_module("distributed")
    except ImportError:
        raise UsageError("a cluster needs the extra `cluster` to be installed") from None
    from joblib import parallel_config

    try:
        client = distributed.Client(address, timeout=CLUSTER_SECONDS)
    except (OSError, ValueError) as error:
        raise InputError(f"the cluster {address} cannot be reached: {error}") from None
    with client, parallel_config(backend="dask"):
        yield


def _tell_learned(learned: Learned, as_json: bool) -> None:
    reasons: dict[str, int] = {}
    for left in learned.left_out:
        reasons[left.reason] = reasons.get(left.reason, 0) + 1
    if as_json:
        rows = [{**asdict(number), "moved": number.moved} for number in learned.numbers]
        _print_json(
            {
                "circuit": learned.circuit,
                "cases": learned.cases,
                "left_out": [left._asdict() for left in learned.left_out],
                "hours": learned.hours,
                "hours_given": learned.hours_given,
                "numbers": rows,
                "notice": NOTICE,
            }
        )
        return
    print(f"{learned.cases} cases count, {len(learned.left_out)} do not")
    for reason, count in sorted(reasons.items()):
        print(f"  left out: {count} {reason}")
    if not learned.hours_given:
        print("  without --hours only the proportions between causes are learned")
    print(f"{len(learned.numbers)} numbers; those that moved furthest:")
    for number in learned.numbers[:MOVES]:
        print(f"  {number.name}: {number.note}")


# -- shared -----------------------------------------------------------------------------------


def _read(log: Path) -> Replay:
    """A log as it stands, with what is wrong with it told beside.

    Raises:
        InputError: nothing of a case can be read.
    """
    replay = read_journal(log)
    if not replay.events or not isinstance(replay.events[0], Opened):
        raise InputError(f"{log}: not a case that can be read", replay.problems)
    for problem in (*replay.notices, *replay.problems[:5]):
        _narrate(str(problem))
    return replay


def _torn(replay: Replay) -> list[str]:
    return ["its last line was not written whole"] if replay.torn else []


def _head(events: Sequence[AnyEvent], log: Path) -> Opened:
    head = events[0]
    if not isinstance(head, Opened):
        raise InputError(f"{log}: the case is not opened first")
    return head


def _load(
    events: Sequence[AnyEvent], log: Path, folder: Path | None, overlay: Sequence[Path] | None
) -> Circuit:
    """The circuit of a log: a stored copy where one is named, else the present one or the copy
    beside the log."""
    from diag.record.keep import find_circuit, load_kept

    head = _head(events, log)
    if folder is not None:
        return load_kept(folder, head.circuit)
    found, where = find_circuit(log, head.circuit, head.content_hash, overlay or ())
    if where != "the present circuit":
        _narrate(f"using {where}")
    return found


def _circuit_of(
    events: Sequence[AnyEvent], log: Path, folder: Path | None, overlay: Sequence[Path] | None
) -> Circuit | None:
    """The same for titles only: a log stays readable without its circuit."""
    try:
        return _load(events, log, folder, overlay)
    except DiagError:
        if folder is not None:
            raise
        return None


def _session(circuit: Circuit, journal: Journal, log: Path) -> Session:
    def save(event: AnyEvent) -> None:
        journal.append(event)

    try:
        return Session.replay(circuit, journal.events, save)
    except UsageError as error:
        raise InputError(f"{log}: it does not fit the circuit: {error}") from None


@dataclass(frozen=True, slots=True)
class _Weighed:
    """A case as its circuit sees it; empty where there is none that fits."""

    circuit: Circuit | None
    steps: tuple[str, ...] = ()
    chances: Mapping[int, Mapping[str, float]] = field(default_factory=dict)


def _weighed(events: Sequence[AnyEvent], circuit: Circuit | None) -> _Weighed:
    from diag.audit import chances_after

    if circuit is None:
        return _Weighed(None)
    try:
        steps = tuple(_next_steps(Session.replay(circuit, events)))
        return _Weighed(circuit, steps, chances_after(circuit, events))
    except DiagError as error:
        _narrate(f"the case cannot be weighed on this circuit: {error}")
        return _Weighed(circuit)


def _next_steps(session: Session) -> list[str]:
    if session.state.closed is not None:
        return []
    assessment = session.assessment
    held = [f"HELD {_step_line(step)}" for step in assessment.held[:2]]
    return [*(_step_line(step) for step in assessment.steps[: STEPS - len(held)]), *held]


def _step_line(step: NextStep) -> str:
    needs = f"; needs: {', '.join(step.needs)}" if step.needs else ""
    note = f"; {step.note}" if step.note else ""
    return f"{step.title}, {step.expected_minutes:g} min{needs}{note}"


def _spread(paths: Sequence[Path]) -> list[Path]:
    """Logs as named, and those of the folders named."""
    found: list[Path] = []
    for path in paths:
        found += sorted(path.glob("*.jsonl")) if path.is_dir() else [path]
    if not found:
        raise UsageError("no findings logs there")
    return found


def _write(text: str, to: Path | None, overwrite: bool) -> None:
    """Writes to a new file, or to the output."""
    if to is None:
        sys.stdout.write(text)
        return
    if to.suffix == ".jsonl":
        raise UsageError(f"{to} would pass for a findings log; choose another name")
    try:
        with to.open("w" if overwrite else "x", encoding="utf-8", newline="") as stream:
            stream.write(text)
    except FileExistsError:
        raise UsageError(f"{to} exists already; --overwrite replaces it") from None
    except OSError as error:
        raise InputError(f"{to} cannot be written: {error.strerror}") from None
    _narrate(f"written: {to}")


def _now() -> datetime:
    return datetime.now().astimezone()


def _narrate(text: str) -> None:
    print(f"diag: {text}", file=sys.stderr)


def _print_json(data: Any) -> None:
    print(json.dumps(data, indent=2, ensure_ascii=False))
