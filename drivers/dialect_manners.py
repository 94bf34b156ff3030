"""How a device that speaks a dialect is met: who it is, and what a pump is told once after its port was opened."""

from __future__ import annotations

from typing import TYPE_CHECKING

from drivers.dialect_talk import DialectTalk
from drivers.identity import Identity
from drivers.reunion import Acquaintance

if TYPE_CHECKING:
    from configs.dialectfile import DialectSettings, PumpSayings, Saying

#: silence of the controller after which the pump halts of itself, where the dialect can say so
WATCHDOG_S = 5.0


def ask_identity(talk: DialectTalk, dialect: DialectSettings, saying: Saying | None) -> Identity:
    """Ask who a device is; what it does not say comes from the dialect, its number from its address.

    Raises:
        DeviceError: silent, garbled or gone.
    """
    told = talk.ask(saying) if saying is not None else {}
    return Identity(
        maker=told.get("maker", dialect.maker),
        model=told.get("model", dialect.model),
        serial=told.get("serial", talk.link.name),
        firmware=told.get("firmware", "0"),
    )


class PumpManners:
    """Rate and watchdog are told after every opening of the port: the pump may have forgotten them."""

    def __init__(self, talk: DialectTalk, dialect: DialectSettings, sayings: PumpSayings, rate_ml_min: float) -> None:
        self._talk, self._sayings, self._rate_ml_min = talk, sayings, rate_ml_min
        self._instructed_for = 0
        self._acquaintance = Acquaintance(
            talk.link, lambda: ask_identity(talk, dialect, sayings.identify), self._instruct
        )

    def identity(self) -> Identity:
        """Ask who it is, and remember it. Raises: DeviceError."""
        return self._acquaintance.identity()

    def be_instructed(self) -> None:
        """Tell it, unless it was told since its port was opened. Raises: DeviceError."""
        if self._instructed_for != self._talk.link.openings:
            self._instruct()

    def _instruct(self) -> None:
        self._talk.be_set_up()
        if self._sayings.set_rate is not None:
            self._talk.repeatable(self._sayings.set_rate, {"rate": self._rate_ml_min})
        if self._sayings.watchdog is not None:
            self._talk.repeatable(self._sayings.watchdog, {"seconds": WATCHDOG_S})
        self._instructed_for = self._talk.link.openings
