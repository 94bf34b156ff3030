"""The form for a titrant's or a blank's calibration: lot, portions or volumes, runs that are there; then the start."""

from __future__ import annotations

import re
from functools import partial
from typing import Any, ClassVar

from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Vertical, VerticalScroll
from textual.widgets import Footer, Input, Select

from configs.errors import HalfdropError
from configs.method import MethodSettings
from configs.settings import load_method
from controller.labfolder import Lab
from controller.records.record import list_records, printable
from controller.running.launch import record_of, start_run
from controller.ui.newrun import Prepared, Wanted, methods_of, usual_method
from controller.ui.screens.dialogs import printable_lines
from controller.ui.screens.help import help_of
from controller.ui.screens.methodform import MethodForm, form_row, method_row, operator_row
from controller.ui.texts import number_of
from controller.ui.widgets.answerfield import AnswerField
from controller.ui.widgets.plain import Plain
from controller.ui.widgets.titlebar import TitleBar
from drivers.clock import SystemClock

_HEADINGS = {"titrant": "Standardise a titrant", "blank": "Settle a blank"}
_PORTIONS = "empty: as the method says; else 0,1512; 0,1490; 0,1533"
_VOLUMES = "0,012; none; 0,009 (none: no end point was found)"
TIME_SCALE = 10.0


class LotScreen(MethodForm):
    """Collects what the calibration needs, and starts it in its own process.

    Args:
        lab: the lab folder.
        kind: "titrant" or "blank".
    """

    HELP = "calibrations"
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("f9", "start", "Start"),
        Binding("f1", "help", "Help"),
        Binding("escape", "app.go('calibrations')", "Leave"),
        Binding("ctrl+q", "app.quit", "Quit"),
    ]

    def __init__(self, lab: Lab, kind: str) -> None:
        super().__init__(lab)
        self._kind = kind

    def compose(self) -> ComposeResult:
        """A few lines, then the questions of safety where something will be titrated."""
        names = methods_of(self._lab)
        yield TitleBar("calibrations")
        with VerticalScroll(classes="page", id="form"):
            with Vertical(id="fields"):
                yield Plain(_HEADINGS[self._kind], classes="heading")
                yield from self._fields(names)
            with Vertical(id="beside"):
                yield Plain("", id="problem", classes="problem")
                yield Vertical(id="questions")
        yield Footer(show_command_palette=False, compact=True)

    def _fields(self, names: list[str]) -> ComposeResult:
        yield from method_row(names, self._usual(names))
        yield from form_row("lot", Input(id="lot", placeholder="as on the bottle", compact=True))
        if self._kind == "titrant":
            yield from form_row("replicates", Input(value="3", id="replicates", compact=True))
            yield from form_row("or portions, g", Input(id="figures", placeholder=_PORTIONS, compact=True))
        else:
            yield from form_row("volumes, mL", Input(id="figures", placeholder=_VOLUMES, compact=True))
        there = "names of finished runs, in place of the above"
        yield from form_row("or from runs", Input(id="runs-from", placeholder=there, compact=True))
        yield from operator_row()

    def _usual(self, names: list[str]) -> str | None:
        """The first method of this purpose, else the first."""
        for name in names if self._kind == "titrant" else ():
            try:
                report = load_method(self._lab.methods / f"{name}.yaml").report_as
            except HalfdropError:
                continue
            if report is not None and report.quantity == "titrant":
                return name
        return usual_method(self._lab)

    def on_mount(self) -> None:
        """Begin at the lot."""
        self.query_one("#lot", Input).focus()

    # --- the form ----------------------------------------------------------------------------------------------------

    def on_select_changed(self, event: Select.Changed) -> None:
        """Another method: another lot, other questions."""
        if isinstance(event.value, str):
            self.run_worker(
                partial(self._look, Wanted(method=event.value)), thread=True, exclusive=True, group="prepare"
            )

    def show_method(self, prepared: Prepared) -> None:
        """Fill in the lot that the method names, and ask its questions where something is titrated."""
        self.query_one("#lot", Input).value = self._lot_of(prepared.method) or ""
        super().show_method(prepared)
        self._say_problem()

    def _lot_of(self, method: MethodSettings) -> str | None:
        return method.titrant.lot_id if self._kind == "titrant" else method.blank_lot_id

    def asks_questions(self) -> bool:
        """A blank is settled from figures or runs that are there."""
        return self._kind == "titrant"

    def on_input_changed(self, event: Input.Changed) -> None:
        """What is typed is looked at; runs that are there need no safety questions."""
        if event.input.id == "runs-from":
            self.query_one("#questions").display = not event.value.strip()
        self._say_problem()

    def on_input_submitted(self, _event: Input.Submitted) -> None:
        """Enter goes to the next field."""
        self.focus_next()

    def _say_problem(self) -> None:
        try:
            self._arguments()
        except ValueError as error:
            text = str(error)
        else:
            text = ""
        self.query_one("#problem", Plain).say(printable_lines(text))

    def _typed(self, name: str) -> str:
        return self.query_one(f"#{name}", Input).value.strip()

    def _arguments(self) -> list[str]:
        """The command's arguments; ValueError with words where something is wrong."""
        method = self.query_one("#method", Select).value
        if not isinstance(method, str) or self._prepared is None:
            raise ValueError("choose a method")
        lot, runs = self._typed("lot"), [name for name in re.split(r"[;,\s]+", self._typed("runs-from")) if name]
        if not lot:
            raise ValueError("lot: give it a name, as on the bottle")
        given = [method, f"--lot-id={lot}"]
        if self._typed("operator"):
            given.append(f"--operator={self._typed('operator')}")
        if runs:
            known = {path.stem for path in list_records(self._lab.runs)}
            if unknown := [name for name in runs if name not in known]:
                raise ValueError(f"from runs: there is no record {printable(unknown[0])}; the archive shows the names")
            return [*given, "--from", *runs]
        return [*given, *self._figures()]

    def _figures(self) -> list[str]:
        typed = self._typed("figures")
        if self._kind == "blank":
            if not typed:
                raise ValueError("give volumes, or the names of runs without sample")
            return [f"--volumes-ml={figures_of(typed, what='volumes', or_none=True)}"]
        if typed:
            return [f"--portions={figures_of(typed, what='portions')}"]
        count = self._typed("replicates")
        if not (count.isdecimal() and 1 <= int(count) <= 20):
            raise ValueError(f"replicates: got {printable(count)!r}, allowed: 1 to 20")
        return [f"--replicates={int(count)}"]

    # --- the start ---------------------------------------------------------------------------------------------------

    def action_start(self) -> None:
        """Start, where everything is filled in and answered."""
        try:
            given = self._arguments()
        except ValueError as error:
            self.notify(str(error), severity="error", markup=False)
            return
        titrates = self._kind == "titrant" and "--from" not in given
        fields = list(self.query(AnswerField)) if titrates else []
        if self._all_answered(fields) and not self._starting:
            self._starting = True
            answers = {one.question.key: one.answer or "" for one in fields}
            self.notify("starting")
            self.run_worker(partial(self._begin, given, answers, titrates), thread=True, group="start")

    def _begin(self, given: list[str], answers: dict[str, str], titrates: bool) -> None:
        app: Any = self.app
        lab = self._lab
        simulated = self._prepared is not None and self._prepared.simulated
        timed = [f"--time-scale={TIME_SCALE:g}"] if simulated and titrates else []
        command, records = ("calibrate", self._kind), lab.runs if titrates else lab.calibrations
        before = frozenset(list_records(lab.calibrations)) if lab.calibrations.is_dir() else frozenset()
        try:
            # --from takes every word up to the next option: it stays last of these
            arguments = [given[0], "--attended", *timed, *given[1:]]
            said = answers if titrates else None
            started = start_run(lab, arguments, answers=said, command=command, records=records)
            record = record_of(started, SystemClock())
        except HalfdropError as error:
            app.call_from_thread(self._not_started, str(error))
        else:
            speed = TIME_SCALE if timed else None
            app.call_from_thread(app.open_run, record, speed=speed, calibrations_before=before)

    def action_help(self) -> None:
        """Help for this screen."""
        self.app.push_screen(help_of("calibrations"))


def figures_of(typed: str, *, what: str, or_none: bool = False) -> str:
    """Return typed figures as the command line takes them.

    Args:
        typed: numbers with decimal point or comma, between them semicolons or blanks.
        what: they are, for the message.
        or_none: the word "none" may stand for a figure.

    Raises:
        ValueError: something is no such number.
    """
    said = []
    for word in re.split(r"[;\s]+", typed.strip(" ;")):
        value = number_of(word.rstrip(","))
        if or_none and word.rstrip(",").casefold() == "none":
            said.append("none")
        elif value is None or (value <= 0 and not or_none):
            least = "numbers" if or_none else "numbers above 0"
            raise ValueError(f"{what}: got {word!r}, allowed: {least}, with ; between")
        else:
            said.append(repr(value))
    return ",".join(said)
