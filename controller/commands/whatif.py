"""halfdrop replay RUN --with METHOD: the bench fitted to the log, and both methods on it."""

from __future__ import annotations

import argparse
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from configs.settings import load_bench, shipped_bench
from controller.commands.output import decimals, print_json, say
from controller.commands.progressbar import ProgressBar
from controller.commands.settings import lab_of, method_of
from controller.curves.curvefile import CurveOptions, read_curve
from controller.foresight.benchfit import FittedBench, fit_bench
from controller.foresight.whatif import Compared, MethodOutcome, compare, fit_record, other_plan
from controller.planning.runplan import SampleChoice, expected_account, make_plan
from controller.records.record import Record, printable

if TYPE_CHECKING:
    from controller.evaluation.curve import Curve
    from controller.labfolder import Lab
    from controller.titration.plan import RunPlan

DONE = 0


def what_if(given: argparse.Namespace, record: Record) -> int:
    """Fit a bench to a record and compare its method with another."""
    _check_runs(given)
    lab = lab_of(given)
    _, method = method_of(given.with_method, lab)
    fitted = fit_record(record)
    return _compare(given, fitted, other_plan(fitted.plan, method, _bench(given, lab)), about={"run": record.path.stem})


def foreign(given: argparse.Namespace) -> int:
    """Fit a beaker to a table of points, as far as that goes, and run a method on it."""
    if given.with_method is None or given.time_scale is not None:
        raise HalfdropError(
            "a table of points holds no decisions that could be taken again",
            where=given.run,
            remedy="Name a method with --with METHOD: what would it do on such a sample? Or use halfdrop evaluate",
        )
    _check_runs(given)
    lab = lab_of(given)
    _, method = method_of(given.with_method, lab)
    bench = _bench(given, lab)
    account = expected_account(bench)
    plan = make_plan(method, bench, SampleChoice(), pump=account, probe_identity=account.identity)
    found = read_curve(Path(given.run), CurveOptions())
    for note in (*found.notes, *found.warnings):
        say(f"note: {note}")
    say(
        f"assumed as in method {method.name}: {plan.sample.initial_volume_ml:g} mL in the vessel, "
        f"{plan.titrant.name} {plan.titrant.concentration_mol_l:g} mol/L; lag and noise of the bench file"
    )
    fitted = fit_bench(plan, _known(found.curve, plan))
    return _compare(given, fitted, plan, about={"file": given.run})


def _known(curve: Curve, plan: RunPlan) -> Curve:
    chemistry, analyte = plan.chemistry, plan.chemistry.analyte
    if curve.ph is None:
        raise HalfdropError(
            "the table holds a potential, no pH", where="replay --with", remedy="Give a table of volume and pH"
        )
    return replace(
        curve,
        initial_volume_ml=plan.sample.initial_volume_ml,
        titrant_concentration_mol_l=plan.titrant.concentration_mol_l,
        titrant_is_acid=plan.titrant.acid,
        pkw=chemistry.pkw,
        debye_huckel_a=chemistry.debye_huckel_a,
        temperature_c=chemistry.temperature_c,
        pka=None if analyte is None else analyte.pka,
        charge=0 if analyte is None else analyte.charge,
        counter_ion_charge=0 if analyte is None else analyte.counter_ion_charge,
    )


def _compare(given: argparse.Namespace, fitted: FittedBench, other: RunPlan, *, about: dict[str, str]) -> int:
    with ProgressBar("simulated runs", total=2 * given.runs) as bar:
        found = compare(
            fitted, other, runs=given.runs, first_seed=1 if given.seed is None else given.seed, on_run=bar.reach
        )
    if given.picture:
        from controller.report.comparison import comparison_svg

        Path(given.picture).write_text(comparison_svg(found), encoding="utf-8")
        say(f"picture: {given.picture}")
    if given.json:
        print_json({**about, **_document(found)})
    else:
        print("\n".join(printable(line) for line in _lines(found)))
    return DONE


def _bench(given: argparse.Namespace, lab: Lab | None) -> BenchSettings:
    if given.bench:
        return load_bench(Path(given.bench))
    return shipped_bench() if lab is None else load_bench(lab.bench)


def _check_runs(given: argparse.Namespace) -> None:
    if not 2 <= given.runs <= 1000:
        raise HalfdropError(f"got {given.runs}, allowed: 2 to 1000", where="--runs", remedy="Correct --runs")


def _document(found: Compared) -> dict[str, Any]:
    fitted = found.fitted
    return {
        "fitted": [
            {
                "name": one.name,
                "value": one.value,
                "standard_uncertainty": one.standard_uncertainty,
                "unit": one.unit,
            }
            for one in fitted.parameters()
        ],
        "fit_sound": fitted.sound,
        "chi_square": fitted.fit.chi_square,
        "own": found.own.to_json(),
        "other": found.other.to_json(),
    }


def _lines(found: Compared) -> list[str]:
    fitted = found.fitted
    lines = ["fitted to the log (standard uncertainty):"]
    for one in fitted.parameters():
        places = decimals(one.standard_uncertainty)
        value, uncertainty = f"{one.value:.{places}f}", f"{one.standard_uncertainty:.{places}f}"
        lines.append(f"  {one.name}: {value} ({uncertainty}) {one.unit}".rstrip())
    if not fitted.sound:
        lines.append("warning: the fit does not describe the points well; take what follows with care")
    lines += [
        f"{found.own.runs} simulated runs of each method on this bench: median (range)",
        _row("", found.own.name, found.other.name),
    ]
    rows = [
        ("doses", _count(found.own.doses), _count(found.other.doses)),
        ("minutes", _minutes(found.own), _minutes(found.other)),
        ("titrant, mL", _millilitres(found.own), _millilitres(found.other)),
        ("end points found", f"{found.own.found:.0%}", f"{found.other.found:.0%}"),
        ("off the truth, uL", _microlitres(found.own.bias_ul), _microlitres(found.other.bias_ul)),
        ("spread, uL", _microlitres(found.own.spread_ul), _microlitres(found.other.spread_ul)),
        ("stated uncertainty, uL", _microlitres(found.own.uncertainty_ul), _microlitres(found.other.uncertainty_ul)),
    ]
    return [*lines, *[_row(*row) for row in rows]]


def _row(name: str, own: str, other: str) -> str:
    return f"  {name:<24}{own:<26}{other}".rstrip()


def _count(values: tuple[float, float, float]) -> str:
    return f"{values[0]:.0f} ({values[1]:.0f} to {values[2]:.0f})"


def _minutes(outcome: MethodOutcome) -> str:
    middle, lowest, highest = (one / 60.0 for one in outcome.duration_s)
    return f"{middle:.1f} ({lowest:.1f} to {highest:.1f})"


def _millilitres(outcome: MethodOutcome) -> str:
    return "{:.3f} ({:.3f} to {:.3f})".format(*outcome.titrant_ml)


def _microlitres(value: float | None) -> str:
    return "none" if value is None else f"{value:.2f}"
