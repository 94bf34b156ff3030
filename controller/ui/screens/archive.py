"""The archive: every record of the lab folder, found by words, opened, verified, compared."""

from __future__ import annotations

from collections.abc import Sequence
from functools import partial
from pathlib import Path
from typing import Any, ClassVar

from rich.text import Text as RichText
from textual import events
from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Horizontal, Vertical
from textual.screen import Screen
from textual.widgets import DataTable, Footer, Input

from configs.errors import HalfdropError
from controller.labfolder import Lab
from controller.records.archive_index import ArchiveIndex, IndexedRun
from controller.records.record import printable
from controller.ui.screens.dialogs import Line
from controller.ui.screens.help import help_of
from controller.ui.screens.recordwork import verify_for, write_tables
from controller.ui.texts import clock_text, local_time_text
from controller.ui.widgets.plain import Plain
from controller.ui.widgets.titlebar import TitleBar

PAGE = 200
OUTCOMES = (None, "completed", "stopped", "failed", "abandoned", "open", "unreadable")
#: columns with their least widths; what room there is more goes to those that are named
_COLUMNS = (("started", 16), ("sample", 18), ("outcome", 9), ("amount", 24), ("end points", 20), ("method", 14))
_GROWING = ("sample", "end points", "method")


class ArchiveScreen(Screen[None]):
    """Lists, searches and opens records."""

    HELP = "archive"
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("slash", "search", "Search", key_display="/"),
        Binding("f", "outcome", "Outcome"),
        Binding("enter", "open", "Open", priority=False),
        Binding("v", "verify", "Verify"),
        Binding("c", "compare", "Compare"),
        Binding("e", "export", "Export"),
        Binding("y", "copy", "Copy", show=False),
        Binding("escape", "list", "List", show=False),
        Binding("question_mark", "help", "Help", key_display="?"),
        Binding("q", "app.quit", "Quit"),
    ]

    def __init__(self, lab: Lab) -> None:
        super().__init__()
        self._lab = lab
        self._index = ArchiveIndex(lab.runs)
        self._outcome: str | None = None
        self._shown: list[IndexedRun] = []
        self._count = 0
        self._chosen: str | None = None

    def compose(self) -> ComposeResult:
        """Search, list, what is known of the line under the cursor."""
        yield TitleBar("archive")
        with Vertical(classes="page"):
            with Horizontal(id="search-line"):
                yield Input(placeholder="/ search in sample, method, operator, outcome", id="search", compact=True)
                yield Plain("", id="filter")
            yield DataTable(cursor_type="row", id="runs")
            yield Plain("", id="about")
        yield Footer(show_command_palette=False, compact=True)

    def on_mount(self) -> None:
        """Show what the index knows at once, then bring it up to date."""
        table = self.query_one(DataTable)
        for name, width in widths_for(self.app.size.width, _COLUMNS, _GROWING):
            table.add_column(name, width=width, key=name)
        table.focus()
        self.run_worker(self._refresh, thread=True, exclusive=True, group="index")

    def _refresh(self) -> None:
        self._index.refresh(lambda done, of: self.app.call_from_thread(self._say_reading, done, of))
        self.app.call_from_thread(self.search)
        from controller.ui.screens.leftopen import left_open

        if found := left_open(self._lab):
            app: Any = self.app
            app.call_from_thread(app.offer_left_open, found)

    def _say_reading(self, done: int, of: int) -> None:
        self.query_one("#about", Plain).say(f"reading records: {done} of {of}")

    def on_resize(self, event: events.Resize) -> None:
        """Give the columns the room there is."""
        set_widths(self.query_one(DataTable), widths_for(event.size.width, _COLUMNS, _GROWING))

    # --- the list ----------------------------------------------------------------------------------------------------

    def search(self) -> None:
        """List what the search finds, from its beginning."""
        table = self.query_one(DataTable)
        table.clear()
        self._shown = []
        words = self.query_one("#search", Input).value
        self._count = self._index.count(words, outcome=self._outcome)
        self._more()
        self.query_one("#filter", Plain).say(f"f: {self._outcome or 'every outcome'}")
        if not self._shown:
            nothing = "nothing found" if words or self._outcome else "no records yet; 2 starts the first run"
            self.query_one("#about", Plain).say(nothing)

    def _more(self) -> None:
        words = self.query_one("#search", Input).value
        found = self._index.find(words, outcome=self._outcome, most=PAGE, after=len(self._shown))
        table = self.query_one(DataTable)
        for one in found:
            table.add_row(*(cell_of(cell) for cell in _cells(one)), key=one.run)
        self._shown += found

    def on_data_table_row_highlighted(self, event: DataTable.RowHighlighted) -> None:
        """Tell about the line; near the end of what is listed, list more."""
        if not 0 <= event.cursor_row < len(self._shown):
            return
        one = self._shown[event.cursor_row]
        place = f"{event.cursor_row + 1} of {self._count}"
        took = "" if one.duration_s is None else f", {one.doses} doses in {clock_text(one.duration_s)}"
        why = f" ({one.reason})" if one.reason else ""
        to_ph = f", {one.amount[one.amount.index('to pH') :].split(' (')[0]}" if "to pH" in one.amount else ""
        about = f"{place}   {one.run}{to_ph}\n{one.outcome}{why}{took}, operator: {one.operator or 'not named'}"
        self.query_one("#about", Plain).say(printable(about.replace("\n", " │ ")).replace(" │ ", "\n", 1))
        if event.cursor_row >= len(self._shown) - 20 and len(self._shown) < self._count:
            self._more()

    def on_input_changed(self, _event: Input.Changed) -> None:
        """Search while typing."""
        self.search()

    def on_input_submitted(self, _event: Input.Submitted) -> None:
        """To the list."""
        self.action_list()

    async def on_data_table_row_selected(self, _event: DataTable.RowSelected) -> None:
        """Enter or a click on the line."""
        self.action_open()

    # --- actions -----------------------------------------------------------------------------------------------------

    def _record(self) -> Path | None:
        row = self.query_one(DataTable).cursor_row
        return self._lab.runs / f"{self._shown[row].run}.jsonl" if 0 <= row < len(self._shown) else None

    def action_search(self) -> None:
        """Into the search field."""
        self.query_one("#search", Input).focus()

    def action_list(self) -> None:
        """Into the list."""
        self.query_one(DataTable).focus()

    def action_outcome(self) -> None:
        """The next outcome alone, or all."""
        self._outcome = OUTCOMES[(OUTCOMES.index(self._outcome) + 1) % len(OUTCOMES)]
        self.search()

    def action_open(self) -> None:
        """Open the run under the cursor."""
        record = self._record()
        if record is not None:
            from controller.ui.screens.record import RecordScreen

            self.app.push_screen(RecordScreen(record))

    def action_compare(self) -> None:
        """Choose a run; with a second one, show both."""
        record = self._record()
        if record is None:
            return
        if self._chosen is None or self._chosen == record.stem:
            self._chosen = record.stem
            self.notify(f"chosen: {record.stem}; choose a second one with c", markup=False)
            return
        from controller.ui.screens.comparison import CompareScreen

        first, self._chosen = self._lab.runs / f"{self._chosen}.jsonl", None
        self.app.push_screen(CompareScreen(first, record))

    def action_verify(self) -> None:
        """Verify the record under the cursor."""
        record = self._record()
        if record is not None:
            self.run_worker(partial(verify_for, self, record), thread=True)

    def action_export(self) -> None:
        """Ask where the tables go."""
        record = self._record()
        if record is not None:
            where = str(self._lab.path / "exports" / record.stem)
            ask = Line("Write tables (CSV with units, data package)", "Into which folder?", value=where)
            self.app.push_screen(ask, partial(self._export, record))

    def _export(self, record: Path, named: str | None) -> None:
        if named and named.strip():
            try:
                files = write_tables(record, Path(named.strip()).expanduser())
            except (HalfdropError, OSError) as error:
                self.notify(str(error), severity="error", timeout=12, markup=False)
            else:
                self.notify(f"wrote {', '.join(files)} into {named.strip()}", markup=False)

    def action_copy(self) -> None:
        """Put the list into the clipboard."""
        self.app.copy_to_clipboard("\n".join("\t".join(_cells(one)) for one in self._shown))
        self.notify(f"{len(self._shown)} lines are in the clipboard")

    def action_help(self) -> None:
        """Help for this screen."""
        self.app.push_screen(help_of("archive"))


def widths_for(room: int, columns: Sequence[tuple[str, int]], growing: Sequence[str]) -> list[tuple[str, int]]:
    """Return the columns with their widths on a screen of `room` cells."""
    more = max(0, room - 6 - sum(width + 2 for _, width in columns)) // len(growing)
    return [(name, width + (min(more, 20) if name in growing else 0)) for name, width in columns]


def cell_of(text: str) -> RichText:
    """Return a cell's text, never markup, with a sign where it is cut."""
    return RichText(printable(text), no_wrap=True, overflow="ellipsis")


def set_widths(table: DataTable[Any], widths: Sequence[tuple[str, int]]) -> None:
    """Change the widths of a table's columns."""
    for (_, width), column in zip(widths, table.ordered_columns, strict=False):
        column.width = width
    table.refresh(layout=True)


def _cells(one: IndexedRun) -> tuple[str, ...]:
    volumes = ", ".join(f"{volume_ml:.4f} mL" for volume_ml in one.end_points_ml)
    started = local_time_text(one.started_utc)[:16]
    amount = one.amount.split(" as ")[0].split(" (")[0]
    return started, one.sample_id, one.outcome, amount or "none", volumes or "none", one.method
