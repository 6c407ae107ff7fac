"""Box-drawing characters by the lines that meet in them."""

from __future__ import annotations

import unicodedata
from functools import cache

NONE, LIGHT, HEAVY, DOUBLE = range(4)
_WEIGHTS = {"LIGHT": LIGHT, "SINGLE": LIGHT, "HEAVY": HEAVY, "DOUBLE": DOUBLE}
_SIDES = {
    "UP": (0,), "RIGHT": (1,), "DOWN": (2,), "LEFT": (3,),
    "VERTICAL": (0, 2), "HORIZONTAL": (1, 3),
}  # fmt: skip
Arms = tuple[int, int, int, int]
"""Weights of the arms to the top, right, bottom and left."""


@cache
def _table() -> dict[Arms, str]:
    """Arms to character, read off the names that Unicode gives the block U+2500 to U+257F."""
    found: dict[Arms, str] = {}
    for code in range(0x2500, 0x2580):
        words = unicodedata.name(chr(code)).removeprefix("BOX DRAWINGS ").split()
        if not {"DASH", "ARC", "DIAGONAL"} & set(words):
            found[_arms(words)] = chr(code)
    return found


def _arms(words: list[str]) -> Arms:
    """`LIGHT DOWN AND RIGHT` and `DOWN LIGHT AND RIGHT HEAVY` both occur."""
    arms = [NONE] * 4
    leading = words[0] in _WEIGHTS
    weight = NONE
    waiting: list[str] = []
    for word in words:
        if word in _WEIGHTS:
            weight = _WEIGHTS[word]
            if not leading:
                _set(arms, waiting, weight)
                waiting = []
        elif word in _SIDES:
            if leading:
                _set(arms, [word], weight)
            else:
                waiting.append(word)
    return arms[0], arms[1], arms[2], arms[3]


def _set(arms: list[int], sides: list[str], weight: int) -> None:
    for side in sides:
        for index in _SIDES[side]:
            arms[index] = weight


def box(arms: Arms) -> str:
    """The character in which these arms meet.

    Unicode joins double lines to light ones only, and to some not at all: then the heavier
    line that runs straight through is drawn and the other passes beneath it.
    """
    table = _table()
    if arms in table:
        return table[arms]
    softened = tuple(LIGHT if arm == HEAVY else arm for arm in arms)
    if softened in table and len({a for a in arms if a}) > 1:
        return table[softened]
    if arms[1] and arms[3] and not (arms[0] and arms[2] and max(arms[0], arms[2]) > arms[1]):
        return box((NONE, max(arms[1], arms[3]), NONE, max(arms[1], arms[3])))
    if arms[0] and arms[2]:
        return box((max(arms[0], arms[2]), NONE, max(arms[0], arms[2]), NONE))
    heaviest = max(arms)
    return table.get(tuple(heaviest if arm else NONE for arm in arms), " ")  # type: ignore[arg-type]
