"""A run as plain lines: what was decided and why, about how long it still takes, and how it ended."""

from __future__ import annotations

from typing import Any, TextIO

from controller.commands.output import amount_text, volume_text
from controller.records.record import printable
from controller.running.progress import Progress
from controller.titration.actions import Command, Dose, Failed, Refill, Refused, Report

#: a plain half-equivalence pH nearer to the pKa than this may stand for it
LARGEST_PLAIN_BIAS = 0.02
#: of a pKa that is not brought to infinite dilution
NOT_CORRECTED = "activities not corrected: the substance's charge is not known, or the method takes none"
#: as an amount names its end point (controller/calibration/validity.py)
EQUIVALENCE = "the equivalence point"
_TOLD = {"note", "warning", "end-point"}


class Lines:
    """Writes one line for every dose, end point, note, warning, question and trouble."""

    def __init__(self, sink: TextIO) -> None:
        self._sink = sink
        self._last = ""

    def __call__(self, progress: Progress) -> None:
        """Take in an entry of the record."""
        text = _text_of(progress)
        repeated, self._last = text == self._last, text or self._last
        if text and not repeated:
            left = "" if progress.time_left_s is None else f", about {_clock_text(progress.time_left_s)} left"
            self._sink.write(f"[{_clock_text(progress.at_s)}{left}] {printable(text)}\n")
            self._sink.flush()


def _text_of(progress: Progress) -> str:
    match progress.item:
        case Dose(reason=reason):
            return reason
        case Report(what=what, text=text) if what in _TOLD:
            return f"warning: {text}" if what == "warning" else text
        case Refill(reason=reason):
            return f"refilling the syringe{f': {reason}' if reason else ''}"
        case Refused(what=what):
            return f"refused: {what}"
        case Failed(device=device, what=what):
            return f"{device} failed: {what}"
        case Command(name=name):
            return f"command: {name}"
    return ""


def _clock_text(seconds: float) -> str:
    minutes, rest = divmod(round(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours}:{minutes:02d}:{rest:02d}" if hours else f"{minutes}:{rest:02d}"


def _course(result: dict[str, Any]) -> list[str]:
    if not result.get("run_outcome") and result.get("doses") and result.get("duration_s") is not None:
        minutes = _clock_text(result["duration_s"])
        return [f"{result['doses']} doses, {result['titrant_ml']:.4f} mL of titrant, {minutes} (minutes:seconds)"]
    return []


def _half_line(half: dict[str, Any]) -> str:
    """PKa with the plain pH half-way beside it, and its bias where that is known."""
    here = f" at this ionic strength ({NOT_CORRECTED})" if half.get("conditional_pka") == half["pka"] else ""
    line = f"pKa about {half['pka']:.2f}{here} from the half-equivalence at {half['volume_ml']:.3f} mL"
    bias = half.get("plain_bias")
    if bias is None or half.get("ph") is None:
        return line
    word = "" if abs(bias) <= LARGEST_PLAIN_BIAS else ": too far to stand for the pKa"
    return f"{line} (plain pH there {half['ph']:.2f}, {bias:+.2f} from it{word})"


def result_lines(result: dict[str, Any]) -> list[str]:
    """Return how a run ended, for people."""
    lines = [f"outcome: {result.get('run_outcome', result['outcome'])}"]
    if result["reason"]:
        lines[0] += f" ({result['reason']})"
    for number, point in enumerate(result["end_points"], start=1):
        ph = "" if point.get("ph") is None else f", pH {point['ph']:.2f}"
        volume = volume_text(point["volume_ml"], point["standard_uncertainty_ml"])
        lines.append(f"end point {number}: {volume}{ph}, by {point['estimator']}")
    if not result["end_points"]:
        lines.append("no end point was found, so no amount is given")
    lines += [_half_line(half) for half in result["half_equivalence"] if half.get("pka") is not None]
    if result.get("result"):
        to = " to the equivalence point" if result["result"].get("end_point") == EQUIVALENCE else ""
        lines.append(f"amount{to}: {amount_text(result['result'])}")
    lines += _course(result)
    lines += [f"note: {note}" for note in result.get("notes") or []]
    lines += [f"warning: {warning}" for warning in result["warnings"]]
    if result.get("seed") is not None:
        lines.append(f"simulated bench, seed {result['seed']}: the same seed gives the same readings again")
    if result.get("run"):
        lines.append(f"record: {result['run']}")
    return [printable(line) for line in lines]


def estimator_lines(result: dict[str, Any]) -> list[str]:
    """Return what each estimator gives, in the order of end points; one that does not apply is marked, with why."""
    volumes: dict[str, list[str]] = {}
    for estimates in result.get("estimates") or []:
        for one in estimates:
            text = f"{one['volume_ml']:.4f} mL"
            if not one["sound"]:
                text += f" (does not apply: {one['remark'] or 'it does not fit this curve'})"
            volumes.setdefault(one["estimator"], []).append(text)
    return [printable(f"  {name}: {', '.join(texts)}") for name, texts in volumes.items()]
