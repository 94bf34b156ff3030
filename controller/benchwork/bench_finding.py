"""One step of a walk through a bench, and what was found."""

from __future__ import annotations

from collections.abc import Callable, Generator, Iterator
from dataclasses import dataclass
from typing import Literal, TypeVar

from configs.errors import HalfdropError
from drivers.errors import DeviceError, StoppedError

Verdict = Literal["ok", "warning", "failed", "passed over"]
Answer = TypeVar("Answer")


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """One line of the walk."""

    step: str
    verdict: Verdict
    what: str
    remedy: str | None = None


def step(
    name: str, act: Callable[[], Answer], text: Callable[[Answer], str] = str
) -> Generator[Finding, None, Answer | None]:
    """Do something and yield what was found; returns its answer, None where it failed.

    Raises:
        StoppedError: somebody ended the walk.
    """
    try:
        answer = act()
    except StoppedError:
        raise
    except HalfdropError as error:
        yield Finding(step=name, verdict="failed", what=error.what, remedy=error.remedy)
        return None
    yield Finding(step=name, verdict="ok", what=text(answer))
    return answer


def passed_over(steps: tuple[str, ...], why: str, remedy: str | None = None) -> Iterator[Finding]:
    """Yield that steps were not done, and why."""
    for name in steps:
        yield Finding(step=name, verdict="passed over", what=why, remedy=remedy)


def wrong(what: str, remedy: str) -> DeviceError:
    """Return the error of a step that found something wrong."""
    return DeviceError(what, where="bench", remedy=remedy)
