"""Short names for plates."""

from __future__ import annotations

from diag.oilpath.flow import Part
from diag.oilpath.fold import words

LEAST = 3
"""Letters that a cut word keeps."""


def label_of(part: Part) -> str:
    """A short name: the section's title, or the component's id in words."""
    return part.title if part.folded else words(part.id)


def on_two_lines(name: str, first: int, second: int) -> tuple[str, str]:
    """A name on two lines of at most so many letters.

    Where it is too long, words are cut and end in a full stop; of all ways to divide it, the
    one that loses the fewest letters is taken.
    """
    if len(name) <= first:
        return name, ""
    parts = name.split()
    best: tuple[int, str, str] | None = None
    for cut in range(len(parts), 0, -1):
        above, below = cut_to(parts[:cut], first), cut_to(parts[cut:], second)
        lost = len(name) - len(above) - len(below) + above.count(".") + below.count(".")
        if best is None or lost < best[0]:
            best = (lost, above, below)
    assert best is not None
    return best[1], best[2]


def cut_to(parts: list[str], room: int) -> str:
    """Words in at most `room` letters, the longest cut first."""
    shown = list(parts)
    while len(text := " ".join(shown)) > room:
        longest = max(range(len(shown)), key=lambda i: len(shown[i].rstrip(".")))
        stem = shown[longest].rstrip(".")
        if len(stem) <= LEAST:
            return text[: max(room, 0)].rstrip()
        shown[longest] = f"{stem[:-1]}."
    return text


def fits_uncut(name: str, width: int) -> bool:
    """Whether two lines of `width` letters take the name as it is."""
    return "." not in "".join(on_two_lines(name, width, width))
