"""The typed loader: a YAML file in, a checked settings model out, or every problem at once with its line and column."""

from __future__ import annotations

import re
import types
import typing
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ValidationError
from pydantic.fields import FieldInfo

from configs.errors import SettingsError
from configs.fields import Settings, limits_of, unit_of
from configs.marked import LARGEST_FILE_BYTES, Marked, Trap, UnreadableYamlError, read_marked, shown
from configs.nearest import did_you_mean

Model = TypeVar("Model", bound=Settings)
_DECIMAL_COMMA = re.compile(r"[-+]?\d+,\d+")
Location = tuple[int | str, ...]


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
    problems = [_line(where, trap.line, trap.column, trap.key, trap.text) for trap in traps]
    places = {(trap.line, trap.column) for trap in traps}
    try:
        settings = model.model_validate(document.plain())
    except ValidationError as error:
        problems += _problems_of(error, model, document, where, places)
    else:
        if not problems:
            return settings
    raise SettingsError(_in_order(problems), where=where)


def read_file(path: str | Path) -> bytes:
    """Return the bytes of a settings file of at most 1 MB.

    Raises:
        SettingsError: not there, a directory, not readable, or too large.
    """
    try:
        with Path(path).open("rb") as file:
            data = file.read(LARGEST_FILE_BYTES + 1)
    except IsADirectoryError:
        raise _whole(path, "got a directory, allowed: a YAML file") from None
    except FileNotFoundError:
        raise _whole(path, f"no such file{_near_file(Path(path))}; allowed: an existing YAML file") from None
    except (OSError, ValueError) as error:
        if Path(path).is_dir():  # Windows reports a directory as a refused permission
            raise _whole(path, "got a directory, allowed: a YAML file") from None
        reason = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        raise _whole(path, f"not readable: {reason}") from None
    if len(data) > LARGEST_FILE_BYTES:
        raise _whole(path, f"got more than {LARGEST_FILE_BYTES:,} bytes, allowed: at most {LARGEST_FILE_BYTES:,} bytes")
    return data


def read_document(data: bytes, *, where: str, all_text: bool = False) -> tuple[Marked, list[Trap]]:
    """Return the mapping that a settings file holds, with its places, and what was refused in it.

    Raises:
        SettingsError: unreadable, empty, or no mapping.
    """
    try:
        document, traps = read_marked(data, all_text=all_text)
    except UnreadableYamlError as error:
        raise SettingsError([_line(where, error.line, error.column, "file", str(error))], where=where) from None
    if document is None or document.content in (None, ""):
        raise SettingsError([_line(where, 1, 1, "file", "got nothing, allowed: settings as 'key: value'")], where=where)
    if not isinstance(document.content, dict):
        got = f"got {shown(document.plain())}, allowed: settings as 'key: value' lines"
        raise SettingsError([_line(where, document.line, document.column, "file", got)], where=where)
    return document, traps


def _whole(path: str | Path, text: str) -> SettingsError:
    return SettingsError([_line(str(path), 1, 1, "file", text)], where=str(path))


def _near_file(path: Path) -> str:
    try:
        return did_you_mean(path.name, [entry.name for entry in path.parent.iterdir() if entry.suffix == ".yaml"])
    except OSError:
        return ""


def _line(where: str, line: int, column: int, key: str, text: str) -> str:
    return f"{where}:{line}:{column}: {key or 'file'}: {text}"


def _in_order(problems: list[str]) -> list[str]:
    def place(problem: str) -> tuple[int, int]:
        found = re.search(r":(\d+):(\d+): ", problem)
        return (int(found[1]), int(found[2])) if found else (0, 0)

    return sorted(dict.fromkeys(problems), key=place)


def _problems_of(
    error: ValidationError, model: type[Settings], document: Marked, where: str, trapped: set[tuple[int, int]]
) -> list[str]:
    found = []
    for item in error.errors(include_url=False):
        location: Location = item["loc"]
        context = item.get("ctx", {})
        if item["type"] == "disagreement":
            for one in context["found"]:
                path = (*location, *(int(part) if part.isdigit() else part for part in one.field.split(".")))
                line, column = _place(document, path)
                text = f"got {_bare(one.got)}, allowed: {one.allowed}"
                found.append(_line(where, line, column, _dotted(path), text))
            continue
        line, column = _place(document, location, of_key=item["type"] == "extra_forbidden")
        if (line, column) not in trapped:
            text = _text(item["type"], item["input"], context, model, location)
            found.append(_line(where, line, column, _dotted(location), text))
    return found


def _text(kind: str, got: Any, context: dict[str, Any], model: type[Settings], location: Location) -> str:
    if kind == "extra_forbidden":
        known = _group_at(model, location[:-1])
        near = did_you_mean(str(location[-1]), known)
        return f"got an unknown key{near}, allowed: {', '.join(known)}"
    info, annotation = _field_at(model, location)
    allowed = allowed_text(info, annotation, _name_of(location))
    if kind == "missing":
        return f"missing, allowed: {allowed}"
    if kind == "unknown_substance":
        return f"got {shown(got)}, unknown substance{context['near']}, allowed: {allowed}"
    hint = ""
    if isinstance(got, str) and _DECIMAL_COMMA.fullmatch(got) and "number" in allowed_kind(annotation):
        hint = f" (with a decimal point: {got.replace(',', '.')})"
    return f"got {shown(got)}, allowed: {allowed}{hint}"


def allowed_text(info: FieldInfo | None, annotation: Any, name: str) -> str:
    """Return in words what a setting may be: kind, range and unit."""
    kind = allowed_kind(annotation)
    limits = limits_of(info) if info is not None else {}
    unit = unit_of(name)
    if "number" in kind:
        spelled = _range(limits)
        text = kind if not spelled else spelled if kind == "number" else f"{kind} {spelled}"
        return f"{text} {unit}".rstrip()
    lengths = _lengths(info, "entries" if kind.startswith("a list") else "characters")
    pattern = next((item.pattern for item in info.metadata if getattr(item, "pattern", None)), "") if info else ""
    if pattern:
        return "small letters, digits and hyphens, at most 64"
    return f"{kind}{lengths}"


def allowed_kind(annotation: Any) -> str:
    """Return in words what kind of value an annotation asks for."""
    annotation = _without_none(annotation)
    origin = typing.get_origin(annotation)
    if origin is typing.Literal:
        return " | ".join(str(choice) for choice in typing.get_args(annotation))
    if origin is tuple or origin is list:
        return "a list"
    if origin is dict:
        return "a mapping"
    if annotation is bool:
        return "true or false"
    if annotation is int:
        return "whole number"
    if annotation is float:
        return "number"
    if annotation is str:
        return "text"
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return f"the keys {', '.join(annotation.model_fields)}"
    return "a value"


def _range(limits: dict[str, float]) -> str:
    above, below = limits.get("gt"), limits.get("lt")
    lowest, highest = limits.get("ge"), limits.get("le")
    if lowest is not None and highest is not None:
        return f"{lowest:.12g} to {highest:.12g}"
    parts = []
    if above is not None:
        parts.append(f"above {above:.12g}")
    if lowest is not None:
        parts.append(f"at least {lowest:.12g}")
    if highest is not None:
        parts.append(f"at most {highest:.12g}" if not parts else f"up to {highest:.12g}")
    if below is not None:
        parts.append(f"below {below:.12g}")
    return " ".join(parts)


def _lengths(info: FieldInfo | None, what: str) -> str:
    if info is None:
        return ""
    lowest = next((item.min_length for item in info.metadata if getattr(item, "min_length", None)), None)
    highest = next((item.max_length for item in info.metadata if getattr(item, "max_length", None)), None)
    if lowest is None and highest is None:
        return ""
    if highest is None:
        return f" of at least {lowest} {what}"
    return f" of {lowest or 0} to {highest} {what}"


def _bare(got: Any) -> str:
    return got if isinstance(got, str) else shown(got)


def _dotted(location: Location) -> str:
    text = ""
    for part in location:
        text += f"[{part + 1}]" if isinstance(part, int) else f".{part}" if text else str(part)
    return text


def _name_of(location: Location) -> str:
    return next((part for part in reversed(location) if isinstance(part, str)), "")


def _place(document: Marked, location: Location, *, of_key: bool = False) -> tuple[int, int]:
    """Return line and column of a value; of the nearest group that is there where the value is missing."""
    node = document
    place = (document.line, document.column)
    for depth, part in enumerate(location):
        content = node.content
        if isinstance(content, dict) and part in content:
            last = depth == len(location) - 1
            key = node.keys[str(part)]
            node = content[part]
            place = key if (last and of_key) or isinstance(node.content, dict) else (node.line, node.column)
        elif isinstance(content, list) and isinstance(part, int) and part < len(content):
            node = content[part]
            place = (node.line, node.column)
        else:
            break
    return place


def _group_at(model: type[Settings], location: Location) -> list[str]:
    _, annotation = _field_at(model, location) if location else (None, model)
    annotation = _without_none(annotation)
    return list(annotation.model_fields) if isinstance(annotation, type) and issubclass(annotation, BaseModel) else []


def _field_at(model: type[Settings], location: Location) -> tuple[FieldInfo | None, Any]:
    """Return the field, and the annotation of the value, at a place in a model."""
    annotation: Any = model
    info: FieldInfo | None = None
    for part in location:
        annotation = _without_none(annotation)
        arguments = typing.get_args(annotation)
        if isinstance(annotation, type) and issubclass(annotation, BaseModel):
            info = annotation.model_fields.get(str(part))
            annotation = info.annotation if info is not None else None
        elif typing.get_origin(annotation) in (tuple, list):
            info, annotation = _item(arguments[0])
        elif typing.get_origin(annotation) is dict:
            info, annotation = _item(arguments[1])
    return info, annotation


def _item(annotation: Any) -> tuple[FieldInfo | None, Any]:
    if typing.get_origin(annotation) is typing.Annotated:
        return FieldInfo.from_annotation(annotation), typing.get_args(annotation)[0]
    return None, annotation


def _without_none(annotation: Any) -> Any:
    if typing.get_origin(annotation) in (types.UnionType, typing.Union):
        kept = [part for part in typing.get_args(annotation) if part is not type(None)]
        annotation = kept[0]
    if typing.get_origin(annotation) is typing.Annotated:
        annotation = typing.get_args(annotation)[0]
    return annotation
