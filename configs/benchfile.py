"""Settings of a bench: vessel, pump, probe with its calibration and lag record, and the simulated world, if any."""

from __future__ import annotations

from typing import Literal

from pydantic import Field

from configs.calibrating import BalanceSettings, BufferLotSettings, CalibrationRules
from configs.fields import Disagreement, Settings, group, number, words
from configs.notifying import NotifySettings
from configs.simulation import SimulationSettings

SIMULATED_PORT = "simulated"


class VesselSettings(Settings):
    """Limits of the bench that no method can pass."""

    capacity_ml: float = number(1, 10000, "volume of the vessel up to its rim")
    displaced_ml: float = number(0, 1000, "volume that probe, tip and stirrer displace", default=5.0)
    margin_ml: float = number(0, 1000, "volume kept free below the rim", default=5.0)
    tray_ml: float = number(0, 100000, "volume that the tray under the vessel holds", default=0.0)
    waste_ml: float = number(0, 100000, "free volume of the waste vessel for priming and rinsing", default=0.0)
    largest_dose_ml: float = number(0.001, 100, "largest single dose", default=1.0)
    longest_run_s: float = number(10, 604800, "longest run", default=7200.0)
    lowest_temperature_c: float = number(-10, 100, "temperature below which a run stops", default=10.0)
    highest_temperature_c: float = number(-10, 100, "temperature above which a run stops", default=40.0)

    def disagreements(self) -> list[Disagreement]:
        """Return a vessel with no room and a window without width."""
        found = []
        if self.displaced_ml + self.margin_ml >= self.capacity_ml:
            allowed = f"less than capacity_ml less displaced_ml, {self.capacity_ml - self.displaced_ml:g} mL"
            found.append(Disagreement("margin_ml", self.margin_ml, allowed))
        if self.lowest_temperature_c >= self.highest_temperature_c:
            allowed = f"below highest_temperature_c, {self.highest_temperature_c:g} °C"
            found.append(Disagreement("lowest_temperature_c", self.lowest_temperature_c, allowed))
        return found


class PortSettings(Settings):
    """How a device is reached."""

    port: str = words(
        '"simulated", a port name, a device path, a pyserial URL, or the USB serial number of the adapter'
    )
    speaks: Literal["scpi", "dialect", "modbus"] = Field(default="scpi", description="grammar of the device")
    dialect: str | None = words(
        "how it is spoken to where it speaks no SCPI: a file of the lab folder, or the name of a shipped dialect",
        default=None,
    )
    baud_rate: int = number(300, 4000000, "symbols per second on the line", default=115200)
    dtr: bool = Field(default=False, description="state of the DTR line when the port opens; many boards restart on it")
    rts: bool = Field(default=False, description="state of the RTS line when the port opens")
    reply_time_out_s: float = number(0.05, 30, "time in which the device must answer", default=1.0)

    def disagreements(self) -> list[Disagreement]:
        """Return a dialect where none is spoken, and none where one is."""
        if (self.dialect is None) != (self.speaks == "scpi"):
            allowed = "nothing with speaks: scpi, a file or a shipped name with speaks: dialect or modbus"
            return [Disagreement("dialect", self.dialect or "nothing", allowed)]
        return []


class PumpSettings(PortSettings):
    """The syringe pump and its stated delivery errors."""

    syringe_ml: float = number(0.05, 1000, "volume of the syringe")
    step_ml: float = number(1e-7, 0.1, "smallest step", default=0.0005)
    rate_ml_min: float = number(0.01, 200, "rate of delivery", default=5.0)
    highest_rate_ml_min: float = number(0.01, 200, "rate that no method can pass", default=10.0)
    refill: Literal["valve", "by-hand", "none"] = Field(default="valve", description="how the syringe is filled again")
    reservoir_ml: float = number(0, 100000, "titrant in the reservoir bottle when it was last changed", default=0.0)
    reservoir_changed_utc: str | None = words("when that was, UTC, in quotes; change it with the bottle", default=None)
    position_sd_ml: float = number(0, 1, "standard deviation of the slowly varying position error", default=0.0009)
    position_correlation_ml: float = number(0.0001, 100, "volume over which the position error varies", default=0.05)
    dose_sd_ml: float = number(0, 1, "standard deviation of the error of each dose", default=0.00045)
    gain_standard_uncertainty: float = number(0, 0.1, "relative standard uncertainty of all volumes", default=0.001)
    titrant_temperature_standard_uncertainty_c: float = number(
        0, 20, "standard uncertainty of the titrant's temperature", default=0.5
    )

    def disagreements(self) -> list[Disagreement]:
        """Return a rate above the highest, a step larger than the syringe, and what does not fit its port."""
        found = super().disagreements()
        if self.speaks == "modbus":
            found.append(Disagreement("speaks", "modbus", "scpi | dialect: Modbus is for transmitters, not for pumps"))
        if self.rate_ml_min > self.highest_rate_ml_min:
            allowed = f"at most highest_rate_ml_min, {self.highest_rate_ml_min:g} mL/min"
            found.append(Disagreement("rate_ml_min", self.rate_ml_min, allowed))
        if self.step_ml > self.syringe_ml / 100:
            found.append(
                Disagreement("step_ml", self.step_ml, f"at most a hundredth of syringe_ml, {self.syringe_ml:g} mL")
            )
        return found


class CalibrationSettings(Settings):
    """What a calibration with buffers found."""

    slope_percent: float = number(50, 110, "slope, of the ideal slope")
    isopotential_ph: float = number(0, 14, "pH at which temperature does not change the potential", default=7.0)
    offset_mv: float = number(-200, 200, "potential at the isopotential pH")
    slope_percent_standard_uncertainty: float = number(0, 10, "standard uncertainty of the slope", default=0.3)
    offset_standard_uncertainty_mv: float = number(0, 50, "standard uncertainty of the offset", default=1.0)
    calibrated_utc: str | None = words("when it was calibrated, UTC, in quotes", default=None)


class ResponseSettings(Settings):
    """The lag of the probe in its vessel, as a response check found it."""

    bulk_s: float = number(0.01, 100, "time constant of mixing")
    film_s: float = number(0.01, 100, "time constant of the film at the glass")
    slow_s: float = number(0.1, 1000, "time constant of the slow layer")
    slow_share_percent: float = number(0, 50, "share of the slow layer")
    dead_time_s: float = number(0, 30, "delay before anything is seen")
    time_relative_uncertainty_percent: float = number(0, 100, "standard uncertainty of the times", default=10.0)
    share_relative_uncertainty_percent: float = number(0, 100, "standard uncertainty of the share", default=20.0)
    measured_utc: str | None = words("when it was measured, UTC, in quotes", default=None)


class ProbeSettings(PortSettings):
    """The probe with its meter."""

    signal: Literal["potential", "ph"] = Field(default="potential", description="what the meter gives")
    ph_standard_uncertainty: float | None = number(
        0.0001, 1, "standard uncertainty of the meter's own pH, with signal: ph", default=None
    )
    resolution_mv: float = number(0.0001, 10, "smallest step of a reading", default=0.1)
    reading_interval_s: float = number(0.05, 60, "time between readings", default=0.5)
    typed_temperature_c: float | None = number(-5, 100, "temperature where there is no sensor", default=None)
    calibration: CalibrationSettings | None = Field(default=None, description="last calibration with buffers")
    response: ResponseSettings | None = Field(
        default=None, description="last response check; left out: lag is not known"
    )

    def disagreements(self) -> list[Disagreement]:
        """Return a meter's own pH without its uncertainty, or with a calibration that is not its own."""
        found = super().disagreements()
        own = self.signal == "ph"
        if own and self.speaks == "scpi":
            found.append(Disagreement("signal", "ph", "potential with speaks: scpi, whose probes give the potential"))
        if own != (self.ph_standard_uncertainty is not None):
            allowed = "a number with signal: ph, nothing with signal: potential"
            found.append(Disagreement("ph_standard_uncertainty", self.ph_standard_uncertainty, allowed))
        if own and self.calibration is not None:
            found.append(Disagreement("calibration", "a mapping", "nothing with signal: ph: the meter has its own"))
        return found


class BenchSettings(Settings):
    """A bench file."""

    schema_version: int = number(1, 1, "version of this form of file", default=1)
    name: str = words("name of the bench")
    vessel: VesselSettings = Field(description="limits that no method can pass")
    pump: PumpSettings = Field(description="the syringe pump")
    probe: ProbeSettings = Field(description="the probe")
    balance: BalanceSettings = group(BalanceSettings, "the balance")
    buffers: tuple[BufferLotSettings, ...] = Field(
        default=(), max_length=20, description="bottles of buffer that this bench keeps"
    )
    calibration_rules: CalibrationRules = group(CalibrationRules, "limits and dates of calibrations")
    traffic_log: bool = Field(default=False, description="keep everything that goes over the lines in logs/traffic.log")
    notify: NotifySettings | None = Field(default=None, description="who is told when a run ends, fails or asks")
    simulation: SimulationSettings | None = Field(
        default=None, description="the simulated world behind simulated ports"
    )

    def disagreements(self) -> list[Disagreement]:
        """Return a simulated port without a simulation, and two bottles of one lot."""
        lots = [bottle.lot_id for bottle in self.buffers]
        found = [
            Disagreement(f"buffers.{place}.lot_id", lot, "a lot of its own for each bottle")
            for place, lot in enumerate(lots)
            if lot in lots[:place]
        ]
        if self.simulation is None:
            found += [
                Disagreement(f"{name}.port", SIMULATED_PORT, "a real port, or a group simulation in this file")
                for name, device in (("pump", self.pump), ("probe", self.probe))
                if device.port == SIMULATED_PORT
            ]
        return found
