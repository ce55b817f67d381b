"""Turn what the schema refuses into an error a person can act on."""

from __future__ import annotations

import difflib
import re
import types
import typing
from collections.abc import Iterable
from typing import Any

import annotated_types
from pydantic import BaseModel, ValidationError

from mrics.errors import ProtocolError

Location = tuple[int | str, ...]
EACH = "a list, each item "


def nearest(word: str, known: Iterable[str]) -> str:
    """A sentence that names the known word closest to ``word``, or all of them."""
    names = sorted(known)
    close = difflib.get_close_matches(word, names, n=1, cutoff=0.55)
    listed = "Known here: " + (", ".join(names) or "none") + "."
    return f"Did you mean {close[0]!r}? {listed}" if close else listed


def dotted(location: Location) -> str:
    """``("sampling", 0, "law")`` as ``sampling[1].law``; tables are counted from 1."""
    text = ""
    for part in location:
        text += f"[{part + 1}]" if isinstance(part, int) else f".{part}"
    return text.lstrip(".")


def line_of(text: str, location: Location) -> int | None:
    """Line (from 1) of the key, else of the table that should hold it, else None."""
    if not location or not isinstance(location[0], str):
        return None
    section, rest = location[0], location[1:]
    number = 1
    if rest and isinstance(rest[0], int):
        number, rest = rest[0] + 1, rest[1:]
    key = next((part for part in rest if isinstance(part, str)), None)
    header = re.compile(r"^\s*\[\[?\s*([\w.\-]+)\s*\]\]?")
    seen, inside, found = 0, False, None
    for at, line in enumerate(text.splitlines(), start=1):
        match = header.match(line)
        if match:
            seen += match.group(1) == section
            inside = match.group(1) == section and seen == number
            if inside:
                found = at
        elif inside and key and re.match(rf"^\s*[\"']?{re.escape(key)}[\"']?\s*=", line):
            return at
    return found


def place(path: object, text: str, location: Location) -> str:
    """File, line and dotted key."""
    line = line_of(text, location)
    at = f"{path}, line {line}" if line else f"{path}"
    key = dotted(location)
    return f"{at}, key {key}" if key else at


def within(path: object, text: str, location: Location, where: str) -> str:
    """The place of what another room's error calls ``where``, inside the table at ``location``."""
    key = where.split(" ")[0].strip(",")
    if key and line_of(text, (*location, key)) != line_of(text, location):
        exact = place(path, text, (*location, key))
        return exact if where == key else f"{exact} ({where})"
    table = place(path, text, location)
    return f"{table}, {where}" if where else table


def allowed(annotation: Any, metadata: Iterable[Any] = ()) -> str:
    """What a field accepts, in words: type and range."""
    while typing.get_origin(annotation) is typing.Annotated:
        annotation, *more = typing.get_args(annotation)
        metadata = [*metadata, *more]
    origin, arguments = typing.get_origin(annotation), typing.get_args(annotation)
    if origin in (typing.Union, types.UnionType):
        return " or ".join(allowed(a, metadata) for a in arguments if a is not type(None))
    if origin is typing.Literal:
        return "one of " + ", ".join(repr(a) for a in arguments)
    if origin is tuple:
        return EACH + allowed(arguments[0])
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return "a table with the keys " + ", ".join(annotation.model_fields)
    words = {int: "a whole number", float: "a number", bool: "true or false", str: "text"}
    return words.get(annotation, "a value") + _range(metadata)


def _range(metadata: Iterable[Any]) -> str:
    bounds: dict[str, Any] = {}
    for item in _flat(metadata):
        for name in ("gt", "ge", "lt", "le", "min_length", "max_length"):
            value = getattr(item, name, None)
            if value is not None:
                bounds[name] = value
    low = f" above {bounds['gt']}" if "gt" in bounds else ""
    low = f" from {bounds['ge']}" if "ge" in bounds else low
    high = f" below {bounds['lt']}" if "lt" in bounds else ""
    high = f" up to {bounds['le']}" if "le" in bounds else high
    size = f" of at least {bounds['min_length']} character" if "min_length" in bounds else ""
    size += f" of at most {bounds['max_length']} characters" if "max_length" in bounds else ""
    return low + high + size


def _flat(metadata: Iterable[Any]) -> Iterable[Any]:
    for item in metadata:
        if isinstance(item, annotated_types.GroupedMetadata):
            yield from item
        elif hasattr(item, "metadata"):
            yield from _flat(item.metadata)
        else:
            yield item


def refuse(
    error: ValidationError,
    model: type[BaseModel],
    prefix: Location,
    path: object,
    text: str,
) -> ProtocolError:
    """The first thing to mend of a failed validation (unknown keys first), as one error."""
    problems = sorted(error.errors(), key=lambda item: item["type"] != "extra_forbidden")
    first = problems[0]
    location: Location = tuple(first["loc"])
    holder, field = _field(model, location)
    value = first["input"]
    where = place(path, text, prefix + location)
    key = dotted(location) or dotted(prefix)
    others = sum(len(item["loc"]) >= len(location) for item in problems) - 1
    more = f" ({others} more to mend in this section.)" if others else ""
    if first["type"] == "extra_forbidden":
        fix = nearest(str(location[-1]), holder.model_fields) + more
        return ProtocolError(f"Unknown key {location[-1]!r}.", where, fix)
    accepts = allowed(field.annotation, field.metadata) if field is not None else allowed(holder)
    if location and isinstance(location[-1], int):
        accepts = accepts.removeprefix(EACH)
    if first["type"] == "value_error":
        accepts = str(first["ctx"]["error"])
    if first["type"] == "missing":
        described = f" ({field.description})" if field is not None and field.description else ""
        return ProtocolError(
            f"Key {key!r} is missing.", where, f"Add it{described}: {accepts}.{more}"
        )
    return ProtocolError(f"{key} = {shown(value)} is not allowed.", where, f"Give {accepts}.{more}")


def _field(model: type[BaseModel], location: Location) -> tuple[type[BaseModel], Any]:
    """The model that holds the last named key of ``location``, and that key's field."""
    holder, field, inside = model, None, model
    for part in location:
        if isinstance(part, str):
            holder = inside
            field = holder.model_fields.get(part)
            inner = _model_in(field.annotation) if field is not None else None
            inside = inner if inner is not None else holder
    return holder, field


def _model_in(annotation: Any) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    for argument in typing.get_args(annotation):
        found = _model_in(argument)
        if found is not None:
            return found
    return None


def shown(value: Any) -> str:
    """A value as an error shows it: a TOML reader's spelling, cut to one short line."""
    text = repr(list(value) if isinstance(value, tuple) else value)
    if isinstance(value, bool):
        text = text.lower()
    return text if len(text) <= 80 else text[:77] + "..."
