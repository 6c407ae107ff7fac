"""The command line. stdout is data, stderr is narration; exit codes as in `Exit`."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from datetime import datetime
from pathlib import Path
from typing import Annotated, Any

import typer

from diag.advice.steps import NOTICE
from diag.belief.evidence import parse_finding
from diag.circuit.loading import circuit_names, load_circuit
from diag.circuit.model import Circuit
from diag.errors import DiagError, Exit, InputError, UsageError
from diag.plain import Identity, PlainSession
from diag.record.events import AnyEvent, Opened
from diag.record.journal import Journal, read_journal
from diag.record.narrate import cause_title, narrate, percent, summary
from diag.session import Session, ranking

app = typer.Typer(
    name="diag",
    help="Fault isolation for gas-turbine oil circuits. " + NOTICE,
    add_completion=True,
    no_args_is_help=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["--help", "-h"]},
)
log_app = typer.Typer(help="Findings logs: list and read.", rich_markup_mode=None)
circuit_app = typer.Typer(help="Circuits: list and check.", rich_markup_mode=None)
app.add_typer(log_app, name="log")
app.add_typer(circuit_app, name="circuit")

CircuitName = Annotated[str, typer.Argument(help="Circuit by name, or the folder of one.")]
Observe = Annotated[
    list[str] | None,
    typer.Option("--observe", metavar="F=V", help="A finding, NAME@POINT=VALUE. Repeatable."),
]
Overlays = Annotated[
    list[Path] | None,
    typer.Option("--overlay", metavar="FILE", help="A site overlay. Repeatable."),
]
WorkedOn = Annotated[
    list[str] | None,
    typer.Option("--worked-on", metavar="COMPONENT", help="Touched at the last maintenance."),
]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON.")]


def main() -> None:
    """Runs the command; a user never sees a traceback."""
    sys.exit(run(sys.argv[1:]))


def run(arguments: list[str]) -> int:
    """Runs one command and gives its exit code."""
    command = typer.main.get_command(app)
    try:
        command.main(args=arguments, prog_name="diag", standalone_mode=False)
        sys.stdout.flush()
    except BrokenPipeError:
        return _pipe_closed()
    except DiagError as error:
        return _told(str(error), error.code)
    except (KeyboardInterrupt, typer.Abort):
        return _told("stopped", Exit.DONE)
    except typer.Exit as leave:
        return leave.exit_code
    except Exception as error:
        return _unexpected(error)
    return Exit.DONE


def _told(message: str, code: int) -> int:
    with suppress(OSError):
        print(f"diag: {message}", file=sys.stderr)
    return code


def _pipe_closed() -> int:
    # The reader has gone: nothing more can be said, and that is no fault of the case.
    with suppress(OSError):
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    return Exit.DONE


def _unexpected(error: Exception) -> int:
    show = getattr(error, "format_message", None)
    if show is not None:  # a usage error of the command-line library
        return _told(f"{show()}; see `diag --help`", Exit.USAGE)
    if isinstance(error, OSError):
        return _told(f"{error.filename or ''}: {error.strerror or error}".lstrip(": "), Exit.INPUT)
    if os.environ.get("DIAG_TRACEBACK"):
        raise error
    text = f"internal fault: {type(error).__name__}: {error}; set DIAG_TRACEBACK=1 to see where"
    return _told(text, Exit.INTERNAL)


@app.callback(invoke_without_command=True)
def start(context: typer.Context) -> None:
    """Without a command: asks for the circuit and begins a session."""
    if context.invoked_subcommand is None:
        names = circuit_names()
        for number, name in enumerate(names, start=1):
            print(f"  {number} {name}")
        with _clean_stop(None):
            answer = _ask("circuit> ").strip()
            chosen = (
                names[int(answer) - 1] if answer in map(str, range(1, len(names) + 1)) else answer
            )
            isolate(chosen)


@app.command()
def isolate(
    circuit: CircuitName,
    observe: Observe = None,
    plain: Annotated[bool, typer.Option("--plain", help="Ask in plain lines.")] = False,
    log: Annotated[Path | None, typer.Option(help="Findings log to write.")] = None,
    engine: Annotated[str, typer.Option(help="Engine identity for the log.")] = "",
    aircraft: Annotated[str, typer.Option(help="Aircraft identity for the log.")] = "",
    by: Annotated[str, typer.Option(help="Who works on the case.")] = "",
    worked_on: WorkedOn = None,
    overlay: Overlays = None,
) -> None:
    """Isolate a fault: complaint in, next check out, findings log saved.

    Example: diag isolate relief-valve-turboprop --plain --observe oil_pressure@hot_idle=52psi
    """
    known = load_circuit(circuit, overlay or ())
    for text in observe or ():
        parse_finding(known, text)
    path = log or _default_log(known)
    keeper = _Keeper(path)
    with _clean_stop(path), keeper:
        session = Session(known, keeper.save)
        front = _front(session, keeper, by)
        front.begin(Identity(engine, aircraft), tuple(worked_on or ()), observe or ())
        front.run()
        keeper.farewell(session)


@app.command()
def resume(
    log: Annotated[Path, typer.Argument(help="Findings log of the case.")],
    by: Annotated[str, typer.Option(help="Who works on the case.")] = "",
    plain: Annotated[bool, typer.Option("--plain", help="Ask in plain lines.")] = False,
    overlay: Overlays = None,
) -> None:
    """Carry on with a case exactly where it stopped.

    Example: diag resume case.jsonl
    """
    with _clean_stop(log), Journal.open(log) as journal:
        for notice in journal.notices:
            print(f"diag: {notice}", file=sys.stderr)
        head = journal.events[0]
        assert isinstance(head, Opened)
        known = load_circuit(head.circuit, overlay or ())
        if known.content_hash != head.content_hash:
            print(
                f"diag: the circuit has changed since this log was begun (version {head.version},"
                f" now {known.file.version}): the odds are those of the present circuit",
                file=sys.stderr,
            )
        keeper = _Keeper(log, journal)
        session = Session.replay(known, journal.events, keeper.save)
        if session.state.closed is not None:
            raise UsageError(f"{log}: the case is closed; `diag log show` reads it")
        _front(session, keeper, by).run()
        keeper.farewell(session)


@app.command()
def rank(
    circuit: CircuitName,
    observe: Observe = None,
    worked_on: WorkedOn = None,
    overlay: Overlays = None,
    as_json: AsJson = False,
    count: Annotated[int, typer.Option("--count", min=1, help="Causes to list.")] = 10,
) -> None:
    """Rank the causes for some findings, once.

    Example: diag rank full-flow-turbofan --observe oil_pressure@high_power=130psi --json
    """
    known = load_circuit(circuit, overlay or ())
    findings = [parse_finding(known, text) for text in observe or ()]
    session = Session(known)
    moment = datetime.now().astimezone()
    session.add(
        Opened(
            at=moment,
            circuit=known.id,
            version=known.file.version,
            content_hash=known.content_hash,
            worked_on=tuple(worked_on or ()),
        )
    )
    for finding in findings:
        record = finding.observable.record
        session.find(moment, record.id, finding.observable.point, finding.value)
    data = ranking(session.assessment, count)
    _print_json(data) if as_json else _print_ranking(known, data)


def _print_json(data: Any) -> None:
    print(json.dumps(data, indent=2, ensure_ascii=False))


def _print_ranking(circuit: Circuit, data: dict[str, Any]) -> None:
    print(f"{circuit.title}: {', '.join(data['findings']) or 'no findings'}")
    for cause in data["causes"]:
        print(f"  {percent(cause['probability']):>7}  {cause['title']}")
    print(f"  {percent(data['unlisted']):>7}  {cause_title(circuit, 'unlisted.present')}")
    print(f"  {percent(data['nothing_found']):>7}  {cause_title(circuit, 'nothing_found')}")
    print("Next:")
    for step in data["next"]:
        bits, minutes = step["information_bits"], step["expected_minutes"]
        print(f"  {step['title']} ({step['step']}): {bits:.2f} bits in {minutes:g} min")
    print(f"coverage {data['coverage']:.6f} ({data['coverage_method']})")
    print(data["notice"])


@log_app.command("list")
def log_list(
    folder: Annotated[Path, typer.Argument(help="Folder with findings logs.")] = Path("."),
    as_json: AsJson = False,
) -> None:
    """List the cases in a folder.

    Example: diag log list /cases
    """
    if not folder.is_dir():
        raise InputError(f"{folder}: not a folder")
    rows = [row for path in sorted(folder.glob("*.jsonl")) for row in [_log_row(path)]]
    if as_json:
        _print_json({"logs": rows, "notice": NOTICE})
        return
    for row in rows:
        if "problem" in row:
            print(f"{row['log']}  unreadable: {row['problem']}")
            continue
        top = f"{row['top_cause']} {percent(row['probability'])}" if row["top_cause"] else "-"
        who = " ".join(part for part in (row["engine"], row["aircraft"]) if part) or "-"
        print(f"{row['log']}  {row['opened']}  {row['circuit']}  {who}  {row['state']}  {top}")


def _log_row(path: Path) -> dict[str, Any]:
    try:
        found = summary(read_journal(path).events)
    except DiagError as error:
        return {"log": path.name, "problem": str(error).splitlines()[0]}
    names = ("circuit", "engine", "aircraft", "opened", "state", "top_cause", "probability")
    return {"log": path.name, **{name: getattr(found, name) for name in names}}


@log_app.command("show")
def log_show(
    log: Annotated[Path, typer.Argument(help="Findings log.")], as_json: AsJson = False
) -> None:
    """Read one log to a person.

    Example: diag log show case.jsonl
    """
    replay = read_journal(log)
    for problem in (*replay.notices, *replay.problems):
        print(f"diag: {problem}", file=sys.stderr)
    if as_json:
        events = [event.model_dump(mode="json", exclude_none=True) for event in replay.events]
        _print_json({"log": str(log), "events": events, "notice": NOTICE})
    else:
        for line in narrate(_circuit_of(replay.events), replay.events):
            print(line)
        print(NOTICE)
    if replay.problems:
        raise typer.Exit(Exit.PROBLEMS)


def _circuit_of(events: tuple[AnyEvent, ...]) -> Circuit | None:
    """The circuit of a log, for its titles; a log stays readable without it."""
    head = events[0] if events else None
    try:
        return load_circuit(head.circuit) if isinstance(head, Opened) else None
    except DiagError:
        return None


@circuit_app.command("list")
def circuit_list(as_json: AsJson = False) -> None:
    """List the circuits that ship with diag.

    Example: diag circuit list
    """
    rows = []
    for name in circuit_names():
        found = load_circuit(name)
        rows.append(
            {
                "circuit": found.id,
                "version": found.file.version,
                "title": found.title,
                "components": len(found.components),
                "modes": len(found.modes),
                "findings": len(found.observables),
                "rectifications": len(found.remedies),
            }
        )
    if as_json:
        _print_json({"circuits": rows, "notice": NOTICE})
        return
    for row in rows:
        print(
            f"{row['circuit']}  {row['version']}  {row['title']}: {row['components']} components,"
            f" {row['modes']} modes, {row['findings']} findings,"
            f" {row['rectifications']} rectifications"
        )


@circuit_app.command("review")
def circuit_review(circuit: CircuitName, overlay: Overlays = None) -> None:
    """Check a circuit; every problem with file, line and what would be accepted.

    Example: diag circuit review my_circuit/
    """
    try:
        load_circuit(circuit, overlay or ())
    except InputError as error:
        for problem in error.problems:
            print(problem)
        print(f"diag: {str(error).splitlines()[0]}", file=sys.stderr)
        raise typer.Exit(Exit.PROBLEMS) from None
    print("no problems found")


# -- files and lines --------------------------------------------------------------------


class _Keeper:
    """Keeps a case on disk: the log begins with the first event."""

    def __init__(self, path: Path, journal: Journal | None = None) -> None:
        self.path = path
        self.journal = journal
        self._told = len(journal.notices) if journal else 0

    def __enter__(self) -> _Keeper:
        return self

    def __exit__(self, *_: object) -> None:
        if self.journal is not None:
            self.journal.close()

    def save(self, event: AnyEvent) -> None:
        if self.journal is None:
            assert isinstance(event, Opened)
            self.journal = Journal.create(self.path, event)
        else:
            self.journal.append(event)
        for notice in self.journal.notices[self._told :]:
            print(f"diag: {notice}", file=sys.stderr)
        self._told = len(self.journal.notices)

    def elsewhere(self, path: str) -> object:
        if self.journal is None:
            raise UsageError("the case has not begun")
        return self.journal.save_elsewhere(path)

    def farewell(self, session: Session) -> None:
        state = "closed" if session.state.closed else f"open; `diag resume {self.path}` carries on"
        print(f"diag: case {state}; findings log {self.path}", file=sys.stderr)


def _front(session: Session, keeper: _Keeper, by: str) -> PlainSession:
    return PlainSession(session, _ask, print, _now, by, keeper.elsewhere)


def _now() -> datetime:
    return datetime.now().astimezone()


def _ask(prompt: str) -> str:
    print(prompt, end="", flush=True)
    line = sys.stdin.readline()
    if not line:
        raise EOFError
    # A key that sends an escape sequence must not end up in the record.
    return "".join(c for c in line if c.isprintable())


def _default_log(circuit: Circuit) -> Path:
    from platformdirs import user_data_path

    stamp = _now().strftime("%Y%m%d-%H%M%S")
    return user_data_path("diag", appauthor=False) / "logs" / f"{circuit.id}-{stamp}.jsonl"


@contextmanager
def _clean_stop(log: Path | None) -> Iterator[None]:
    """Ctrl-C and the end of input leave a session cleanly; what was acknowledged is on disk."""
    try:
        yield
    except (KeyboardInterrupt, EOFError):
        where = f"; `diag resume {log}` carries on" if log is not None and log.exists() else ""
        print(f"\ndiag: stopped{where}", file=sys.stderr)
