"""The commands of the command line, each with its options; only the chosen one's are filled in."""

from __future__ import annotations

from controller.commandparser import Parser, added

TYPE_CHECKING = False  # typing itself would cost a tenth of the time that --help may take
if TYPE_CHECKING:
    from collections.abc import Callable
    from typing import Any


def _lab(made: Parser) -> None:
    made.add_argument("--lab", metavar="DIR", help="lab folder (else HALFDROP_LAB, else the nearest parent)")


def _json(made: Parser) -> None:
    made.add_argument("--json", action="store_true", help="one JSON document on standard output")


def _sample(made: Parser) -> None:
    made.add_argument("--sample-id", metavar="TEXT", help="what the record calls the sample")
    amount = made.add_mutually_exclusive_group()
    amount.add_argument("--sample-volume-ml", type=float, metavar="ML", help="volume of sample taken")
    amount.add_argument("--sample-mass-g", type=float, metavar="G", help="mass of sample or standard weighed in")
    made.add_argument("--initial-volume-ml", type=float, metavar="ML", help="all liquid in the vessel, water included")


def _world(made: Parser) -> None:
    made.add_argument("--bench", metavar="FILE", help="bench file (default: bench.yaml of the lab folder)")
    made.add_argument("--seed", type=int, metavar="N", help="seed of the simulated bench")


def _demo(made: Parser) -> None:
    made.set_defaults(function="controller.commands.demo:demo")
    made.add_argument("--dir", metavar="DIR", help="where to make the lab folder (default: a new temporary folder)")
    made.add_argument("--headless", action="store_true", help="progress and result as plain lines")
    made.add_argument("--time-scale", metavar="X", help="run X times real time (default: 10 on a screen, else 'fast')")
    made.add_argument("--seed", type=int, default=1, metavar="N", help="seed of the simulated bench (default: 1)")
    _json(made)


def _init(made: Parser) -> None:
    made.set_defaults(function="controller.commands.init:init")
    made.add_argument("dir", metavar="DIR")
    made.add_argument("--upgrade", action="store_true", help="show what a newer version would change, keep .bak files")


def _run(made: Parser) -> None:
    made.set_defaults(function="controller.commands.run:run")
    made.add_argument("method", metavar="METHOD", help="a method's name or file")
    _lab(made)
    _sample(made)
    _world(made)
    made.add_argument("--replicates", type=int, metavar="N", help="titrate the sample N times; mean, scatter, Grubbs")
    made.add_argument("--portions", metavar="LIST", help="mL or g of each replicate, as 10,10,10 or 0.151,0.148,0.153")
    made.add_argument("--series", metavar="FILE", help="a table of samples: id, amount, method, replicates")
    made.add_argument(
        "--on-failure", choices=("stop", "skip", "repeat-once"), default="stop", help="series: where a sample fails"
    )
    made.add_argument("--check-buffer-every", type=int, metavar="N", help="series: probe into the check buffer, each N")
    made.add_argument("--operator", metavar="NAME", help="who runs it (kept in the record)")
    made.add_argument("--headless", action="store_true", help="ask nothing on the terminal")
    made.add_argument("--attended", action="store_true", help="questions wait for whoever watches it on a screen")
    made.add_argument("--traffic-log", action="store_true", help="keep what goes over the lines in logs/traffic.log")
    made.add_argument("--answers", metavar="FILE", help="answers to the questions of a headless run (YAML)")
    made.add_argument("--time-scale", metavar="X", help="simulated bench only: X times real time, or 'fast' (default)")
    made.add_argument("--faults", metavar="FILE", help="simulated bench only: what goes wrong, and when (YAML)")
    _json(made)


def _watch(made: Parser) -> None:
    made.set_defaults(function="controller.commands.watch:watch")
    made.add_argument("run", metavar="RUN", nargs="?", help="a record's name or file (default: the run that goes on)")
    _lab(made)


def _calibration(actions: Any, name: str, about: str) -> Parser:
    made = added(actions, name, f"controller.commands.calibrate:{name}", about)
    _lab(made)
    _world(made)
    made.add_argument("--operator", metavar="NAME", help="who does it (kept in the record)")
    made.add_argument("--headless", action="store_true", help="ask nothing on the terminal")
    made.add_argument("--answers", metavar="FILE", help="answers to its questions, headless (YAML)")
    made.add_argument("--attended", action="store_true", help="questions wait for whoever watches it on a screen")
    made.add_argument("--time-scale", metavar="X", help="simulated bench only: X times real time, or 'fast' (default)")
    _json(made)
    return made


def _from_runs(made: Parser) -> None:
    made.add_argument("method", metavar="METHOD", help="a method's name or file")
    made.add_argument("--lot-id", metavar="NAME", help="name of the lot (default: the method's)")
    made.add_argument("--from", dest="runs_from", metavar="RUN", nargs="+", help="runs that are there already")


def _calibrate(group: Parser) -> None:
    actions = group.add_subparsers(dest="action", metavar="ACTION", parser_class=Parser, required=True)
    made = _calibration(actions, "probe", "calibrate the probe with the bench's buffers")
    made.add_argument("--lots", metavar="LIST", help="bottles to use, in this order, as B4-118,B7-204 (default: all)")
    made.add_argument("--no-check", action="store_true", help="leave the check buffer out (then it is no pass)")
    made = _calibration(actions, "burette", "check the burette by weighing (ISO 8655-6)")
    made.add_argument("--weighings", metavar="FILE", help="balance readings made before: CSV of set_volume_ml, mass_g")
    made.add_argument("--deliveries", type=int, default=10, metavar="N", help="of each volume (default: 10)")
    made.add_argument("--water-temperature-c", type=float, metavar="T")
    made.add_argument("--air-temperature-c", type=float, metavar="T")
    made.add_argument("--pressure-hpa", type=float, default=1013.25, metavar="P")
    made.add_argument("--humidity-percent", type=float, default=50.0, metavar="H")
    made.add_argument("--evaporation-mg", type=float, default=0.0, metavar="MG", help="loss per delivery, as measured")
    made = _calibration(actions, "titrant", "standardise a titrant against a primary standard")
    _from_runs(made)
    _sample(made)
    made.add_argument("--replicates", type=int, metavar="N", help="how many portions are titrated (default: 3)")
    made.add_argument("--portions", metavar="LIST", help="g of standard of each, as 0.1512,0.1490,0.1533")
    made.add_argument("--response-check", action="store_true", help="hold twice before the last end point: probe's lag")
    made.add_argument("--carbonate-run", metavar="RUN", help="a run on strong acid: is there carbonate in the titrant?")
    made.add_argument("--preparation", metavar="TEXT", help="how the titrant was prepared")
    made.add_argument("--prepared-on", metavar="DAY", help="as 2026-12-01")
    made.add_argument("--expires", metavar="DAY", help="last day of use, as 2027-06-30")
    made = _calibration(actions, "blank", "titrate a blank, or settle it from runs without sample or typed volumes")
    made.set_defaults(function="controller.commands.calibrate_blank:blank")
    _from_runs(made)
    made.add_argument("--replicates", type=int, metavar="N", help="titrate N blanks to the end point pH of the sample")
    made.add_argument("--at-ph", type=float, metavar="PH", help="where the sample's titration ends (default: as known)")
    made.add_argument("--expires", metavar="DAY", help="last day of use, as 2027-06-30")
    made.add_argument("--volumes-ml", metavar="LIST", help="volumes in mL, none where no end point was found")
    made = added(actions, "list", "controller.commands.calibrations:list_calibrations", "what is in force, and since")
    _lab(made)
    _json(made)
    made = added(actions, "history", "controller.commands.calibrations:history", "how a kind moved over time")
    made.add_argument("kind", choices=("probe", "response", "burette", "titrant", "blank"))
    _lab(made)
    _json(made)


def _decide(made: Parser) -> None:
    made.set_defaults(function="controller.commands.decide:decide")
    made.add_argument("method", metavar="METHOD", nargs="?", help="a method's name or file")
    made.add_argument("--plan", metavar="FILE", help="a run plan as in a record's header, instead of a method")
    _lab(made)
    _sample(made)
    _world(made)


def _evaluate(made: Parser) -> None:
    made.set_defaults(function="controller.commands.evaluate:evaluate")
    made.add_argument("file", metavar="FILE", help="a run record, or any CSV of volume and pH or potential")
    made.add_argument("--volume-column", metavar="NAME")
    made.add_argument("--signal-column", metavar="NAME")
    made.add_argument("--signal-unit", choices=("ph", "mv", "v"))
    made.add_argument("--decimal", choices=("point", "comma"), help="the decimal mark, where it can mean two things")
    made.add_argument(
        "--interpolate-volumes", action="store_true", help="a time series: volumes between those read run evenly"
    )
    made.add_argument("--initial-volume-ml", type=float, metavar="ML", help="all liquid in the vessel at the start")
    made.add_argument("--titrant-concentration-mol-l", type=float, metavar="C")
    made.add_argument("--substance", metavar="NAME", help="the substance titrated")
    made.add_argument("--temperature-c", type=float, metavar="T")
    made.add_argument("--activity", choices=("davies", "none"), default="none", help="activity correction of the model")
    _lab(made)
    made.add_argument("--end-points", type=int, metavar="N", help="how many equivalence points are expected")
    made.add_argument("--identify", action="store_true", help="rank what an unknown acid or base may be (never proof)")
    made.add_argument("--sample-mass-g", type=float, metavar="G", help="--identify: mass taken (a record has its own)")
    made.add_argument("--add", action="store_true", help="keep the evaluation of a record beside it, the old one stays")
    made.add_argument("--reason", metavar="TEXT", help="--add: why it is evaluated again")
    _json(made)


def _predict(made: Parser) -> None:
    made.set_defaults(function="controller.commands.predict:predict")
    made.add_argument("what", metavar="METHOD|SOLUTION", help="a method (name or file), or a solution file")
    made.add_argument("--volumes", metavar="FILE", help="solution file: volumes from this file, one a line")
    made.add_argument("--runs", type=int, default=39, metavar="N", help="method: simulated runs (39: a 95 %% range)")
    made.add_argument(
        "--amount-uncertainty-percent", type=float, metavar="P", help="method: how well the amount is known (k = 1)"
    )
    _lab(made)
    _sample(made)
    _world(made)
    _json(made)


def _resume(made: Parser) -> None:
    made.set_defaults(function="controller.commands.resume:resume")
    made.add_argument("run", metavar="RUN", help="a record without an end (of a run or a series): its name or file")
    made.add_argument("--evaluate-only", action="store_true", help="do not go on: end it and evaluate what is there")
    made.add_argument("--bench", metavar="FILE", help="bench file (default: bench.yaml of the lab folder)")
    made.add_argument("--operator", metavar="NAME", help="who resumes it (kept in the record)")
    made.add_argument("--headless", action="store_true", help="ask nothing on the terminal")
    made.add_argument("--answers", metavar="FILE", help="answers to the questions of a headless run (YAML)")
    made.add_argument("--attended", action="store_true", help="questions wait for whoever watches it on a screen")
    made.add_argument("--time-scale", metavar="X", help="served simulated bench only: X times real time")
    _lab(made)
    _json(made)


def _replay(made: Parser) -> None:
    made.set_defaults(function="controller.commands.replay:replay")
    made.add_argument("run", metavar="RUN", help="a record's name or file, or a table of volume and pH")
    made.add_argument("--with", dest="with_method", metavar="METHOD", help="what this method would have done instead")
    made.add_argument("--time-scale", metavar="X", help="watch it again, X times as fast as it was")
    made.add_argument("--runs", type=int, default=39, metavar="N", help="--with: simulated runs of each method")
    made.add_argument("--picture", metavar="FILE", help="--with: both methods compared, as SVG")
    _lab(made)
    _world(made)
    _json(made)


def _schema(made: Parser) -> None:
    made.set_defaults(function="controller.commands.schema:schema")
    made.add_argument("kind", choices=("method", "bench", "solution", "dialect"))


def _runs(group: Parser) -> None:
    actions = group.add_subparsers(dest="action", metavar="ACTION", parser_class=Parser, required=True)
    made = added(actions, "list", "controller.commands.runs:list_runs", "all records of the lab folder")
    _lab(made)
    _json(made)
    made = added(actions, "show", "controller.commands.runs:show", "one record: result, end points, warnings")
    made.add_argument("run", metavar="RUN", help="a record's name or file")
    _lab(made)
    _json(made)
    made = added(actions, "mean", "controller.commands.runs:mean", "runs on one sample together: mean, RSD, Grubbs")
    made.add_argument("run", metavar="SAMPLE|RUN", nargs="+", help="a sample's id, or the runs to take")
    _lab(made)
    _json(made)
    made = added(actions, "verify", "controller.commands.runs:verify", "is a record intact, edited, torn or cut")
    made.add_argument("run", metavar="RUN", nargs="*", help="records (default: all)")
    _lab(made)
    _json(made)
    made = added(actions, "export", "controller.commands.runs:export", "points of a record as CSV or JSON")
    made.add_argument("run", metavar="RUN")
    made.add_argument("--to", metavar="DIR", help="folder for the files (default: CSV on standard output)")
    _lab(made)
    _json(made)
    made = added(actions, "report", "controller.commands.report:report", "one record as a page to read and print")
    made.add_argument("run", metavar="RUN")
    made.add_argument("--replicate", metavar="RUN", nargs="+", help="more runs of the sample (default: its series)")
    made.add_argument("--to", metavar="FILE", help="the page ('-': standard output; default: in the lab's reports/)")
    _lab(made)
    _json(made)
    made = added(actions, "close", "controller.commands.runs:close", "end a record that was left open")
    made.add_argument("run", metavar="RUN")
    _lab(made)


def _at_bench(made: Parser) -> None:
    _lab(made)
    _world(made)
    made.add_argument("--answers", metavar="FILE", help="answers to the questions (YAML)")
    made.add_argument("--time-scale", metavar="X", help="simulated bench only: X times real time, or 'fast' (default)")
    made.add_argument("--traffic-log", action="store_true", help="keep what goes over the lines in logs/traffic.log")
    _json(made)


def _bench(group: Parser) -> None:
    actions = group.add_subparsers(dest="action", metavar="ACTION", parser_class=Parser, required=True)
    made = added(actions, "show", "controller.commands.bench:show", "devices, limits, calibration, state of the probe")
    _lab(made)
    made.add_argument("--bench", metavar="FILE")
    _json(made)
    made = added(actions, "ports", "controller.commands.bench_ready:ports", "serial ports by lasting names")
    _json(made)
    made = added(actions, "check", "controller.commands.bench_ready:check", "readings, a dry dose, stop, watchdog")
    _at_bench(made)
    made.add_argument("--no-motion", action="store_true", help="only what moves nothing")
    made = added(actions, "ready", "controller.commands.bench_ready:ready", "could a run begin now; nothing moves")
    _at_bench(made)
    made.add_argument("--method", metavar="METHOD", help="the method to be ready for")
    made = added(actions, "shut-down", "controller.commands.bench_ready:shut_down", "stop, empty, see to the probe")
    _at_bench(made)
    made.add_argument("--empty", action="store_true", help="push what the syringe holds into the waste")
    made = added(actions, "serve", "controller.commands.bench:serve", "offer a simulated bench's ports to programs")
    _lab(made)
    _world(made)
    made.add_argument("--method", metavar="METHOD", help="the method whose sample is in the beaker")
    made.add_argument("--link", choices=("pty", "tcp"), help="pseudo-terminals or TCP (default: pty if there is one)")
    made.add_argument("--time-scale", metavar="X", help="run X times faster than real time")
    _sample(made)


COMMANDS: dict[str, tuple[str, Callable[[Parser], None]]] = {
    "demo": ("a simulated lab folder and a whole run in it", _demo),
    "init": ("make a lab folder", _init),
    "run": ("titrate by a method", _run),
    "watch": ("follow a run that goes on, and command it", _watch),
    "calibrate": ("probe, burette, titrant and blank", _calibrate),
    "decide": ("the decision core alone, over JSON lines", _decide),
    "evaluate": ("end points of a record or CSV file", _evaluate),
    "predict": ("the expected curve before anything moves", _predict),
    "resume": ("go on with a run that broke off", _resume),
    "replay": ("decide a record again, or see what another method would do", _replay),
    "schema": ("JSON Schema of a settings file", _schema),
    "runs": ("list, show, verify and export records", _runs),
    "bench": ("show, check, shut down or serve a bench", _bench),
}
