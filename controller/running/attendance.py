"""What stands in for a person while a run goes on alone: the lab's log, messages to people elsewhere, a computer awake.

All of it looks on; nothing of it can hold up or end a run.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

from controller.running.awake import kept_awake
from controller.running.log import LabLog
from controller.running.notify import Notifier
from controller.running.outcome import RunResult
from controller.running.progress import Progress
from controller.titration.actions import Command, Failed, Refused, Report
from drivers.clock import Clock, ManualClock
from drivers.operator import Operator

if TYPE_CHECKING:
    from configs.notifying import NotifySettings

_TOLD = ("note", "warning", "end-point")


class Attendance:
    """One run's. See `attended`."""

    def __init__(
        self, log: LabLog, notifier: Notifier | None, clock: Clock, *, run: str, question_after_s: float
    ) -> None:
        self._log, self._notifier, self._clock = log, notifier, clock
        self._run, self._question_after_s = run, question_after_s
        self._began_s = clock.now_s()

    def write(self, text: str) -> None:
        """Add a line of this run to the log."""
        self._log.write(f"{self._run}: {text}", utc_s=self._clock.utc_s())

    def looking_on(self, inner: Callable[[Progress], None]) -> Callable[[Progress], None]:
        """Return what is told of every entry: `inner`, and the log."""

        def both(progress: Progress) -> None:
            if text := _line(progress.item):
                self.write(f"at {progress.at_s:.1f} s, {progress.delivered_ml:.4f} mL: {text}")
            inner(progress)

        return both

    def operator(self, inner: Operator) -> Operator:
        """Return an operator that tells people elsewhere of a question before `inner` is asked."""
        return _TellingOperator(inner, self._asked)

    def ended(self, result: RunResult) -> None:
        """The run is over and its record closed."""
        occasion: Any = "end" if result.exit_status == 0 else "failure"
        self.write(
            f"{result.outcome}, exit status {result.exit_status}" + (f" ({result.reason})" if result.reason else "")
        )
        kept = {key: result.result.get(key) for key in ("end_points", "result", "warnings", "doses", "duration_s")}
        self._tell(occasion, {"outcome": result.outcome, "reason": result.reason, **kept})

    def failed(self, error: BaseException) -> None:
        """The run ended by an error."""
        what = f"{type(error).__name__}: {error}"
        self.write(f"ended by an error: {what}")
        self._tell("failure", {"outcome": "failed", "reason": what})

    def _asked(self, key: str, text: str, choices: Sequence[str]) -> None:
        self.write(f"question {key}: {text}")
        if self._clock.now_s() - self._began_s >= self._question_after_s:  # nobody is told what they sit before
            self._tell("question", {"key": key, "question": text, "choices": list(choices)})

    def _tell(self, occasion: Any, facts: dict[str, Any]) -> None:
        if self._notifier is not None:
            self._notifier.tell(occasion, {"run": self._run, **facts})


class _TellingOperator:
    def __init__(self, inner: Operator, asked: Callable[[str, str, Sequence[str]], None]) -> None:
        self._inner, self._asked = inner, asked

    def ask(self, key: str, text: str, choices: tuple[str, ...]) -> str:
        """Tell that something is asked, then ask."""
        self._asked(key, text, choices)
        return self._inner.ask(key, text, choices)

    def tell(self, text: str) -> None:
        """Pass it on."""
        self._inner.tell(text)


@contextmanager
def attended(logs: Path, notify: NotifySettings | None, clock: Clock, *, run: str) -> Iterator[Attendance]:
    """Look on while the block carries out a run; messages under way get their time at its end.

    Args:
        logs: folder of the lab's log.
        notify: who is told of what, None: nobody.
        clock: the run's; under a manual clock no time passes that the computer could sleep through.
        run: the record's name, as it stands in log and messages.
    """
    log = LabLog(logs)
    notifier = (
        None if notify is None else Notifier(notify, lambda text: log.write(f"{run}: {text}", utc_s=clock.utc_s()))
    )
    after_s = 0.0 if notify is None else notify.question_after_s
    attendance = Attendance(log, notifier, clock, run=run, question_after_s=after_s)
    with ExitStack() as held:
        held.callback(log.close)
        if notifier is not None:
            held.callback(notifier.finish)
        if not isinstance(clock, ManualClock) and not held.enter_context(kept_awake(f"titration {run}")):
            attendance.write("nothing is known to keep this computer awake; see to its settings")
        attendance.write("begins")
        try:
            yield attendance
        except BaseException as error:
            attendance.failed(error)
            raise


def _line(item: Any) -> str:
    match item:
        case Report(what=what, text=text) if what in _TOLD:
            return f"{what}: {text}"
        case Refused(what=what):
            return f"refused: {what}"
        case Failed(device=device, what=what):
            return f"{device} failed: {what}"
        case Command(name=name, text=text):
            return f"command {name}" + (f": {text}" if text else "")
    return ""
