"""Before the first dose: readings at rest, and the temperature that the sample is taken to have."""

from __future__ import annotations

from statistics import median

from controller.titration.exchange import Exchange, Talk
from controller.titration.noise import READINGS
from controller.titration.plan import RunPlan
from controller.titration.probewatch import ProbeWatch

LIQUID_C = (0.0, 100.0)


def rest_readings(world: Exchange, probe: ProbeWatch, plan: RunPlan) -> Talk[tuple[list[float], list[float]]]:
    """Read until there are enough good readings in a row at rest; potentials and temperatures."""
    potentials: list[float] = []
    temperatures: list[float] = []
    while len(potentials) < READINGS:
        reading = yield from world.read()
        if world.disturbed:  # not at rest: a dose by hand, a gap
            world.disturbed = False
            potentials, temperatures = [], []
        if probe.is_good(reading):
            potentials.append(reading.potential_mv)
            if reading.temperature_c is not None:
                temperatures.append(reading.temperature_c)
        yield from world.wait(plan.probe.reading_interval_s)
    return potentials, temperatures


def sample_temperature_c(world: Exchange, plan: RunPlan, temperatures: list[float]) -> Talk[float]:
    """The temperature measured at rest where it can be believed, else the plan's."""
    temperature_c = plan.chemistry.temperature_c
    calibration = plan.probe.calibration
    if calibration is not None and calibration.source == "meter":
        temperatures = []  # its own pH became a potential at the plan's temperature, and becomes pH again there
    if temperatures and LIQUID_C[0] <= (measured_c := round(median(temperatures), 1)) <= LIQUID_C[1]:
        temperature_c = measured_c
    elif temperatures:
        yield from world.warn(f"the temperature sensor reads {measured_c:.1f} °C: {temperature_c:.1f} °C is taken")
    return temperature_c
