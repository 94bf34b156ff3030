"""Settings of buffers, rules, preparation and back titration: defaults, and what is refused by name."""

from __future__ import annotations

import pytest

from configs.benchfile import BenchSettings
from configs.errors import SettingsError
from configs.loading import parse
from configs.method import MethodSettings
from configs.shipped import shipped_bytes

BENCH = shipped_bytes("benches", "simulated").decode()
JUICE = shipped_bytes("methods", "juice-acidity").decode()


def bench(text: str) -> BenchSettings:
    return parse(text.encode(), BenchSettings, where="bench.yaml")


def method(text: str) -> MethodSettings:
    return parse(text.encode(), MethodSettings, where="method.yaml")


def test_the_shipped_bench_keeps_three_buffers_and_a_check() -> None:
    found = bench(BENCH)
    assert [one.role for one in found.buffers] == ["calibration", "calibration", "calibration", "check"]
    rules = found.calibration_rules
    assert (rules.expired, rules.failed) == ("warn", "refuse")
    assert rules.titrant.rsd_percent == 0.2  # Ph. Eur. 4.2.2
    assert found.balance.air_density_kg_m3 == 1.2


def test_a_bench_file_without_the_new_groups_still_loads() -> None:
    start, end = BENCH.index("\nbalance:"), BENCH.index("\nsimulation:")
    found = bench(BENCH[:start] + BENCH[end:])
    assert found.buffers == ()
    assert found.calibration_rules.probe.days == 7


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        (
            "buffer: technical 7.00",
            "buffer: technical 7.10",
            r"buffers\[2\]\.buffer: got technical 7\.10.*did you mean",
        ),
        ('opened: "2026-11-20"', 'opened: "2026-13-20"', r"buffers\[1\]\.opened: got 2026-13-20.*2026-12-01"),
        ('lot_id: "B7-204"', 'lot_id: "B4-118"', r"buffers\[2\]\.lot_id: got B4-118.*a lot of its own"),
        ("expired: warn ", "expired: ignore ", r"calibration_rules\.expired: got \"ignore\", allowed: warn \| refuse"),
    ],
)
def test_a_wrong_bench_is_named(old: str, new: str, words: str) -> None:
    with pytest.raises(SettingsError, match=words):
        bench(BENCH.replace(old, new, 1))


@pytest.mark.parametrize(
    ("more", "words"),
    [
        ("preparation: {moisture_fraction: 1.2}", r"preparation\.moisture_fraction: got 1\.2, allowed: 0 to 0\.99"),
        (
            "preparation: {dilutions: [{made_up_to_ml: 100, aliquot_ml: 200}]}",
            r"aliquot_ml: got 200.*at most made_up_to_ml, 100 mL",
        ),
        ("preparation: {density_g_ml: -1}", r"preparation\.density_g_ml: got -1"),
        ("back_titration: {excess_volume_ml: 0}", r"back_titration\.excess_volume_ml: got 0"),
        ('standard: {lot_id: "1", expires: "soon tomorr"}', r"standard\.expires"),
    ],
)
def test_a_wrong_method_is_named(more: str, words: str) -> None:
    with pytest.raises(SettingsError, match=words):
        method(f"{JUICE}\n{more}\n")


def test_a_density_leads_from_volume_to_mass() -> None:
    by_mass = JUICE.replace("unit: g/L", "unit: '% m/m'")
    with pytest.raises(SettingsError, match=r"report_as\.unit"):
        method(by_mass)
    assert method(f"{by_mass}\npreparation: {{density_g_ml: 1.05}}\n").preparation is not None
