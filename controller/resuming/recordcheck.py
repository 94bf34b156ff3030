"""Before a broken-off run goes on: are these its devices, and does the probe still read what it read?"""

from __future__ import annotations

import math

from configs.errors import HalfdropError
from controller.running.devices import Devices
from controller.titration.actions import Reading
from controller.titration.plan import RunPlan
from drivers.probe import Probe

#: a settled sample at rest drifts less than this; a change beyond it is asked about, mV
AT_REST_MV = 20.0
#: after a dose the potential may move by a whole jump, mV
AFTER_DOSE_MV = 400.0


def check_identities(plan: RunPlan, devices: Devices, *, where: str) -> None:
    """Refuse other devices than the run's.

    Raises:
        DeviceError: one does not answer.
        HalfdropError: another one answers.
    """
    pump, probe = devices.pump.identify(), devices.probe.identify()
    for role, told, planned in (("pump", pump.key, plan.pump.identity), ("probe", probe.key, plan.probe.identity)):
        if told != planned:
            raise HalfdropError(
                f"{role}: {told!r} answers, the run was made with {planned!r}",
                where=where,
                remedy="Connect the device that the run was made with",
            )


def check_probe(probe: Probe, *, last_reading: Reading | None, disturbed: bool) -> bool:
    """Read the probe once; True where the reading is plausible after the last one.

    Args:
        probe: the run's probe.
        last_reading: the last good reading in the record, None where there is none.
        disturbed: a dose was delivered, or may have been, since the last settled point.

    Raises:
        DeviceError: it does not answer.
    """
    now = probe.read()
    if now.status != "ok" or not math.isfinite(now.potential_mv):
        return False
    if last_reading is None:
        return True
    limit_mv = AFTER_DOSE_MV if disturbed else AT_REST_MV
    return abs(now.potential_mv - last_reading.potential_mv) <= limit_mv
