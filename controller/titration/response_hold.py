"""The response check: hold still after doses just before the end point, so that the probe's slow layer can be seen.

The readings go into the record; `controller.calibration.response` makes the probe's lag of them. A plan without a check
decides as before.
"""

from __future__ import annotations

from controller.titration.actions import Report
from controller.titration.exchange import Exchange, Talk
from controller.titration.plan import RunPlan


class ResponseHold:
    """Holds after the first doses that end within the stretch before the end point."""

    def __init__(self, plan: RunPlan) -> None:
        self._check = plan.response_check
        self._interval_s = plan.probe.reading_interval_s
        self.done = 0

    def after_dose(self, world: Exchange, equivalence_ml: float | None) -> Talk[None]:
        """Hold where this dose is one of those to be watched."""
        check = self._check
        if check is None or self.done >= check.doses or equivalence_ml is None or not world.log:
            return
        if not 0.0 < equivalence_ml - world.delivered_ml < check.within_ml:
            return
        self.done += 1
        began_s = world.log[-1][1]
        yield from world.say(
            Report(what="note", text=f"response check {self.done} of {check.doses}: holding for {check.hold_s:g} s")
        )
        while (world.now_s or 0.0) - began_s < check.hold_s:
            yield from world.wait(self._interval_s)
            yield from world.read()
