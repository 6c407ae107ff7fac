"""Folding: sections of a circuit that may stand as one part when there is little room."""

from __future__ import annotations

from collections import Counter
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, replace

from diag.circuit.graph import OIL
from diag.circuit.records import Medium
from diag.oilpath.flow import Flow, Part, Pipe

_STRONGEST: tuple[Medium, ...] = (
    "supply", "scavenge", "bypass", "spill", "vent", "sense", "signal", "heat", "fuel", "drive",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Section:
    """Parts that belong together; the first is the one that gives it its place and role."""

    title: str
    members: tuple[str, ...]

    @property
    def id(self) -> str:
        """The id of the part that stands for it when it is folded."""
        return f"{self.members[0]}+"


def sections(flow: Flow) -> tuple[Section, ...]:
    """The sections of a circuit; parts that belong to none of two or more are left out.

    Suction, pumps, filters, galleries and the feed after them along the trunk; each branch
    from its own feed to where it joins the others; the way home; air; each chain of
    instruments.
    """
    groups: dict[str, list[str]] = {}
    home: dict[str, str] = {flow.tank: "tank"}
    groups["tank"] = [flow.tank]
    for title, names in _named([*_along_trunk(flow), *_branches(flow), *_way_home(flow)]):
        groups[title] = list(names)
        home.update(dict.fromkeys(names, title))
    _adopt_shunts(flow, groups, home)
    if flow.vents:
        groups["vent"] = [n for n in flow.vents if n not in home]
        home.update(dict.fromkeys(groups["vent"], "vent"))
    _adopt_rest(flow, groups, home)
    return tuple(Section(t, tuple(names)) for t, names in groups.items() if len(names) > 1)


def _named(found: Sequence[tuple[str, list[str]]]) -> list[tuple[str, list[str]]]:
    """Titles made unlike one another."""
    seen: Counter[str] = Counter()
    named = []
    for title, names in found:
        seen[title] += 1
        named.append((title if seen[title] == 1 else f"{title} {seen[title]}", names))
    return named


def _along_trunk(flow: Flow) -> list[tuple[str, list[str]]]:
    """Suction, then each pump, filter and the first gallery with what follows it, then the feed."""
    found: list[tuple[str, list[str]]] = []
    reached = ""
    for name in flow.trunk:
        role = flow.parts[name].role
        if reached in ("gallery", "feed"):
            begins, reached = reached == "gallery", "feed"
        elif role in ("pump", "gallery") or (reached and role == "filter"):
            begins, reached = True, role
        else:
            begins = not found
        if begins:
            title = "feed" if reached == "feed" else words(name) if reached else "suction"
            found.append((title, []))
        found[-1][1].append(name)
    rejoining = [n for n in flow.feed if n not in flow.trunk and _rejoins(flow, n)]
    if rejoining:
        found[-1][1].extend(rejoining)
    return found


def _rejoins(flow: Flow, name: str) -> bool:
    return any(p.source == name and p.target in flow.trunk for p in flow.pipes)


def _branches(flow: Flow) -> list[tuple[str, list[str]]]:
    """What joins the common way home, each with the users and the feed that is its alone."""
    tops = [n for n in flow.back if n not in flow.home and flow.onward.get(n) in (*flow.home, None)]
    order = {name: i for i, name in enumerate(flow.parts)}
    tops.sort(key=lambda t: min(order[n] for n in flow.back if _runs_into(flow, n, t)))
    found = []
    for top in tops:
        names = [n for n in flow.back if _runs_into(flow, n, top)]
        users = [n for n in flow.users if n in names]
        feed = [n for n in flow.feed if n not in flow.trunk and _feeds_only(flow, n, names)]
        ordered = [
            *users,
            *sorted((n for n in names if n not in users), key=flow.back.__getitem__),
            *feed,
        ]
        found.append((f"{_common_word(names)} branch", ordered))
    return found


def _runs_into(flow: Flow, name: str, top: str) -> bool:
    here: str | None = name
    while here is not None:
        if here == top:
            return True
        here = flow.onward.get(here)
    return False


def _feeds_only(flow: Flow, name: str, names: Collection[str]) -> bool:
    targets = {p.target for p in flow.pipes if p.source == name and p.medium == "supply"}
    return bool(targets) and targets <= set(names)


def _common_word(names: Sequence[str]) -> str:
    """The word most of the ids begin with."""
    first = Counter(name.partition("_")[0] for name in names)
    word, count = first.most_common(1)[0]
    return word if count > 1 else words(names[0])


def _way_home(flow: Flow) -> list[tuple[str, list[str]]]:
    names = sorted(flow.home, key=flow.back.__getitem__)
    rest = [n for n in names if flow.parts[n].role != "detector"]
    cools = any(flow.parts[n].role == "cooler" for n in rest)
    single = [(words(n), [n]) for n in names if n not in rest]
    return [*single, *([("coolers" if cools else "return", rest)] if rest else [])]


def _adopt_shunts(flow: Flow, groups: Mapping[str, list[str]], home: dict[str, str]) -> None:
    """A shunt belongs to what it leads round."""
    for name, (source, target) in flow.shunts.items():
        order = {n: i for i, n in enumerate((flow.tank, *flow.trunk))}
        inner = flow.onward.get(source, source)
        if source in order and target in order and order[target] > order[source] + 1:
            inner = flow.trunk[order[source]]
        title = home.get(inner) or home.get(source)
        if title:
            groups[title].append(name)
            home[name] = title


def _adopt_rest(flow: Flow, groups: dict[str, list[str]], home: dict[str, str]) -> None:
    """Parts off the loop join what they hang on; longer chains of instruments stay together."""
    waiting = [n for n in flow.parts if n not in home]
    chains: dict[str, list[str]] = {}
    for name in waiting:
        before = [p.source for p in flow.pipes if p.target == name and p.source in waiting]
        chains[name] = [*chains.pop(before[0]), name] if before and before[0] in chains else [name]
    for chain in chains.values():
        hosts = _hosts(flow, chain, home)
        if len(chain) > 2 or not hosts:
            title = "pressure reading" if len(chain) > 2 else words(chain[0])
            title = title if title not in groups else words(chain[-1])
            groups[title] = chain
        else:
            title = home[hosts[0]]
            groups[title].extend(chain)
        home.update(dict.fromkeys(chain, title))


def _hosts(flow: Flow, chain: Sequence[str], home: Mapping[str, str]) -> list[str]:
    ends = (chain[0], chain[-1])
    into = [p.source for p in flow.pipes if p.target in ends and p.source in home]
    return [*into, *(p.target for p in flow.pipes if p.source in ends and p.target in home)]


def words(name: str) -> str:
    """An id as words."""
    return name.replace("_", " ")


def folded(
    parts: Mapping[str, Part], pipes: Sequence[Pipe], closed: Collection[Section]
) -> tuple[dict[str, Part], tuple[Pipe, ...]]:
    """Parts and pipes with the sections in `closed` each as one part.

    Between two parts of which one is folded only the strongest line is kept.
    """
    stands = {name: section for section in closed for name in section.members}
    made: dict[str, Part] = {}
    for name, part in parts.items():
        section = stands.get(name)
        if section is None:
            made[name] = part
        elif section.id not in made:
            main = parts[section.members[0]]
            made[section.id] = replace(
                main, id=section.id, title=section.title, members=section.members
            )
    best: dict[tuple[str, str, str], Pipe] = {}
    for pipe in sorted(pipes, key=lambda p: _STRONGEST.index(p.medium)):
        source, target = (stands[n].id if n in stands else n for n in (pipe.source, pipe.target))
        if source == target:
            continue
        plain = source == pipe.source and target == pipe.target
        key = (source, target, pipe.medium) if plain else (source, target, _kind(pipe.medium))
        back = (target, source, key[2])
        if key not in best and (plain or back not in best):
            best[key] = Pipe(source, target, pipe.medium)
    return made, tuple(best.values())


def _kind(medium: Medium) -> str:
    return "oil" if medium in OIL else medium
