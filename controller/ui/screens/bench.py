"""The bench screen: who is there, how well it answers, what is left, and what to do where something is wrong."""

from __future__ import annotations

from functools import partial
from pathlib import Path
from typing import Any, ClassVar

from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import VerticalScroll
from textual.screen import Screen
from textual.widgets import Footer

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from configs.settings import load_bench
from controller.benchwork.work import ask_bench
from controller.calibration.store import Calibration, in_force
from controller.labfolder import Lab
from controller.records.archive_index import ArchiveIndex
from controller.records.record import printable
from controller.ui.benchtext import (
    calibration_lines,
    file_lines,
    in_force_lines,
    probe_lines,
    pump_lines,
    settings_of,
)
from controller.ui.screens.dialogs import Choice, Line, printable_lines
from controller.ui.screens.help import help_of
from controller.ui.screens.leftopen import left_open
from controller.ui.texts import number_of
from controller.ui.widgets.facts import Facts
from controller.ui.widgets.plain import Plain
from controller.ui.widgets.titlebar import TitleBar

_DOING = {
    "look": "asking the devices",
    "read": "reading the probe",
    "fill": "filling the syringe",
    "prime": "priming",
}


class BenchScreen(Screen[None]):
    """Shows the bench; devices are asked by a process of its own, so no key waits for them."""

    HELP = "bench"
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("r", "look", "Read now"),
        Binding("f", "fill", "Fill"),
        Binding("o", "prime", "Prime"),
        Binding("u", "see_to", "Go on or close"),
        Binding("y", "copy", "Copy"),
        Binding("question_mark", "help", "Help", key_display="?"),
        Binding("q,escape", "app.go('archive')", "Leave", key_display="q"),
    ]

    def __init__(self, lab: Lab) -> None:
        super().__init__()
        self._lab = lab
        self._bench: BenchSettings | None = None
        self._told: dict[str, Any] = {}
        self._open: list[Path] = []  # runs that were left without an end
        self._doing: str | None = None
        self._waited_s = 0

    def compose(self) -> ComposeResult:
        """One page of facts, and one line for what goes on."""
        yield TitleBar("bench")
        with VerticalScroll(classes="page", id="facts"):
            for part in ("file", "pump", "probe", "calibration"):
                yield Facts(id=f"bench-{part}")
            yield Facts(id="bench-open", classes="problem")
            yield Facts(id="bench-problem", classes="problem")
        yield Plain("", id="doing")
        yield Footer(show_command_palette=False, compact=True)

    def on_mount(self) -> None:
        """Read the bench file, then ask the devices."""
        self.set_interval(1.0, self._tick)
        try:
            self._bench = load_bench(self._lab.bench)
        except HalfdropError as error:
            self._say("bench-problem", printable_lines(str(error)).splitlines())
            return
        self._show()
        self.action_look()

    def _show(self) -> None:
        if self._bench is None:
            return
        self._say("bench-file", file_lines(self._bench))
        self._say("bench-pump", pump_lines(self._bench, self._told))
        record = self._in_force()
        known = None if record is None else settings_of(record)
        self._say("bench-probe", probe_lines(self._bench, self._told, known))
        lines = calibration_lines(self._bench.probe.calibration) if record is None else in_force_lines(record)
        self._say("bench-calibration", lines)
        self._say("bench-problem", self._problem_lines())
        self._say("bench-open", [f"left open   {path.stem}: u goes on with it, or closes it" for path in self._open])
        self.query_one("#bench-open").display = bool(self._open)
        self.refresh_bindings()

    def _in_force(self) -> Calibration | None:
        """The calibration of the probe that answered, if one was made here and accepted."""
        probe = self._told.get("probe")
        if not probe:
            return None
        record = in_force(self._lab.calibrations, "probe", probe["identity"])
        return record if record is not None and "line" in record.result else None

    def _problem_lines(self) -> list[str]:
        if "error" not in self._told:
            return []
        if "remedy" not in self._told:
            return [f"trouble     {printable(str(self._told['error']))}"]
        return [
            f"trouble     {printable(self._told['where'])}: {printable(self._told['what'])}",
            f"to do       {printable(self._told['remedy'])}; then press r",
        ]

    def _say(self, name: str, lines: list[str]) -> None:
        self.query_one(f"#{name}", Facts).tell(lines)

    def _tick(self) -> None:
        self._waited_s += 1
        doing = "" if self._doing is None else f"{_DOING[self._doing]}, {self._waited_s} s (keys work meanwhile)"
        self.query_one("#doing", Plain).say(doing)

    # --- actions -----------------------------------------------------------------------------------------------------

    def _ask(self, action: str, volume_ml: float | None = None) -> None:
        if self._doing is not None:
            self.notify(f"{_DOING[self._doing]} first", severity="warning")
            return
        self._doing, self._waited_s = action, 0
        self.query_one("#doing", Plain).say(_DOING[action])
        self.run_worker(partial(self._work, action, volume_ml), thread=True, group="bench")

    def _work(self, action: str, volume_ml: float | None) -> None:
        told = ask_bench(self._lab, action, volume_ml=volume_ml)
        ArchiveIndex(self._lab.runs).refresh()
        self.app.call_from_thread(self._done, told, left_open(self._lab))

    def _done(self, told: dict[str, Any], found: list[Path]) -> None:
        self._open = found
        done, self._doing = self._doing, None
        self._told = told if "error" not in told else {**self._told, **told}
        if "error" not in told:
            self._told.pop("error", None)
        if not self.is_attached:
            return
        self.query_one("#doing", Plain).say("")
        if "primed_ml" in told:
            self.notify(f"primed {told['primed_ml']:.3f} mL into the waste")
        elif done == "fill" and "error" not in told:
            self.notify("the syringe is filled")
        self._show()

    def check_action(self, action: str, parameters: tuple[object, ...]) -> bool | None:
        """Show the keys that do something now."""
        return bool(self._open) if action == "see_to" else True

    def action_see_to(self) -> None:
        """Ask what is to become of the newest run that was left open."""
        app: Any = self.app
        if self._open:
            app.see_to(self._open[0])

    def action_look(self) -> None:
        """Ask the devices and read the probe."""
        self._ask("look")

    def action_fill(self) -> None:
        """Fill the syringe, after a question."""
        question = Choice(
            "Fill the syringe?",
            "It draws from the reservoir. Eyes and hands protected, tubes tight?",
            [("y", "Yes, fill", "yes"), ("n", "No", "no")],
        )
        self.app.push_screen(question, lambda answer: self._ask("fill") if answer == "yes" else None)

    def action_prime(self) -> None:
        """Prime, after the question about the tip."""
        question = Choice(
            "Is the tip over the waste?",
            "Priming pushes titrant through the tip. It must not go into a sample.",
            [("y", "Yes", "yes"), ("n", "No", "no")],
        )
        self.app.push_screen(question, self._prime_volume)

    def _prime_volume(self, answer: str | None) -> None:
        if answer == "yes":
            ask = Line("Prime", "Volume in mL; it counts in the waste vessel.", value="0.5")
            self.app.push_screen(ask, self._prime)

    def _prime(self, typed: str | None) -> None:
        volume_ml = None if typed is None else number_of(typed)
        if volume_ml is not None and volume_ml > 0:
            self._ask("prime", volume_ml)
        elif typed is not None:
            self.notify(f"{typed!r} is no volume; allowed: a number above 0, in mL", severity="error", markup=False)

    def action_copy(self) -> None:
        """Put the page into the clipboard."""
        self.app.copy_to_clipboard("\n".join(one.text for one in self.query("#facts > Plain").results(Plain)))
        self.notify("copied")

    def action_help(self) -> None:
        """Help for this screen."""
        self.app.push_screen(help_of("bench"))
