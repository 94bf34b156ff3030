"""Two themes of our own: an orchard at night, and one by day. Colours only add to what signs and words say.

Amber and blue differ in hue and lightness for every common colour vision (after Okabe and Ito's rule of thumb, common
practice).
"""

from __future__ import annotations

from textual.theme import Theme

NIGHT = Theme(
    name="orchard-night",
    primary="#e0a93b",
    secondary="#7fb0d6",
    accent="#e9c46a",
    foreground="#e8e4d8",
    background="#12160f",
    surface="#181d14",
    panel="#222a1c",
    success="#a7c957",
    warning="#f2c14e",
    error="#f28c6a",
    dark=True,
    variables={
        "footer-key-foreground": "#e9c46a",
        "footer-background": "#222a1c",
        "scrollbar": "#3a4630",
        "scrollbar-hover": "#566648",
        "scrollbar-active": "#e0a93b",
        "scrollbar-background": "#12160f",
        "scrollbar-background-hover": "#12160f",
        "scrollbar-background-active": "#12160f",
        "scrollbar-corner-color": "#12160f",
        "quiet": "#98a08a",
        "curve": "#f0b843",
        "slope": "#5f8fb4",
        "band": "#5d7f58",
    },
)
DAY = Theme(
    name="orchard-day",
    primary="#8a5a00",
    secondary="#245a86",
    accent="#7a4f00",
    foreground="#23281d",
    background="#f6f3e9",
    surface="#efebdc",
    panel="#e2dec9",
    success="#4b6b12",
    warning="#8a5a00",
    error="#a03018",
    dark=False,
    variables={
        "footer-key-foreground": "#7a4f00",
        "footer-background": "#e2dec9",
        "scrollbar": "#c2bda3",
        "scrollbar-hover": "#a49f86",
        "scrollbar-active": "#8a5a00",
        "scrollbar-background": "#f6f3e9",
        "scrollbar-background-hover": "#f6f3e9",
        "scrollbar-background-active": "#f6f3e9",
        "scrollbar-corner-color": "#f6f3e9",
        "quiet": "#6a7060",
        "curve": "#9a5b00",
        "slope": "#4f86b5",
        "band": "#8fae7c",
    },
)
