"""From text to tables: TOML syntax and the shape of every table, all mistakes at once."""

from __future__ import annotations

import re
import tomllib
from types import UnionType
from typing import Annotated, Any, TypeVar, Union, get_args, get_origin

from pydantic import BaseModel, TypeAdapter, ValidationError
from pydantic_core import ErrorDetails

from meterfix.intake.site.findings import Findings, Place, suggestion
from meterfix.intake.site.shapes import ALTERNATIVES
from meterfix.intake.site.tables import SiteFile

AnyTable = TypeVar("AnyTable", bound=BaseModel)

_AT = re.compile(r"\s*\(at (?:line (\d+), column (\d+)|end of document)\)$")
_PLAIN = {
    "string_type": "text in quotes is needed",
    "int_type": "a whole number is needed",
    "float_type": "a number without quotes is needed",
    "bool_type": "true or false is needed",
    "list_type": "a list is needed: [ ... ]",
    "dict_type": "a table is needed",
    "model_type": "a table is needed",
    "finite_number": "a finite number is needed",
}


def read_tables(text: str, findings: Findings) -> SiteFile | None:
    """Return a site file's tables; None if not even the syntax can be read.

    Where the shape is wrong, the mistakes are in `findings` and the tables come back with what
    could be read; what could not is None, whatever its type says. Builders therefore treat None
    as "already reported", and nothing is built from such tables.
    """
    try:
        raw = tomllib.loads(text.removeprefix("\ufeff"))
    except tomllib.TOMLDecodeError as error:
        found = _AT.search(str(error))
        line = f"line {found[1]}, column {found[2]}" if found and found[1] else "end of the file"
        findings.add((), f"{line}: {_AT.sub('', str(error))}", "this is not TOML")
        return None
    except RecursionError:
        findings.add((), "tables or lists nested too deeply", "a site file needs few levels")
        return None
    try:
        return SiteFile.model_validate(raw)
    except ValidationError as errors:
        for detail in errors.errors(include_url=False):
            _report(detail, findings)
    return _what_can_be_read(SiteFile, raw)


def _report(detail: ErrorDetails, findings: Findings) -> None:
    """Tell one finding of pydantic in the words of a site file."""
    place: Place = tuple(step for step in detail["loc"] if step not in ALTERNATIVES)
    kind, given = detail["type"], _shown(detail["input"])
    context = detail.get("ctx", {})
    if place and place[-1] == "[key]":
        findings.add(
            place[:-1],
            f"'{place[-2]}' cannot be a name",
            "use at most 64 characters, none of / \\ * ? [ ] { } or quotes, "
            "and do not begin with a blank or = + - @",
        )
    elif kind == "extra_forbidden":
        keys = _keys_allowed(detail["loc"][:-1])
        findings.add(place, "unknown key", suggestion(str(place[-1]), keys))
    elif kind == "missing":
        findings.add(place, "missing", "this key is needed")
    elif kind == "literal_error":
        findings.add(place, given, f"use {context['expected']}")
    elif kind in {"too_short", "too_long"}:
        least, most = context.get("min_length"), context.get("max_length")
        limit = f"at least {least}" if least is not None else f"at most {most}"
        entry = "entry is" if (least or most) == 1 else "entries are"
        findings.add(place, given, f"{limit} {entry} needed")
    else:
        findings.add(place, given, _PLAIN.get(kind, _lower(detail["msg"])))


def _lower(message: str) -> str:
    return message[:1].lower() + message[1:]


def _shown(value: object) -> str:
    """Return a value as it would stand in the file, shortened."""
    if isinstance(value, dict):
        return "a table"
    text = {True: "true", False: "false"}[value] if isinstance(value, bool) else repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."


def _keys_allowed(steps: tuple[int | str, ...]) -> list[str]:
    """Return the keys that the table at these steps may hold."""
    annotation: Any = SiteFile
    for step in steps:
        if step in ALTERNATIVES:
            continue
        annotation = _inside(annotation, step)
    tables = _models(annotation)
    return [field.alias or name for t in tables for name, field in t.model_fields.items()]


def _inside(annotation: Any, step: int | str) -> Any:
    """Return the type of what is found one step further in."""
    for model in _models(annotation):
        for name, field in model.model_fields.items():
            if step == (field.alias or name):
                return field.annotation
    for choice in _choices(annotation):
        if get_origin(choice) in {list, dict} and (
            isinstance(step, int) == (get_origin(choice) is list)
        ):
            return get_args(choice)[-1]
    return annotation


def _choices(annotation: Any) -> list[Any]:
    """Return the alternatives of a type, without its annotations."""
    if get_origin(annotation) is Annotated:
        return _choices(get_args(annotation)[0])
    if get_origin(annotation) in {Union, UnionType}:
        return [choice for part in get_args(annotation) for choice in _choices(part)]
    return [annotation]


def _models(annotation: Any) -> list[type[BaseModel]]:
    return [
        choice
        for choice in _choices(annotation)
        if isinstance(choice, type) and issubclass(choice, BaseModel)
    ]


def _keys(table: type[BaseModel]) -> set[str]:
    """Return the keys that a table may hold."""
    return {field.alias or name for name, field in table.model_fields.items()}


def _what_can_be_read(table: type[AnyTable], raw: dict[str, Any]) -> AnyTable:
    """Return a table whose unreadable values are None; known to be incomplete."""
    values: dict[str, Any] = {}
    given: set[str] = set()
    for name, field in table.model_fields.items():
        key = field.alias or name
        if key in raw:
            values[name] = _readable(field.rebuild_annotation(), raw[key])
            given.add(name)
        else:
            values[name] = (
                None if field.is_required() else field.get_default(call_default_factory=True)
            )
    return table.model_construct(_fields_set=given, **values)


def _readable(annotation: Any, raw: Any) -> Any:
    """Return a value of the type, with what cannot be read inside left out or None."""
    try:
        return TypeAdapter(annotation).validate_python(raw, strict=True)
    except ValidationError:
        pass
    tables = _models(annotation)
    if isinstance(raw, dict) and tables:
        # of several forms of a table, the one that knows most of the keys is meant
        return _what_can_be_read(max(tables, key=lambda t: len(_keys(t) & raw.keys())), raw)
    for choice in _choices(annotation):
        inner = get_args(choice)[-1] if get_args(choice) else None
        if isinstance(raw, dict) and get_origin(choice) is dict:
            # a named table that is no table stays, empty, so that its name is known
            named = bool(_models(inner))
            items = {k: {} if named and not isinstance(v, dict) else v for k, v in raw.items()}
            read = {key: _readable(inner, item) for key, item in items.items()}
            return {key: value for key, value in read.items() if value is not None}
        if isinstance(raw, list) and get_origin(choice) is list and _models(inner):
            return [_readable(inner, item) for item in raw if isinstance(item, dict)]
    return None
