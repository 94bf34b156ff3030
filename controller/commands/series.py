"""halfdrop run METHOD --series FILE: samples one after another, with prompts between them, resumable in the middle."""

from __future__ import annotations

import argparse
import sys
from argparse import Namespace
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Literal

from configs.errors import HalfdropError
from configs.method import MethodSettings
from controller.assembly import Opening, is_simulated
from controller.commands.output import amount_text, print_json, print_table, say
from controller.commands.replicates import summary_of_records
from controller.commands.run import titrate_once
from controller.commands.settings import Chosen, answers_of, chosen, method_of
from controller.guard import check_start
from controller.journal import Journal
from controller.labfolder import Lab
from controller.outcome import RunResult
from controller.planning import SampleChoice, expected_account, make_plan
from controller.record import printable, read_record
from controller.series import Series, SeriesItem, Titration, read_series, titrations_of
from controller.seriesrecord import FOLDER, SeriesState, new_series, read_state, reopen_series
from controller.titration.actions import Answered, Ask
from controller.titration.traceability import Replicate
from controller.unclosed import unclosed
from drivers.clock import SystemClock
from drivers.operator import AnswersOperator, ConsoleOperator, Operator

OnFailure = Literal["stop", "skip", "repeat-once"]
DONE, NOT_ALL, STOPPED, INTERRUPTED, TERMINATED = 0, 1, 3, 130, 143
NEXT_SAMPLE = "next-sample"
_CHOICES = ("ready", "skip", "end")


def run_series(picked: Chosen, lab: Lab, given: argparse.Namespace, *, opening: Opening, headless: bool) -> int:
    """Check the file of a series whole, then titrate its samples; exit status 1 where one gave no result."""
    for option, value in (
        ("--sample-id", given.sample_id),
        ("--sample-volume-ml", given.sample_volume_ml),
        ("--sample-mass-g", given.sample_mass_g),
        ("--replicates", given.replicates),
        ("--portions", given.portions),
    ):
        if value is not None:
            raise HalfdropError(
                f"{option} stands beside --series", where="run", remedy="Say it in the file of the series"
            )
    series = checked_series(Path(given.series), picked, lab, initial_volume_ml=given.initial_volume_ml)
    say(f"series {series.path.name}: {len(series.items)} samples, {series.titrations} titrations")
    journal = new_series(
        lab.path,
        clock=SystemClock(),
        label=series.path.stem,
        items=series.items,
        about={
            "method": given.method,
            "bench": given.bench,
            "file": series.path.name,
            "on_failure": given.on_failure,
            "operator": given.operator,
            "seed": given.seed,
            "initial_volume_ml": given.initial_volume_ml,
        },
    )
    going = SeriesRun(
        picked=picked, lab=lab, items=series.items, methods=series.methods, journal=journal, opening=opening,
        headless=headless, operator_name=given.operator, on_failure=given.on_failure,
        initial_volume_ml=given.initial_volume_ml,
    )  # fmt: skip
    return going.whole(as_json=given.json)


def is_series(named: str, lab: Lab) -> Path | None:
    """Return the record of the series of this name, None where there is none."""
    inside = lab.path / FOLDER / f"{Path(named).stem}.jsonl"
    if Path(named).name == named and inside.is_file():
        return inside
    path = Path(named)
    return path if path.parent.name == FOLDER and path.is_file() else None


def resume_series(path: Path, lab: Lab, given: argparse.Namespace) -> int:
    """Go on with a series: first with the run that broke off, if there is one."""
    state = read_state(path)
    if state.closed:
        raise HalfdropError("the series has its end", where=str(path), remedy="Nothing needs to be done")
    header = state.header
    picked = chosen(
        Namespace(method=header["method"], bench=given.bench or header["bench"], lab=str(lab.path)), lab_needed=True
    )
    methods = {item.method: method_of(item.method, lab)[1] for item in state.items}
    answers = answers_of(given)
    opening = Opening(
        seed=header["seed"],
        time_scale=given.time_scale,
        answers=answers,
        answers_from=given.answers or "answers",
        place=lab.path,
        unattended=given.headless or not sys.stdin.isatty(),
    )
    broken_off = _finish_open_run(state, lab, given)
    going = SeriesRun(
        picked=picked, lab=lab, items=state.items, methods=methods, journal=reopen_series(state, SystemClock()),
        opening=opening, headless=given.headless or not sys.stdin.isatty(),
        operator_name=given.operator or header["operator"], on_failure=header["on_failure"],
        initial_volume_ml=header["initial_volume_ml"], ended=dict(state.ended),
    )  # fmt: skip
    if broken_off is not None and state.under_way is not None:
        going.note_end(going.titration(state.under_way), broken_off)
    return going.whole(as_json=given.json)


def _finish_open_run(state: SeriesState, lab: Lab, given: argparse.Namespace) -> RunResult | None:
    from controller.commands.resume import resume_run

    if state.under_way is None:
        return None
    for path in reversed(unclosed(lab.runs)):
        sample = (read_record(path).header.get("plan") or {}).get("sample") or {}
        if sample.get("sample_id") == state.under_way[0]:
            say(f"going on with the run that broke off: {path.stem}")
            return resume_run(given, lab, path)
    return None


def checked_series(path: Path, picked: Chosen, lab: Lab, *, initial_volume_ml: float | None) -> Series:
    """Read a series; every sample is held against its method and this bench.

    Raises:
        SettingsError: with every problem and its line.
    """

    def fits(method: MethodSettings, choice: SampleChoice) -> None:
        account = expected_account(picked.bench)
        whole = replace(choice, initial_volume_ml=initial_volume_ml)
        check_start(make_plan(method, picked.bench, whole, pump=account, probe_identity=account.identity))

    return read_series(
        path,
        usual_method=picked.method.name,
        find=lambda name: picked.method if name == picked.method.name else method_of(name, lab)[1],
        fits=fits,
    )


@dataclass(slots=True, kw_only=True)
class SeriesRun:
    """A series while it goes on."""

    picked: Chosen
    lab: Lab
    items: tuple[SeriesItem, ...]
    methods: Mapping[str, MethodSettings]
    journal: Journal
    opening: Opening
    headless: bool
    operator_name: str | None
    on_failure: OnFailure
    initial_volume_ml: float | None
    ended: dict[tuple[str, int], tuple[str, str | None]] = field(default_factory=dict)
    durations_s: list[float] = field(default_factory=list)
    status: int = DONE

    def whole(self, *, as_json: bool) -> int:
        """Titrate what is left, close the record, print the table; an interrupted series stays open."""
        every = titrations_of(self.items)
        for place, titration in enumerate(every, start=1):
            if self._is_over(titration):
                continue
            say(self._progress(place, len(every), titration))
            answer = self._ask(titration)
            if answer == "end" or not (self._skip(titration) if answer == "skip" else self._titrate(titration, place)):
                self.status = self.status or STOPPED
                say(f"the series is left open; go on with: halfdrop resume {Path(self.journal.name).stem}")
                break
        else:
            document = self._summary()
            complete = all(self.ended[one.key][0] == "completed" for one in every)
            self.status = DONE if complete else NOT_ALL
            self.journal.close("completed" if complete else "incomplete", result=document)
        self._tell(as_json=as_json)
        return self.status

    def titration(self, key: tuple[str, int]) -> Titration:
        """Return the titration of a sample and a replicate."""
        return next(one for one in titrations_of(self.items) if one.key == key)

    def note_end(self, titration: Titration, result: RunResult | None, reason: str | None = None) -> None:
        """Write down what became of a titration."""
        outcome = "refused" if result is None else result.outcome
        run = None if result is None else Path(result.record).stem
        self.ended[titration.key] = (outcome, run)
        self.journal.event(
            "titration-ended",
            sample_id=titration.item.sample_id,
            replicate=titration.replicate,
            attempt=titration.attempt,
            outcome=outcome,
            run=run,
            reason=reason if result is None else result.reason,
        )
        self.journal.barrier()
        if result is not None:
            self.durations_s.append(float(result.result.get("duration_s") or 0.0))

    def _is_over(self, titration: Titration) -> bool:
        outcome = self.ended.get(titration.key, (None, None))[0]
        return outcome in ("completed", "skipped") or (outcome is not None and self.on_failure != "stop")

    def _titrate(self, titration: Titration, place: int) -> bool:
        """Run it, again where the rule says so; False ends the series here."""
        result = self._once(titration, place)
        if result is not None and result.outcome == "completed":
            return True
        if self.status:
            return False
        if self.on_failure == "repeat-once":
            say("it failed; it is repeated once, as the rule says")
            again = replace(titration, attempt=2)
            if self._ask(again) == "end":
                return False
            self._once(again, place)
            return not self.status
        return self.on_failure == "skip"

    def _once(self, titration: Titration, place: int) -> RunResult | None:
        item, method = titration.item, self.methods[titration.item.method]
        self.journal.event(
            "titration-begun", sample_id=item.sample_id, replicate=titration.replicate, attempt=titration.attempt
        )
        self.journal.barrier()
        try:
            result = titrate_once(
                replace(self.picked, method=method),
                self.lab,
                replace(item.choice(method), initial_volume_ml=self.initial_volume_ml),
                opening=self._opening(place),
                headless=self.headless,
                operator_name=self.operator_name,
                replicate=Replicate(number=titration.replicate, count=item.replicates),
            )
        except HalfdropError as error:
            say(f"not titrated: {error}")
            self.note_end(titration, None, str(error))
            return None
        self.note_end(titration, result)
        if result.exit_status in (INTERRUPTED, TERMINATED) or result.stop_confirmed is False:
            self.status = result.exit_status
        return result

    def _opening(self, place: int) -> Opening:
        simulation = self.picked.bench.simulation if is_simulated(self.picked.bench) else None
        if simulation is None:
            return self.opening
        first = simulation.seed if self.opening.seed is None else self.opening.seed
        return replace(self.opening, seed=first + place - 1)  # each beaker has its own noise

    def _skip(self, titration: Titration) -> bool:
        self.ended[titration.key] = ("skipped", None)
        self.journal.event(
            "titration-ended",
            sample_id=titration.item.sample_id,
            replicate=titration.replicate,
            attempt=titration.attempt,
            outcome="skipped",
            run=None,
            reason="skipped by the operator",
        )
        return True

    def _ask(self, titration: Titration) -> str:
        """Ask for the next sample; probe and tip are rinsed between two."""
        item, method = titration.item, self.methods[titration.item.method]
        unit, usual = (
            ("g", method.sample.mass_g) if method.sample.taken_by == "mass" else ("mL", method.sample.volume_ml)
        )
        amount = item.amount if item.amount is not None else usual
        which = f", replicate {titration.replicate} of {item.replicates}" if item.replicates > 1 else ""
        question = Ask(
            key=NEXT_SAMPLE,
            text=f"Rinse probe and tip, then put in place: sample {item.sample_id}{which}, {amount:g} {unit} "
            f"({method.title}). Ready?",
            choices=_CHOICES,
        )
        self.journal.write(question, by="series")
        self.journal.barrier()
        answer = self._operator().ask(question.key, question.text, question.choices)
        self.journal.write(Answered(key=question.key, answer=answer), by="series")
        return answer

    def _operator(self) -> Operator:
        answers = self.opening.answers
        if is_simulated(self.picked.bench):
            return AnswersOperator({NEXT_SAMPLE: "ready", **(answers or {})}, where=self.opening.answers_from)
        if self.headless and answers is not None:
            return AnswersOperator(answers, where=self.opening.answers_from)
        return ConsoleOperator()

    def _progress(self, place: int, count: int, titration: Titration) -> str:
        item = titration.item
        text = f"titration {place} of {count}: sample {printable(item.sample_id)}"
        if item.replicates > 1:
            text += f", replicate {titration.replicate} of {item.replicates}"
        if not self.durations_s:
            return text
        each_s = sum(self.durations_s) / len(self.durations_s)
        return f"{text}, about {each_s * (count - place + 1) / 60.0:.0f} min left"

    # --- what came of it ---

    def _summary(self) -> dict[str, Any]:
        return {"series": Path(self.journal.name).stem, "samples": [self._sample(item) for item in self.items]}

    def _sample(self, item: SeriesItem) -> dict[str, Any]:
        outcomes, runs = [], []
        for number in range(1, item.replicates + 1):
            outcome, run = self.ended.get((item.sample_id, number), ("not titrated", None))
            outcomes.append(outcome)
            if outcome == "completed" and run is not None:
                runs.append(run)
        told: dict[str, Any] = {
            "sample_id": item.sample_id,
            "method": item.method,
            "replicates": item.replicates,
            "outcomes": outcomes,
            "runs": runs,
            "summary": None,
            "reason": None,
        }
        if not runs:
            return {**told, "reason": "no run was completed"}
        try:
            told["summary"] = summary_of_records([self.lab.runs / f"{run}.jsonl" for run in runs])
        except HalfdropError as error:
            told["reason"] = error.what
        return told

    def _tell(self, *, as_json: bool) -> None:
        document = self._summary()
        if as_json:
            print_json({**document, "record": self.journal.name, "complete": self.status == DONE})
            return
        heads = ("sample", "method", "runs", "mean", "s", "RSD", "remark")
        print_table(heads, [_row(sample) for sample in document["samples"]])
        print(f"record: {self.journal.name}")


def _row(sample: dict[str, Any]) -> tuple[str, ...]:
    summary, done = sample["summary"], len(sample["runs"])
    runs = f"{done} of {sample['replicates']}"
    bad = sorted({outcome for outcome in sample["outcomes"] if outcome != "completed"})
    remark = ", ".join(bad)
    if summary is None:
        reason = sample["reason"] or ""
        return printable(sample["sample_id"]), sample["method"], runs, "", "", "", printable(remark or reason)
    spread, rsd = summary["standard_deviation"], summary["rsd_percent"]
    test = summary["grubbs"]
    if test is not None and test["outlier"]:
        remark = "; ".join([one for one in (remark, f"replicate {test['replicate']} is an outlier (Grubbs)") if one])
    return (
        printable(sample["sample_id"]),
        sample["method"],
        runs,
        amount_text(summary["result"]),
        "" if spread is None else f"{spread:.3g}",
        "" if rsd is None else f"{rsd:.3g} %",
        printable(remark),
    )
