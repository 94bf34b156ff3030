"""What every form that begins with a method does: prepare the method chosen, ask its questions, start once."""

from __future__ import annotations

import os
from collections.abc import Sequence

from textual.app import ComposeResult
from textual.containers import Horizontal, Vertical
from textual.screen import Screen
from textual.widgets import Input, Select

from configs.errors import HalfdropError
from controller.labfolder import Lab
from controller.ui.newrun import Prepared, Wanted, prepare
from controller.ui.screens.dialogs import Text, printable_lines
from controller.ui.widgets.answerfield import AnswerField
from controller.ui.widgets.plain import Plain

#: from this width on the questions stand beside the form, cells
WIDE = 140


class MethodForm(Screen[None]):
    """A form whose first line is the method; `#problem` and `#questions` are among its widgets."""

    HORIZONTAL_BREAKPOINTS: list[tuple[int, str]] | None = [(0, "-narrow"), (WIDE, "-wide")]  # noqa: RUF012  (as Textual has it)
    NOT_BEGUN = "It did not begin"

    def __init__(self, lab: Lab) -> None:
        super().__init__()
        self._lab = lab
        self._prepared: Prepared | None = None
        self._starting = False

    def show_method(self, prepared: Prepared) -> None:
        """Show what the method says of itself: here its questions."""
        self.call_later(self._show_questions, prepared)

    def asks_questions(self) -> bool:
        """Tell whether the method's questions of safety belong to what is started."""
        return True

    def _look(self, wanted: Wanted) -> None:
        """Prepare the method that was chosen; for a thread of its own."""
        try:
            prepared = prepare(self._lab, wanted)
        except HalfdropError as error:
            self.app.call_from_thread(self._not_readable, str(error))
        else:
            self.app.call_from_thread(self._readable, prepared)

    def _not_readable(self, text: str) -> None:
        self._prepared = None
        self.query_one("#problem", Plain).say(printable_lines(text))
        self.query_one("#questions", Vertical).remove_children()

    def _readable(self, prepared: Prepared) -> None:
        self._prepared = prepared
        self.show_method(prepared)

    async def _show_questions(self, prepared: Prepared) -> None:
        questions = self.query_one("#questions", Vertical)
        await questions.remove_children()
        if self.asks_questions() and prepared.plan is not None:
            await questions.mount(*(AnswerField(one) for one in prepared.plan.questions))

    def _all_answered(self, fields: Sequence[AnswerField]) -> bool:
        """Go to the first question that is not answered as it must be; True where there is none."""
        missing = next((one for one in fields if not one.fits), None)
        if missing is None:
            return True
        self.notify(f"this must be answered first: {missing.question.text}", severity="error", markup=False)
        missing.focus()
        missing.scroll_visible()
        return False

    def _not_started(self, text: str) -> None:
        self._starting = False
        self.app.push_screen(Text(self.NOT_BEGUN, printable_lines(text)))


def method_row(names: Sequence[str], first: str | None) -> ComposeResult:
    """Return the line of the method, with one chosen where there is a usual one."""
    choices = [(name, name) for name in names]
    if first is None:
        yield from form_row("method", Select(choices, id="method", allow_blank=True, compact=True))
    else:
        yield from form_row("method", Select(choices, id="method", value=first, allow_blank=False, compact=True))


def operator_row() -> ComposeResult:
    """Return the line of the operator, with the name by which the computer knows the person."""
    name = os.environ.get("USER") or os.environ.get("USERNAME") or ""
    yield from form_row("operator", Input(value=name, id="operator", compact=True))


def form_row(label: str, field: Select[str] | Input | Plain) -> ComposeResult:
    """Return a line of a form: its label, its field."""
    with Horizontal(classes="row", id=f"row-{field.id}"):
        yield Plain(label, classes="label", id=f"label-{field.id}")
        yield field
