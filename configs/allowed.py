"""What a setting may be, in words, from the settings models: kind, range and unit."""

from __future__ import annotations

import types
import typing
from typing import Any

from pydantic import AfterValidator, BaseModel
from pydantic.fields import FieldInfo

from configs.fields import PLAIN_NAME, Settings, limits_of, unit_of

Location = tuple[int | str, ...]

_KINDS: dict[Any, str] = {bool: "true or false", int: "whole number", float: "number", str: "text"}


def field_at(model: type[Settings], location: Location) -> tuple[FieldInfo | None, Any]:
    """Return the field, and the annotation of the value, at a place in a model."""
    annotation: Any = model
    info: FieldInfo | None = None
    for part in location:
        annotation = _without_none(annotation)
        arguments = typing.get_args(annotation)
        if isinstance(annotation, type) and issubclass(annotation, BaseModel):
            info = annotation.model_fields.get(str(part))
            annotation = info.annotation if info is not None else None
        elif typing.get_origin(annotation) is tuple:
            info, annotation = _item(arguments[0])
        elif typing.get_origin(annotation) is dict:
            info, annotation = _item(arguments[1])
    return info, annotation


def keys_at(model: type[Settings], location: Location) -> list[str]:
    """Return the keys of the group at a place in a model."""
    annotation = _without_none(field_at(model, location)[1])
    return list(annotation.model_fields) if isinstance(annotation, type) and issubclass(annotation, BaseModel) else []


def allowed_at(model: type[Settings], location: Location) -> str:
    """Return in words what the value at a place in a model may be."""
    info, annotation = field_at(model, location)
    kind = kind_of(annotation)
    if kind in ("number", "whole number"):
        name = next((part for part in reversed(location) if isinstance(part, str)), "")
        limits = limits_of(info) if info is not None else {}
        spelled = _range(limits)
        shown_kind = kind if not spelled or (kind == "whole number" and limits.get("ge") != limits.get("le")) else ""
        return " ".join(part for part in (shown_kind, spelled, unit_of(name)) if part)
    metadata = [*(info.metadata if info is not None else []), *_inner_metadata(annotation)]
    if any(getattr(item, "pattern", None) == PLAIN_NAME for item in metadata):
        return "small letters, digits and hyphens, at most 64"
    if kind == "text" and any(isinstance(item, AfterValidator) for item in metadata):
        return "a name of the catalogue of substances"
    return kind + _length(metadata, "entries" if kind == "a list" else "characters")


def kind_of(annotation: Any) -> str:
    """Return in words what kind of value an annotation asks for."""
    annotation = _without_none(annotation)
    origin = typing.get_origin(annotation)
    if origin is typing.Literal:
        return " | ".join(str(choice) for choice in typing.get_args(annotation))
    if origin is tuple:
        return "a list"
    if origin is dict:
        return "a mapping"
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return f"the keys {', '.join(annotation.model_fields)}"
    return _KINDS.get(annotation, "a value")


def _range(limits: dict[str, float]) -> str:
    lowest, above, highest = limits.get("ge"), limits.get("gt"), limits.get("le")
    if lowest is not None and highest is not None:
        return f"{lowest:.12g} to {highest:.12g}" if lowest != highest else f"{lowest:.12g}"
    parts = []
    if above is not None:
        parts.append(f"above {above:.12g}")
    if lowest is not None:
        parts.append(f"at least {lowest:.12g}")
    if highest is not None:
        parts.append(f"up to {highest:.12g}")
    return " ".join(parts)


def _length(metadata: list[Any], what: str) -> str:
    lowest = next((item.min_length for item in metadata if getattr(item, "min_length", None)), 0)
    highest = next((item.max_length for item in metadata if getattr(item, "max_length", None)), None)
    return f" of {lowest} to {highest} {what}" if highest is not None else ""


def _item(annotation: Any) -> tuple[FieldInfo | None, Any]:
    if typing.get_origin(annotation) is typing.Annotated:
        return FieldInfo.from_annotation(annotation), typing.get_args(annotation)[0]
    return None, annotation


def _inner_metadata(annotation: Any) -> tuple[Any, ...]:
    """Return what is annotated inside "this or nothing"."""
    return tuple(
        item
        for part in typing.get_args(annotation)
        if typing.get_origin(part) is typing.Annotated
        for item in typing.get_args(part)[1:]
    )


def _without_none(annotation: Any) -> Any:
    if typing.get_origin(annotation) in (types.UnionType, typing.Union):
        annotation = next(part for part in typing.get_args(annotation) if part is not type(None))
    if typing.get_origin(annotation) is typing.Annotated:
        annotation = typing.get_args(annotation)[0]
    return annotation
