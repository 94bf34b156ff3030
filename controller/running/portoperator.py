"""Questions of a run without a terminal: put to whoever watches it, once the answers given beforehand are at an end.

A run that nobody ever watched fails at a question without an answer, as a run with an answers file always did. Once
somebody watched, a question that the run needs waits for them; the one about the probe, when everything else is done,
waits only as long as they are there: the record must be closed.
"""

from __future__ import annotations

from controller.running.aftercare import RINSE_AND_STORE
from controller.running.commandport import CommandPort
from controller.running.stopping import StopSwitch
from drivers.clock import Clock
from drivers.errors import StoppedError
from drivers.operator import AnswerMissingError, Operator

#: a viewer says hello more often than this, s
GONE_AFTER_S = 15.0
_LOOK_S = 0.2


class PortOperator:
    """Asks the answers given beforehand first, then the viewers.

    Args:
        beforehand: who knows the answers that were given.
        port: the run's command port.
        clock: real time.
        stop: the run's stop switch.
        attended: somebody will watch: questions wait from the beginning.
    """

    def __init__(
        self, beforehand: Operator, port: CommandPort, clock: Clock, stop: StopSwitch, *, attended: bool = False
    ) -> None:
        self._beforehand, self._port, self._clock, self._stop = beforehand, port, clock, stop
        self._attended = attended

    def ask(self, key: str, text: str, choices: tuple[str, ...]) -> str:
        """Return the answer given beforehand, or the viewers'.

        Raises:
            AnswerMissingError: there is none, and nobody watches.
            StoppedError: the run was halted or stopped meanwhile.
        """
        try:
            return self._beforehand.ask(key, text, choices)
        except AnswerMissingError:
            if not (self._attended or self._port.watched_within(None)):
                raise
            with self._port.asking(key, text, choices):
                while (answer := self._port.answer) is None:
                    if key == RINSE_AND_STORE.key and not self._port.watched_within(GONE_AFTER_S):
                        raise
                    if self._clock.wait(_LOOK_S, self._stop.event):
                        raise StoppedError(
                            "stopped at a question", where="operator", remedy="Go on or end the run"
                        ) from None
            return answer

    def tell(self, text: str) -> None:
        """Pass on what needs no answer."""
        self._beforehand.tell(text)
