"""From the crew's words to findings that a person may confirm.

Pure and cautious: it proposes, with a score and the words that made it think so, and takes
nothing. Words are compared letter by letter (normalised edit similarity, Levenshtein 1966, as
rapidfuzz computes it), so that slips of the pen do no harm. What an instrument is called comes
from the circuit (`Indication.synonyms`); the words for states and for phases of a flight are
common English and stand here.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import get_args

from diag.belief.evidence import make_finding
from diag.circuit.model import Circuit, Observable
from diag.circuit.records import Unit
from diag.errors import UsageError

ALIKE = 82.0
"""Similarity, 0 to 100, from which two words count as the same. Judgement."""
WINDOW = 2
"""Words that may stand between the words of a name."""
INHERITED, IMPLIED, SHORT = 0.9, 0.85, 0.92
"""Factors on the score: subject of the clause before, outcome only implied, name without "oil"."""

_STATES: Mapping[str, str] = {
    "lost": "lost zero nil vanished",
    "low": "low lower lowered drop drops dropped dropping fall falls fell fallen falling down "
    "below decrease decreased decreasing decreases sank sinking reduced less losing",
    "high": "high higher rise rises rose rising up above over increase increased increasing "
    "increases excessive raised",
    "normal": "normal ok okay fine good green unchanged full constant steady",
    "jumping": "flicker flickers flickered flickering jump jumps jumped jumping jerky erratic "
    "fluctuate fluctuates fluctuated fluctuating swings swinging surging unsteady bouncing",
    "wandering": "wander wanders wandering hunting drifting",
    "on": "on lit came illuminated flashing shown active steady-on",
    "off": "off out silent extinguished dark",
}
_CLASS = {word: name for name, words in _STATES.items() for word in words.split()}
_OUTCOMES: Mapping[str, tuple[str, ...]] = {
    "lost": ("very_low", "low"),
    "low": ("low",),
    "high": ("high", "raised"),
    "jumping": ("jumping",),
    "wandering": ("wandering",),
    "on": ("on",),
    "off": ("off",),
}
_NEGATIONS = frozenset({"no", "not", "never", "without", "none", "nothing", "didnt", "didn't"})
_STRONG = frozenset({"very", "extremely"})
_PHASES: tuple[tuple[str, str], ...] = (
    ("cold idle", "cold_idle"), ("hot idle", "hot_idle"), ("ground idle", "hot_idle"),
    ("flight idle", "hot_idle"), ("high power", "high_power"), ("full power", "high_power"),
    ("take off", "high_power"), ("takeoff", "high_power"), ("climb", "high_power"),
    ("cruise", "high_power"), ("run up", "high_power"), ("after start", "cold_idle"),
    ("idle", "hot_idle"), ("taxi", "hot_idle"), ("descent", "hot_idle"),
    ("motoring", "motoring"), ("motored", "motoring"), ("shut down", "static"),
    ("shutdown", "static"), ("before flight", "static"), ("at rest", "static"),
    ("static", "static"),
)  # fmt: skip
"""Phases of a flight and the operating point that comes nearest; longer ones first."""
_USUAL = ("high_power", "hot_idle")
"""Points assumed where none is said, the first that the indication has."""
_CLAUSE = re.compile(
    r"[;:,\n]|\.(?=\s|$)|\s(?:and|but|then|while|whilst|yet|although)\s(?!\s*[\d-])"
)
_WORD = re.compile(r"[A-Za-z][A-Za-z'-]*|[-+]?\d+(?:[.,]\d+)?")
_READING = re.compile(r"([-+]?\d+(?:\.\d+)?)\s*([A-Za-z/%]+)(?:\s+([A-Za-z]+))?")


@dataclass(frozen=True, slots=True)
class Proposal:
    """A finding that the words may mean.

    Attributes:
        observable: the indication, with its operating point where it has one.
        value: an outcome word, or a number with its unit.
        score: 0 to 100, how sure the reading of the words is; no probability.
        words: the crew's words that made it.
        point_said: whether the words name the operating point; otherwise it is assumed.
        points: the operating points at which the same thing may be meant.
    """

    observable: str
    value: str
    score: int
    words: str
    point_said: bool
    points: tuple[str, ...] = ()

    @property
    def finding(self) -> str:
        """As it is written: `NAME@POINT=VALUE`."""
        return f"{self.observable}={self.value}"

    def at(self, point: str) -> Proposal:
        """The same at another operating point, as a person says."""
        name = self.observable.partition("@")[0]
        return replace(self, observable=f"{name}@{point}", point_said=True)


@dataclass(frozen=True, slots=True)
class _Clause:
    text: str
    words: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class _Subject:
    """What a clause speaks of: an indication, the words that named it, and how well."""

    name: str
    score: float
    words: tuple[int, ...]


def propose(circuit: Circuit, text: str) -> tuple[Proposal, ...]:
    """Findings that the crew's words may mean, in the order of the words, each once."""
    families = _families(circuit)
    found: dict[str, Proposal] = {}
    last: str | None = None
    for clause in _clauses(text):
        subjects = _subjects(families, clause)
        if not subjects and last is not None:
            subjects = [_Subject(last, 100 * INHERITED, ())]
        for subject in subjects:
            last = subject.name
            made = _proposal(families[subject.name], subject, clause)
            known = found.get(made.observable) if made else None
            if made and (known is None or known.score < made.score):
                found[made.observable] = made
    return tuple(found.values())


def _families(circuit: Circuit) -> dict[str, list[Observable]]:
    """The indications by name, each with the points at which it can be read."""
    found: dict[str, list[Observable]] = {}
    for observable in circuit.observables.values():
        if observable.record.kind == "indication":
            found.setdefault(observable.record.id, []).append(observable)
    return found


def _clauses(text: str) -> Iterator[_Clause]:
    for part in _CLAUSE.split(text):
        words = tuple(word.lower() for word in _WORD.findall(part))
        if words:
            yield _Clause(part.strip(), words)


# -- what a clause speaks of ------------------------------------------------------------------


def _subjects(families: Mapping[str, list[Observable]], clause: _Clause) -> list[_Subject]:
    """The indications that a clause names; of names that overlap, the fuller one."""
    named = []
    for name, family in families.items():
        best = max(
            (_match(words, factor, clause.words) for words, factor in _names(family[0])),
            key=lambda match: (match[0] * len(match[1]), match[0]),
        )
        if best[0] > 0:
            named.append(_Subject(name, best[0], best[1]))
    named.sort(key=lambda s: (-len(s.words), -s.score))
    kept: list[_Subject] = []
    for subject in named:
        if not any(set(subject.words) & set(other.words) for other in kept):
            kept.append(subject)
    return sorted(kept, key=lambda s: s.words)


def _names(observable: Observable) -> Iterator[tuple[tuple[str, ...], float]]:
    """Every name of an indication in words, and a factor on the score of those cut short."""
    record = observable.record
    synonyms: Sequence[str] = getattr(record, "synonyms", ())
    for text in (record.id.replace("_", " "), record.title, *synonyms):
        words = tuple(word.lower() for word in _WORD.findall(text))
        yield words, 1.0
        if words[:1] == ("oil",) and len(words) == 2 and len(words[1]) > 3:
            yield words[1:], SHORT


def _match(
    name: Sequence[str], factor: float, words: Sequence[str]
) -> tuple[float, tuple[int, ...]]:
    """How well a name is found in words that stand close together, and which they are."""
    best: tuple[float, tuple[int, ...]] = (0.0, ())
    for start in range(len(words)):
        window = range(start, min(start + len(name) + WINDOW, len(words)))
        taken: list[int] = []
        total = 0.0
        for wanted in name:
            scored = [(_alike(wanted, words[i]), -i) for i in window if i not in taken]
            score, place = max(scored, default=(0.0, 0))
            if score < ALIKE:
                break
            taken.append(-place)
            total += score
        else:
            found = (factor * total / len(name), tuple(sorted(taken)))
            best = max(best, found)
    return best


def _alike(wanted: str, word: str) -> float:
    """Similarity of two words, 0 to 100; words for the same state are the same."""
    from rapidfuzz.fuzz import ratio

    if wanted in _CLASS and _CLASS[wanted] == _CLASS.get(word):
        return 100.0
    if len(wanted) < 4 or len(word) < 4:
        return 100.0 if wanted == word else 0.0
    if wanted.startswith(word) or word.startswith(wanted):
        return 95.0
    return float(ratio(wanted, word))


# -- what it says of it -----------------------------------------------------------------------


def _proposal(family: Sequence[Observable], subject: _Subject, clause: _Clause) -> Proposal | None:
    points = [o.point for o in family if o.point]
    point, said = _point(clause, points)
    observable = next((o for o in family if o.point == point), family[0])
    value, factor = _value(observable, subject, clause)
    if not value:
        return None
    return Proposal(
        observable.id,
        value,
        round(min(100.0, subject.score * factor)),
        " ".join(clause.text.split()),
        said or not points,
        tuple(points),
    )


def _point(clause: _Clause, points: Sequence[str]) -> tuple[str | None, bool]:
    """The operating point of a clause, and whether it is said."""
    text = f" {' '.join(clause.words).replace('-', ' ')} "
    for phrase, point in _PHASES:
        if f" {phrase} " in text and point in points:
            return point, True
    usual = next((point for point in _USUAL if point in points), None)
    return usual or (points[0] if points else None), False


def _value(observable: Observable, subject: _Subject, clause: _Clause) -> tuple[str, float]:
    """The outcome or reading that a clause gives, and a factor on the score; "" for none."""
    reading = _reading(observable, clause)
    if reading:
        return reading, 1.0
    outcomes = observable.outcomes
    negated = any(word in _NEGATIONS for word in clause.words)
    for outcome in outcomes:
        own = [i for i, word in enumerate(clause.words) if word == outcome]
        if own and outcome not in _CLASS:
            return (observable.normal if negated else outcome), 1.0
    states = _states(clause, subject)
    for state in states:
        if state == "normal":
            return observable.normal, 1.0
        for outcome in _OUTCOMES.get(state, ()):
            if outcome in outcomes:
                return (observable.normal if negated else outcome), 1.0
    if len(outcomes) == 2 and (subject.words or states):
        other = next(o for o in outcomes if o != observable.normal)
        return (observable.normal if negated or "off" in states else other), IMPLIED
    return "", 0.0


def _states(clause: _Clause, subject: _Subject) -> list[str]:
    """Words for states in a clause: those outside the name first, in their order."""
    found = []
    for inside in (False, True):
        for i, word in enumerate(clause.words):
            if (i in subject.words) != inside or word not in _CLASS:
                continue
            state = _CLASS[word]
            if state == "low" and i and clause.words[i - 1] in _STRONG:
                state = "lost"
            found.append(state)
    return found


def _reading(observable: Observable, clause: _Clause) -> str:
    """A number with a unit that the instrument can show, as it is written in a finding."""
    for number, unit, after in _READING.findall(clause.text):
        known = _UNITS.get(unit.lower()) or (unit if unit in get_args(Unit) else None)
        if known is None or _CLASS.get(after.lower()) in ("low", "high"):
            continue  # "15 degrees up" is a change and no reading
        text = f"{number}{known}"
        try:
            make_finding(observable, text)
        except UsageError:
            continue
        return text
    return ""


_UNITS = {
    "degrees": "degC", "deg": "degC", "c": "degC", "f": "degF", "litres": "litre", "l": "litre",
    "quarts": "quart", "qt": "quart", "qts": "quart", "pints": "pint", "psig": "psi",
}  # fmt: skip
"""Units as crews write them."""
