"""Two runs in one plot, their results side by side, and how far they differ."""

from __future__ import annotations

from pathlib import Path
from typing import Any, ClassVar

from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import VerticalScroll
from textual.screen import Screen
from textual.widgets import Footer

from controller.commands.output import amount_text, volume_text
from controller.records.record import printable
from controller.ui.runview import RunView
from controller.ui.screens.help import help_of
from controller.ui.tail import all_entries
from controller.ui.texts import clock_text, local_time_text
from controller.ui.widgets.curveplot import CurvePlot
from controller.ui.widgets.plain import Plain
from controller.ui.widgets.titlebar import TitleBar

_NAMES_WIDTH = 17


class CompareScreen(Screen[None]):
    """Two runs in one plot, their results side by side."""

    HELP = "record"
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("z", "near", "Near"),
        Binding("y", "copy", "Copy"),
        Binding("question_mark", "help", "Help", key_display="?"),
        Binding("q,escape", "app.pop_screen", "Back", key_display="q"),
    ]

    def __init__(self, first: Path, second: Path) -> None:
        super().__init__()
        self._paths = (first, second)
        self._text = ""

    def compose(self) -> ComposeResult:
        """Plot above, table below."""
        yield TitleBar("archive")
        yield CurvePlot()
        with VerticalScroll(id="words"):
            yield Plain("", id="compared")
        yield Footer(show_command_palette=False, compact=True)

    def on_mount(self) -> None:
        """Read both."""
        first, second = (view_of(path) for path in self._paths)
        self.query_one(CurvePlot).show(first, second)
        self._text = compared_text(first, second)
        widest = (self.app.size.width - _NAMES_WIDTH) // 2
        self.query_one("#compared", Plain).say(compared_text(first, second, widest=widest))

    def action_near(self) -> None:
        """Look closely at the equivalence point."""
        plot = self.query_one(CurvePlot)
        plot.near = not plot.near

    def action_copy(self) -> None:
        """Put the table into the clipboard."""
        self.app.copy_to_clipboard(self._text)
        self.notify("copied")

    def action_help(self) -> None:
        """Help."""
        self.app.push_screen(help_of("record"))


def view_of(record: Path) -> RunView:
    """Return the whole of a record as seen."""
    view = RunView(name=record.stem)
    for entry in all_entries(record):
        view.feed(entry)
    return view


def compared_text(first: RunView, second: RunView, *, widest: int = 200) -> str:
    """Return both results as a small table, and how far they differ in their uncertainties.

    Args:
        first, second: the runs.
        widest: longer cells are cut.
    """
    rows = [("", "A", "B"), *zip(_names(), _facts(first), _facts(second), strict=True)]
    rows = [(name, _cut(one, widest), _cut(other, widest)) for name, one, other in rows]
    widths = [max(len(row[column]) for row in rows) for column in range(3)]
    lines = ["  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows]
    return "\n".join([*lines, difference_text(first, second)])


def _cut(text: str, widest: int) -> str:
    return text if len(text) <= widest else f"{text[: widest - 1]}…"


def _names() -> tuple[str, ...]:
    return ("run", "sample", "started", "outcome", "end point", "amount", "doses", "time")


def _facts(view: RunView) -> tuple[str, ...]:
    end = view.end_points[0] if view.end_points else None
    return (
        view.name,
        view.sample_id,
        local_time_text(view.header.get("started_utc")),
        printable(str((view.closing or {}).get("outcome") or "open")),
        "none" if end is None else volume_text(end.volume_ml, end.standard_uncertainty_ml),
        printable(amount_text(view.result.get("result"))),
        str(len(view.doses)),
        clock_text(view.took_s),
    )


def difference_text(first: RunView, second: RunView) -> str:
    """Return by how much the first amounts (or end points) differ, against their joint uncertainty."""
    one, other = (_value_of(view) for view in (first, second))
    if one is None or other is None or one[2] != other[2]:
        return "the two cannot be compared by number"
    unlike = [pair for pair in zip(_quantity_of(first), _quantity_of(second), strict=True) if pair[0] != pair[1]]
    if unlike:  # acidity to a pH and acidity to equivalence, say
        return f"not compared by number, A and B are different quantities: {unlike[0][0]}, {unlike[0][1]}"
    joint = (one[1] ** 2 + other[1] ** 2) ** 0.5
    text = f"B - A: {other[0] - one[0]:+.4g} {one[2]}"
    if joint > 0:
        text += f", {abs(other[0] - one[0]) / joint:.1f} times their joint standard uncertainty of {joint:.2g} {one[2]}"
    return text


def _quantity_of(view: RunView) -> tuple[str, str]:
    """What an amount is of: its substance, and where the titration ended, in words (early records have a number)."""
    amount = view.result.get("result") or {}
    end_point = amount.get("end_point")
    to_ph = end_point if isinstance(end_point, str) and end_point.startswith("pH") else "the equivalence point"
    return printable(str(amount.get("substance"))), printable(to_ph)


def _value_of(view: RunView) -> tuple[float, float, str] | None:
    amount: dict[str, Any] | None = view.result.get("result")
    if amount:
        return float(amount["value"]), float(amount.get("standard_uncertainty") or 0.0), printable(str(amount["unit"]))
    if view.end_points:
        return view.end_points[0].volume_ml, view.end_points[0].standard_uncertainty_ml or 0.0, "mL"
    return None
