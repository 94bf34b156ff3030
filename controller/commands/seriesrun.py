"""A series while it goes on: prompt, titration, rule for failures, check buffer, table at the end."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Literal

from configs.errors import HalfdropError
from configs.method import MethodSettings
from controller.assembly import Opening, is_simulated
from controller.commands.nextsample import END, NEXT_SAMPLE, READY, SKIP, Between
from controller.commands.output import print_json, say
from controller.commands.seriestable import print_series, summed_up
from controller.commands.settings import Chosen
from controller.commands.titration import titrate_once
from controller.journal import Journal
from controller.labfolder import Lab
from controller.planning.series import SeriesItem, Titration, titrations_of
from controller.planning.seriescheck import check_in_buffer
from controller.records.record import printable, read_record
from controller.replay import plan_of_record
from controller.running.outcome import RunResult
from controller.running.stopping import StopSwitch
from controller.titration.actions import Answered, Ask
from controller.titration.traceability import Replicate

OnFailure = Literal["stop", "skip", "repeat-once"]
DONE, NOT_ALL, STOPPED, INTERRUPTED, TERMINATED = 0, 1, 3, 130, 143
_CHOICES = (READY, SKIP, END)


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
    check_every: int | None = None
    attended: bool = False
    ended: dict[tuple[str, int], tuple[str, str | None]] = field(default_factory=dict)
    durations_s: list[float] = field(default_factory=list)
    status: int = DONE
    last_record: Path | None = None  # of the titration before, in this process

    def whole(self, *, as_json: bool) -> int:
        """Titrate what is left, close the record, print the table; an interrupted series stays open."""
        every = titrations_of(self.items)
        for place, titration in enumerate(every, start=1):
            if self._is_over(titration):
                continue
            say(self._progress(place, len(every), titration))
            answer = self._ask(titration)
            goes_on = answer != END and (self._skip(titration) if answer == SKIP else self._titrate(titration, place))
            if not goes_on or not self._still_reads_right(titration):
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
            why = (result.reason or result.outcome) if result is not None else "it could not be begun"
            sample = printable(titration.item.sample_id)
            say(f"sample {sample} failed ({printable(why)}); it is repeated once, as the rule says")
            again = replace(titration, attempt=2)
            if self._ask(again) == END:
                return False
            self._once(again, place, repeats=why)
            return not self.status
        return self.on_failure == "skip"

    def _once(self, titration: Titration, place: int, *, repeats: str | None = None) -> RunResult | None:
        """Run it; `repeats` is why it is done again."""
        item, method = titration.item, self.methods[titration.item.method]
        why = {} if repeats is None else {"repeats": repeats}
        self.journal.event(
            "titration-begun", sample_id=item.sample_id, replicate=titration.replicate, attempt=titration.attempt, **why
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
                attended=self.attended,
            )
        except HalfdropError as error:
            say(f"not titrated: {error}")
            self.note_end(titration, None, str(error))
            return None
        self.note_end(titration, result)
        self.last_record = Path(result.record)
        if result.exit_status in (INTERRUPTED, TERMINATED) or result.stop_confirmed is False:
            self.status = result.exit_status
        return result

    def _opening(self, place: int) -> Opening:
        simulation = self.picked.bench.simulation if is_simulated(self.picked.bench) else None
        if simulation is None:
            return self.opening if self.last_record is None else self._between().opening_after_the_first()
        first = simulation.seed if self.opening.seed is None else self.opening.seed
        return replace(self.opening, seed=first + place - 1)  # each beaker has its own noise

    def _still_reads_right(self, titration: Titration) -> bool:
        """Check the probe in the check buffer where it is due; False ends the series here."""
        done = [run for outcome, run in self.ended.values() if outcome == "completed" and run is not None]
        outcome, run = self.ended[titration.key]
        if self.check_every is None or outcome != "completed" or run is None or len(done) % self.check_every:
            return True
        plan = plan_of_record(read_record(self.lab.runs / f"{run}.jsonl"))
        if plan.probe.calibration is None:
            return True
        try:
            found = check_in_buffer(self.picked.bench, plan.probe.calibration, opening=self.opening, stop=StopSwitch())
        except HalfdropError as error:
            self.journal.event("buffer-check", passed=False, reason=str(error))
            say(f"check buffer: {error}")
            return False
        self.journal.event("buffer-check", **found.to_json())
        say(found.says())
        if not found.passed:
            say("calibrate the probe before the next sample; what was titrated since the last check is in question")
        return found.passed

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
        answer = self._between().ask(question, beside=self.last_record)
        self.journal.write(Answered(key=question.key, answer=answer), by="series")
        return answer

    def _between(self) -> Between:
        return Between(
            simulated=is_simulated(self.picked.bench),
            opening=self.opening,
            headless=self.headless,
            attended=self.attended,
        )

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
        name = Path(self.journal.name).stem
        return {"series": name, "samples": [summed_up(item, self.ended, self.lab.runs) for item in self.items]}

    def _tell(self, *, as_json: bool) -> None:
        document = self._summary()
        if as_json:
            print_json({**document, "record": self.journal.name, "complete": self.status == DONE})
            return
        print_series(document["samples"])
        print(f"record: {self.journal.name}")
