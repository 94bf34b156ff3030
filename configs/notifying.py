"""Settings of a bench's messages to people who are elsewhere: a command or a web address, told when something is up."""

from __future__ import annotations

from typing import Literal

from pydantic import Field

from configs.fields import Disagreement, Settings, number

Occasion = Literal["end", "failure", "question"]


class NotifySettings(Settings):
    """Who is told. The message is one JSON object: to the command on standard input, to the web address as body."""

    command: tuple[str, ...] | None = Field(
        default=None, min_length=1, max_length=50, description="program and its arguments, each for itself; no shell"
    )
    webhook: str | None = Field(
        default=None, pattern=r"^https?://[^\s]{1,2000}$", description="address that takes JSON by POST"
    )
    on: tuple[Occasion, ...] = Field(
        default=("end", "failure", "question"), min_length=1, max_length=3, description="occasions to tell of"
    )
    time_limit_s: float = number(1, 300, "time after which a message is given up", default=20.0)
    question_after_s: float = number(0, 86400, "questions before that run time are not told of", default=60.0)

    def disagreements(self) -> list[Disagreement]:
        """Return messages that nobody gets."""
        if self.command is None and self.webhook is None:
            return [Disagreement("command", "neither command nor webhook", "a command, a webhook, or both")]
        return []
