"""What stands on the screen while a case is being read."""

from __future__ import annotations

from textual.app import ComposeResult
from textual.screen import Screen
from textual.widgets import Static


class WaitingScreen(Screen[None]):
    """One line."""

    def __init__(self, words: str) -> None:
        super().__init__()
        self.words = words

    def compose(self) -> ComposeResult:
        yield Static(self.words, id="waiting", markup=False)
