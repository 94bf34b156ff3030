"""Calibrations: what is in force, how it moved, and one that goes on, step by step."""

from __future__ import annotations

from functools import partial
from typing import Any, ClassVar

from textual import events
from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Horizontal, Vertical
from textual.screen import Screen
from textual.widgets import DataTable, Footer

from configs.errors import HalfdropError
from configs.settings import load_bench
from controller.assembly import is_simulated
from controller.calibration.store import Calibration, calibrations, in_force
from controller.commands.calibrations import calibration_entry, followed
from controller.labfolder import Lab
from controller.records.record import printable
from controller.running.launch import record_of, start_run
from controller.ui.screens.archive import cell_of, set_widths
from controller.ui.screens.dialogs import Text, printable_lines
from controller.ui.screens.help import help_of
from controller.ui.screens.recordwork import verify_for
from controller.ui.screens.run import RunScreen
from controller.ui.widgets.plain import Plain
from controller.ui.widgets.readout import Readout
from controller.ui.widgets.sentences import Sentences
from controller.ui.widgets.titlebar import TitleBar
from controller.ui.widgets.warningbar import WarningBar
from drivers.clock import SystemClock

#: kinds of which several are in force side by side: their rows begin with the lot's name
LOTS = frozenset({"titrant", "blank"})
_COLUMNS = (("on", 10), ("kind", 8), ("state", 14), ("due", 10), ("verdict", 24))
_TIME_SCALE = 10.0


class CalibrationScreen(RunScreen):
    """A calibration step by step: what it asks, the reading and how steady it is, what it found."""

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("v", "verify", "Verify"),
    ]

    def compose(self) -> ComposeResult:
        """Steps beside the reading."""
        yield TitleBar("calibrations")
        yield Plain("", id="phase")
        with Horizontal(id="run"):
            with Vertical(id="steps"):
                yield Plain("", id="asked")
                yield WarningBar()
                yield Sentences()
            yield Readout()
        yield Footer(show_command_palette=False, compact=True)

    def on_mount(self) -> None:
        """There is no plot to wait for."""
        self.call_after_refresh(self.on_curve_plot_painted)

    def show_view(self) -> None:
        """Show the calibration as it is now."""
        view = self.view
        self.query_one("#phase", Plain).say(self.phase_text())
        asked = self.query_one("#asked", Plain)
        question = None if self.view.over else self.question
        if question is not None:
            how = f" ({' / '.join(question.choices)})" if question.choices else ""
            asked.say(printable_lines(f"{question.text}\n\nEnter: answer{how}"))
        asked.display = question is not None
        self.query_one(Readout).show(view)
        self.query_one(Sentences).show(view.sentences)
        self.query_one(WarningBar).show(view.warnings)
        self.say_halted()

    def check_action(self, action: str, parameters: tuple[object, ...]) -> bool | None:
        """No doses and no plot here."""
        if action in ("dose", "near", "cursor"):
            return False
        if action == "verify":
            return not self.live
        return super().check_action(action, parameters)

    def action_verify(self) -> None:
        """Verify the record."""
        self.run_worker(partial(verify_for, self, self.record), thread=True)

    def action_help(self) -> None:
        """Help."""
        self.app.push_screen(help_of("calibrations"))

    def post_leave(self) -> None:
        """Back to the list."""
        self.app.call_later(self.app.run_action, "go('calibrations')")


class CalibrationsScreen(Screen[None]):
    """Every calibration of the lab folder, and the start of new ones."""

    HELP = "calibrations"
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("p", "start('probe')", "Probe"),
        Binding("u", "start('burette')", "Burette"),
        Binding("t", "lot('titrant')", "Titrant"),
        Binding("b", "lot('blank')", "Blank"),
        Binding("h", "history", "Trend"),
        Binding("enter", "open", "Open"),
        Binding("y", "copy", "Copy", show=False),
        Binding("question_mark", "help", "Help", key_display="?"),
        Binding("q,escape", "app.go('archive')", "Leave", key_display="q"),
    ]

    def __init__(self, lab: Lab) -> None:
        super().__init__()
        self._lab = lab
        self._shown: list[Calibration] = []
        self._rows: list[dict[str, Any]] = []
        self._starting = False

    def compose(self) -> ComposeResult:
        """The list, and what is known of the line under the cursor."""
        yield TitleBar("calibrations")
        with Vertical(classes="page"):
            yield Plain("Calibrations, the newest first", classes="heading")
            yield DataTable(cursor_type="row", id="runs")
            yield Plain("", id="about")
        yield Footer(show_command_palette=False, compact=True)

    def on_mount(self) -> None:
        """Read the records, away from the keys."""
        table = self.query_one(DataTable)
        for name, width in _widths(self.app.size.width):
            table.add_column(name, width=width, key=name)
        table.focus()
        self.run_worker(self._read, thread=True, exclusive=True)

    def on_resize(self, event: events.Resize) -> None:
        """Give the verdict the room there is."""
        set_widths(self.query_one(DataTable), _widths(event.size.width))

    def _read(self) -> None:
        found = calibrations(self._lab.calibrations)[::-1]
        rows = [calibration_entry(one, in_force(self._lab.calibrations, one.kind, one.subject)) for one in found]
        self.app.call_from_thread(self._list, found, rows)

    def _list(self, found: list[Calibration], rows: list[dict[str, Any]]) -> None:
        self._shown, self._rows = found, rows
        table = self.query_one(DataTable)
        table.clear()
        for row in rows:
            lot = f"{row['subject']}: " if row["kind"] in LOTS else ""  # there are several of them, one probe only
            table.add_row(*(cell_of((lot if name == "verdict" else "") + str(row[name])) for name, _ in _COLUMNS))
        if not rows:
            text = "none yet: p calibrates the probe, u checks the burette, t settles a titrant, b a blank"
            self.query_one("#about", Plain).say(text)

    def on_data_table_row_highlighted(self, event: DataTable.RowHighlighted) -> None:
        """Tell about the line."""
        if 0 <= event.cursor_row < len(self._rows):
            row = self._rows[event.cursor_row]
            self.query_one("#about", Plain).say(printable(f"{row['subject']}") + "\n" + printable(row["verdict"]))

    async def on_data_table_row_selected(self, _event: DataTable.RowSelected) -> None:
        """Enter or a click."""
        self.action_open()

    def action_open(self) -> None:
        """Open the record under the cursor."""
        row = self.query_one(DataTable).cursor_row
        if 0 <= row < len(self._shown):
            self.app.switch_screen(CalibrationScreen(self._shown[row].path))

    def action_history(self) -> None:
        """Show how the figures of what is under the cursor moved."""
        row = self.query_one(DataTable).cursor_row
        if not 0 <= row < len(self._shown):
            return
        chosen = self._shown[row]
        accepted = [
            one
            for one in self._shown[::-1]
            if one.accepted and (one.kind, one.subject) == (chosen.kind, chosen.subject)
        ]
        self.app.push_screen(Text(f"How the {chosen.kind} moved", history_text(accepted)))

    def action_lot(self, kind: str) -> None:
        """Fill in what a titrant's or a blank's calibration needs."""
        from controller.ui.screens.lot import LotScreen

        self.app.switch_screen(LotScreen(self._lab, kind))

    def action_start(self, kind: str) -> None:
        """Start a calibration in its own process."""
        if not self._starting:
            self._starting = True
            self.notify("starting; the devices are asked who they are")
            self.run_worker(partial(self._start, kind), thread=True)

    def _start(self, kind: str) -> None:
        app: Any = self.app
        try:
            simulated = is_simulated(load_bench(self._lab.bench))
            given = ["--attended", *([f"--time-scale={_TIME_SCALE:g}"] if simulated else [])]
            started = start_run(self._lab, given, command=("calibrate", kind), records=self._lab.calibrations)
            record = record_of(started, SystemClock())
        except HalfdropError as error:
            app.call_from_thread(self._not_started, str(error))
        else:
            speed = _TIME_SCALE if simulated else None
            app.call_from_thread(app.switch_screen, CalibrationScreen(record, speed=speed))

    def _not_started(self, text: str) -> None:
        self._starting = False
        self.app.push_screen(Text("It did not begin", printable_lines(text)))

    def action_copy(self) -> None:
        """Put the list into the clipboard."""
        self.app.copy_to_clipboard("\n".join("\t".join(str(value) for value in row.values()) for row in self._rows))
        self.notify("copied")

    def action_help(self) -> None:
        """Help."""
        self.app.push_screen(help_of("calibrations"))


def _widths(room: int) -> list[tuple[str, int]]:
    *others, (last, least) = _COLUMNS
    return [*others, (last, max(least, room - 8 - sum(width + 2 for _, width in others)))]


def history_text(accepted: list[Calibration], *, width: int = 30) -> str:
    """Return each followed figure as a small bar chart over the days, with its trend in words."""
    if not accepted:
        return "No accepted calibration of this kind yet."
    lines: list[str] = []
    for figure in followed(accepted):
        entries = figure["entries"]
        values = [value for _, value in entries]
        lowest, reach = min(values), (max(values) - min(values)) or 1.0
        lines.append(printable(f"{figure['quantity']}, {figure['unit']}"))
        for on, value in entries:
            bar = "█" * (1 + round((width - 1) * (value - lowest) / reach))
            lines.append(f"  {on}  {value:<12.6g} {bar}")
        if figure["text"]:
            lines.append(printable(f"  {figure['text']}"))
        lines.append("")
    return "\n".join(lines).rstrip()
