"""Where the probe was left: told from the records, warned about before the next run, cleared when it is stored."""

from __future__ import annotations

import datetime as dt
from pathlib import Path
from typing import Any

import pytest

from configs.benchfile import BenchSettings
from configs.settings import shipped_bench, shipped_method
from controller.calibration.probe_record import LearnedTimes, keep_stored
from controller.calibration.slowing import slowing_texts
from controller.calibration.store import Calibration
from controller.journal import Journal, utc_text
from controller.planning.expected_in_force import Expected, expected_in_force
from controller.planning.inforce import find_in_force
from controller.planning.last_devices import LastDevices, last_devices
from controller.planning.probe_state import probe_state
from controller.records.recordfile import new_record
from controller.running.probe_left import LONG_S, ProbeLeft, probe_left, span_text
from drivers.clock import ManualClock

PROBE = "cider house probe 7"
START_S = dt.datetime(2026, 3, 2, 8, tzinfo=dt.UTC).timestamp()


def record(folder: Path, *, after_s: float = 0.0, probe: str = PROBE, lasts_s: float = 300.0, **closing: Any) -> Path:
    """A closed run, by default one in which nobody was asked."""
    folder.mkdir(exist_ok=True)
    clock = ManualClock(start_utc_s=START_S + after_s)
    sink = new_record(folder, utc_s=clock.utc_s(), label="juice", durable=False)
    journal = Journal(sink, clock)
    plan = {"titrant": {}, "pump": {"identity": "pump 1"}, "probe": {"identity": probe}}
    journal.begin({"plan": plan, "started_utc": utc_text(clock.utc_s())})
    clock.wait(lasts_s)
    journal.event("report", what="point", ph=11.24)
    journal.close("completed", result={}, **closing)
    return sink.path


def found(tmp_path: Path, probe: str | None = PROBE) -> ProbeLeft | None:
    return probe_left(tmp_path / "runs", tmp_path / "calibrations", probe)


def test_a_probe_without_a_record_or_stored_is_nowhere_left(tmp_path: Path) -> None:
    assert found(tmp_path) is None
    record(tmp_path / "runs", probe_stored="yes")
    assert found(tmp_path) is None


@pytest.mark.parametrize(
    ("closing", "words"),
    [
        ({"probe_stored": "not answered"}, "nobody said that it was rinsed and stored"),
        ({"probe_stored": "no"}, "it was not rinsed and stored"),
        ({}, "nobody said that it was rinsed and stored"),
    ],
)
def test_how_long_it_stood_counts_from_the_end_of_the_run(tmp_path: Path, closing: dict[str, str], words: str) -> None:
    path = record(tmp_path / "runs", **closing)
    left = found(tmp_path)
    assert left is not None
    assert left.stood_s(START_S + 300.0 + 7200.0) == pytest.approx(7200.0, abs=1e-3)
    told = left.text(START_S + 300.0 + 7200.0)
    assert told.startswith(f"the probe has stood in the titrated solution of {path.stem}, pH 11.2, for up to 2 h: ")
    assert words in told
    assert left.stood_s(START_S) == 0.0


def test_the_newest_record_of_this_probe_counts(tmp_path: Path) -> None:
    record(tmp_path / "runs", probe_stored="not answered")
    record(tmp_path / "runs", after_s=900.0, probe="another", probe_stored="yes")
    assert found(tmp_path) is not None
    assert found(tmp_path, probe=None) is None  # the other one was used last, and stored
    record(tmp_path / "calibrations", after_s=1800.0, probe_stored="yes")  # rinsed for its calibration
    assert found(tmp_path) is None


def test_storing_it_later_clears_it(tmp_path: Path) -> None:
    record(tmp_path / "runs", probe_stored="no")
    keep_stored(tmp_path / "calibrations", PROBE, utc_text(START_S))  # before
    assert found(tmp_path) is not None
    keep_stored(tmp_path / "calibrations", PROBE, utc_text(START_S + 4000.0))
    assert found(tmp_path) is None
    record(tmp_path / "runs", after_s=9000.0, probe_stored="no")
    assert found(tmp_path) is not None


@pytest.mark.parametrize(("later_s", "warned"), [(600.0, False), (LONG_S + 600.0, True)])
def test_only_long_standing_is_a_warning_of_the_next_run(tmp_path: Path, later_s: float, warned: bool) -> None:
    record(tmp_path / "runs", probe_stored="not answered")
    now = START_S + 300.0 + later_s
    known = find_in_force(
        shipped_method("juice-acidity"), shipped_bench(), tmp_path / "calibrations", pump_identity="pump 1",
        probe_identity=PROBE, today=dt.date(2026, 3, 2), left=found(tmp_path), now_utc_s=now,
    )  # fmt: skip
    assert any("has stood in the titrated solution" in text for text in known.traceability.warnings) == warned
    state = probe_state(tmp_path / "runs", tmp_path / "calibrations", PROBE, now_utc_s=now)
    assert any("has stood" in text for text in state.warnings)  # the bench tells it in any case


@pytest.mark.parametrize(
    ("seconds", "text"), [(59.0, "1 min"), (3599.0, "60 min"), (7200.0, "2 h"), (200000.0, "2 days")]
)
def test_times_are_told_in_the_unit_that_a_person_would_use(seconds: float, text: str) -> None:
    assert span_text(seconds) == text


def test_the_devices_of_the_newest_run_are_the_last_ones(tmp_path: Path) -> None:
    assert last_devices(tmp_path / "runs", tmp_path / "calibrations") == LastDevices()
    record(tmp_path / "runs")
    record(tmp_path / "runs", after_s=900.0, probe="another")
    assert last_devices(tmp_path / "runs", tmp_path / "calibrations") == LastDevices(pump="pump 1", probe="another")


def test_what_would_be_in_force_is_said_beforehand_and_a_refusal_too(tmp_path: Path) -> None:
    method, bench = shipped_method("juice-acidity"), shipped_bench()

    def expected(made: BenchSettings) -> Expected:
        return expected_in_force(method, made, tmp_path / "runs", tmp_path / "calibrations", today=dt.date(2026, 12, 1))

    told = expected(bench)
    assert told.refusal is None
    assert told.says[0].endswith("that of the bench file, slope 99.1 %, +3.4 mV at pH 7")
    assert told.says[1] == "probe's lag: of the bench file, 1.50 s mixing and 2.00 s film"
    assert bench.probe.calibration is not None
    old = bench.probe.calibration.model_copy(update={"calibrated_utc": "2026-10-01T08:00:00Z"})
    strict = bench.model_copy(
        update={
            "probe": bench.probe.model_copy(update={"calibration": old}),
            "calibration_rules": bench.calibration_rules.model_copy(update={"expired": "refuse"}),
        }
    )
    refused = expected(strict)
    assert refused.in_force is None
    assert "made 61 days ago, allowed: 7 days" in str(refused.refusal)


# --- slowing, from everything on record -------------------------------------------------------------------------------


def calibration(kind: str, day: int, **result: Any) -> Calibration:
    on = f"2026-03-{day:02d}"
    return Calibration(
        path=Path("c"), sha256="", kind=kind, subject=PROBE, on=on, started_utc=f"{on}T08:00:00Z", plan={},
        result={"accepted": True, **result}, intact=True,
    )  # fmt: skip


def test_a_probe_slow_in_buffers_or_in_checks_is_named() -> None:
    quick = [calibration("probe", day, response_s=12.0) for day in (1, 2, 3)]
    assert slowing_texts([], quick) == ()
    assert slowing_texts([], [*quick, calibration("probe", 9, response_s=20.0)]) == ()
    (told,) = slowing_texts([], [*quick, calibration("probe", 9, response_s=31.0)])
    assert "in buffers it answers within 31 s, it was 12 s in its first calibrations" in told
    checks = [
        calibration("response", day, response={"bulk_s": 1.5, "film_s": film}) for day, film in ((1, 2.0), (9, 4.5))
    ]
    (told,) = slowing_texts([], checks)
    assert "its fast lag is 6.0 s by the newest response check, it was 3.5 s" in told


def test_a_run_whose_record_did_not_hold_is_named_until_the_response_is_checked_again() -> None:
    run = LearnedTimes(
        run="run-1", record_sha256="", utc="2026-03-05T08:00:00Z", method="m", bulk_s=1.5,
        bulk_standard_uncertainty_s=0.2, film_s=6.0, film_standard_uncertainty_s=0.2, sum_s=7.5,
        sum_standard_uncertainty_s=0.1, transients=20, holds=False, doubt="x",
    )  # fmt: skip
    (told,) = slowing_texts([run], [])
    assert "did not answer as its record says in its last run (run-1)" in told
    after = calibration("response", 6, response={"bulk_s": 1.5, "film_s": 6.0})
    assert slowing_texts([run], [after]) == ()
