"""The titrant that is left, for a bench whose pump does not tell: by the lab's own account."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace

from configs.benchfile import PumpSettings
from configs.errors import HalfdropError
from controller.assembly import OpenBench
from controller.commands.output import say
from controller.labfolder import Lab
from controller.running.titrant_account import TitrantAccount, account_of, keep


@contextmanager
def titrant_counted(lab: Lab, pump: PumpSettings, bench: OpenBench) -> Iterator[OpenBench]:
    """Yield the bench with the titrant left by the lab's own account, where the pump does not tell; book afterwards."""
    if bench.reservoir_told or pump.refill == "none":
        yield bench
        return

    def account() -> TitrantAccount:
        return account_of(
            lab.path,
            lab.runs,
            pump=bench.account.identity,
            filled_ml=pump.reservoir_ml,
            changed_utc=pump.reservoir_changed_utc,
        )

    left_ml = account().reservoir_left_ml(syringe_ml=pump.syringe_ml, contents_ml=bench.account.contents_ml)
    try:
        yield replace(bench, account=replace(bench.account, reservoir_ml=left_ml))
    finally:
        try:
            keep(lab.path, account())
        except HalfdropError as error:  # the records say the same
            say(f"halfdrop: {error}")
