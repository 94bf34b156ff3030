"""The simulated world of calibrations: probe among buffers, balance under the tip; devices that are not there."""

from __future__ import annotations

import math

import pytest

from configs.errors import HalfdropError
from configs.water import z_factor_ul_mg
from drivers.absent import AbsentProbe, AbsentPump
from drivers.errors import DeviceRefusedError
from simulators.balance import WeighingChemist
from simulators.buffer_beaker import BufferShelf, Settling
from simulators.chemist import ChemistError
from simulators.electrode import Electrode, ElectrodeTruth


def shelf() -> BufferShelf:
    settling = Settling(film_s=2.0, slow_s=30.0, slow_share=0.01, dead_time_s=0.0)
    return BufferShelf(
        Electrode(ElectrodeTruth(temperature_resolution_c=0.0), seed=1), {"a": 4.0, "b": 7.0}, temperature_c=25.0,
        settling=settling,
    )  # fmt: skip


def test_the_probe_settles_with_film_and_slow_layer() -> None:
    table = shelf()
    table.place("a", 0.0)
    table.place("b", 1000.0)
    left = 0.99 * math.exp(-5.0 / 2.0) + 0.01 * math.exp(-5.0 / 30.0)
    assert table.seen_ph(1005.0) == pytest.approx(7.0 - 3.0 * left, abs=1e-9)
    # Nernst slope at 25 degrees from CODATA constants: 59.1593 mV
    assert table.read(3000.0, 1).potential_mv == pytest.approx(0.0, abs=1e-6)
    table.place("a", 3000.0)
    assert table.read(9000.0, 2).potential_mv == pytest.approx(3 * 59.1593, abs=1e-3)
    with pytest.raises(HalfdropError, match="no bottle 'c'"):
        table.place("c", 9000.0)


class World:
    delivered = 0.0
    mechanism = None

    def true_delivered_ml(self, at_s: float) -> float:
        return self.delivered


def test_the_balance_reads_each_delivery_by_difference() -> None:
    world = World()
    chemist = WeighingChemist(world, lambda: 0.0, temperature_c=20.0, seed=3)  # type: ignore[arg-type]
    for total in (1.0, 3.0):
        before, world.delivered = world.delivered, total
        reading = float(chemist.ask("balance-reading-g-1-1", "?", ()))
        assert reading * z_factor_ul_mg(20.0) == pytest.approx(total - before, abs=0.0006)
    world.delivered = 5.0
    chemist.ask("tare", "?", ("yes", "stop"))
    assert abs(float(chemist.ask("balance-reading-g-1-3", "?", ()))) < 0.0006
    with pytest.raises(ChemistError, match="no rule for the question 'other'"):
        chemist.ask("other", "?", ("yes",))


def test_a_device_that_is_not_there_refuses_to_move() -> None:
    pump = AbsentPump()
    assert pump.stop()
    assert pump.delivered_ml() == 0.0
    for action in (lambda: pump.dose(1, 0.1), pump.fill, lambda: pump.prime(0.1)):
        with pytest.raises(DeviceRefusedError, match="uses no pump"):
            action()
    assert math.isnan(AbsentProbe().read().potential_mv)
