"""The report of a whole run: what stands in it, nothing in it from outside, hostile text stays text."""

from __future__ import annotations

import base64
import csv
import hashlib
import io
import json
import math
import subprocess
import sys
import xml.etree.ElementTree as ET
from collections.abc import Callable
from html.parser import HTMLParser
from pathlib import Path

import pytest

from controller.cli import main
from controller.records.record import list_records, read_record
from controller.records.verification import verify
from controller.report.contents import report_contents
from controller.report.export import data_package, tables
from controller.report.page import render
from controller.report.series_of_runs import found_replicates
from controller.report.wording import local_time

Run = Callable[..., tuple[int, str, str]]
pytestmark = pytest.mark.usefixtures("own_place")
HOSTILE = (
    "<script>alert(1)</script>\"'><img src=x onerror=alert(2)>&amp; =cmd|' /C calc'!A0 \x1b[31mred\x07"
    " {{ 7 * 7 }} $x^2$"
)
VOID = {"meta", "img", "br", "hr", "link", "input"}


class Page(HTMLParser):
    """Every element with its attributes, every text, and the tags that did not close in order."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.texts: list[str] = []
        self.open: list[str] = []
        self.wrong: list[str] = []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        if not self.open or self.open.pop() != tag:
            self.wrong.append(tag)

    def handle_data(self, data: str) -> None:
        self.texts.append(data)

    def all(self, tag: str) -> list[dict[str, str | None]]:
        return [attributes for name, attributes in self.elements if name == tag]

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.texts).split())


@pytest.fixture(scope="module")
def runs(tmp_path_factory: pytest.TempPathFactory) -> list[Path]:
    """Two runs of juice and one of wash water, made once."""
    folder = tmp_path_factory.mktemp("report")
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("XDG_STATE_HOME", str(folder / "state"))
        patch.setenv("LOCALAPPDATA", str(folder / "state"))
        lab = folder / "cider-lab"
        assert main(["init", str(lab)]) == 0
        for method, seed in (("juice-acidity", "1"), ("juice-acidity", "2"), ("wash-water-alkalinity", "4")):
            given = ["run", method, "--lab", str(lab), "--seed", seed, "--operator", HOSTILE, "--sample-id", HOSTILE]
            assert main([*given, "--headless"]) == 0
    return list_records(lab / "runs")


@pytest.fixture(scope="module")
def page(runs: list[Path]) -> Page:
    contents = report_contents(read_record(runs[0]), written_utc="2026-12-01T15:00:00Z", replicates=[])
    return Page(render(contents))


def test_the_page_is_well_formed_and_takes_nothing_from_outside(page: Page) -> None:
    assert page.wrong == []
    assert page.open == []
    tags = {name for name, _ in page.elements}
    assert not tags & {"script", "iframe", "object", "embed", "link", "form", "base", "a", "audio", "video"}
    for _, attributes in page.elements:
        assert not [name for name in attributes if name.startswith("on")]
        assert not set(attributes) & {"href", "srcset", "background", "style"}
    for image in page.all("img"):
        assert str(image["src"]).startswith("data:image/svg+xml;base64,")
    policies = [m["content"] for m in page.all("meta") if m.get("http-equiv") == "Content-Security-Policy"]
    assert policies == ["default-src 'none'; img-src data:; style-src 'unsafe-inline'"]


def test_hostile_text_stays_text(page: Page) -> None:
    assert "<script>alert(1)</script>" in page.text
    assert "{{ 7 * 7 }}" in page.text
    assert not [c for text in page.texts for c in text if not c.isprintable() and c not in "\n\t"]
    assert len(page.all("img")) == 3  # curve, Gran plot, residuals: none of the operator's


def test_every_figure_has_words_and_every_table_heads(page: Page) -> None:
    for image in page.all("img"):
        assert len(str(image["alt"])) > 30
    assert all(head.get("scope") in ("col", "row") for head in page.all("th"))
    assert len(page.all("table")) == len(page.all("caption"))
    assert page.all("html") == [{"lang": "en"}]
    assert any("end points at 7.3" in str(image["alt"]) for image in page.all("img"))


def test_figures_are_self_contained_and_need_no_font(page: Page) -> None:
    for image in page.all("img"):
        svg = base64.b64decode(str(image["src"]).partition(",")[2]).decode()
        tags = {element.tag.rpartition("}")[2] for element in ET.fromstring(svg).iter()}
        assert not tags & {"text", "script", "image", "style"} - {"style"}
        assert "date" not in tags
        assert "alert" not in svg


def test_the_page_says_what_a_reader_must_know(runs: list[Path], page: Page) -> None:
    record = read_record(runs[0])
    result = record.closing["result"]
    for text in (
        "Simulated bench (seed 1): no real sample was titrated.",
        f"{result['result']['value']:.3f} ± {result['result']['expanded_uncertainty']:.3f}",
        "as malic acid",
        "intact",
        str(record.closing["last_sha256"]),
        record.header["plan_sha256"],
        record.header["hashes"]["method"],
        "burette gain",
        "charge-balance fit",
        "NaOH-2026-11",
        local_time(record.header["plan"]["probe"]["calibration"]["calibrated_utc"], record.header["lab_utc_offset"]),
        "Eyes and hands protected",
        "dose 3:",
        "Safety data sheets",
        "Monte Carlo",
    ):
        assert text in page.text, text
    assert f"{record.header['started_utc'][:10]} " in page.text
    for warning in [*result["warnings"], *result.get("notes", [])]:
        assert warning in page.text
    details = page.all("details")
    assert details
    assert all("open" not in one for one in details)


def test_one_record_gives_the_same_page_twice(runs: list[Path]) -> None:
    pages = [
        render(report_contents(read_record(runs[2]), written_utc="2026-12-01T15:00:00Z")) for _ in range(2)
    ]  # fmt: skip
    assert pages[0] == pages[1]
    assert "foams" in pages[0]  # a carbonate sample with acid
    assert "hypochlorite" in pages[0]


def test_replicates_have_mean_spread_and_their_test(runs: list[Path]) -> None:
    first, second = read_record(runs[0]), read_record(runs[1])
    text = Page(render(report_contents(first, written_utc="2026-12-01T15:00:00Z", replicates=[second]))).text
    values = [one.closing["result"]["result"]["value"] for one in (first, second)]
    assert f"Mean of 2: {sum(values) / 2:.3f}" in text
    assert "Grubbs' test needs three values or more" in text
    mixed = Page(
        render(report_contents(first, written_utc="2026-12-01T15:00:00Z", replicates=[read_record(runs[2])]))
    ).text
    assert "No mean: the runs report different substances or units." in mixed


def test_an_edited_or_open_record_is_told_on_the_page(runs: list[Path], tmp_path: Path) -> None:
    data = runs[0].read_bytes()
    edited = tmp_path / "edited.jsonl"
    edited.write_bytes(data.replace(b'"volume_ml":0.1,', b'"volume_ml":0.2,', 1))
    text = Page(render(report_contents(read_record(edited), written_utc="2026-12-01T15:00:00Z"))).text
    assert "not as the program wrote it" in text
    opened = tmp_path / "open.jsonl"
    opened.write_bytes(data[: data.rstrip(b"\n").rfind(b"\n") + 1])
    text = Page(render(report_contents(read_record(opened), written_utc="2026-12-01T15:00:00Z"))).text
    assert "no closing line" in text
    assert "no amount" in text


def test_a_record_cut_off_before_any_point_still_has_a_page(runs: list[Path], tmp_path: Path) -> None:
    lines = runs[0].read_bytes().splitlines(keepends=True)
    cut = tmp_path / "cut.jsonl"
    cut.write_bytes(b"".join(lines[:12]))
    text = Page(render(report_contents(read_record(cut), written_utc="2026-12-01T15:00:00Z"))).text
    assert "No figures" in text
    assert "not answered" not in text.partition("Questions and answers")[0]


def test_the_command_writes_into_the_lab_folder_and_replaces_only_reports(halfdrop: Run, runs: list[Path]) -> None:
    lab = runs[0].parent.parent
    status, out, _ = halfdrop("runs", "report", runs[0].stem, "--lab", str(lab), "--json")
    assert status == 0
    told = json.loads(out)
    written = Path(told["report"])
    assert written == lab / "reports" / f"{runs[0].stem}.html"
    assert told["record"]["state"] == "intact"
    assert halfdrop("runs", "report", runs[0].stem, "--lab", str(lab))[0] == 0  # an earlier report may go
    other = lab / "reports" / "notes.html"
    other.write_text("<p>mine</p>", encoding="utf-8")
    status, _, err = halfdrop("runs", "report", runs[0].stem, "--lab", str(lab), "--to", str(other))
    assert status == 2
    assert "no report is in the way" in err
    assert other.read_text(encoding="utf-8") == "<p>mine</p>"
    assert not list((lab / "reports").glob("*.part"))


def test_an_edited_record_ends_the_command_with_status_1(halfdrop: Run, runs: list[Path], tmp_path: Path) -> None:
    edited = tmp_path / "edited.jsonl"
    edited.write_bytes(runs[0].read_bytes().replace(b'"volume_ml":0.1,', b'"volume_ml":0.2,', 1))
    status, out, _ = halfdrop("runs", "report", str(edited))
    assert status == 1
    assert "edited" in out
    assert "\x1b" not in out
    assert (tmp_path / "edited.html").is_file()


def test_a_run_loads_neither_matplotlib_nor_jinja2(runs: list[Path]) -> None:
    modules = (
        "controller.assembly", "controller.runner", "controller.commands.run", "controller.curves.evaluate_record",
        "controller.report.export", "controller.records.reevaluation", "controller.commands.evaluate",
        "controller.commands.runs",
    )  # fmt: skip
    code = f"import sys, {', '.join(modules)}; print(sorted({{'matplotlib', 'jinja2'}} & set(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_evaluations_are_added_beside_the_record_and_shown(halfdrop: Run, runs: list[Path]) -> None:
    record, lab = runs[1], str(runs[1].parent.parent)
    before = record.read_bytes()
    for reason in ("newer program", HOSTILE):
        status, out, err = halfdrop("evaluate", record.stem, "--lab", lab, "--add", "--reason", reason)
        assert status == 0, err
        assert "added beside the record" in out
    assert record.read_bytes() == before
    assert verify(record).state == "intact"
    assert [path.name for path in list_records(record.parent)] == [path.name for path in runs]
    _, out, _ = halfdrop("runs", "show", record.stem, "--lab", lab)
    assert "evaluated again, no. 1" in out
    assert "\x1b" not in out
    told = json.loads(halfdrop("runs", "show", record.stem, "--lab", lab, "--json")[1])["added_evaluations"]
    assert [one["state"] for one in told] == ["intact", "intact"]
    own = read_record(record).closing["result"]["end_points"][0]
    again = told[0]["result"]["end_points"][0]
    assert again["volume_ml"] == pytest.approx(own["volume_ml"], abs=2e-7)
    # the run may have widened its own by what it saw in time, which points alone do not tell
    assert 0.0005 < again["standard_uncertainty_ml"] < 1.01 * own["standard_uncertainty_ml"]
    text = Page(render(report_contents(read_record(record), written_utc="2026-12-01T15:00:00Z"))).text
    assert "Evaluations side by side" in text
    assert "newer program" in text
    told_path = Path(told[0]["path"])
    told_path.write_bytes(told_path.read_bytes().replace(b"newer program", b"older program"))
    text = Page(render(report_contents(read_record(record), written_utc="2026-12-01T15:00:00Z"))).text
    assert "FILE EDITED" in text


def test_a_curve_without_an_end_point_is_evaluated_all_the_same(halfdrop: Run, tmp_path: Path) -> None:
    table = tmp_path / "flat.csv"
    table.write_text("volume_ml,ph\n" + "".join(f"{i},{4.0 + 0.01 * i}\n" for i in range(12)), encoding="utf-8")
    status, out, err = halfdrop("evaluate", str(table), "--identify", "--json")
    assert status == 1, err
    told = json.loads(out)
    assert told["end_points"] == []
    assert {one["region"] for one in told["regions"]} == {"no end point is known"}
    assert told["identity"]["candidates"] == []
    assert told["identity"]["refused"]


def test_add_needs_a_record(halfdrop: Run, tmp_path: Path) -> None:
    table = tmp_path / "curve.csv"
    table.write_text("volume_ml,ph\n0,3\n1,4\n2,5\n3,6\n4,10\n5,11\n", encoding="utf-8")
    status, _, err = halfdrop("evaluate", str(table), "--add")
    assert status == 2
    assert "beside a record" in err


def test_every_exported_cell_is_of_the_type_that_the_package_states(runs: list[Path]) -> None:
    # Table Schema (frictionlessdata.io): number, integer and boolean as its text defines them; missing is empty
    record = read_record(runs[2])
    files = tables(record)
    package = data_package(record, files)
    assert {one["path"] for one in package["resources"]} == {
        "points.csv",
        "readings.csv",
        "doses.csv",
        "end_points.csv",
        "results.csv",
        "budget.csv",
    }
    for resource in package["resources"]:
        text = files[resource["path"]]
        assert resource["hash"] == f"sha256:{hashlib.sha256(text.encode()).hexdigest()}"
        head, *rows = csv.reader(io.StringIO(text))
        fields = resource["schema"]["fields"]
        assert head == [one["name"] for one in fields]
        assert rows
        for row in rows:
            for cell, field in zip(row, fields, strict=True):
                assert fits(cell, field["type"]), (resource["path"], field["name"], cell)
    doses = list(csv.DictReader(io.StringIO(files["doses.csv"])))
    assert float(doses[-1]["delivered_ml"]) == pytest.approx(record.closing["result"]["titrant_ml"])
    reported = [one for one in csv.DictReader(io.StringIO(files["end_points.csv"])) if one["reported"] == "true"]
    assert [one["end_point"] for one in reported] == ["1", "2"]
    (amount,) = csv.DictReader(io.StringIO(files["results.csv"]))
    assert float(amount["value"]) == record.closing["result"]["result"]["value"]
    assert amount["unit"] == record.closing["result"]["result"]["unit"]
    shares = [float(row["share"]) for row in csv.DictReader(io.StringIO(files["budget.csv"]))]
    assert sum(shares) == pytest.approx(1.0)
    assert not any(cell[:1] in ("=", "+", "-", "@") for one in doses for cell in (one["reason"],))


def fits(cell: str, kind: str) -> bool:
    """Whether a cell is empty or of a Table Schema type."""
    if cell == "" or kind == "string":
        return True
    if kind == "boolean":
        return cell in ("true", "false")
    try:
        return math.isfinite(float(cell)) and (kind != "integer" or cell.lstrip("-").isdigit())
    except ValueError:
        return False


def test_a_calibration_has_a_report_and_a_run_names_the_calibration_it_took(halfdrop: Run, tmp_path: Path) -> None:
    lab = tmp_path / "cider-lab"
    assert halfdrop("init", str(lab))[0] == 0
    status, _, err = halfdrop("calibrate", "probe", "--lab", str(lab), "--headless")
    assert status == 0, err
    (record,) = list_records(lab / "calibrations")
    status, out, err = halfdrop("runs", "report", record.stem, "--lab", str(lab), "--json")
    assert status == 0, err
    page = Page(Path(json.loads(out)["report"]).read_text(encoding="utf-8"))
    assert page.wrong == []
    findings = read_record(record).closing["result"]["calibration"]["findings"]
    assert findings
    for one in findings:
        assert str(one["quantity"]) in page.text
    for text in ("in force from", "B7-204", "nothing real was measured", "technical 7.00"):
        assert text in page.text
    assert "Titration curve" not in page.text
    assert halfdrop("run", "juice-acidity", "--lab", str(lab), "--headless")[0] == 0
    (run,) = list_records(lab / "runs")
    text = Page(render(report_contents(read_record(run), written_utc="2026-12-01T15:00:00Z"))).text
    assert f"record {record.stem}, unchanged since" in text
    assert hashlib.sha256(record.read_bytes()).hexdigest() in text
    with record.open("ab") as file:
        file.write(b"{}\n")
    text = Page(render(report_contents(read_record(run), written_utc="2026-12-01T15:00:00Z"))).text
    assert "has changed since the run took it over" in text


def test_a_series_of_replicates_is_found_by_itself(halfdrop: Run, tmp_path: Path) -> None:
    lab = tmp_path / "cider-lab"
    assert halfdrop("init", str(lab))[0] == 0
    for _ in range(2):  # a second series of the same sample stays apart
        given = ["run", "juice-acidity", "--lab", str(lab), "--headless", "--replicates", "2"]
        assert halfdrop(*given)[0] == 0
    records = sorted((read_record(path) for path in list_records(lab / "runs")), key=lambda r: r.header["started_utc"])
    names = [one.path.stem for one in records]
    found = [[other.path.stem for other in found_replicates(one)] for one in records]
    assert found == [[names[1]], [names[0]], [names[3]], [names[2]]]
    status, _, err = halfdrop("runs", "report", names[0], "--lab", str(lab))
    assert status == 0, err
    page = Page((lab / "reports" / f"{names[0]}.html").read_text(encoding="utf-8"))
    assert "mean of 2 runs" in page.text
    assert "repeatability" in page.text
