"""The set-up screen: method, sample, amount, questions of safety; then the start in a process of its own."""

from __future__ import annotations

from functools import partial
from pathlib import Path
from typing import Any, ClassVar

from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Vertical, VerticalScroll
from textual.widgets import Footer, Input, Select

from configs.errors import HalfdropError
from controller.records.record import printable
from controller.ui.newrun import Prepared, Wanted, begin, expectation_text, methods_of, usual_method
from controller.ui.screens.dialogs import Text, printable_lines
from controller.ui.screens.help import help_of
from controller.ui.screens.methodform import MethodForm, form_row, method_row, operator_row
from controller.ui.texts import number_of
from controller.ui.widgets.answerfield import AnswerField
from controller.ui.widgets.plain import Plain
from controller.ui.widgets.titlebar import TitleBar

MOST_REPLICATES = 20
_SCALES = (("real time", "1"), ("10 times real time", "10"), ("50 times real time", "50"), ("at once", "fast"))


class SetUpScreen(MethodForm):
    """Collects what a run needs, and starts it when every question is answered."""

    HELP = "set-up"
    NOT_BEGUN = "The run did not begin"
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("f9", "start", "Start the run"),
        Binding("f5", "expect", "What to expect"),
        Binding("f1", "help", "Help"),
        Binding("escape", "app.go('archive')", "Leave"),
        Binding("ctrl+q", "app.quit", "Quit"),
    ]

    def compose(self) -> ComposeResult:
        """A form of a few lines, then the questions."""
        methods = methods_of(self._lab)
        yield TitleBar("set-up")
        with VerticalScroll(classes="page", id="form"):
            with Vertical(id="fields"):
                yield from self._fields(methods)
            with Vertical(id="beside"):
                yield Plain("", id="problem", classes="problem")
                yield Vertical(id="questions")
        yield Footer(show_command_palette=False, compact=True)

    def _fields(self, methods: list[str]) -> ComposeResult:
        yield from method_row(methods, usual_method(self._lab))
        yield from form_row("", Plain("", id="method-title", classes="quiet"))
        yield from form_row("sample", Input(id="sample-id", placeholder="what the record calls it", compact=True))
        yield from form_row("amount", Input(id="amount", compact=True))
        yield from form_row("all liquid, mL", Input(id="initial", compact=True))
        yield from form_row("replicates", Input(value="1", id="replicates", compact=True))
        yield from form_row("or a series", Input(id="series", placeholder="a CSV file of samples", compact=True))
        yield from operator_row()
        scale = Select(_SCALES, id="scale", value="10", allow_blank=False, compact=True)
        yield from form_row("simulated time", scale)

    def on_mount(self) -> None:
        """Look at the first method."""
        if not methods_of(self._lab):
            self.query_one("#problem", Plain).say("this lab folder has no methods: put one into its folder methods")
        self.query_one("#sample-id", Input).focus()

    # --- the form ----------------------------------------------------------------------------------------------------

    def on_select_changed(self, event: Select.Changed) -> None:
        """Another method: other amounts, other questions."""
        if event.select.id == "method" and isinstance(event.value, str):
            wanted = Wanted(method=event.value)
            self.run_worker(partial(self._look, wanted), thread=True, exclusive=True, group="prepare")

    def show_method(self, prepared: Prepared) -> None:
        """Fill in amount and liquid as the method has them, and ask its questions."""
        sample = prepared.method.sample
        usual = sample.volume_ml if sample.taken_by == "volume" else sample.mass_g
        unit = "mL" if sample.taken_by == "volume" else "g"
        amount = self.query_one("#amount", Input)
        amount.value = "" if usual is None else f"{usual:g}"
        amount.placeholder = f"{sample.taken_by} in {unit}"
        self.query_one("#label-amount", Plain).say(f"{sample.taken_by}, {unit}")
        self.query_one("#initial", Input).value = f"{sample.initial_volume_ml:g}"
        self.query_one("#method-title", Plain).say(printable(prepared.method.title))
        self.query_one("#row-scale").display = prepared.simulated
        super().show_method(prepared)
        self._say_problem()

    def on_answer_field_answered(self, _event: AnswerField.Answered) -> None:
        """One answer more."""
        self._say_problem()

    def on_input_changed(self, _event: Input.Changed) -> None:
        """Numbers are looked at while they are typed."""
        self._say_problem()

    def on_input_submitted(self, _event: Input.Submitted) -> None:
        """Enter goes to the next field."""
        self.focus_next()

    def _say_problem(self) -> None:
        wanted = self._wanted()
        text = wanted if isinstance(wanted, str) else ""
        if not text and self._prepared is not None:
            text = "\n".join(printable(one) for one in (self._prepared.problem, *self._prepared.warnings) if one)
        self.query_one("#problem", Plain).say(text)

    def _wanted(self) -> Wanted | str:
        """What is filled in, or what is wrong with it."""
        method = self.query_one("#method", Select).value
        if not isinstance(method, str) or self._prepared is None:
            return "choose a method"
        numbers: dict[str, float | None] = {}
        for name, what in (("amount", "amount"), ("initial", "all liquid")):
            typed = self.query_one(f"#{name}", Input).value
            value = number_of(typed) if typed.strip() else None
            if typed.strip() and (value is None or value <= 0):
                return f"{what}: got {printable(typed)!r}, allowed: a number above 0 (decimal point or comma)"
            numbers[name] = value
        replicates = self.query_one("#replicates", Input).value.strip() or "1"
        if not (replicates.isdecimal() and 1 <= int(replicates) <= MOST_REPLICATES):
            return f"replicates: got {printable(replicates)!r}, allowed: 1 to {MOST_REPLICATES}"
        series = self.query_one("#series", Input).value.strip()
        if series and not Path(series).expanduser().is_file():
            return f"series: there is no file {printable(series)}"
        by_volume = self._prepared.method.sample.taken_by == "volume"
        scale = self.query_one("#scale", Select).value
        return Wanted(
            method=method,
            sample_id=self.query_one("#sample-id", Input).value.strip() or None,
            volume_ml=numbers["amount"] if by_volume else None,
            mass_g=None if by_volume else numbers["amount"],
            initial_volume_ml=numbers["initial"],
            operator=self.query_one("#operator", Input).value.strip() or None,
            replicates=int(replicates),
            series=str(Path(series).expanduser().resolve()) if series else None,
            time_scale=str(scale) if self._prepared.simulated else None,
        )

    # --- actions -----------------------------------------------------------------------------------------------------

    def action_start(self) -> None:
        """Start, where everything is filled in and answered."""
        wanted, fields = self._wanted(), list(self.query(AnswerField))
        if isinstance(wanted, str):
            self.notify(wanted, severity="error", markup=False)
        elif wanted.sample_id is None and wanted.series is None:
            self.notify("say what the record should call the sample", severity="error")
            self.query_one("#sample-id", Input).focus()
        elif self._all_answered(fields) and not self._starting:
            self._starting = True
            answers = {one.question.key: one.answer or "" for one in fields}
            self.notify("starting; the devices are asked who they are")
            self.run_worker(partial(self._begin, wanted, answers), thread=True, group="start")

    def _begin(self, wanted: Wanted, answers: dict[str, str]) -> None:
        app: Any = self.app
        try:
            record = begin(self._lab, wanted, answers)
        except HalfdropError as error:
            app.call_from_thread(self._not_started, str(error))
        else:
            speed = None if wanted.time_scale in (None, "fast", "1") else float(wanted.time_scale or 1)
            app.call_from_thread(app.open_run, record, speed=speed)

    def action_expect(self) -> None:
        """Say what the run is expected to need."""
        wanted = self._wanted()
        if isinstance(wanted, str):
            self.notify(wanted, severity="error", markup=False)
            return
        self.notify("running it in memory first; this takes some seconds")
        self.run_worker(partial(self._expect, wanted), thread=True, exclusive=True, group="expect")

    def _expect(self, wanted: Wanted) -> None:
        text = printable_lines(expectation_text(self._lab, wanted))
        self.app.call_from_thread(self.app.push_screen, Text("What to expect of this run", text))

    def action_help(self) -> None:
        """Help for this screen."""
        self.app.push_screen(help_of("set-up"))
