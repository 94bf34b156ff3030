"""A series of samples: its file checked whole with line numbers, its runs, its failure rule, resumed in the middle."""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Any

import pytest

from configs.errors import HalfdropError, SettingsError
from configs.settings import shipped_method, shipped_methods
from controller.cli import main
from controller.commands import seriesrun as command
from controller.curves.tablefile import TableError
from controller.labfolder import init_lab
from controller.planning.series import Series, read_series, titrations_of
from controller.records.record import read_record
from controller.records.seriesrecord import read_state
from controller.records.verification import verify
from controller.running.outcome import RunResult


def find(name: str) -> Any:
    if name not in shipped_methods():
        raise HalfdropError(f"no method {name!r}", where="methods", remedy="x")
    return shipped_method(name)


def read(tmp_path: Path, text: str) -> Series:
    path = tmp_path / "samples.csv"
    path.write_text(text, encoding="utf-8")
    return read_series(path, usual_method="juice-acidity", find=find, fits=lambda method, choice: None)


def test_lines_become_items(tmp_path: Path):
    series = read(
        tmp_path,
        "# press of 4 May\nid;amount;method;replicates\npress 1;10,5;;3\n"
        "KHP;0,151;standardise-sodium-hydroxide;\n\nwater;;wash-water-alkalinity;2\n",
    )
    assert [(one.line, one.sample_id, one.method, one.amount, one.replicates) for one in series.items] == [
        (3, "press 1", "juice-acidity", 10.5, 3),
        (4, "KHP", "standardise-sodium-hydroxide", 0.151, 1),
        (6, "water", "wash-water-alkalinity", None, 2),
    ]
    assert series.titrations == 6
    assert [one.key for one in titrations_of(series.items)][:4] == [
        ("press 1", 1), ("press 1", 2), ("press 1", 3), ("KHP", 1),
    ]  # fmt: skip
    assert series.items[1].choice(series.methods["standardise-sodium-hydroxide"]).mass_g == 0.151
    assert series.items[0].choice(series.methods["juice-acidity"]).volume_ml == 10.5


@pytest.mark.parametrize(
    ("line", "says"),
    [
        pytest.param("b,-1,,", "amount: got '-1', allowed: above 0 to 5000 mL", id="negative amount"),
        pytest.param("b,0,,", "amount: got '0', allowed", id="no amount at all"),
        pytest.param("b,1e9,,", "amount: got '1e9', allowed", id="impossible amount"),
        pytest.param("b,ten,,", "amount: got 'ten', allowed: a number", id="a word"),
        pytest.param("b,=1+1,,", "amount: '=1+1' is a formula, not a number", id="formula"),
        pytest.param("A,1,,", "id: 'A' stands in line 2 already", id="doubled id, other case"),
        pytest.param(",1,,", "id: got '', allowed: 1 to 200 printable characters", id="no id"),
        pytest.param("b,1,,0", "replicates: got '0', allowed: a whole number from 1 to 20", id="no replicate"),
        pytest.param("b,1,,2.5", "replicates: got '2.5'", id="half a replicate"),
        pytest.param("b,1,nothing,", "method: no method 'nothing'", id="unknown method"),
    ],
)
def test_a_wrong_line_is_named(tmp_path: Path, line: str, says: str):
    with pytest.raises(SettingsError) as caught:
        read(tmp_path, f"id,amount,method,replicates\na,1,,\n{line}\n")
    assert f"samples.csv:3: {says}" in str(caught.value)


def test_every_problem_is_told_at_once(tmp_path: Path):
    with pytest.raises(SettingsError) as caught:
        read(tmp_path, "id,amount\na,-1\na,2\nb,0\n")
    assert len(caught.value.problems) == 3


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("1,2\n3,4\n", "no header line"),
        ("amount\n1\n", "no column id"),
        ("id,amout\na,1\n", "unknown column 'amout' (did you mean"),
        ("id,amount,volume_ml\na,1,1\n", "says the same as"),
        ("id,mass_g\na,1\n", "takes its sample by volume"),
    ],
)
def test_a_wrong_header_is_named(tmp_path: Path, text: str, says: str):
    with pytest.raises((SettingsError, TableError)) as caught:
        read(tmp_path, text)
    assert says in str(caught.value)


def test_too_many_titrations_are_refused(tmp_path: Path):
    rows = "".join(f"s{number},1,,20\n" for number in range(51))
    with pytest.raises(SettingsError, match="1020 titrations, allowed: up to 1000"):
        read(tmp_path, f"id,amount,method,replicates\n{rows}")


@pytest.fixture
def lab(tmp_path: Path) -> Path:
    folder = tmp_path / "lab"
    init_lab(folder)
    return folder


def samples(lab: Path, text: str) -> str:
    path = lab / "samples.csv"
    path.write_text(text)
    return str(path)


def run(lab: Path, file: str, *more: str) -> int:
    return main(["run", "juice-acidity", "--series", file, "--lab", str(lab), "--headless", "--json", *more])


TWO = "id,amount,replicates\npress 1,10,2\npress 2,9,1\n"


def test_a_series_runs_and_is_summed_up(lab: Path, capsys: pytest.CaptureFixture[str]):
    assert run(lab, samples(lab, TWO)) == 0
    document = json.loads(capsys.readouterr().out)
    first, second = document["samples"]
    assert (first["outcomes"], second["outcomes"]) == (["completed"] * 2, ["completed"])
    summary = first["summary"]
    values = [
        (read_record(lab / "runs" / f"{name}.jsonl").closing or {})["result"]["result"]["value"]
        for name in first["runs"]
    ]
    assert values[0] != values[1]  # each beaker has its own noise
    assert summary["result"]["value"] == pytest.approx(sum(values) / 2, rel=1e-6)
    assert summary["count"] == 2
    plan = read_record(lab / "runs" / f"{second['runs'][0]}.jsonl").header["plan"]
    assert (plan["sample"]["sample_id"], plan["sample"]["volume_ml"]) == ("press 2", 9.0)
    [path] = (lab / "series").glob("*.jsonl")
    assert verify(path).state == "intact"
    assert read_state(path).closed


def test_nothing_moves_where_a_line_is_wrong(lab: Path, capsys: pytest.CaptureFixture[str]):
    # 90 mL of sample do not fit into the 50 mL that the method has in the vessel
    assert run(lab, samples(lab, "id,amount\na,10\nb,90\n")) == 2
    assert "samples.csv:3: amount: got 90 mL of sample, allowed: at most 50 mL" in capsys.readouterr().err
    assert not list((lab / "runs").glob("*.jsonl"))
    assert not (lab / "series").exists()


def failing(monkeypatch: pytest.MonkeyPatch, numbers: set[int]) -> list[int]:
    """Let some calls fail before anything moves, and the others end at once; returns the list of calls."""
    calls: list[int] = []

    def titrate(*given: Any, **more: Any) -> RunResult:
        calls.append(len(calls) + 1)
        if calls[-1] in numbers:
            raise HalfdropError("no reply within 1 s", where="pump", remedy="Switch it on")
        result = {"duration_s": 1.0}
        return RunResult(
            outcome="completed", reason=None, result=result, exit_status=0, record="none", steps=0, stop_confirmed=None
        )

    monkeypatch.setattr(command, "titrate_once", titrate)
    return calls


def interrupting(monkeypatch: pytest.MonkeyPatch, number: int) -> None:
    """Let one call be interrupted at the keyboard before anything moves."""
    calls: list[int] = []
    original = command.titrate_once

    def titrate(*given: Any, **more: Any) -> RunResult:
        calls.append(len(calls) + 1)
        if calls[-1] == number:
            raise KeyboardInterrupt
        return original(*given, **more)

    monkeypatch.setattr(command, "titrate_once", titrate)


THREE = "id,amount\na,10\nb,10\nc,10\n"


@pytest.mark.parametrize(
    ("rule", "failures", "expected"),
    [
        ("skip", {2}, (["completed", "refused", "completed"], 3)),
        ("repeat-once", {2}, (["completed", "completed", "completed"], 4)),
        ("repeat-once", {2, 3}, (["completed", "refused", "completed"], 4)),
        ("stop", {2}, (["completed", "refused", "not titrated"], 2)),
    ],
)
def test_a_failed_sample_goes_by_the_rule(rule, failures, expected, lab, monkeypatch, capsys):  # noqa: PLR0917
    outcomes, calls = expected
    made = failing(monkeypatch, failures)
    status = run(lab, samples(lab, THREE), "--on-failure", rule)
    document = json.loads(capsys.readouterr().out)
    assert [one["outcomes"][0] for one in document["samples"]] == outcomes
    assert len(made) == calls
    assert (status == 0) == (outcomes == ["completed"] * 3)
    [path] = (lab / "series").glob("*.jsonl")
    assert read_state(path).closed == (rule != "stop")


def test_a_series_goes_on_in_the_middle(lab: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]):
    interrupting(monkeypatch, 2)
    assert run(lab, samples(lab, THREE)) == 130
    monkeypatch.undo()
    capsys.readouterr()
    [path] = (lab / "series").glob("*.jsonl")
    state = read_state(path)
    assert (state.closed, state.under_way, list(state.ended)) == (False, ("b", 1), [("a", 1)])
    with path.open("ab") as file:
        file.write(b'{"line":99,"torn')
    assert main(["resume", path.stem, "--lab", str(lab), "--headless", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert [one["outcomes"] for one in document["samples"]] == [["completed"]] * 3
    assert len(list((lab / "runs").glob("*.jsonl"))) == 3
    assert verify(path).state == "intact"
    assert main(["resume", path.stem, "--lab", str(lab), "--headless"]) == 2
    assert "the series has its end" in capsys.readouterr().err


def test_the_run_that_broke_off_goes_on_first(lab: Path, capsys: pytest.CaptureFixture[str]):
    assert run(lab, samples(lab, "id,amount\na,10\nb,10\n")) == 0
    runs = sorted((lab / "runs").glob("*.jsonl"), key=lambda path: path.stat().st_mtime)
    data = runs[1].read_bytes()
    runs[1].write_bytes(data[: len(data) * 2 // 3])
    [path] = (lab / "series").glob("*.jsonl")
    lines = path.read_bytes().splitlines(keepends=True)
    begun = [place for place, line in enumerate(lines) if b'"titration-begun"' in line]
    path.write_bytes(b"".join(lines[: begun[1] + 1]))
    capsys.readouterr()
    assert main(["resume", path.stem, "--lab", str(lab), "--headless", "--json"]) == 0
    told = capsys.readouterr()
    assert f"going on with the run that broke off: {runs[1].stem}" in told.err
    document = json.loads(told.out)
    assert document["samples"][1]["runs"] == [runs[1].stem]
    assert len(list((lab / "runs").glob("*.jsonl"))) == 2
    assert verify(runs[1]).state == "intact"


def test_an_operator_can_skip_or_end(lab: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]):
    answers = tmp_path / "answers.yaml"
    answers.write_text("next-sample: skip\n")
    assert run(lab, samples(lab, THREE), "--answers", str(answers)) == 1
    assert [one["outcomes"] for one in json.loads(capsys.readouterr().out)["samples"]] == [["skipped"]] * 3
    answers.write_text("next-sample: end\n")
    assert run(lab, samples(lab, THREE), "--answers", str(answers)) == 3
    assert "go on with: halfdrop resume" in capsys.readouterr().err
    assert not list((lab / "runs").glob("*.jsonl"))


def test_options_of_a_single_run_do_not_go_with_a_series(lab: Path, capsys: pytest.CaptureFixture[str]):
    assert run(lab, samples(lab, TWO), "--sample-id", "x") == 2
    assert "--sample-id stands beside --series" in capsys.readouterr().err


@pytest.mark.parametrize(("limit_ph", "status"), [(0.05, 0), (0.001, 3)])
def test_the_check_buffer_is_read_in_between(
    lab: Path, limit_ph: float, status: int, capsys: pytest.CaptureFixture[str]
):
    bench = lab / "bench.yaml"
    rules = f"calibration_rules:\n  probe:\n    largest_check_error_ph: {limit_ph}\n"
    bench.write_text(re.sub(r"calibration_rules:\n(  .*\n)+", rules, bench.read_text()))
    assert run(lab, samples(lab, "id,amount\na,10\nb,10\n"), "--check-buffer-every", "1") == status
    told = capsys.readouterr()
    done = [one["outcomes"] for one in json.loads(told.out)["samples"]]
    assert done == [["completed"], ["completed"] if status == 0 else ["not titrated"]]
    [path] = (lab / "series").glob("*.jsonl")
    checks = [json.loads(line) for line in path.read_text().splitlines() if '"buffer-check"' in line]
    # the simulated electrode differs from its calibration by 0.1 % of slope and 0.4 mV: some 0.005 pH at pH 9.18
    assert all(0.001 < abs(one["error_ph"]) < 0.03 for one in checks)
    assert [one["passed"] for one in checks] == ([True, True] if status == 0 else [False])
    assert read_state(path).closed == (status == 0)


def test_a_bench_without_a_check_buffer_is_told(lab: Path, capsys: pytest.CaptureFixture[str]):
    bench = lab / "bench.yaml"
    bench.write_text(bench.read_text().replace("role: check", "role: calibration"))
    assert run(lab, samples(lab, TWO), "--check-buffer-every", "1") == 2
    assert "keeps no check buffer" in capsys.readouterr().err
    assert run(lab, samples(lab, TWO), "--check-buffer-every", "0") == 2
    assert "--check-buffer-every: got 0, allowed: 1 to 1000" in capsys.readouterr().err
