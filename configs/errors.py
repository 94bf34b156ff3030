"""The one error root: every error says where, what was wrong, and what to do."""

from __future__ import annotations


class HalfdropError(Exception):
    """An error with a place, a fact and a remedy, printed in one line.

    Args:
        what: the fact, with the value got and what is allowed (numbers with units).
        where: file, device, setting or record that it concerns.
        remedy: what the person can do about it.
    """

    #: exit status of a command that ends with this error (2: wrong use or settings; 3: device failure or safety stop)
    exit_status = 2

    def __init__(self, what: str, *, where: str, remedy: str) -> None:
        super().__init__(f"{where}: {what}. {remedy}.")
        self.what, self.where, self.remedy = what, where, remedy


class SettingsError(HalfdropError):
    """One or more wrong settings; `problems` holds one line each, `file:line:column: key: got ..., allowed ...`."""

    def __init__(self, problems: list[str], *, where: str) -> None:
        count = f"{len(problems)} wrong setting{'s' if len(problems) != 1 else ''}"
        super().__init__(count, where=where, remedy="Correct what is listed and start again")
        self.problems = problems

    def __str__(self) -> str:
        return "\n".join(self.problems)
