"""The line on top of every screen: the program, the places to go, and which lab folder this is."""

from __future__ import annotations

from textual.content import Content
from textual.widgets import Static

#: the places, in the order of their keys
PLACES = (
    ("1", "run", "Run"),
    ("2", "set-up", "New run"),
    ("3", "bench", "Bench"),
    ("4", "archive", "Archive"),
    ("5", "calibrations", "Calibrate"),
)


class TitleBar(Static):
    """Shows where one is; a click on a place goes there."""

    def __init__(self, here: str) -> None:
        super().__init__(id="title")
        self._here = here

    def on_mount(self) -> None:
        """Write the line."""
        parts = [Content.styled(" halfdrop ", "bold")]
        for key, place, name in PLACES:
            here = place == self._here
            text = f"[{key} {name}]" if here else f" {key} {name} "
            parts.append(Content(text).stylize("bold" if here else f"@click=app.go('{place}')"))
        lab = getattr(self.app, "lab", None)
        if lab is not None:
            parts.append(Content(f"  {lab.path.name}"))
        self.update(Content("").join(parts))
