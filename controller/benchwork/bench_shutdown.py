"""The end of a working day: the pump stands, nothing caustic is left in it, the probe is stored."""

from __future__ import annotations

from collections.abc import Iterator

from configs.benchfile import BenchSettings
from controller.benchwork.bench_finding import Finding, passed_over, step, wrong
from controller.benchwork.bench_motion import TIP_OVER_WASTE
from controller.running.stopping import halted
from drivers.operator import Operator
from drivers.pump import Pump, PumpStatus

PROBE_STORED = "probe-stored"


def shut_down_steps(
    pump: Pump | None, status: PumpStatus | None, operator: Operator, bench: BenchSettings, *, empty: bool
) -> Iterator[Finding]:
    """Yield what was done and found.

    Args:
        pump: None where it does not answer.
        status: its account now.
        empty: push what the syringe holds into the waste.
    """
    if pump is None:
        yield Finding(
            step="stop",
            verdict="failed",
            what="NOT CONFIRMED STOPPED: the pump does not answer",
            remedy="Switch it off at its own switch, and look that it stands",
        )
    else:
        yield from step("stop", lambda: _stop(pump))
        if empty and status is not None:
            yield from _emptied(pump, status, operator, bench)
        elif status is not None and status.contents_ml > 0:
            yield Finding(
                step="syringe",
                verdict="warning",
                what=f"holds {status.contents_ml:.2f} mL",
                remedy="Base creeps, salts clog: empty it (--empty), rinse it with water, leave the valve closed",
            )
    stored = operator.ask(PROBE_STORED, "Probe rinsed, and in its storage solution (not in water)?", ("yes", "no"))
    if stored == "yes":
        yield Finding(step="probe", verdict="ok", what="rinsed and stored")
    else:
        yield Finding(
            step="probe",
            verdict="warning",
            what="is not stored",
            remedy="Rinse it, and stand it in its storage solution (3 mol/L potassium chloride is common practice)",
        )


def _stop(pump: Pump) -> str:
    if not halted(pump):
        raise wrong("NOT CONFIRMED STOPPED", "Switch the pump off at its own switch, and look that it stands")
    return "the pump stands, and confirms it"


def _emptied(pump: Pump, status: PumpStatus, operator: Operator, bench: BenchSettings) -> Iterator[Finding]:
    held_ml = int(status.contents_ml / bench.pump.step_ml + 1e-6) * bench.pump.step_ml
    if held_ml <= 0:
        yield Finding(step="syringe", verdict="ok", what="is empty")
        return
    if held_ml > bench.vessel.waste_ml:
        what = f"{held_ml:.2f} mL do not fit {bench.vessel.waste_ml:g} mL of waste"
        yield from passed_over(("syringe",), what, "Empty the waste, and set vessel.waste_ml to its free volume")
        return
    question = f"The pump will push {held_ml:.2f} mL. Tip over the waste vessel, eyes and hands protected?"
    if operator.ask(TIP_OVER_WASTE, question, ("yes", "no")) != "yes":
        yield from passed_over(("syringe",), "the tip is not over the waste", "Put it there, and shut down again")
        return
    yield from step(
        "syringe", lambda: pump.prime(held_ml), lambda pushed_ml: f"{pushed_ml:.3f} mL pushed into the waste"
    )
