"""Everything that a key can do, once: keys, key strip, help and palette are all made of it."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

from textual.binding import Binding, BindingType

CASE, COMPLAINT, OIL, CASES, ANY = "case", "complaint", "oil", "cases", "any"


@dataclass(frozen=True, slots=True)
class Act:
    """One thing a person can do.

    Attributes:
        id: names it in a keymap, and the method `action_ID` that does it.
        key: as Textual writes it; several are separated by commas.
        word: on the key strip.
        help: what it does, for help and palette.
        screen: where it is possible.
        strip: whether the key strip shows it; the strip shows as many as there is room for.
        cap: how the key reads, where its own name is clumsy.
        priority: whether the key works while a field is being typed in.
    """

    id: str
    key: str
    word: str
    help: str
    screen: str
    strip: bool = True
    cap: str = ""
    priority: bool = False

    @property
    def keycap(self) -> str:
        """The key as it is printed."""
        return self.cap or self.key.partition(",")[0].replace("question_mark", "?")


ACTS: tuple[Act, ...] = (
    Act("answer", "1,2,3,4,5,6,7,8,9", "answer", "Give the answer beside the number", CASE,
        cap="1-9"),
    Act("reading", "r", "reading", "Type a reading with its unit", CASE),
    Act("task", "t", "task", "Fill in the task of the approved data that you follow", CASE),
    Act("next_step", "right", "other step", "Turn to the next of the other steps", CASE,
        cap="→"),
    Act("previous_step", "left", "back", "Turn back towards the step that is proposed", CASE,
        strip=False, cap="←"),
    Act("cannot", "c", "can't", "This step is not possible; ask for another", CASE),
    Act("undo", "u", "undo", "Take back the last thing recorded", CASE),
    Act("why", "w", "why", "Why this step, what each answer would do, and why a cause stands "
        "where it stands", CASE),
    Act("add", "a", "add", "Add a finding that nobody asked for", CASE),
    Act("state", "s", "state", "Say what state the engine is in, what is open and who is near",
        CASE),
    Act("fixed", "f", "fixed", "Record a rectification that was done", CASE),
    Act("oil_path", "o", "oil path", "See the oil path with what is suspected", CASE),
    Act("hand_over", "h", "hand over", "Pass the case on to somebody", CASE),
    Act("taken_over", "k", "taken over", "Record that the hand-over was read", CASE, strip=False),
    Act("close", "x", "close", "End the case", CASE),
    Act("doubt", "d", "doubt", "Trust a finding less", CASE, strip=False),
    Act("note", "n", "note", "Write a remark that is evidence of nothing", CASE, strip=False),
    Act("log", "l", "log", "Read the whole log", CASE),
    Act("save", "v", "save", "Write the whole case to another file", CASE, strip=False),
    Act("cause_up", "up", "cause", "Choose the cause above", CASE, strip=False, cap="↑"),
    Act("cause_down", "down", "cause", "Choose the cause below", CASE, strip=False, cap="↓"),
    Act("page('down')", "pagedown", "more", "See more of a long step", CASE, strip=False,
        cap="PgDn"),
    Act("page('up')", "pageup", "more", "See the beginning of a long step again", CASE,
        strip=False, cap="PgUp"),
    Act("begin", "f2", "begin", "Begin the case with what is confirmed", COMPLAINT, cap="F2",
        priority=True),
    Act("find_finding", "f3", "add finding", "Look up a finding by a word", COMPLAINT, cap="F3",
        priority=True),
    Act("move('left')", "left", "move", "Move to the next part on the left", OIL, strip=False,
        cap="←"),
    Act("move('right')", "right", "move", "Move to the next part on the right", OIL, cap="←↑↓→"),
    Act("move('up')", "up", "move", "Move to the next part above", OIL, strip=False, cap="↑"),
    Act("move('down')", "down", "move", "Move to the next part below", OIL, strip=False, cap="↓"),
    Act("turn", "enter", "open, fold", "Open a folded section, or fold the one you are in", OIL,
        cap="Enter"),
    Act("fold_all", "f", "fold", "Fold or open everything", OIL),
    Act("cause(1)", "n", "next cause", "Show the way of the next cause", OIL),
    Act("cause(-1)", "p", "previous", "Show the way of the previous cause", OIL),
    Act("heat", "t", "heat", "Show or hide where heat enters the oil", OIL),
    Act("to_svg", "g", "to file", "Write the drawing as SVG beside the log", OIL),
    Act("back", "escape,o", "back", "Back to the case", OIL, cap="Esc"),
    Act("open_case", "enter", "open", "Open the case", CASES, cap="Enter"),
    Act("reread", "r", "read again", "Read the folder again", CASES),
    Act("back", "escape", "back", "Back to where you came from", CASES, cap="Esc"),
    Act("cases", "f4", "cases", "Cases in this folder", ANY, cap="F4", priority=True),
    Act("new_case", "f6", "new case", "Begin another case", ANY, strip=False, cap="F6",
        priority=True),
    Act("copy", "f7,y", "copy", "Send the words of this screen to the clipboard", ANY,
        strip=False, cap="F7"),
    Act("copy_file", "f8", "to file", "Write the words of this screen to a file beside the log",
        ANY, strip=False, cap="F8", priority=True),
    Act("next_theme", "f9", "colours", "Change colours: dark, light, terminal", ANY, strip=False,
        cap="F9", priority=True),
    Act("help", "f1,question_mark", "help", "All keys", ANY, cap="F1"),
    Act("leave", "f10,q", "leave", "Leave; the case can be resumed", ANY, cap="F10"),
)  # fmt: skip


def name_of(act: Act) -> str:
    """The name of an act in a keymap: its screen and what it does."""
    plain = act.id.replace("('", "_").replace("')", "").replace("(", "_").replace(")", "")
    return f"{act.screen}.{plain.replace('-1', 'back').replace('_1', '')}"


def acts_of(screen: str) -> Iterator[Act]:
    """The acts of one screen, then those that are possible anywhere."""
    yield from (act for act in ACTS if act.screen == screen)
    if screen != ANY:
        yield from (act for act in ACTS if act.screen == ANY)


def bindings(screen: str) -> list[BindingType]:
    """The key bindings of one screen (without those that are possible anywhere)."""
    made: list[BindingType] = []
    for act in ACTS:
        if act.screen != screen:
            continue
        if act.id == "answer":
            made += [
                Binding(key, f"answer({key})", act.word, id=f"case.answer_{key}", tooltip=act.help)
                for key in act.key.split(",")
            ]
        else:
            made.append(
                Binding(act.key, act.id, act.word, id=name_of(act), tooltip=act.help,
                        priority=act.priority)
            )  # fmt: skip
    return made


def keymap_from(text: str) -> dict[str, str]:
    """A keymap from the words of a file: lines `NAME = KEY`, `#` begins a remark.

    Raises:
        ValueError: a line is not of that form, or names nothing that a key can do.
    """
    known = {name_of(act) for act in ACTS} | {f"case.answer_{n}" for n in range(1, 10)}
    found: dict[str, str] = {}
    for number, line in enumerate(text.splitlines(), start=1):
        body = line.partition("#")[0].strip()
        if not body:
            continue
        name, equals, key = (part.strip() for part in body.partition("="))
        if not (equals and key) or name not in known:
            raise ValueError(f"line {number}: {line.strip()[:60]!r} is not NAME = KEY")
        found[name] = key
    return found


def keycaps(keymap: Mapping[str, str]) -> dict[str, str]:
    """Name of each act to its key as printed, with a keymap laid over."""
    return {name_of(act): keymap.get(name_of(act), act.keycap) for act in ACTS}
