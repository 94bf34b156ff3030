"""Warnings stay on the screen until somebody has read them."""

from __future__ import annotations

from textual.widgets import Static


class WarningBar(Static):
    """One line with the first unread warning and how many there are; a click reads them."""

    def __init__(self) -> None:
        super().__init__(id="warnings", markup=False)
        self._read = 0
        self._all: list[str] = []

    def show(self, warnings: list[str]) -> None:
        """Take over the run's warnings."""
        self._all = list(warnings)
        unread = len(self._all) - self._read
        self.set_class(unread > 0, "-unread")
        if unread > 0:
            count = "1 warning" if unread == 1 else f"{unread} warnings"
            self.update(f"⚠ {count}, press w to read: {self._all[self._read]}")

    def mark_read(self) -> None:
        """Everything was read."""
        self._read = len(self._all)
        self.set_class(False, "-unread")

    @property
    def all(self) -> list[str]:
        """Every warning, read or not."""
        return self._all

    async def on_click(self) -> None:
        """As the key."""
        await self.screen.run_action("warnings")
