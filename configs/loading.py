"""The typed loader: a YAML file in, a checked settings model out, or every problem at once with its line and column."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any, NamedTuple, TypeVar

from pydantic import ValidationError

from configs.allowed import Location, allowed_at, field_at, keys_at, kind_of
from configs.errors import SettingsError
from configs.fields import Disagreement, Settings
from configs.marked import LARGEST_FILE_BYTES, MOST_PROBLEMS, Marked, Trap, UnreadableYamlError, read_marked, shown
from configs.nearest import did_you_mean

Model = TypeVar("Model", bound=Settings)
_NOT_TEXT = ("number", "whole number", "true or false")
_DECIMAL_COMMA = re.compile(r"[-+]?\d+,\d+")


class Problem(NamedTuple):
    """One thing wrong, with its place (line and column from 1)."""

    line: int
    column: int
    key: str
    text: str


def load(path: str | Path, model: type[Model]) -> Model:
    """Return the settings of a file.

    Raises:
        SettingsError: the file cannot be read or anything in it is wrong; every problem is listed.
    """
    return parse(read_file(path), model, where=str(path))


def parse(data: bytes, model: type[Model], *, where: str) -> Model:
    """Return the settings in the bytes of a YAML file; `where` is the name that problems are reported under.

    Raises:
        SettingsError: anything is wrong; every problem is listed.
    """
    document, traps = read_document(data, where=where)
    problems = [Problem(trap.line, trap.column, trap.key, _trap_text(trap, model)) for trap in traps]
    trapped = {(trap.line, trap.column) for trap in traps}
    try:
        settings = model.model_validate(document.plain())
    except ValidationError as error:
        found = _problems_of(error, model, document)
        problems += [problem for problem in found if problem[:2] not in trapped]
    else:
        if not problems:
            return settings
    raise settings_error(problems, where=where)


def settings_error(problems: list[Problem], *, where: str) -> SettingsError:
    """Return the error of these problems, in the order of the file, one line each; of very many the first ones."""
    ordered = sorted(dict.fromkeys(problems), key=lambda problem: problem[:2])
    lines = [f"{where}:{line}:{column}: {key}: {text}" for line, column, key, text in ordered[:MOST_PROBLEMS]]
    if len(ordered) > MOST_PROBLEMS:
        lines.append(f"{where}: and more; mend these first")
    return SettingsError([_printable(line) for line in lines], where=where)


def read_file(path: str | Path) -> bytes:
    """Return the bytes of a settings file of at most 1 MB.

    Raises:
        SettingsError: not there, a directory, not readable, or too large.
    """
    where = str(path)
    try:
        with Path(path).open("rb") as file:
            data = file.read(LARGEST_FILE_BYTES + 1)
    except FileNotFoundError:
        raise _whole(where, f"no such file{_near_file(Path(path))}, allowed: an existing YAML file") from None
    except (OSError, ValueError) as error:  # Windows reports a directory as a refused permission
        if isinstance(error, IsADirectoryError) or _is_directory(where):
            raise _whole(where, "got a directory, allowed: a YAML file") from None
        reason = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        raise _whole(where, f"not readable ({reason}), allowed: a YAML file that this account may read") from None
    if len(data) > LARGEST_FILE_BYTES:
        raise _whole(where, f"got more than {LARGEST_FILE_BYTES} bytes, allowed: at most {LARGEST_FILE_BYTES} bytes")
    return data


def read_document(data: bytes, *, where: str, all_text: bool = False) -> tuple[Marked, list[Trap]]:
    """Return the mapping that a settings file holds, with its places, and what was refused in it.

    Raises:
        SettingsError: unreadable, empty, or no mapping.
    """
    allowed = "allowed: settings, each as 'key: value'"
    try:
        document, traps = read_marked(data, all_text=all_text)
    except UnreadableYamlError as error:
        raise settings_error([Problem(error.line, error.column, "file", str(error))], where=where) from None
    if document is None or document.content in (None, ""):
        raise _whole(where, f"got nothing, {allowed}")
    if not isinstance(document.content, dict):
        got = f"got {shown(document.plain())}, {allowed}"
        raise settings_error([Problem(document.line, document.column, "file", got)], where=where)
    return document, traps


def _printable(text: str) -> str:
    """Return the text with control characters (a key may hold a terminal's escape codes) replaced."""
    return "".join(letter if letter.isprintable() else "?" for letter in text)


def _whole(where: str, text: str) -> SettingsError:
    return settings_error([Problem(1, 1, "file", text)], where=where)


def _is_directory(path: str) -> bool:
    try:
        return Path(path).is_dir()
    except (OSError, ValueError):
        return False


def _near_file(path: Path) -> str:
    try:
        return did_you_mean(
            path.stem, {entry.stem: entry.name for entry in path.parent.iterdir() if entry.suffix == ".yaml"}
        )
    except OSError:
        return ""


def _problems_of(error: ValidationError, model: type[Settings], document: Marked) -> list[Problem]:
    found: list[Problem] = []
    for item in error.errors(include_url=False)[: MOST_PROBLEMS + 1]:
        location: Location = item["loc"]
        kind, got, context = item["type"], item["input"], item.get("ctx", {})
        if kind == "disagreement":
            found += [_disagreeing(one, location, document) for one in context["found"]]
            continue
        if kind == "too_short" and len(got) >= context["min_length"]:
            continue  # entries that are wrong themselves do not count as present; they are listed already
        of_key = kind == "extra_forbidden"
        if location[-1:] == ("[key]",):
            location, of_key = location[:-1], True
        line, column, _ = _place(document, location, of_key=of_key)
        found.append(Problem(line, column, _dotted(location), _text(kind, got, context, model, location)))
    return found


def _disagreeing(one: Disagreement, location: Location, document: Marked) -> Problem:
    path = (*location, *(int(part) if part.isdigit() else part for part in one.field.split(".")))
    line, column, exact = _place(document, path)
    got = one.got if isinstance(one.got, str) else shown(one.got)
    return Problem(line, column, _dotted(path), f"got {got}{'' if exact else ' (the default)'}, allowed: {one.allowed}")


def _text(kind: str, got: Any, context: dict[str, Any], model: type[Settings], location: Location) -> str:
    if kind == "extra_forbidden":
        known = keys_at(model, location[:-1])
        near = did_you_mean(str(location[-1]), known)
        return f"got an unknown key{near}, allowed: {', '.join(known)}"
    allowed = allowed_at(model, location)
    if kind == "missing":
        return f"got nothing, allowed: {allowed}"
    if kind == "unknown_substance":
        return f"got {shown(got)}{context['near']}, allowed: a name of the catalogue of substances"
    wanted = kind_of(field_at(model, location)[1])
    hint = ""
    if "number" in wanted and isinstance(got, str) and _DECIMAL_COMMA.fullmatch(got):
        hint = f" (with a decimal point: {got.replace(',', '.')})"
    elif allowed.startswith("text") and isinstance(got, int | float):
        hint = f' (in quotes: "{shown(got)}")'
    elif " | " in wanted and isinstance(got, str):
        hint = did_you_mean(got, wanted.split(" | "))
    elif wanted == "whole number" and isinstance(got, float):
        return f"got {got!r}, allowed: {allowed}, without a decimal point"
    return f"got {shown(got)}, allowed: {allowed}{hint}"


def _trap_text(trap: Trap, model: type[Settings]) -> str:
    """Return what was refused, and what the setting there may be where that is no text (quotes would not help)."""
    if trap.got is None:
        return trap.text
    location: Location = tuple(int(part) - 1 if part.isdigit() else part for part in re.findall(r"[^.\[\]]+", trap.key))
    kind = kind_of(field_at(model, location)[1])
    return f"{trap.got}, allowed: {allowed_at(model, location)}" if kind in _NOT_TEXT or " | " in kind else trap.text


def _dotted(location: Location) -> str:
    text = ""
    for part in location:
        text += f"[{part + 1}]" if isinstance(part, int) else f".{part}" if text else str(part)
    return text or "file"


def _place(document: Marked, location: Location, *, of_key: bool = False) -> tuple[int, int, bool]:
    """Return line and column of a value and True, or those of the nearest group that is there and False."""
    node, place = document, (document.line, document.column)
    for depth, part in enumerate(location):
        content = node.content
        if isinstance(content, dict) and part in content:
            key, node = node.keys[str(part)], content[str(part)]
            last = depth == len(location) - 1
            place = key if (last and of_key) or isinstance(node.content, dict) else (node.line, node.column)
        elif isinstance(content, list) and isinstance(part, int) and part < len(content):
            node = content[part]
            place = (node.line, node.column)
        else:
            return *place, False
    return *place, True
