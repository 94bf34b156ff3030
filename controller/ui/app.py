"""The application: places to go, what is opened first, and leaving without touching a run."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path
from typing import Any, ClassVar

from textual.app import App
from textual.binding import Binding, BindingType
from textual.screen import Screen

from controller.labfolder import Lab
from controller.ui.theme import DAY, NIGHT

TYPE_CHECKING = False  # screens are imported when they are opened: the first paint waits for one of them only
if TYPE_CHECKING:
    from controller.ui.screens.run import RunScreen


class HalfdropApp(App[int]):
    """The face of halfdrop.

    Args:
        lab: the lab folder, None where there is none yet.
        record: a run to open first.
        speed: of its simulated bench, where it is known.
        start_demo: starts the demo's run; returns its lab folder, its record, and how many times real time passes.
    """

    CSS_PATH = "halfdrop.tcss"
    TITLE = "halfdrop"
    ENABLE_COMMAND_PALETTE = False
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("1", "go('run')", "Run", show=False),
        Binding("2", "go('set-up')", "New run", show=False),
        Binding("3", "go('bench')", "Bench", show=False),
        Binding("4", "go('archive')", "Archive", show=False),
        Binding("5", "go('calibrations')", "Calibrate", show=False),
        Binding("f2", "colours", "Colours", show=False),
        Binding("f1,question_mark", "help", "Help", show=False),
        Binding("ctrl+q", "quit", "Quit", show=False, priority=True),
    ]

    def __init__(
        self,
        *,
        lab: Lab | None = None,
        record: Path | None = None,
        speed: float | None = None,
        start_demo: Callable[[], tuple[Lab, Path, float | None]] | None = None,
    ) -> None:
        super().__init__()
        self.start_demo = start_demo
        self.lab, self._record, self._speed = lab, record, speed
        self._offered: set[Path] = set()  # runs left open that were asked about already
        # animations would draw more often than four times a second
        self.animation_level = "none"
        self.register_theme(NIGHT)
        self.register_theme(DAY)
        self.theme = "orchard-day" if os.environ.get("HALFDROP_COLOURS") == "day" else "orchard-night"

    def get_theme_variable_defaults(self) -> dict[str, str]:
        """Names of ours that the style sheet uses, whatever the theme."""
        return NIGHT.variables

    def on_mount(self) -> None:
        """Open the first screen."""
        if self._record is not None:
            from controller.ui.screens.run import RunScreen

            self.push_screen(RunScreen(self._record, speed=self._speed))
        elif self.lab is None:
            from controller.ui.screens.welcome import WelcomeScreen

            self.push_screen(WelcomeScreen())
        else:
            self.push_screen(self._place("run") or self._place("archive") or Screen())

    # --- places ------------------------------------------------------------------------------------------------------

    def action_go(self, place: str) -> None:
        """Go to another place; a run that is left goes on."""
        if self.lab is None or self.screen.is_modal:
            return
        screen = self._place(place)
        if screen is None:
            self.notify("no run goes on in this lab folder; 2 starts one, 4 shows the finished ones")
        else:
            self.switch_screen(screen)

    def _place(self, place: str) -> Screen[Any] | None:
        assert self.lab is not None
        match place:
            case "run":
                return self._run_screen()
            case "set-up":
                from controller.ui.screens.setup import SetUpScreen

                return SetUpScreen(self.lab)
            case "bench":
                from controller.ui.screens.bench import BenchScreen

                return BenchScreen(self.lab)
            case "calibrations":
                from controller.ui.screens.calibration import CalibrationsScreen

                return CalibrationsScreen(self.lab)
            case _:
                from controller.ui.screens.archive import ArchiveScreen

                return ArchiveScreen(self.lab)

    def _run_screen(self) -> RunScreen | None:
        from controller.running.commandclient import running

        record = running(self.lab.runs) if self.lab is not None else None
        if record is None and not getattr(self.screen, "live", False):
            return None
        from controller.ui.screens.run import RunScreen

        if isinstance(self.screen, RunScreen) and self.screen.live:
            return self.screen
        return None if record is None else RunScreen(record)

    def open_run(
        self, record: Path, *, speed: float | None = None, calibrations_before: frozenset[Path] | None = None
    ) -> None:
        """Show a run or a calibration in place of the present screen.

        Args:
            record: of the run.
            speed: of its simulated bench, where it is known.
            calibrations_before: those that were there before the calibration was started that this run belongs to.
        """
        if record.parent.name == "calibrations":
            from controller.ui.screens.calibration import CalibrationScreen

            self.switch_screen(CalibrationScreen(record, speed=speed))
        else:
            from controller.ui.screens.run import RunScreen

            self.switch_screen(RunScreen(record, speed=speed, calibrations_before=calibrations_before))

    def use_lab(self, lab: Lab) -> None:
        """Take a lab folder that was just made or chosen."""
        self.lab = lab
        self.switch_screen(self._place("archive") or Screen())

    def offer_left_open(self, found: list[Path]) -> None:
        """Ask once about the newest run that was left open."""
        new = [path for path in found if path not in self._offered]
        self._offered.update(found)
        if new and self.lab is not None and not self.screen.is_modal:
            self.see_to(new[0])

    def see_to(self, record: Path) -> None:
        """Ask what is to become of a run that was left open."""
        from controller.ui.screens.leftopen import see_to

        if self.lab is not None:
            see_to(self, self.lab, record)

    # --- actions of every screen -------------------------------------------------------------------------------------

    def action_left_run(self) -> None:
        """From a run: to the archive, or out where there is none."""
        if self.lab is None:
            self.exit(0)
        else:
            self.switch_screen(self._place("archive") or Screen())

    def action_colours(self) -> None:
        """Day or night."""
        self.theme = "orchard-day" if self.theme == "orchard-night" else "orchard-night"

    def action_help(self) -> None:
        """Help where a screen has none of its own."""
        from controller.ui.screens.help import help_of

        if not self.screen.is_modal:
            self.push_screen(help_of(getattr(self.screen, "HELP", "")))

    async def action_quit(self) -> None:
        """Leave the program; a run that goes on is asked about."""
        if getattr(self.screen, "live", False) and getattr(self.screen, "listens", False):
            from controller.ui.screens.commanding import leave_question

            self.push_screen(leave_question(), self._quit)
        else:
            self.exit(0)

    def _quit(self, answer: str | None) -> None:
        if answer == "leave":
            self.exit(0)
        elif answer == "stop":
            screen: Any = self.screen
            screen.action_stop()
