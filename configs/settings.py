"""The settings files by kind: methods, benches, solutions, answers; what ships; their JSON Schema."""

from __future__ import annotations

from pathlib import Path
from typing import Any, Literal

from configs.benchfile import BenchSettings
from configs.dialectfile import DialectSettings
from configs.fields import Settings, unit_of
from configs.loading import Problem, load, parse, read_document, read_file, settings_error
from configs.method import MethodSettings
from configs.shipped import shipped_bytes, shipped_names
from configs.solutionfile import SolutionSettings

Kind = Literal["method", "bench", "solution", "dialect"]
MODELS: dict[Kind, type[Settings]] = {
    "method": MethodSettings,
    "bench": BenchSettings,
    "solution": SolutionSettings,
    "dialect": DialectSettings,
}
LONGEST_ANSWER = 400


def load_method(path: str | Path) -> MethodSettings:
    """Return the method of a file. Raises: SettingsError with every problem."""
    return load(path, MethodSettings)


def load_bench(path: str | Path) -> BenchSettings:
    """Return the bench of a file. Raises: SettingsError with every problem."""
    return load(path, BenchSettings)


def load_solution(path: str | Path) -> SolutionSettings:
    """Return the two mixtures of a solution file. Raises: SettingsError with every problem."""
    return load(path, SolutionSettings)


def load_dialect(named: str, beside: Path | None = None) -> DialectSettings:
    """Return a dialect by file (relative to `beside`, the bench file's folder) or by the name of a shipped one.

    Raises:
        SettingsError: with every problem of the file.
        HalfdropError: nothing of this name ships.
    """
    if named.endswith((".yaml", ".yml")) or Path(named).name != named:
        return load((beside or Path()) / named, DialectSettings)
    return shipped_dialect(named)


def load_answers(path: str | Path) -> dict[str, str]:
    """Return the answers of a file, key by key, letter for letter: `hypochlorite: no` is the answer "no".

    Raises:
        SettingsError: with every problem: an answer that is empty, a list or a group, a key twice.
    """
    where = str(path)
    document, traps = read_document(read_file(path), where=where, all_text=True)
    problems = [Problem(trap.line, trap.column, trap.key, trap.text) for trap in traps]
    answers: dict[str, str] = {}
    for key, value in document.content.items():
        content = value.content
        if isinstance(content, str) and 0 < len(content.strip()) <= LONGEST_ANSWER:
            answers[key] = content.strip()
        else:
            got = "nothing" if content == "" else "a long text" if isinstance(content, str) else "a group or list"
            allowed = f"one answer of 1 to {LONGEST_ANSWER} characters"
            problems.append(Problem(value.line, value.column, key, f"got {got}, allowed: {allowed}"))
    if problems:
        raise settings_error(problems, where=where)
    return answers


def shipped_methods() -> tuple[str, ...]:
    """Return the names of the methods that ship with the program."""
    return shipped_names("methods")


def shipped_benches() -> tuple[str, ...]:
    """Return the names of the benches that ship with the program."""
    return shipped_names("benches")


def shipped_method(name: str) -> MethodSettings:
    """Return a shipped method. Raises: HalfdropError where nothing of this name ships."""
    return parse(shipped_bytes("methods", name), MethodSettings, where=f"methods/{name}.yaml")


def shipped_bench(name: str = "simulated") -> BenchSettings:
    """Return a shipped bench. Raises: HalfdropError where nothing of this name ships."""
    return parse(shipped_bytes("benches", name), BenchSettings, where=f"benches/{name}.yaml")


def shipped_dialects() -> tuple[str, ...]:
    """Return the names of the dialects that ship with the program."""
    return shipped_names("dialects")


def shipped_dialect(name: str) -> DialectSettings:
    """Return a shipped dialect. Raises: HalfdropError where nothing of this name ships."""
    return parse(shipped_bytes("dialects", name), DialectSettings, where=f"dialects/{name}.yaml")


def schema(kind: Kind) -> dict[str, Any]:
    """Return the JSON Schema (draft 2020-12) of a kind of file, for editors; `x-unit` gives a number's unit."""
    document = MODELS[kind].model_json_schema()
    for part in (document, *document.get("$defs", {}).values()):
        for name, entry in part.get("properties", {}).items():
            if (unit := unit_of(name)) and entry.get("type") != "object":
                entry["x-unit"] = unit
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        **document,
        "title": f"halfdrop {kind} file",
    }
