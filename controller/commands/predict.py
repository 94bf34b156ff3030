"""halfdrop predict: the curve of a solution file, or what a run of a method will be like, before anything moves."""

from __future__ import annotations

import argparse
import sys
from dataclasses import replace
from pathlib import Path

from configs.errors import HalfdropError
from configs.loading import read_document, read_file
from configs.settings import load_solution
from controller.commands.output import decimals, print_json, say
from controller.commands.progressbar import ProgressBar
from controller.commands.settings import chosen, sample_choice
from controller.foresight.predict import curve_text, predict_solution, read_volumes
from controller.foresight.prediction import Band, Prediction, predict_run
from controller.planning.expected_in_force import expected_in_force
from controller.planning.inforce import utc_day
from controller.planning.runplan import expected_account, expected_volume_ml, make_plan, plan_sample
from controller.records.record import printable
from drivers.clock import SystemClock

#: keys at the top of a solution file, and of a method file
_SOLUTION_KEYS, _METHOD_KEYS = {"volumes_ml", "pkw", "debye_huckel_a"}, {"name", "kind", "title", "end_points"}


def predict(given: argparse.Namespace) -> int:
    """Predict a solution's curve or a method's run; exit status 1 where the run would be refused."""
    if is_solution_file(given.what):
        return _solution(given)
    if given.volumes:
        raise HalfdropError(
            "--volumes belongs to a solution file; this is a method", where="predict", remedy="Leave --volumes out"
        )
    return _method(given)


def is_solution_file(named: str) -> bool:
    """Tell whether this names a solution file, by what is in it.

    Raises:
        SettingsError: a file that cannot be read.
    """
    looks_like_file = named.endswith((".yaml", ".yml")) or Path(named).name != named or Path(named).is_file()
    if not looks_like_file:
        return False
    document, _ = read_document(read_file(named), where=named)
    keys = set(document.content)
    if keys & _METHOD_KEYS:
        return False
    sample = document.content["sample"].content if "sample" in keys else {}
    inside = set(sample) if isinstance(sample, dict) else set()
    return bool(keys & _SOLUTION_KEYS) or bool(inside & {"substances", "strong_ions"}) or "volume_ml" in inside


def _solution(given: argparse.Namespace) -> int:
    for option, value in (
        ("--sample-volume-ml", given.sample_volume_ml),
        ("--sample-mass-g", given.sample_mass_g),
        ("--initial-volume-ml", given.initial_volume_ml),
    ):
        if value is not None:
            raise HalfdropError(
                f"{option} belongs to a method; {given.what} is a solution file",
                where="predict",
                remedy="Set sample.volume_ml in the file",
            )
    settings = load_solution(given.what)
    volumes = read_volumes(given.volumes) if given.volumes else None
    curve = predict_solution(settings, volumes)
    for warning in curve.warnings:
        say(f"warning: {warning}")
    if given.json:
        print_json({"volume_ml": list(curve.volume_ml), "ph": list(curve.ph), "warnings": list(curve.warnings)})
    else:
        sys.stdout.write(curve_text(curve))
    return 0


def _method(given: argparse.Namespace) -> int:
    _check_numbers(given)
    given.method = given.what
    picked = chosen(given, lab_needed=False)
    account = expected_account(picked.bench)
    choice, lab = sample_choice(given), picked.lab
    known = None if lab is None else expected_in_force(
        picked.method,
        picked.bench,
        lab.runs,
        lab.calibrations,
        today=utc_day(SystemClock().utc_s()),
        expected_volume_ml=expected_volume_ml(picked.method, plan_sample(picked.method, choice)),
    )  # fmt: skip
    plan = make_plan(
        picked.method,
        picked.bench,
        choice,
        pump=account,
        probe_identity=account.identity,
        seed=None,
        in_force=None if known is None else known.in_force,
    )
    says = ["probe calibration: that of the shipped bench"] if known is None else list(known.says)
    percent = given.amount_uncertainty_percent
    with ProgressBar("simulated runs", total=given.runs) as bar:
        predicted = predict_run(
            plan,
            runs=given.runs,
            first_seed=1 if given.seed is None else given.seed,
            amount_relative_sd=None if percent is None else percent / 100.0,
            on_run=bar.reach,
        )
    if known is not None and known.refusal is not None:
        predicted = replace(predicted, problems=(known.refusal, *predicted.problems))
    if given.json:
        print_json({"method": plan.method_name, "taken_from": says, **predicted.to_json()})
    else:
        print("\n".join(printable(line) for line in [*says, *prediction_lines(predicted)]))
    return 1 if predicted.problems else 0


def _check_numbers(given: argparse.Namespace) -> None:
    percent = given.amount_uncertainty_percent
    for option, value, lowest, highest in (
        ("--runs", given.runs, 2, 1000),
        ("--amount-uncertainty-percent", percent, 0, 50),
        ("--seed", given.seed, 0, 2**63 - 2000),
    ):
        if value is not None and not lowest <= value <= highest:
            raise HalfdropError(
                f"got {value:g}, allowed: {lowest:g} to {highest:g}", where=option, remedy=f"Correct {option}"
            )


def prediction_lines(predicted: Prediction) -> list[str]:
    """Return a prediction for people."""
    lines = [
        f"{predicted.runs} simulated runs; another one lies within the range with probability {predicted.coverage:.2f}"
    ]
    points = zip(predicted.volume_ml, predicted.standard_uncertainty_ml, strict=True)
    for number, (volume, uncertainty) in enumerate(points, start=1):
        lines.append(f"end point {number}: {_range(volume, 3)} mL, standard uncertainty {_small(uncertainty)} mL")
    if not predicted.volume_ml:
        lines.append("no end point was found in any of them")
    elif predicted.assumption is not None:
        lines.append(predicted.assumption)
    lines += [
        f"doses: {_range(predicted.doses, 0)}",
        f"duration: {_range(_minutes(predicted.duration_s), 1)} min",
        f"titrant: {_range(predicted.titrant_ml, 2)} mL",
        f"refills: {_range(predicted.refills, 0)}",
        "expected curve (pH, and its range over what is not known beforehand):",
        *_curve_lines(predicted),
    ]
    lines += [f"the run would be refused: {problem}" for problem in predicted.problems]
    lines += [f"warning: {warning}" for warning in predicted.warnings]
    return lines


def _curve_lines(predicted: Prediction) -> list[str]:
    curve = predicted.curve
    step = max(1, len(curve) // 24)
    shown = [*curve[::step], *([] if (len(curve) - 1) % step == 0 else [curve[-1]])]
    return [
        f"  {one.volume_ml:9.3f} mL   pH {one.ph.median:5.2f}   ({one.ph.lowest:.2f} to {one.ph.highest:.2f})"
        for one in shown
    ]


def _range(band: Band, places: int) -> str:
    if band.lowest == band.highest:
        return f"{band.median:.{places}f}"
    return f"{band.median:.{places}f} ({band.lowest:.{places}f} to {band.highest:.{places}f})"


def _small(band: Band) -> str:
    return _range(band, decimals(band.median))


def _minutes(band: Band) -> Band:
    return Band(median=band.median / 60.0, lowest=band.lowest / 60.0, highest=band.highest / 60.0)
