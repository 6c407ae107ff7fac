"""Colours: by lamp, by daylight, and the terminal's own."""

from __future__ import annotations

from textual.theme import BUILTIN_THEMES, Theme

LAMP, DAYLIGHT, TERMINAL = "lamp", "daylight", "terminal"
NAMES = (LAMP, DAYLIGHT, TERMINAL)

_DARK = {
    "feed": "#c98a2b", "top": "#2b2f2c", "top-text": "#efe9da", "answer": "#f0c05a",
    "bar": "#e3a33a", "bar-gained": "#f3d28a", "bar-lost": "#8b8676",
    "field": "#2f3532", "field-text": "#f2ecdd", "field-focus": "#46504a",
    "oil-supply": "#e3a33a", "oil-scavenge": "#b98556", "oil-vent": "#79b4c4",
    "oil-sense": "#a3a7b8", "oil-fill": "#3a2f18", "plate": "#262b29", "way": "#ff8e6e",
    "shade1": "#453a22", "shade2": "#6b4f1d", "shade3": "#9a5a1c", "shade4": "#c24a24",
    "shade-text": "#fff6e4", "faint": "#a9a595",
}  # fmt: skip
_LIGHT = {
    "feed": "#8a5a10", "top": "#e4ddca", "top-text": "#22261f", "answer": "#7a4c06",
    "bar": "#a96a0f", "bar-gained": "#d9a650", "bar-lost": "#8b8676",
    "field": "#eae4d4", "field-text": "#1e221c", "field-focus": "#d9d0b8",
    "oil-supply": "#a5640a", "oil-scavenge": "#6d4526", "oil-vent": "#1f6d84",
    "oil-sense": "#555a6e", "oil-fill": "#f3dfb4", "plate": "#f1ecdf", "way": "#b02a10",
    "shade1": "#f6e6bd", "shade2": "#f0cc80", "shade3": "#e9a44e", "shade4": "#dd6f3c",
    "shade-text": "#1e1a12", "faint": "#6a6656",
}  # fmt: skip
_ANSI = {
    "feed": "ansi_yellow", "top": "ansi_default", "top-text": "ansi_default",
    "answer": "ansi_default", "bar": "ansi_yellow", "bar-gained": "ansi_bright_yellow",
    "bar-lost": "ansi_default", "field": "ansi_default", "field-text": "ansi_default",
    "field-focus": "ansi_default", "oil-supply": "ansi_yellow", "oil-scavenge": "ansi_red",
    "oil-vent": "ansi_cyan", "oil-sense": "ansi_default", "oil-fill": "ansi_default",
    "plate": "ansi_default", "way": "ansi_magenta", "shade1": "ansi_default",
    "shade2": "ansi_default", "shade3": "ansi_default", "shade4": "ansi_default",
    "shade-text": "ansi_default", "faint": "ansi_default",
}  # fmt: skip

THEMES = (
    Theme(
        name=LAMP, dark=True, primary="#c98a2b", secondary="#79b4c4", accent="#e3a33a",
        warning="#f0c05a", error="#ff8e6e", success="#9ab973", background="#1b1e1c",
        surface="#232825", panel="#2b2f2c", foreground="#efe9da", variables=_DARK,
    ),
    Theme(
        name=DAYLIGHT, dark=False, primary="#8a5a10", secondary="#1f6d84", accent="#a96a0f",
        warning="#8a5200", error="#a5230b", success="#4d6b22", background="#faf7ee",
        surface="#f1ecdf", panel="#e4ddca", foreground="#22261f", variables=_LIGHT,
    ),
    Theme(
        name=TERMINAL, ansi=True, dark=True, primary="ansi_yellow", secondary="ansi_cyan",
        accent="ansi_yellow", warning="ansi_yellow", error="ansi_red", success="ansi_green",
        background="ansi_default", surface="ansi_default", panel="ansi_default",
        boost="ansi_default", foreground="ansi_default",
        variables={
            **BUILTIN_THEMES["ansi-dark"].variables,
            **_ANSI,
            "block-cursor-foreground": "ansi_default",
            "block-cursor-background": "ansi_default",
            "block-cursor-text-style": "bold reverse",
            "input-cursor-text-style": "reverse",
            "input-cursor-background": "ansi_default",
            "input-cursor-foreground": "ansi_default",
        },
    ),
)  # fmt: skip
DEFAULTS = dict(_DARK)
"""Values that a style sheet needs whatever theme is on."""
