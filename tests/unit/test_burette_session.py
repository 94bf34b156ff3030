"""Checking the burette step by step: deliveries in doses, readings typed in, slips of the pen, limits, correction."""

from __future__ import annotations

import datetime as dt
from typing import Any

import pytest

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from configs.settings import shipped_bench
from configs.water import z_factor_ul_mg
from controller.calibration.burette import BuretteCorrection
from controller.calibration.burette_session import check_burette, correction_to_json
from controller.calibration.planning_burette import WeighingConditions, plan_burette, read_weighings
from controller.calibration.plans import BurettePlan
from controller.planning.runplan import PumpAccount
from controller.titration.actions import (
    Action,
    Answered,
    Ask,
    Dose,
    Dosed,
    Failed,
    Observation,
    Refill,
    Refilled,
    Report,
)

WATER_C = 20.0
TODAY = dt.date(2026, 12, 1)


class Weighing:
    """A burette with a true gain and offset over a balance."""

    def __init__(self, plan: BurettePlan, *, gain: float = 1.0, offset_ml: float = 0.0) -> None:
        self.plan, self.gain, self.offset_ml = plan, gain, offset_ml
        self.doses: list[Dose] = []
        self.delivered_ml = 0.0
        self.readings = 0
        self.typed: dict[str, str] = {}
        self.refills = 0
        self.emptied = 0
        self.said: list[str] = []

    def answer(self, action: Action) -> Observation | None:
        match action:
            case Report(text=text):
                self.said.append(text)
                return None
            case Dose(number=number, volume_ml=volume_ml):
                self.doses.append(action)
                self.delivered_ml += volume_ml
                return Dosed(at_s=0.0, number=number, volume_ml=volume_ml)
            case Refill():
                self.refills += 1
                return Refilled(at_s=0.0, contents_ml=10.0)
            case Ask(key=key):
                self.emptied += key == "weighing-vessel-empty"
                return Answered(key=key, answer=self.typed.get(key) or self._told(key))
        raise AssertionError(action)

    def _told(self, key: str) -> str:
        if not key.startswith("balance-reading-g"):
            return "yes"
        true_ml = self.gain * self.delivered_ml + self.offset_ml
        self.delivered_ml = 0.0
        self.readings += 1
        wobble = 1e-4 * (-1) ** self.readings  # 0.1 mg either way
        return f"{true_ml / z_factor_ul_mg(WATER_C) + wobble:.5f}"

    def check(self) -> dict[str, Any]:
        core, seen = check_burette(self.plan), None
        try:
            while True:
                seen = self.answer(core.send(seen))
        except StopIteration as end:
            result: dict[str, Any] = end.value
            return result


def plan(readings: dict[float, tuple[float, ...]] | None = None, bench: BenchSettings | None = None) -> BurettePlan:
    return plan_burette(
        bench or shipped_bench(),
        pump=PumpAccount(identity="b", start_count=1, last_dose_number=7, contents_ml=10.0, reservoir_ml=250.0),
        today=TODAY,
        last=None,
        conditions=WeighingConditions(water_temperature_c=WATER_C),
        readings_g=readings,
    )


def test_ten_deliveries_at_three_volumes_find_gain_and_offset() -> None:
    table = Weighing(plan(), gain=1.001, offset_ml=-0.002)
    found = table.check()["calibration"]
    assert found["passed"]
    assert [one["deliveries"] for one in found["series"]] == [10, 10, 10]
    assert [one["set_volume_ml"] for one in found["series"]] == [1.0, 5.0, 10.0]
    assert found["series"][2]["systematic_error_ul"] == pytest.approx(1000 * (0.01 - 0.002), abs=0.1)
    line = found["correction"]
    assert line["gain"] == pytest.approx(1.001, abs=2e-5)
    assert line["offset_ml"] == pytest.approx(-0.002, abs=1e-4)
    assert all(dose.volume_ml <= 1.0 + 1e-9 for dose in table.doses)  # the bench's largest dose
    assert [dose.number for dose in table.doses] == list(range(8, 8 + len(table.doses)))
    assert sum(dose.volume_ml for dose in table.doses) == pytest.approx(10 * 16.0)
    assert table.refills >= 15
    assert table.emptied >= 2  # 160 mL do not fit the vessel of 100 mL


def test_beyond_its_limits_it_fails_by_name() -> None:
    found = Weighing(plan(), gain=1.005).check()["calibration"]  # +50 uL at 10 mL, allowed 30
    assert not found["passed"]
    assert found["verdict"].startswith("failed: systematic error at 10 mL")
    assert "enter your edition's limits" in found["verdict"]


def test_the_limits_of_the_bench_file_come_first() -> None:
    made = shipped_bench()
    rules = made.calibration_rules
    own = rules.burette.model_copy(update={"systematic_ul": 60.0, "random_ul": 5.0})
    bench = made.model_copy(update={"calibration_rules": rules.model_copy(update={"burette": own})})
    found = Weighing(plan(bench=bench), gain=1.005).check()["calibration"]
    assert found["passed"]
    assert "bench file" in found["verdict"]


def test_a_slip_of_the_pen_and_a_negative_mass_are_asked_again() -> None:
    table = Weighing(plan())
    table.typed = {"balance-reading-g-1-1": "-0.9971", "balance-reading-g-1-2": "9.971"}
    assert table.check()["calibration"]["passed"]
    stubborn = Weighing(plan())
    stubborn.typed = {f"balance-reading-g-1-1{again}": "-0.9971" for again in ("", "-again")}
    result = stubborn.check()
    assert "allowed: a number above 0" in result["reason"]
    assert result["calibration"]["accepted"] is False


def test_a_pump_that_fails_ends_the_check() -> None:
    table = Weighing(plan())
    plain = table.answer

    def failing(action: Action) -> Observation | None:
        if isinstance(action, Dose) and action.number == 10:
            return Failed(device="pump", what="no reply", number=10, lowest_ml=0.0, highest_ml=action.volume_ml)
        return plain(action)

    table.answer = failing  # type: ignore[method-assign]
    result = table.check()
    assert "no reply" in result["reason"]
    assert not result["calibration"]["accepted"]


def test_readings_made_before_need_no_pump(tmp_path: Any) -> None:
    path = tmp_path / "weighings.csv"
    z = z_factor_ul_mg(WATER_C)
    lines = [f"{volume},{volume / z + 1e-4 * (-1) ** n:.5f}" for volume in (1, 5, 10) for n in range(10)]
    path.write_text("# balance 2\nset_volume_ml,mass_g\n" + "\n".join(lines) + "\n")
    table = Weighing(plan(read_weighings(path)))
    found = table.check()["calibration"]
    assert found["passed"]
    assert table.doses == []
    few = Weighing(plan({1.0: (0.9972, 0.9971)}))
    assert "deliveries are missing at" in few.check()["calibration"]["verdict"]


def test_wrong_weighings_are_named_by_line(tmp_path: Any) -> None:
    path = tmp_path / "weighings.csv"
    path.write_text("set_volume_ml,mass_g\n1,0.997\n1,-0.997\n5,abc\n")
    with pytest.raises(HalfdropError, match=r"line 3: got '1' mL and '-0.997' g; line 4"):
        read_weighings(path)
    path.write_text("volume,mass\n1,2\n")
    with pytest.raises(HalfdropError, match="needed: set_volume_ml, mass_g"):
        read_weighings(path)


def test_errors_of_gain_and_offset_are_independent_about_the_pivot() -> None:
    line = BuretteCorrection(gain=1.0, offset_ml=0.0, covariance=((4e-6, -6e-7), (-6e-7, 1.2e-7)))
    made = correction_to_json(line)
    for volume in (0.0, 3.0, 10.0):
        by_parts = (
            made["offset_standard_uncertainty_ml"] ** 2
            + (made["gain_standard_uncertainty"] * (volume - made["pivot_ml"])) ** 2
        )
        assert by_parts == pytest.approx(line.delivered_ml(volume)[1] ** 2, rel=1e-9)
