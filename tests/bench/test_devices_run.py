"""Whole runs on benches that speak a dialect or Modbus, with drop-outs, and the bench commands."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
import yaml

from controller.records.record import read_record
from controller.running.trafficlog import TrafficFile

Run = Callable[..., tuple[int, str, str]]
pytestmark = pytest.mark.usefixtures("own_place")
DIALECT = {"speaks": "dialect", "dialect": "orchard-lane-pump"}
PROBE = {"speaks": "dialect", "dialect": "orchard-lane-probe"}
MODBUS = {"speaks": "modbus", "dialect": "orchard-lane-transmitter"}
PH_METER = {
    "speaks": "dialect", "dialect": "orchard-lane-ph-meter", "signal": "ph", "ph_standard_uncertainty": 0.02,
    "calibration": None, "resolution_mv": 0.06,
}  # fmt: skip
# the simulated juice by stoichiometry, see tests/bench/test_commands.py
TRUE_JUICE_ML = 10.0 * (2 * 0.045 + 3 * 0.001 - 0.020) / 0.0997


@pytest.fixture
def lab(tmp_path: Path, halfdrop: Run) -> Callable[..., Path]:
    """Makes a lab folder whose bench has some settings put in place (None takes one away)."""
    folder = tmp_path / "cider-lab"
    assert halfdrop("init", str(folder))[0] == 0

    def made(**groups: Any) -> Path:
        path = folder / "bench.yaml"
        bench = yaml.safe_load(path.read_text(encoding="utf-8"))
        for name, keys in groups.items():
            if isinstance(keys, dict):
                bench[name] = {key: value for key, value in {**bench[name], **keys}.items() if value is not None}
            else:
                bench[name] = keys
        path.write_text(yaml.safe_dump(bench), encoding="utf-8")
        return folder

    return made


@pytest.mark.parametrize(
    ("pump", "probe", "link"),
    [
        pytest.param(DIALECT, PROBE, "memory", id="dialect"),
        pytest.param(DIALECT, PROBE, "tcp", id="dialect over TCP"),
        pytest.param({}, MODBUS, "memory", id="Modbus"),
        pytest.param(DIALECT, PH_METER, "memory", id="a meter's own pH"),
    ],
)
def test_a_whole_run_finds_what_is_in_the_beaker(
    halfdrop: Run, lab: Callable[..., Path], pump: dict[str, Any], probe: dict[str, Any], link: str
) -> None:
    folder = lab(pump=pump, probe=probe, simulation={"link": link})
    status, out, err = halfdrop("run", "juice-acidity", "--lab", str(folder), "--json")
    assert status == 0, err
    result = json.loads(out)
    (point,) = result["end_points"]
    assert abs(point["volume_ml"] - TRUE_JUICE_ML) < 4 * point["standard_uncertainty_ml"]
    record = read_record(Path(result["run"]))
    assert sum(entry["steps"] for entry in record.of("dosed")) * 0.0005 == pytest.approx(result["titrant_ml"])
    plan = record.entries[0]["plan"] if "plan" in record.entries[0] else record.header["plan"]
    calibration = plan["probe"]["calibration"]
    if probe is PH_METER:
        # 0.02 pH at the ideal slope of 59.16 mV (25 degrees C)
        assert calibration["source"] == "meter"
        assert calibration["offset_standard_uncertainty_mv"] == pytest.approx(0.02 * 59.16, abs=1e-3)
    else:
        assert calibration["source"] == "buffers"


@pytest.mark.parametrize("grammar", ["scpi", "dialect"])
@pytest.mark.parametrize("link", ["memory", "pty"])
def test_a_run_goes_on_after_its_devices_dropped_out_and_came_back_elsewhere(
    halfdrop: Run, lab: Callable[..., Path], tmp_path: Path, grammar: str, link: str
) -> None:
    if link == "pty":
        pytest.importorskip("pty")
    groups = {"pump": DIALECT, "probe": PROBE} if grammar == "dialect" else {}
    folder = lab(**groups, simulation={"link": link})
    faults = tmp_path / "faults.yaml"
    faults.write_text(
        "faults:\n"
        "  - {what: unplugged, device: probe, at_s: 60, for_s: 20, other_port: true}\n"
        "  - {what: unplugged, device: pump, at_dose: 4, for_s: 3, other_port: true}\n",
        encoding="utf-8",
    )
    status, out, err = halfdrop("run", "juice-acidity", "--lab", str(folder), "--faults", str(faults), "--json")
    assert status in (0, 1), err
    result = json.loads(out)
    assert result["outcome"] == "completed", result["reason"]
    (point,) = result["end_points"]
    assert abs(point["volume_ml"] - TRUE_JUICE_ML) < 4 * point["standard_uncertainty_ml"]
    steps = sum(entry.get("steps") or 0 for entry in read_record(Path(result["run"])).entries)
    assert steps * 0.0005 == pytest.approx(result["titrant_ml"])


def test_a_pump_that_counts_nothing_is_refused_for_an_unattended_run(halfdrop: Run, lab: Callable[..., Path]) -> None:
    folder = lab(pump={**DIALECT, "dialect": "countless.yaml"})
    from configs.shipped import shipped_bytes

    text = shipped_bytes("dialects", "orchard-lane-pump").decode()
    (folder / "countless.yaml").write_text(
        "\n".join(line for line in text.splitlines() if not line.startswith("  delivered: {say")), encoding="utf-8"
    )
    status, _, err = halfdrop("run", "juice-acidity", "--lab", str(folder))
    assert status == 2
    assert "no simulated pump speaks 'countless.yaml'" in err  # a file of one's own is for real devices
    bench = yaml.safe_load((folder / "bench.yaml").read_text(encoding="utf-8"))
    bench["pump"]["port"], bench["probe"]["port"] = "/dev/no-such-pump", "/dev/no-such-probe"
    (folder / "bench.yaml").write_text(yaml.safe_dump(bench), encoding="utf-8")
    (folder / "answers.yaml").write_text("protection: yes\n", encoding="utf-8")
    arguments = ("--headless", "--answers", str(folder / "answers.yaml"))
    status, _, err = halfdrop("run", "juice-acidity", "--lab", str(folder), *arguments)
    assert status == 2
    assert "refused for unattended runs" in err
    assert "neither the volume delivered" in err


@pytest.mark.parametrize(
    ("pump", "probe", "problem"),
    [
        ({"dialect": "orchard-lane-pump"}, {}, "pump.dialect: got orchard-lane-pump, allowed: nothing with speaks"),
        ({"speaks": "dialect"}, {}, "pump.dialect: got nothing"),
        ({**MODBUS}, {}, "Modbus is for transmitters, not for pumps"),
        ({}, {**PH_METER, "ph_standard_uncertainty": None}, "probe.ph_standard_uncertainty"),
        ({}, {"signal": "ph", "ph_standard_uncertainty": 0.02}, "potential with speaks: scpi"),
        ({}, {**PH_METER, "signal": "potential", "ph_standard_uncertainty": None}, "probe.signal is potential"),
        ({"speaks": "dialect", "dialect": "orchard-lane-probe"}, {}, "no simulated pump speaks 'orchard-lane-probe'"),
        ({"speaks": "dialect", "dialect": "orchard-lane-pumb"}, {}, "orchard-lane-pump"),
    ],
    ids=range(8),
)  # fmt: skip
def test_settings_that_do_not_fit_are_named(
    halfdrop: Run, lab: Callable[..., Path], pump: dict[str, Any], probe: dict[str, Any], problem: str
) -> None:
    status, _, err = halfdrop("run", "juice-acidity", "--lab", str(lab(pump=pump, probe=probe)))
    assert status == 2
    assert problem in err


def test_a_missing_library_is_named(halfdrop: Run, lab: Callable[..., Path], monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(__import__("sys").modules, "minimalmodbus", None)
    status, _, err = halfdrop("run", "juice-acidity", "--lab", str(lab(probe=MODBUS)))
    assert status == 2
    assert "minimalmodbus, which is not installed" in err
    assert "extra modbus" in err


# the bench commands


def test_the_bench_is_checked_found_ready_and_shut_down(halfdrop: Run, lab: Callable[..., Path]) -> None:
    folder = str(lab(pump=DIALECT, probe=PROBE))
    status, out, _ = halfdrop("bench", "check", "--lab", folder, "--json")
    told = json.loads(out)
    assert (status, told["verdict"]) == (0, "all is well")
    assert told["findings"][1] == {
        "step": "pump: identity", "verdict": "ok", "what": told["findings"][1]["what"], "remedy": None,
    }  # fmt: skip
    status, out, _ = halfdrop("bench", "ready", "--lab", folder)
    assert status == 0
    assert "no run is open" in out
    assert "dry dose" not in out
    status, out, _ = halfdrop("bench", "shut-down", "--lab", folder, "--empty")
    assert status == 0
    assert "10.000 mL pushed into the waste" in out


def test_a_check_that_fails_has_exit_status_1(halfdrop: Run, lab: Callable[..., Path]) -> None:
    folder = lab(pump={"port": "/dev/no-such-pump"}, probe={"port": "/dev/no-such-probe"})
    (folder / "answers.yaml").write_text("tip-over-waste: yes\nprobe-stored: no\n", encoding="utf-8")
    arguments = ("--lab", str(folder), "--answers", str(folder / "answers.yaml"))
    status, out, _ = halfdrop("bench", "check", *arguments)
    assert status == 1
    assert "-> Check that it is connected" in out
    assert "verdict: 2 failed" in out
    status, out, _ = halfdrop("bench", "shut-down", *arguments)
    assert status == 1
    assert "NOT CONFIRMED STOPPED" in out


def test_what_is_pushed_outside_runs_counts_in_the_titrant_left(halfdrop: Run, lab: Callable[..., Path]) -> None:
    """The pump of the dialect does not tell its reservoir."""
    folder = lab(pump=DIALECT)

    def used_ml() -> float:
        [account] = json.loads((folder / "titrant-left.json").read_text(encoding="utf-8"))
        return float(account["used_ml"])

    assert halfdrop("bench", "check", "--lab", str(folder))[0] == 0
    assert used_ml() == pytest.approx(0.1 + 0.083 + 0.4165, abs=0.002)  # as the check says, see test_bench_check.py
    assert halfdrop("bench", "check", "--no-motion", "--lab", str(folder))[0] == 0
    assert used_ml() == pytest.approx(0.5995, abs=0.002)
    assert halfdrop("bench", "shut-down", "--lab", str(folder), "--empty")[0] == 0
    assert used_ml() == pytest.approx(10.5995, abs=0.01)
    status, out, err = halfdrop("run", "juice-acidity", "--lab", str(folder), "--json")
    assert status == 0, err
    assert used_ml() == pytest.approx(10.5995 + json.loads(out)["titrant_ml"], abs=0.01)
    record = read_record(Path(json.loads(out)["run"]))
    assert record.header["plan"]["pump"]["reservoir_ml"] < 250.0


def test_ports_are_listed_and_nothing_is_opened(halfdrop: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    from drivers.serialport import SerialPort

    listed = [
        SerialPort(path="/dev/ttyUSB0", description="adapter \x1b[2J", usb_serial="OL-7", usb_vendor_product=None)
    ]
    monkeypatch.setattr("drivers.ports.serial_ports", lambda: listed)
    monkeypatch.setattr("drivers.heldport.open_port", lambda *given: pytest.fail("a port was opened"))
    status, out, _ = halfdrop("bench", "ports")
    assert status == 0
    assert out.splitlines()[1].startswith("OL-7")
    assert "\x1b" not in out
    status, out, _ = halfdrop("bench", "ports", "--json")
    assert json.loads(out)["ports"][0]["stable"] == "OL-7"


# the traffic log


def test_lines_are_logged_on_request_only(halfdrop: Run, lab: Callable[..., Path]) -> None:
    folder = lab()
    log = folder / "logs" / "traffic.log"
    assert halfdrop("bench", "check", "--no-motion", "--lab", str(folder))[0] == 0
    assert not log.exists()
    assert halfdrop("bench", "check", "--no-motion", "--lab", str(folder), "--traffic-log")[0] == 0
    text = log.read_text(encoding="ascii")
    assert " probe > b'" in text
    assert " pump < b'" in text
    log.unlink()
    lab(traffic_log=True)
    assert halfdrop("bench", "check", "--no-motion", "--lab", str(folder))[0] == 0
    assert log.exists()


def test_the_traffic_log_turns_over_and_stays_bounded(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("controller.running.trafficlog.LARGEST_BYTES", 2000)
    file = TrafficFile(tmp_path)
    line = file.line("pump")
    for index in range(1000):
        line.sent(float(index), b"\x1b[2J\xff" * 5)
    file.close()
    kept = sorted(path.name for path in tmp_path.iterdir())
    assert kept == ["traffic.log", *[f"traffic.log.{number}" for number in range(1, 5)]]
    assert sum(path.stat().st_size for path in tmp_path.iterdir()) <= 5 * 2000
    assert b"\x1b" not in (tmp_path / "traffic.log").read_bytes()


def test_a_full_disk_ends_the_traffic_log_and_not_the_run(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    file = TrafficFile(tmp_path)
    line = file.line("pump")

    def full(*given: object) -> None:
        raise OSError(28, "no space left on device")

    monkeypatch.setattr("logging.StreamHandler.flush", full)
    line.sent(1.0, b"x")
    line.sent(2.0, b"y")
    assert [data for _, _, data in line.entries] == [b"x", b"y"]
    monkeypatch.undo()
    file.close()
