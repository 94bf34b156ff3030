"""The reading with its stability, the account of titrant, and how far the run is; at the end its result."""

from __future__ import annotations

from typing import Any

from textual.app import ComposeResult
from textual.containers import Vertical
from textual.widgets import Digits

from controller.commands.output import amount_text, volume_text
from controller.records.record import printable
from controller.ui.runview import RunView
from controller.ui.seen import stability_mv_min
from controller.ui.texts import clock_text, left_text
from controller.ui.widgets.plain import Plain

_LEVELS = "▁▂▃▄▅▆▇█"


class Readout(Vertical):
    """Big enough to be read from across the bench."""

    def compose(self) -> ComposeResult:
        """Digits, and the words around them."""
        yield Plain("", id="quantity")
        yield Digits("", id="digits")
        yield Plain("", id="reading")
        yield Plain("", id="trace")
        yield Plain("", id="account")
        yield Plain("", id="progress")

    def show(self, view: RunView) -> None:
        """Show the run as it is now."""
        width = max(10, self.size.width - 2)
        if view.over:
            self._show_result(view, width)
            return
        quantity, value = _big(view)
        self._say("quantity", quantity)
        self._digits(value)
        self._say("reading", "\n".join(reading_lines(view)))
        self._say("trace", trace([one.potential_mv for one in view.readings], width))
        self._say("account", "\n".join(account_lines(view)))
        self._say("progress", progress_text(view, width))

    def _show_result(self, view: RunView, width: int) -> None:
        amount = view.result.get("result")
        if calibration := view.result.get("calibration"):
            self._show_calibration(calibration)
            return
        if amount:
            text, _, unit = amount_text(amount).partition(" ")
            self._say("quantity", f"amount as {_reported(view)}")
            self._digits(text)
            self._say("reading", unit)
        else:
            self._say("quantity", printable(str((view.closing or {}).get("outcome"))))
            self._digits("")
            self._say("reading", "no amount" if view.end_points else "no end point found,\nso no amount is given")
        self._say("trace", "")
        self._say("account", "\n".join(result_lines(view)))
        self._say("progress", f"took {clock_text(view.took_s)}"[:width])

    def _show_calibration(self, found: dict[str, Any]) -> None:
        self._say("quantity", "passed" if found.get("passed") else "not passed")
        self._digits("")
        self._say("reading", "in force from now on" if found.get("accepted") else "not taken into force")
        self._say("trace", "")
        findings = [printable(str(one["text"])) for one in found.get("findings", ())]
        self._say("account", "\n\n".join([printable(str(found.get("verdict", ""))), *findings]))
        self._say("progress", "")

    def _say(self, name: str, text: str) -> None:
        part = self.query_one(f"#{name}", Plain)
        part.say(text)
        part.display = bool(text)

    def _digits(self, text: str) -> None:
        digits = self.query_one("#digits", Digits)
        if digits.value != text:
            digits.update(text)
        digits.display = bool(text)


def _big(view: RunView) -> tuple[str, str]:
    if not view.readings:
        return "no reading yet", ""
    last = view.readings[-1]
    if last.status != "ok":
        return f"probe: {last.status}", "--"
    if last.ph is None:
        return "potential, mV", f"{last.potential_mv:.1f}"
    return "pH", f"{last.ph:.2f}"


def reading_lines(view: RunView) -> list[str]:
    """Return potential, temperature and stability in words."""
    if not view.readings:
        return [view.phase]
    last = view.readings[-1]
    temperature = "" if last.temperature_c is None else f"   {last.temperature_c:.1f} °C"
    return [f"{last.potential_mv:.1f} mV{temperature}", stability_text(view)]


def stability_text(view: RunView) -> str:
    """Return how steady the reading is: a word and the drift."""
    if view.paused:
        return "paused: nothing is read"
    if view.question is not None:
        return "waits for an answer"
    drift = stability_mv_min(view.readings, dosed_at_s=view.dosed_at_s)
    if drift is None:
        return "just dosed"
    limit = view.plan.settling.stability_limit_mv_min if view.plan is not None else 3.0
    word = "steady" if abs(drift) <= limit else "moving"
    return f"{word}, {round(drift, 1) + 0.0:+.1f} mV/min"  # never -0.0


def trace(values: list[float], width: int) -> str:
    """Return the last readings as a line of bars over their own range."""
    kept = values[-width:]
    if len(kept) < 2:
        return ""
    lowest, highest = min(kept), max(kept)
    reach = max(highest - lowest, 1.0)
    middle = (highest + lowest) / 2.0
    scale = (len(_LEVELS) - 1) / reach
    return "".join(_LEVELS[min(7, max(0, round((value - middle + reach / 2.0) * scale)))] for value in kept)


def account_lines(view: RunView) -> list[str]:
    """Return what was dosed and what is left."""
    if view.plan is None and not view.doses:
        return []
    lines = [doses_text(view)]
    if view.contents_ml is not None and view.plan is not None:
        lines.append(f"syringe {max(0.0, view.contents_ml):.2f} of {view.plan.pump.syringe_ml:g} mL")
    if view.reservoir_ml is not None and view.plan is not None and view.plan.pump.refill != "none":
        lines.append(f"reservoir {view.reservoir_ml:.0f} mL")
    return lines


def doses_text(view: RunView) -> str:
    """Return how many doses there were, and what they delivered."""
    count = len(view.doses)
    return f"{count} dose{'' if count == 1 else 's'}, {view.delivered_ml:.4f} mL"


def progress_text(view: RunView, width: int) -> str:
    """Return a bar with the time left in words."""
    left_s = view.time_left_s()
    if view.plan is None:
        return clock_text(view.at_s)
    words = f"{clock_text(view.at_s)}, {left_text(left_s)}"
    if left_s is None or view.at_s + left_s <= 0:
        return words
    share = view.at_s / (view.at_s + left_s)
    full = round(share * width)
    return f"{'━' * full}{'─' * (width - full)}\n{words}"


def result_lines(view: RunView) -> list[str]:
    """Return end points with their uncertainty, and the sums of the run."""
    lines = []
    for number, one in enumerate(view.end_points, start=1):
        lines.append(f"end point {number}:")
        lines.append(f"  {volume_text(one.volume_ml, one.standard_uncertainty_ml)}")
        if one.ph is not None:
            lines.append(f"  pH {one.ph:.2f}")
        if one.estimator:
            lines.append(f"  by {one.estimator}")
    return [*lines, doses_text(view)]


def _reported(view: RunView) -> str:
    report_as = view.plan.report_as if view.plan is not None else None
    return printable(report_as.substance) if report_as is not None else "reported"
