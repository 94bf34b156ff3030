"""Before a record is begun: are these the devices that the plan was made for, and ready?"""

from __future__ import annotations

from configs.errors import HalfdropError
from controller.calibration.plans import AnyPlan
from controller.running.devices import Devices
from drivers.errors import DeviceError

#: times that a device of another name is asked again
ASK_AGAIN = 2


def check_devices(plan: AnyPlan, devices: Devices) -> tuple[dict[str, dict[str, str]], float]:
    """Ask pump and probe who they are and hold it against the plan; nothing moves.

    Returns:
        The identities by role, as plain data for the record's header, and what the pump has delivered so far, mL.

    Raises:
        DeviceError: a device does not answer.
        HalfdropError: it is another device than the plan's, or it was started or used since the plan was made.
    """
    pump, probe, status = devices.pump.identify(), devices.probe.identify(), devices.pump.status()
    for _ in range(ASK_AGAIN):  # a letter of a name may be garbled
        if (pump.key, probe.key) == (plan.pump.identity, plan.probe.identity):
            break
        pump, probe = devices.pump.identify(), devices.probe.identify()
    for role, told, planned in (("pump", pump.key, plan.pump.identity), ("probe", probe.key, plan.probe.identity)):
        if told != planned:
            raise HalfdropError(
                f"{told!r} answers, the plan was made for {planned!r}", where=role, remedy="Correct the bench file"
            )
    if status.fault and not status.moving and devices.pump.stop():  # a halt of before is acknowledged; a defect stays
        status = devices.pump.status()
    if status.fault or status.moving:
        raise DeviceError(
            f"it is not ready: {status.fault or 'it is moving'}", where=f"pump {pump.key}", remedy="Look at the pump"
        )
    if (status.start_count, status.last_dose_number) != (plan.pump.start_count, plan.pump.last_dose_number):
        raise DeviceError(
            "it was switched on again or used since the plan was made", where=f"pump {pump.key}", remedy="Start again"
        )
    identities = {
        role: {"maker": told.maker, "model": told.model, "serial": told.serial, "firmware": told.firmware}
        for role, told in (("pump", pump), ("probe", probe))
    }
    return identities, status.delivered_ml
