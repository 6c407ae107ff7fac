"""The command line. stdout is data, stderr is narration; exit codes as in `Exit`."""

from __future__ import annotations

import json
import os
import re
import shlex
import signal
import sys
from collections.abc import Callable, Iterable, Sequence
from contextlib import suppress
from datetime import datetime
from functools import cache
from pathlib import Path
from typing import Annotated, Any

import typer

from diag import cli_physics, cli_record
from diag.advice.steps import NOTICE
from diag.belief.evidence import parse_finding
from diag.circuit.loading import circuit_folder, circuit_names, load_circuit
from diag.circuit.model import Circuit
from diag.errors import DiagError, Exit, InputError, UnknownName, UsageError
from diag.plain import Identity, PlainSession, plain_id
from diag.record.events import AnyEvent, Closed, Opened
from diag.record.journal import Journal, JournalError, read_journal
from diag.record.narrate import cause_title, narrate, percent, summary
from diag.session import Session, ranking

START = f"""Fault isolation for gas-turbine oil circuits.

{NOTICE}

Without a command: opens the terminal screen; where there is no terminal, asks in plain lines.

\b
Example:
  diag isolate relief-valve-turboprop --plain

Exit codes: 0 done, 1 problems found, 2 wrong usage, 3 unusable input, 4 internal fault.
"""
app = typer.Typer(
    name="diag",
    help=START,
    add_completion=True,
    no_args_is_help=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["--help", "-h"]},
)
log_app = typer.Typer(
    help="Findings logs: list and read.\n\n\b\nExample:\n  diag log show case.jsonl",
    rich_markup_mode=None,
)
circuit_app = typer.Typer(
    help="Circuits: list and check.\n\n\b\nExample:\n  diag circuit list",
    rich_markup_mode=None,
)
app.add_typer(log_app, name="log")
app.add_typer(circuit_app, name="circuit")
cli_record.register(log_app, app)
cli_physics.register(circuit_app)

MAX_NAME = 200
"""Characters in a name given on the command line."""
MAX_TOLD = 20
"""Problems listed under one error; `circuit review` and `log show` list them all."""


def plain_text(text: str) -> str:
    """An identity fit for a record.

    Raises:
        UsageError: it holds control characters or is too long.
    """
    if not (text.isprintable() and len(text) <= MAX_NAME):
        raise UsageError(f"{text[:40]!r} is no name: at most {MAX_NAME} printable characters")
    return text


def named(help: str) -> Any:
    """An option that takes a name for the record."""
    return typer.Option(metavar="NAME", help=help, callback=plain_text)


CircuitName = Annotated[
    str,
    typer.Argument(metavar="CIRCUIT", help="Circuit by name (`diag circuit list`), or its folder."),
]
Observe = Annotated[
    list[str] | None,
    typer.Option(
        "--observe",
        metavar="F=V",
        help="A finding, NAME@POINT=VALUE, such as oil_pressure@hot_idle=52psi. Repeatable.",
    ),
]
Overlays = Annotated[
    list[Path] | None,
    typer.Option("--overlay", metavar="FILE", help="A site overlay (YAML). Repeatable."),
]
WorkedOn = Annotated[
    list[str] | None,
    typer.Option(
        "--worked-on",
        metavar="COMPONENT",
        help="Touched at the last maintenance, such as relief_valve. Repeatable.",
    ),
]
By = Annotated[str, named("Who works on the case, for the log.")]
Plain = Annotated[bool, typer.Option("--plain", help="Ask in plain lines.")]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON.")]
Log = Annotated[
    Path, typer.Argument(metavar="LOG", help="Findings log of a case, such as case.jsonl.")
]


def main() -> None:
    """Runs the command; a user never sees a traceback."""
    _ready_streams()
    try:
        sys.exit(run(sys.argv[1:]))
    except KeyboardInterrupt:
        # What a shell expects of a command that was cut short before it had done anything.
        sys.exit(128 + signal.SIGINT)


def _ready_streams() -> None:
    """Odd bytes do no harm, and a stream that was closed from the start takes nothing."""
    for name, mode, errors in (
        ("stdin", "r", "replace"),
        ("stdout", "w", "backslashreplace"),
        ("stderr", "w", "backslashreplace"),
    ):
        if getattr(sys, name) is None:
            setattr(sys, name, open(os.devnull, mode))  # noqa: SIM115
        getattr(sys, name).reconfigure(errors=errors)


def run(arguments: Sequence[str]) -> int:
    """Runs one command and gives its exit code.

    Raises:
        KeyboardInterrupt: Ctrl-C outside a session.
    """
    try:
        _command(arguments)
        code: int = Exit.DONE
    except Exception as error:
        code = _answered(error)
    try:
        sys.stdout.flush()
    except BrokenPipeError:
        # The reader has gone: nothing more can be said, and that is no fault of the case.
        _drop_output()
    except OSError as error:
        _drop_output()
        return _told(f"the output cannot be written: {error.strerror}", Exit.INPUT)
    return code


@cache
def commands() -> Any:
    """The commands as the command-line library has them, with their options and help."""
    return typer.main.get_command(app)


def _command(arguments: Sequence[str]) -> None:
    command = commands()
    if "_DIAG_COMPLETE" in os.environ:
        command.main(args=list(arguments), prog_name="diag")  # the shell asks for completions
    # Not `main`: it has exit codes of its own for a closed pipe and for Ctrl-C.
    with command.make_context("diag", list(arguments)) as context:
        command.invoke(context)


def _answered(error: Exception) -> int:
    """Tells an error in one line, and gives its exit code."""
    if isinstance(error, typer.Exit):
        return error.exit_code
    if isinstance(error, (typer.Abort, EOFError, BrokenPipeError)):
        return Exit.DONE
    if isinstance(error, DiagError):
        return _told(_shortened(error), error.code)
    show = getattr(error, "format_message", None)
    if show is not None:  # a usage error of the command-line library
        return _told(f"{show()}; see `diag --help`", Exit.USAGE)
    if isinstance(error, OSError):
        what = error.filename or "the output cannot be written"
        return _told(f"{what}: {error.strerror or error}", Exit.INPUT)
    if os.environ.get("DIAG_TRACEBACK"):
        raise error
    text = f"internal fault: {type(error).__name__}: {error}; set DIAG_TRACEBACK=1 to see where"
    return _told(text, Exit.INTERNAL)


def _shortened(error: DiagError) -> str:
    lines = str(error).splitlines()
    more = len(lines) - 1 - MAX_TOLD
    return "\n".join([*lines[: MAX_TOLD + 1], *([f"  and {more} more"] if more > 0 else [])])


def _told(message: str, code: int) -> int:
    with suppress(OSError):
        print(f"diag: {message}", file=sys.stderr)
    return code


def _drop_output() -> None:
    with suppress(OSError):
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


@app.callback(invoke_without_command=True)
def start(context: typer.Context) -> None:  # its help is START
    if context.invoked_subcommand is not None:
        return
    if _on_a_terminal():
        from diag.tui import run as run_screen

        run_screen()
        return
    names = circuit_names()
    for number, name in enumerate(names, start=1):
        print(f"  {number} {name}")
    try:
        answer = _ask("circuit> ").strip()
    except (EOFError, KeyboardInterrupt):
        print()
        return
    if not answer:
        raise UsageError("no circuit named; `diag circuit list` lists them")
    numbered = dict(zip(map(str, range(1, len(names) + 1)), names, strict=True))
    isolate(numbered.get(answer, answer))


@app.command()
def isolate(
    circuit: CircuitName,
    observe: Observe = None,
    plain: Plain = False,
    log: Annotated[
        Path | None,
        typer.Option(
            metavar="FILE",
            help="Findings log to begin, such as case.jsonl; else one in the user's data folder.",
        ),
    ] = None,
    engine: Annotated[str, named("Engine identity for the log.")] = "",
    aircraft: Annotated[str, named("Aircraft identity for the log.")] = "",
    by: By = "",
    worked_on: WorkedOn = None,
    overlay: Overlays = None,
) -> None:
    """Isolate a fault: complaint in, next check out, findings log saved.

    \b
    Example:
      diag isolate relief-valve-turboprop --plain --log case.jsonl
    """
    known = load_circuit(circuit, overlay or ())
    touched = _components(known, worked_on or ())
    for text in observe or ():
        parse_finding(known, text)
    path = log or _default_log(known)
    _require_place(path)
    if not plain and _on_a_terminal():
        from diag.tui import run as run_screen

        given = tuple(observe or ())
        run_screen(circuit, overlay or (), path, given, engine, aircraft, by, touched)
        return
    keeper = _Keeper(path)
    session = Session(known, keeper.save)
    front = PlainSession(session, _ask, print, _now, by, keeper)

    def course() -> None:
        front.begin(Identity(engine, aircraft), touched, observe or ())
        front.run()

    _hold(course, session, keeper)


@app.command()
def resume(
    log: Log,
    by: By = "",
    plain: Plain = False,
    circuit: Annotated[
        str, typer.Option(metavar="FOLDER", help="Its circuit, where that is not one that ships.")
    ] = "",
    overlay: Overlays = None,
) -> None:
    """Carry on with a case exactly where it stopped.

    \b
    Example:
      diag resume case.jsonl
    """
    with Journal.open(log) as journal:
        for notice in journal.notices:
            _narrate(notice)
        if any(isinstance(event, Closed) for event in journal.events):
            raise UsageError(f"{log}: the case is closed; `diag log show` reads it")
        known = _circuit_to_resume(log, journal.events, circuit, overlay or ())
        keeper = _Keeper(log, journal)
        session = _replayed(log, known, journal.events, keeper)
        front = PlainSession(session, _ask, print, _now, by, keeper)

        def course() -> None:
            front.carry_on()
            front.run()

        _hold(course, session, keeper)


def _circuit_to_resume(
    log: Path, events: Sequence[AnyEvent], circuit: str, overlay: Sequence[Path]
) -> Circuit:
    """The circuit of a log, with a word where it is no longer the one it was begun on."""
    head = events[0]
    assert isinstance(head, Opened)
    try:
        known = load_circuit(circuit or head.circuit, overlay)
    except UnknownName as error:
        if circuit:
            raise
        raise InputError(f"{log}: {error}; name its folder with --circuit") from None
    if known.id != head.circuit:
        raise UsageError(f"{log}: the case is on {head.circuit}, not on {known.id}")
    if known.content_hash != head.content_hash:
        laid = f", with overlays {', '.join(head.overlays)}" if head.overlays else ""
        _narrate(
            f"the circuit is not as it was when this log was begun (version {head.version}{laid}):"
            f" the odds are those of the present circuit, version {known.file.version}"
        )
    return known


def _replayed(log: Path, circuit: Circuit, events: Sequence[AnyEvent], keeper: _Keeper) -> Session:
    try:
        return Session.replay(circuit, events, keeper.save)
    except UsageError as error:
        raise InputError(f"{log}: it does not fit the present circuit: {error}") from None


@app.command()
def rank(
    circuit: CircuitName,
    observe: Observe = None,
    worked_on: WorkedOn = None,
    overlay: Overlays = None,
    as_json: AsJson = False,
    count: Annotated[int, typer.Option("--count", min=1, metavar="N", help="Causes to list.")] = 10,
) -> None:
    """Rank the causes for some findings, once.

    \b
    Example:
      diag rank full-flow-turbofan --observe oil_pressure@high_power=130psi --json
    """
    known = load_circuit(circuit, overlay or ())
    touched = _components(known, worked_on or ())
    findings = [parse_finding(known, text) for text in observe or ()]
    session = Session(known)
    moment = _now()
    session.add(
        Opened(
            at=moment,
            circuit=known.id,
            version=known.file.version,
            content_hash=known.content_hash,
            worked_on=touched,
        )
    )
    for finding in findings:
        record = finding.observable.record
        session.find(moment, record.id, finding.observable.point, finding.value)
    data = ranking(session.assessment, count)
    _print_json(data) if as_json else _print_ranking(known, data)


def _components(circuit: Circuit, names: Iterable[str]) -> tuple[str, ...]:
    """Components as people may type them.

    Raises:
        UnknownName: with the nearest names.
    """
    ids = tuple(map(plain_id, names))
    for name in ids:
        if name not in circuit.components:
            raise UnknownName("component", name, circuit.components)
    return ids


def _print_json(data: Any) -> None:
    print(json.dumps(data, indent=2, ensure_ascii=False, allow_nan=False))


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
    folder: Annotated[
        Path, typer.Argument(metavar="FOLDER", help="Folder with findings logs (*.jsonl).")
    ] = Path("."),
    as_json: AsJson = False,
) -> None:
    """List the cases in a folder.

    \b
    Example:
      diag log list cases/
    """
    if not folder.is_dir():
        raise InputError(f"{folder}: not a folder")
    rows = [_log_row(path) for path in sorted(folder.glob("*.jsonl"))]
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
        replay = read_journal(path)
    except DiagError as error:
        return {"log": path.name, "problem": str(error)}
    if replay.problems:
        return {"log": path.name, "problem": str(replay.problems[0])}
    found = summary(replay.events)
    names = ("circuit", "engine", "aircraft", "opened", "state", "top_cause", "probability")
    return {"log": path.name, **{name: getattr(found, name) for name in names}}


@log_app.command("show")
def log_show(log: Log, as_json: AsJson = False) -> None:
    """Read one log to a person.

    \b
    Example:
      diag log show case.jsonl
    """
    replay = read_journal(log)
    if not replay.events:
        raise InputError(f"{log} is no findings log: {replay.problems[0]}")
    remarks = [str(remark) for remark in (*replay.notices, *replay.problems)]
    for remark in remarks:
        _narrate(remark)
    if as_json:
        events = [event.model_dump(mode="json", exclude_none=True) for event in replay.events]
        _print_json({"log": str(log), "events": events, "remarks": remarks, "notice": NOTICE})
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

    \b
    Example:
      diag circuit list
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
def circuit_review(circuit: CircuitName, overlay: Overlays = None, as_json: AsJson = False) -> None:
    """Check a circuit; every problem with file, line and what would be accepted.

    \b
    Example:
      diag circuit review my_circuit/
    """
    from diag.physics.loading import physics_problems

    try:
        known = load_circuit(circuit, overlay or ())
        problems = [str(p) for p in physics_problems(known, circuit_folder(circuit))]
    except InputError as error:
        problems = [str(problem) for problem in error.problems]
        _narrate(str(error).splitlines()[0])
    if as_json:
        _print_json({"circuit": circuit, "problems": problems, "notice": NOTICE})
    else:
        print("\n".join(problems) or "no problems found")
    if problems:
        raise typer.Exit(Exit.PROBLEMS)


# -- sessions and their logs ------------------------------------------------------------


class _Keeper:
    """Keeps a case on disk: the log begins with the first event.

    What the disk does not take waits in memory and goes out before the next event.
    """

    def __init__(self, path: Path, journal: Journal | None = None) -> None:
        self.path, self.journal = path, journal
        self._told = len(journal.notices) if journal else 0
        self._waiting: list[AnyEvent] = []
        """Events of a case whose log could not be begun."""

    @property
    def unsaved(self) -> int:
        """Events that are in memory only."""
        return len(self.journal.unsaved) if self.journal else len(self._waiting)

    def save(self, event: AnyEvent) -> None:
        """Keeps one event.

        Raises:
            JournalError: it is in memory only.
            InputError: it is not taken at all.
        """
        late = self.unsaved
        if self.journal is not None:
            self.journal.append(event)
        else:
            self._waiting.append(event)
            self._begin(self.path)
        if late:
            _narrate(f"the whole case is on disk now, in {self.path}")
        assert self.journal is not None
        for notice in self.journal.notices[self._told :]:
            _narrate(notice)
        self._told = len(self.journal.notices)

    def _begin(self, path: Path) -> None:
        """Begins the log with all that waits."""
        head, *rest = self._waiting
        assert isinstance(head, Opened)
        try:
            self.journal = Journal.create(path, head)
        except InputError:
            self._waiting.pop()
            raise
        self.path, self._waiting = path, []
        for event in rest:
            with suppress(JournalError):
                self.journal.append(event)
        self.journal.retry()

    def elsewhere(self, path: str) -> Path:
        """Writes the whole case to a new file; where the log takes no more, it moves there.

        Raises:
            JournalError: the file exists, or the place does not take it.
        """
        place = Path(path).expanduser()
        if self.journal is None:
            self._begin(place)
            return place
        written = self.journal.save_elsewhere(place)
        if self.journal.unsaved:
            old, self.journal = self.journal, Journal.open(written)
            old.close()
            self.path, self._told = place, len(self.journal.notices)
        return place

    def last_try(self) -> None:
        """Writes what is unsaved, where that is possible by now."""
        with suppress(DiagError):
            if self.journal is not None:
                self.journal.retry()
            elif self._waiting:
                self._begin(self.path)


def _hold(course: Callable[[], None], session: Session, keeper: _Keeper) -> None:
    """Runs a session. `stop`, Ctrl-C, the end of input and a closed pipe end it cleanly.

    Raises:
        Exit: the case, or a part of it, is on no disk.
    """
    try:
        course()
    except (KeyboardInterrupt, EOFError, BrokenPipeError):
        print(file=sys.stderr)
    finally:
        keeper.last_try()
        _farewell(session, keeper)
        if keeper.journal is not None:
            keeper.journal.close()
    if keeper.unsaved:
        raise typer.Exit(Exit.INPUT)


def _farewell(session: Session, keeper: _Keeper) -> None:
    state, log = session.state, shlex.quote(str(keeper.path))
    if not state.events:
        _narrate("stopped; nothing was recorded")
    elif keeper.journal is None:
        _narrate("the case could not be written down; it is lost")
    else:
        if keeper.unsaved:
            _narrate(f"entries that could not be written and are lost: {keeper.unsaved}")
        how = f"closed; findings log {log}" if state.closed else f"open; `diag resume {log}`"
        _narrate(f"case {how}" if state.closed else f"case {how} carries on")


def _require_place(path: Path) -> None:
    """Refuses a log that cannot be begun, before anybody types a complaint.

    Raises:
        InputError: the file exists, or its folder takes no new one.
    """
    try:
        with suppress(FileNotFoundError, NotADirectoryError):
            os.lstat(path)
            raise InputError(f"{path} exists already; `diag resume` carries on with a log")
    except ValueError:
        raise InputError(f"{str(path)!r} is no file name") from None
    folder = next(above for above in path.absolute().parents if above.exists())
    if not folder.is_dir():
        raise InputError(f"the log {path} cannot be begun: {folder} is not a folder")
    if not os.access(folder, os.W_OK | os.X_OK):
        raise InputError(f"the log {path} cannot be begun: no file can be made in {folder}")


def _narrate(text: str) -> None:
    print(f"diag: {text}", file=sys.stderr, flush=True)


def _now() -> datetime:
    return datetime.now().astimezone()


_KEYS = re.compile(r"\x1b(?:\[[0-?]*[ -/]*[@-~]|O.|.)?")
"""What keys such as the arrows send."""


def _ask(prompt: str) -> str:
    print(prompt, end="", flush=True)
    try:
        line = sys.stdin.readline()
    except OSError:  # the terminal has gone
        line = ""
    if not line:
        raise EOFError
    # A key that sends an escape sequence must not end up in the record.
    text = _KEYS.sub("", line).rstrip()
    text = "".join(" " if c.isspace() else c for c in text if c.isspace() or c.isprintable())
    if not sys.stdin.isatty():
        print(text)  # nobody typed it: without it, what is printed would not be understood
    return text


def _on_a_terminal() -> bool:
    """Whether a person sits at both ends, with a terminal that can be drawn on."""
    both = sys.stdin.isatty() and sys.stdout.isatty()
    return both and os.environ.get("TERM", "dumb") != "dumb"


def _default_log(circuit: Circuit) -> Path:
    from platformdirs import user_data_path

    stamp = _now().strftime("%Y%m%d-%H%M%S")
    return user_data_path("diag", appauthor=False) / "logs" / f"{circuit.id}-{stamp}.jsonl"
