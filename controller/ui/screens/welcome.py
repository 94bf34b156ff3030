"""The first screen where there is no lab folder yet: make one, or see a simulated run."""

from __future__ import annotations

from pathlib import Path
from typing import Any, ClassVar

from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Horizontal, Vertical
from textual.screen import Screen
from textual.widgets import Button, Footer

from configs.errors import HalfdropError
from controller.labfolder import find_lab, init_lab
from controller.ui.screens.dialogs import Line
from controller.ui.widgets.plain import Plain

_TEXT = (
    "halfdrop titrates while nobody watches, and can defend the number afterwards.\n\n"
    "There is no lab folder here. A lab folder holds your bench, your methods and every record. It can be made now; "
    "its bench is a simulated one until you describe your own in bench.yaml.\n\n"
    "Safety data sheets, your local rules and licensed practice come before anything this program says."
)


class WelcomeScreen(Screen[None]):
    """Offers to make a lab folder, or the demo."""

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("m", "make", "Make a lab folder"),
        Binding("o", "open", "Open one"),
        Binding("d", "demo", "Demo"),
        Binding("q", "app.quit", "Quit"),
    ]

    def compose(self) -> ComposeResult:
        """A text and three ways on."""
        with Vertical(classes="page"):
            yield Plain("Welcome", classes="heading")
            yield Plain(_TEXT)
            with Horizontal(classes="buttons"):
                yield Button("m  Make a lab folder", id="make")
                yield Button("o  Open one", id="open")
                yield Button("d  Demo", id="demo")
        yield Footer(show_command_palette=False, compact=True)

    async def on_button_pressed(self, event: Button.Pressed) -> None:
        """As the keys."""
        await self.run_action(event.button.id or "")

    def action_make(self) -> None:
        """Ask where."""
        text = "Name a new or an empty folder."
        self.app.push_screen(Line("Make a lab folder", text, value=str(Path.home() / "titration-lab")), self._make)

    def action_open(self) -> None:
        """Ask which."""
        self.app.push_screen(Line("Open a lab folder", "Name the folder with lab.yaml."), self._open)

    def action_demo(self) -> None:
        """Make a lab folder for the demo and start its run."""
        if getattr(self.app, "start_demo", None) is not None:
            self.run_worker(self._demo, thread=True, exclusive=True)
            self.notify("making a lab folder and starting a simulated run")

    def _make(self, named: str | None) -> None:
        if named and named.strip():
            try:
                init_lab(Path(named.strip()).expanduser())
            except HalfdropError as error:
                self.notify(str(error), severity="error", timeout=12, markup=False)
            else:
                self._open(named)

    def _open(self, named: str | None) -> None:
        app: Any = self.app
        if named and named.strip():
            try:
                app.use_lab(find_lab(named.strip()))
            except HalfdropError as error:
                self.notify(str(error), severity="error", timeout=12, markup=False)

    def _demo(self) -> None:
        app: Any = self.app
        try:
            lab, record, speed = app.start_demo()
        except HalfdropError as error:
            app.call_from_thread(self.notify, str(error), severity="error", timeout=12, markup=False)
        else:
            app.lab = lab
            app.call_from_thread(app.open_run, record, speed=speed)
