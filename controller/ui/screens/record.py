"""A finished run from the archive: looked at, played again, verified."""

from __future__ import annotations

from functools import partial
from typing import Any, ClassVar

from textual.binding import Binding, BindingType

from controller.commands.output import amount_text
from controller.records.record import printable
from controller.ui.screens.dialogs import Text
from controller.ui.screens.recordwork import report_for, verify_for
from controller.ui.screens.run import RunScreen
from controller.ui.tail import Playback, all_entries

PLAYED_AT = 20.0


class RecordScreen(RunScreen):
    """A run of the archive. Where its record is still open, it is followed like any run."""

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("a", "again", "Play again"),
        Binding("v", "verify", "Verify"),
        Binding("b", "budget", "Budget"),
        Binding("r", "report", "Report"),
    ]

    def check_action(self, action: str, parameters: tuple[object, ...]) -> bool | None:
        """A run that goes on is not played again."""
        if action in ("again", "verify", "report"):
            return not self.live
        if action == "budget":
            return bool((self.view.result.get("result") or {}).get("budget"))
        return super().check_action(action, parameters)

    def action_again(self) -> None:
        """Play the record from its beginning."""
        playback = Playback(all_entries(self.record), speed=PLAYED_AT)
        self.app.push_screen(RecordScreen(self.record, playback=playback))

    def action_verify(self) -> None:
        """Verify the record."""
        self.run_worker(partial(verify_for, self, self.record), thread=True)

    def action_budget(self) -> None:
        """Show what the amount's uncertainty is made of."""
        self.app.push_screen(Text("What the uncertainty is made of", budget_text(self.view.result["result"])))

    def action_report(self) -> None:
        """Let a process of its own write the report."""
        self.notify("writing the report")
        self.run_worker(partial(report_for, self, self.record), thread=True)

    def post_leave(self) -> None:
        """Back to where it was opened."""
        self.app.pop_screen()


def budget_text(amount: dict[str, Any]) -> str:
    """Return the budget of an amount: the shares as bars, the largest first, then the whole."""
    from controller.commands.budgetlines import closing_lines

    budget = amount["budget"]
    rows = sorted(budget["rows"], key=lambda row: -row["share"])
    widest = max(len(str(row["quantity"])) for row in rows)
    lines = [printable(amount_text(amount)), ""]
    for row in rows:
        share = max(0.0, float(row["share"]))
        bar = "█" * round(20 * share)
        lines.append(f"{row['quantity']!s:<{widest}}  {100 * share:5.1f} %  {bar}")
    text = [printable(line) for line in (*lines, "", *closing_lines(budget))]
    return "\n".join(text)
