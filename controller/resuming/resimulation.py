"""A simulated bench that died with its program is brought back by doing again what the record says was done.

The simulated world is a function of its seed and of what was asked of it, so the same actions give the same answers to
the last bit; where one differs, the bench is not the run's and nothing goes on.
"""

from __future__ import annotations

from configs.errors import HalfdropError
from controller.guard import Guard
from controller.journal import Journal, encode
from controller.records.brokenrun import BrokenRun
from controller.records.recordfile import MemorySink
from controller.running.devices import Devices
from controller.running.execution import Execution
from controller.running.startcheck import check_devices
from controller.running.stopping import StopSwitch
from controller.titration.actions import Back, Command, Refused, Resumed, to_entry
from drivers.clock import Clock

_NOT_CARRIED_OUT = (Back, Command, Refused, Resumed)


def bring_back(broken: BrokenRun, devices: Devices, clock: Clock, stop: StopSwitch) -> None:
    """Carry out again on a fresh simulated bench what the record says was carried out.

    Raises:
        HalfdropError: an answer differs: another bench file, method or seed, or a run at a pace of real time.
    """
    plan, where = broken.plan, str(broken.path)
    check_devices(plan, devices)
    journal = Journal(MemorySink(), clock)
    journal.begin({})
    execution = Execution(plan, devices, journal, Guard(plan), clock=clock, stop=stop)
    for action, recorded in broken.carried_out:
        if isinstance(recorded, _NOT_CARRIED_OUT):
            continue
        again = execution.carry_out(action)
        if encode(to_entry(again)) != encode(to_entry(recorded)):
            raise HalfdropError(
                f"the simulated bench does not answer {action.kind} as it did: its file, method or seed changed, or "
                "the run went at a pace of real time and its bench died with it",
                where=where,
                remedy="What is there can be evaluated: halfdrop resume RUN --evaluate-only",
            )
