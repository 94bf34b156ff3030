"""One pump, two lab folders: the second run is refused before anything moves."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
import yaml

from controller.cli import main
from controller.lock import lock_device
from drivers.clock import SystemClock
from drivers.identity import Identity
from simulators.devices import ProbeDevice, PumpDevice
from simulators.nominal import nominal_bench
from simulators.port import VirtualPorts

PUMP = Identity(maker="halfdrop simulated bench", model="syringe pump", serial="shared", firmware="1")
PROBE = Identity(maker="halfdrop simulated bench", model="pH probe", serial="shared", firmware="1")


@pytest.fixture
def shared(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[tuple[Callable[[str], Path], PumpDevice]]:
    """Lab folders whose benches name ports of their own, behind which there is one and the same pump and probe."""
    monkeypatch.setenv("XDG_STATE_HOME", str(tmp_path / "state"))
    monkeypatch.setenv("LOCALAPPDATA", str(tmp_path / "state"))
    monkeypatch.delenv("HALFDROP_LAB", raising=False)
    world = nominal_bench("acetic", 1).bench
    pump, probe = PumpDevice(world.mechanism, PUMP), ProbeDevice(world.sensor, PROBE)
    with VirtualPorts(SystemClock()) as ports:

        def lab(name: str) -> Path:
            folder = tmp_path / name
            assert main(["init", str(folder)]) == 0
            bench = yaml.safe_load((folder / "bench.yaml").read_text(encoding="utf-8"))
            bench["pump"]["port"] = ports.add(f"{name}-pump", pump, "tcp").url
            bench["probe"]["port"] = ports.add(f"{name}-probe", probe, "tcp").url
            del bench["simulation"]
            (folder / "bench.yaml").write_text(yaml.safe_dump(bench), encoding="utf-8")
            (folder / "answers.yaml").write_text("protection: yes\nstirring: yes\n", encoding="utf-8")
            return folder

        yield lab, pump


@pytest.mark.parametrize(
    ("command", "taken"),
    [
        pytest.param("run", PUMP, id="a run, the pump"),
        pytest.param("run", PROBE, id="a run, the probe"),
        pytest.param("bench check", PROBE, id="a check, the probe"),
    ],
)
def test_a_device_of_a_run_in_another_lab_folder_is_refused(
    shared: tuple[Callable[[str], Path], PumpDevice],
    taken: Identity,
    command: str,
    capsys: pytest.CaptureFixture[str],
) -> None:
    lab, pump = shared
    mine, theirs = lab("mine"), lab("theirs")
    arguments = ["--lab", str(mine), "--answers", str(mine / "answers.yaml")]
    words = ["run", "juice-acidity", *arguments, "--headless"] if command == "run" else ["bench", "check", *arguments]
    if command == "bench check":
        words.append("--no-motion")
    with lock_device(taken.key, {"doing": "a run", "lab": str(theirs)}):
        status = main(words)
    said = capsys.readouterr()
    assert status == (2 if command == "run" else 1)
    assert "in use by process" in said.out + said.err
    assert list((mine / "runs").glob("*.jsonl")) == []
    assert pump.mechanism.tip_steps_total(SystemClock().now_s()) == 0
