"""The tables of a report as rows of text, from the plain data of a record; every cell is text that the page escapes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from controller.commands.lines import LARGEST_PLAIN_BIAS, NOT_CORRECTED
from controller.commands.output import decimals
from controller.evaluation.statistics import StatisticsError, grubbs, summarise
from controller.report.wording import DASH, clock, facts_of, local_time, number, with_uncertainty

#: volumes nearer than this are the same number, mL
_SAME_ML = 2e-6


@dataclass(frozen=True, slots=True, kw_only=True)
class Table:
    """Heads, rows of cells, a note under it; `numeric` are the columns set to the right."""

    caption: str
    heads: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    numeric: tuple[int, ...] = ()
    note: str = ""


#: why a reported end point's uncertainty is larger than its estimator's own
_BEYOND_ESTIMATORS = (
    "The uncertainty of an end point also holds what no estimator sees: the plunger's position, doses in doubt, and "
    "what the last look at the points left open."
)


def end_points(result: dict[str, Any]) -> Table:
    """Every end point with its uncertainty and estimator."""
    rows = []
    for index, point in enumerate(result.get("end_points") or [], start=1):
        volume, u = with_uncertainty(point.get("volume_ml"), point.get("standard_uncertainty_ml"))
        signals = number(point.get("ph"), 2), number(point.get("potential_mv"), 1)
        rows.append((str(index), volume, u, *signals, str(point.get("estimator") or DASH)))
    heads = ("No.", "Volume / mL", "u / mL", "pH", "Potential / mV", "Reported by")
    rule = _sentence(str(result.get("estimator_rule") or ""))
    note = f"{rule} {_BEYOND_ESTIMATORS}".strip() if rows else rule
    return Table(caption="End points", heads=heads, rows=tuple(rows), numeric=(0, 1, 2, 3, 4), note=note)


def estimators(result: dict[str, Any], again: dict[str, Any]) -> Table:
    """What every estimator says of each end point, and how far it is from the reported volume.

    Args:
        result: the run's own.
        again: the evaluation of the same points, which keeps each estimator's uncertainty and remark; may be empty.
    """
    points = result.get("end_points") or []
    detailed = result.get("estimates") or (again.get("estimates") if _same_points(points, again) else None)
    rows: list[tuple[str, ...]] = []
    if detailed:
        for index, (point, found) in enumerate(zip(points, detailed, strict=False), start=1):
            rows += [_estimate(index, point, one) for one in found]
    else:
        for name, volumes in (result.get("estimators") or {}).items():
            for index, (point, volume) in enumerate(zip(points, volumes, strict=False), start=1):
                one = {"estimator": name, "volume_ml": volume}
                rows.append(_estimate(index, point, one))
    heads = ("End point", "Estimator", "Volume / mL", "u / mL", "Less reported / µL", "Remark")
    return Table(caption="Estimators side by side", heads=heads, rows=tuple(sorted(rows, key=lambda r: r[0])),
                 numeric=(0, 2, 3, 4))  # fmt: skip


def _same_points(points: list[dict[str, Any]], again: dict[str, Any]) -> bool:
    """Whether both evaluations report the same volumes, so that the details of one belong to the other."""
    found = again.get("end_points") or []
    pairs = zip(points, found, strict=False)
    return len(points) == len(found) and all(abs(a["volume_ml"] - b["volume_ml"]) < _SAME_ML for a, b in pairs)


def _estimate(index: int, point: dict[str, Any], one: dict[str, Any]) -> tuple[str, ...]:
    volume_ml, u_ml = one["volume_ml"], one.get("standard_uncertainty_ml")
    away = 1000.0 * (volume_ml - point["volume_ml"])
    # cross-checks are compared, so all are shown to 0.1 µL
    shown = (number(volume_ml, 4), number(u_ml, 4) if u_ml else DASH, number(away, 1))
    remark = str(one.get("remark") or ("" if one.get("sound", True) else "not sound, for comparison only"))
    return (str(index), str(one["estimator"]), *shown, remark)


def half_equivalence(result: dict[str, Any]) -> Table:
    """Half-way to each end point: the plain pH, its bias, and the pKa by charge balance."""
    rows = []
    for half in result.get("half_equivalence") or []:
        pka, u = half.get("pka"), half.get("pka_standard_uncertainty")
        shown = with_uncertainty(pka, u) if u else (number(pka, 3), DASH)
        bias = half.get("plain_bias")
        remark = str(half.get("remark") or "")
        if not remark and pka is not None and half.get("conditional_pka") == pka:
            remark = f"at this ionic strength; {NOT_CORRECTED}"
        if not remark and bias is not None and abs(bias) > LARGEST_PLAIN_BIAS:
            remark = "the plain pH half-way is no pKa here: its bias exceeds 0.02"
        rows.append((number(half.get("volume_ml"), 3), number(half.get("ph"), 2), number(bias, 3), *shown, remark))
    heads = ("Volume / mL", "Plain pH half-way", "Its bias", "pKa", "u(pKa)", "Remark")
    note = (
        "pKa by charge balance, pH + log10((Ve − W)/W) with W the titrant used by the substance. u(pKa) leaves the "
        "calibration of the probe out."
    )
    return Table(caption="Half-equivalence", heads=heads, rows=tuple(rows), numeric=(0, 1, 2, 3, 4), note=note)


def replicates(named: Sequence[tuple[str, dict[str, Any] | None]]) -> tuple[Table, list[str]] | None:
    """Amounts of several runs, and in words mean, spread and outlier test; None for fewer than two.

    Args:
        named: the name of each run and its amount (the result's "result").
    """
    if len(named) < 2:
        return None
    rows, values, units = [], [], set()
    for name, amount in named:
        if not amount:
            rows.append((name, DASH, DASH, DASH))
            continue
        value, u = with_uncertainty(amount.get("value"), amount.get("standard_uncertainty"))
        rows.append((name, value, u, str(amount.get("unit"))))
        values.append(float(amount["value"]))
        units.add((amount.get("unit"), amount.get("substance")))
    table = Table(caption="Replicates", heads=("Run", "Amount", "u", "Unit"), rows=tuple(rows), numeric=(1, 2))
    if len(units) > 1:
        return table, ["No mean: the runs report different substances or units."]
    return table, _statistics(values, next(iter(units))[0] if units else "")


def _statistics(values: list[float], unit: Any) -> list[str]:
    if len(values) < 2:
        return ["No mean: fewer than two runs have an amount."]
    found = summarise(values)
    spread = found.standard_deviation or 0.0
    places = decimals(spread)
    said = [
        f"Mean of {found.count}: {number(found.mean, places)} {unit}; s = {number(spread, places)} {unit}, "
        f"RSD = {number(found.rsd_percent, 2)} %; {100.0 * found.confidence:.0f} % confidence interval of the mean "
        f"(Student's t, repeatability alone): {number(found.confidence_low, places)} to "
        f"{number(found.confidence_high, places)} {unit}."
    ]
    try:
        test = grubbs(values)
    except StatisticsError:
        return [*said, "Grubbs' test needs three values or more."]
    if test is None:
        return [*said, "Grubbs' test: all values are equal."]
    word = "an outlier at 5 %; it is reported, not dropped" if test.outlier else "no outlier at 5 %"
    return [
        *said,
        f"Grubbs' test: the most distant value {number(test.value, places)} has G = {number(test.statistic, 3)}, "
        f"critical is {number(test.critical, 3)}: {word}.",
    ]


def questions(entries: Sequence[dict[str, Any]]) -> Table:
    """Every question with its answer; one that was not answered says so."""
    rows: list[list[str]] = []
    waiting: dict[str, list[str]] = {}
    for entry in entries:
        key = str(entry.get("key"))
        if entry.get("action") == "ask":
            waiting[key] = [str(entry.get("text") or key), "not answered", clock(entry.get("run_s"))]
            rows.append(waiting[key])
        elif entry.get("observation") == "answered" and key in waiting:
            waiting[key][1:] = [str(entry.get("answer")), clock(entry.get("run_s"))]
    heads = ("Question", "Answer", "Run time")
    return Table(caption="Questions and answers", heads=heads, rows=tuple(map(tuple, rows)), numeric=(2,))


def doses(entries: Sequence[dict[str, Any]]) -> Table:
    """Every dose with its reason in words."""
    rows, total, reasons = [], 0.0, dict[Any, str]()
    for entry in entries:
        if entry.get("action") == "dose":
            reasons[entry.get("number")] = str(entry.get("reason") or "")
        elif entry.get("observation") == "dosed":
            total += float(entry.get("volume_ml") or 0.0)
            count = entry.get("number")
            shown = (str(count), clock(entry.get("run_s")), number(entry.get("volume_ml"), 4), number(total, 4))
            rows.append((*shown, reasons.get(count, "")))
    heads = ("Dose", "Run time", "Volume / mL", "Delivered / mL", "Why")
    return Table(caption="Every dose and its reason", heads=heads, rows=tuple(rows), numeric=(0, 1, 2, 3))


_INCIDENTS = {
    "refused": "refused by a limit of the bench",
    "failed": "device failed",
    "back": "device back",
    "resumed": "resumed",
    "command": "operator's command",
    "guard": "limit of the bench reached",
    "clock-step": "the clock of the computer was moved",
    "pump-stop": "pump stopped",
}


def incidents(entries: Sequence[dict[str, Any]]) -> Table:
    """What did not go by plan: refusals, failures, resumes, commands, stops."""
    rows = []
    for entry in entries:
        kind = str(entry.get("observation") or entry.get("event"))
        if kind in _INCIDENTS:
            keys = ("device", "what", "name", "text", "why", "gap_s", "seconds", "volume_ml", "lowest_ml", "highest_ml")
            told = [(key, entry[key]) for key in (*keys, "confirmed") if entry.get(key) is not None]
            rows.append((clock(entry.get("run_s")), _INCIDENTS[kind], "; ".join(_told(key, one) for key, one in told)))
    return Table(
        caption="What did not go by plan", heads=("Run time", "What", "Details"), rows=tuple(rows), numeric=(0,)
    )


def _told(key: str, value: Any) -> str:
    if key in ("device", "what", "name", "text", "why"):
        return str(value)
    return ": ".join(facts_of({key: value}, None)[0])


def evaluations(result: dict[str, Any], added: Sequence[dict[str, Any]], offset: Any) -> Table | None:
    """The run's own evaluation and those added later, side by side; None where none was added."""
    if not added:
        return None
    rows = [_evaluation("with the run", result, "", "", "")]
    for one in added:
        when, state = local_time(one.get("evaluated_utc"), offset), str(one.get("state"))
        remark = str(one.get("reason") or "")
        flag = {"edited": "FILE EDITED: do not use", "other record": "the record has changed since"}.get(state, "")
        label = f"added no. {one.get('number')}"
        program = str(one.get("program") or DASH)
        rows.append(_evaluation(label, one.get("result") or {}, when, program, "; ".join(filter(None, (flag, remark)))))
    heads = ("Evaluation", "When", "Program", "End points / mL", "Amount", "u", "Unit", "Reason or remark")
    note = "An added evaluation stands beside the old one; neither the record nor an earlier evaluation is changed."
    return Table(caption="Evaluations side by side", heads=heads, rows=tuple(rows), numeric=(4, 5), note=note)


def _evaluation(label: str, result: dict[str, Any], when: str, program: str, remark: str) -> tuple[str, ...]:
    points = result.get("end_points") or []
    volumes = ", ".join(with_uncertainty(p.get("volume_ml"), p.get("standard_uncertainty_ml"))[0] for p in points)
    amount = result.get("result") or {}
    value, u = with_uncertainty(amount.get("value"), amount.get("standard_uncertainty"))
    return (label, when, program, volumes or "none", value, u, str(amount.get("unit") or ""), remark)


def _sentence(text: str) -> str:
    return f"{text[0].upper()}{text[1:]}." if text else ""
