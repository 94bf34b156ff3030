"""What a run looks like from outside: built up from the entries of its record, and from nothing else."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass, field, replace
from typing import Any

from configs.errors import HalfdropError
from controller.records.record import printable
from controller.ui.seen import CurvePoint, EndPoint, SeenReading, Sentence, end_point_of, point_of, reading_of

TYPE_CHECKING = False  # what a plan needs is imported with the first header, after the first paint
if TYPE_CHECKING:
    from controller.running.progress import Pace
    from controller.titration.plan import RunPlan

#: readings kept for the stability shown
KEPT_READINGS = 120


@dataclass(slots=True)
class RunView:
    """The state of one run, as far as its record tells.

    `phase` is what it does now, in words; `question` what it asks; `forecast` (volume, standard uncertainty) of the
    next equivalence point; `result` the closing line's.
    """

    name: str
    plan: RunPlan | None = None
    header: dict[str, Any] = field(default_factory=dict)
    at_s: float = 0.0
    points: list[CurvePoint] = field(default_factory=list)
    doses: list[tuple[float, float]] = field(default_factory=list)  # volume in the beaker afterwards, dose volume
    readings: deque[SeenReading] = field(default_factory=lambda: deque(maxlen=KEPT_READINGS))
    sentences: list[Sentence] = field(default_factory=list)
    warnings: list[str] = field(default_factory=list)
    end_points: list[EndPoint] = field(default_factory=list)
    forecast: tuple[float, float] | None = None
    phase: str = "starting"
    question: str | None = None
    question_key: str = ""
    choices: tuple[str, ...] = ()
    paused: bool = False
    delivered_ml: float = 0.0
    contents_ml: float | None = None
    reservoir_ml: float | None = None
    dosed_at_s: float = 0.0
    observed_s: float = 0.0  # when something was last read or delivered
    closing: dict[str, Any] | None = None
    _pace: Pace | None = None

    @property
    def over(self) -> bool:
        """True when the record is closed."""
        return self.closing is not None

    @property
    def result(self) -> dict[str, Any]:
        """The closing line's result; empty where there is none."""
        return (self.closing or {}).get("result") or {}

    @property
    def took_s(self) -> float:
        """How long it was observed, s: without the evaluation and the question after it."""
        told = self.result.get("duration_s")
        return float(told) if isinstance(told, int | float) else self.observed_s or self.at_s

    @property
    def target_ph(self) -> float | None:
        """The pH that the run goes to, None where it looks for equivalence points."""
        return None if self.plan is None else self.plan.end_points.at_ph

    @property
    def sample_id(self) -> str:
        """The sample, fit for a terminal."""
        sample = (self.header.get("plan") or {}).get("sample") or {}
        return printable(str(sample.get("sample_id") or self.name))

    @property
    def method_title(self) -> str:
        """The method's title, fit for a terminal."""
        return printable(str((self.header.get("plan") or {}).get("method_title") or ""))

    @property
    def signal(self) -> str:
        """What the curve shows: "pH" or "mV"."""
        return "pH" if self.plan is not None and self.plan.probe.calibration is not None else "mV"

    def time_left_s(self) -> float | None:
        """Return about how long the run still takes."""
        if self.over or self._pace is None:
            return None
        return self._pace.time_left_s(self.at_s, self.delivered_ml)

    def feed(self, entry: dict[str, Any]) -> None:
        """Take in one line of the record; what it does not know it passes over."""
        run_s = entry.get("run_s")
        if isinstance(run_s, int | float):
            self.at_s = float(run_s)
        try:
            if "header" in entry:
                self._begin(entry["header"])
            elif "closing" in entry:
                self._close(entry["closing"])
            elif "action" in entry:
                self._action(str(entry["action"]), entry)
            elif "observation" in entry:
                self._observation(str(entry["observation"]), entry)
            elif "event" in entry:
                self._event(str(entry["event"]), entry)
        except (KeyError, TypeError, ValueError):
            self._say("a line of the record could not be read", "trouble")

    # --- the lines ---------------------------------------------------------------------------------------------------

    def _begin(self, header: dict[str, Any]) -> None:
        from controller.records.encoding import plan_from_json
        from controller.running.progress import Pace

        self.header = header
        if (header.get("plan") or {}).get("kind") not in (None, "equivalence", "end-point-ph"):
            return  # a calibration: no curve, no account
        try:
            self.plan = plan_from_json(header["plan"], where=self.name)
        except HalfdropError:
            self._say("the plan in this record is of another version; what can be shown is shown", "warning")
        else:
            self._pace = Pace(self.plan)
            self.contents_ml, self.reservoir_ml = self.plan.pump.contents_ml, self.plan.pump.reservoir_ml
        for text in header.get("warnings", []):
            self._warn(str(text))

    def _action(self, kind: str, entry: dict[str, Any]) -> None:
        match kind:
            case "dose":
                self.phase = f"dose {entry['number']}: {entry['volume_ml']:.4f} mL"
                self._say(str(entry["reason"]), "dose")
            case "ask":
                self.question, self.phase = printable(str(entry["text"])), "waiting for an answer"
                self.question_key = str(entry["key"])
                self.choices = tuple(printable(str(one)) for one in entry.get("choices", ()))
                self._say(str(entry["text"]), "question")
            case "refill":
                self.phase = "filling the syringe"
                self._say(f"filling the syringe: {entry.get('reason') or 'it is empty'}", "note")
            case "report":
                self._report(str(entry["what"]), entry)
            case "finish":
                self.phase = "evaluated"
            case "read" if not self.paused:
                self.phase = self._reading_phase()

    def _report(self, what: str, entry: dict[str, Any]) -> None:
        text = str(entry.get("text", ""))
        match what:
            case "point":
                self.points.append(point_of(entry, number=len(self.points), at_s=self.at_s))
                self._pace_saw("point")
            case "point-again":
                self._point_again(entry)
            case "forecast":
                self.forecast = (float(entry["volume_ml"]), float(entry["standard_uncertainty_ml"]))
                self._pace_saw("forecast", self.forecast[0], entry.get("end_point"))
            case "end-point":
                self.end_points.append(end_point_of(entry))
                self.forecast = None
                self._say(text, "end-point")
            case "warning":
                self._warn(text)
            case "note":
                if text == "paused":
                    self.paused, self.phase = True, "paused"
                    self.question = None  # it is asked again when one goes on
                elif text == "going on":
                    self.paused, self.phase = False, "going on"
                self._say(text, "note")

    def _point_again(self, entry: dict[str, Any]) -> None:
        """The run takes an earlier point for another composition."""
        number = entry.get("point")
        if isinstance(number, int) and 0 <= number < len(self.points):
            self.points[number] = replace(self.points[number], volume_ml=float(entry["volume_ml"]))

    def _observation(self, kind: str, entry: dict[str, Any]) -> None:
        if kind in ("reading", "dosed"):
            self.observed_s = self.at_s
        match kind:
            case "reading":
                self.readings.append(reading_of(entry, self.plan, at_s=self.at_s))
                if not self.paused:
                    self.phase = self._reading_phase()
            case "dosed":
                volume_ml = float(entry["volume_ml"])
                self._delivered(volume_ml)
                self._pace_saw("dosed", volume_ml)
            case "failed":
                self.phase = f"{entry['device']} in trouble"
                self._say(f"{entry['device']}: {entry['what']}", "trouble")
                if entry.get("lowest_ml") is not None and entry.get("highest_ml") is not None:
                    self._delivered((float(entry["lowest_ml"]) + float(entry["highest_ml"])) / 2.0)
            case "refilled":
                self.contents_ml = entry.get("contents_ml", self.contents_ml)
                self.reservoir_ml = entry.get("reservoir_ml", self.reservoir_ml)
                self.phase = "filled"
            case "answered":
                self.question = None
                self._say(f"answered: {entry['answer']}", "person")
            case "refused":
                self._say(f"refused by the guard: {entry['what']}", "trouble")
            case "resumed":
                self._say(f"went on after a gap of {float(entry['gap_s']):.0f} s", "note")
            case "command":
                self._command(entry)

    def _reading_phase(self) -> str:
        if self.plan is None:
            return "reading until it is steady"
        return "settling" if self.doses else "measuring the noise"

    def _delivered(self, volume_ml: float) -> None:
        self.delivered_ml += volume_ml
        if self.contents_ml is not None:
            self.contents_ml -= volume_ml
        if volume_ml > 0:
            self.doses.append((self.delivered_ml, volume_ml))
            self.dosed_at_s = self.at_s

    def _command(self, entry: dict[str, Any]) -> None:
        name, text = str(entry["name"]), entry.get("text")
        if name == "dose":
            self._say(f"dose by hand asked: {float(entry.get('volume_ml') or 0):.4f} mL", "person")
        elif name != "note":
            self._say(f"command: {name.replace('-', ' ')}" + (f" ({text})" if text else ""), "person")

    def _event(self, kind: str, entry: dict[str, Any]) -> None:
        if kind == "pump-stop":
            confirmed = entry.get("confirmed") is True
            said = "the pump stands, confirmed" if confirmed else "NOT CONFIRMED STOPPED: look at the pump"
            self._say(f"pump stopped ({entry.get('why')}): {said}", "note" if confirmed else "trouble")
            if not confirmed:
                self._warn("NOT CONFIRMED STOPPED: the pump may be moving; look at it and switch it off")
        elif kind == "guard":
            self._say(f"guard: {entry.get('what')}", "trouble")

    def _close(self, closing: dict[str, Any]) -> None:
        self.closing, self.question, self.paused = closing, None, False
        outcome, reason = str(closing.get("outcome")), closing.get("reason")
        self.phase = outcome
        self._say(outcome + (f": {reason}" if reason else ""), "note" if outcome == "completed" else "trouble")
        if self.result.get("end_points"):
            self.end_points = [end_point_of(one) for one in self.result["end_points"]]
        for text in self.result.get("warnings", []):
            self._warn(str(text))

    def _warn(self, text: str) -> None:
        text = printable(text)
        if text not in self.warnings:
            self.warnings.append(text)
            self._say(text, "warning")

    def _say(self, text: str, mark: str) -> None:
        self.sentences.append(Sentence(at_s=self.at_s, text=printable(text), mark=mark))

    def _pace_saw(self, what: str, volume_ml: float | None = None, end_point: int | None = None) -> None:
        if self._pace is None:
            return
        from controller.titration.actions import Dosed, Report

        if what == "dosed":
            item: Dosed | Report = Dosed(at_s=self.at_s, number=len(self.doses), volume_ml=volume_ml or 0.0)
        else:
            item = Report(what=what, volume_ml=volume_ml, end_point=end_point)
        self._pace.saw(item, self.at_s, self.delivered_ml)
