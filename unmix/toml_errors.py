"""What is wrong in a strict file, in the user's words: key, what was expected, the nearest key that is known."""

from __future__ import annotations

import difflib
import re
from typing import Any

from msgspec import inspect

__all__ = ["explain_error"]

_PLAIN_TYPES = {
    "str": "text",
    "int": "a whole number",
    "float": "a number",
    "bool": "true or false",
    "array": "a list",
    "object": "a table",
    "null": "nothing",
}


def explain_error(message: str, kind: type) -> str:
    """A line for people from the text of a `msgspec.ValidationError` met while converting into the struct `kind`."""
    what, _, at = message.partition(" - at ")
    key = at.strip("`").removeprefix("$").removeprefix(".")
    if unknown := re.search(r"unknown field `(.+?)`", what):
        return _unknown_key(unknown.group(1), key, kind)
    if missing := re.search(r"missing required field `(.+?)`", what):
        return f"key `{f'{key}.' if key else ''}{missing.group(1)}` is missing"
    if choice := re.search(r"[Ii]nvalid enum value (.+)", what):
        known = ", ".join(map(repr, _choices(_type_at(kind, key))))
        plain = f"{choice.group(1)} is none of {known}"
    else:
        plain = _plainly(what)
    return f"key `{key}`: {plain}" if key else plain


def _unknown_key(name: str, table: str, kind: type) -> str:
    fields = getattr(_struct_in(_type_at(kind, table)), "fields", ())
    known = [field.encode_name for field in fields]
    near = difflib.get_close_matches(name, known, n=1)
    remedy = f"did you mean `{near[0]}`?" if near else f"known keys: {', '.join(known)}"
    place = "the top level" if not table else table if table.endswith("]") else f"[{table}]"
    return f"unknown key `{name}` in {place}; {remedy}"


def _plainly(what: str) -> str:
    """msgspec's words for types in words of the user's."""

    def name(match: re.Match[str]) -> str:
        kinds = [kind for kind in match.group(1).split(" | ") if kind != "null"]
        return " or ".join(_PLAIN_TYPES.get(kind, kind) for kind in kinds)

    return f"{what[:1].lower()}{re.sub('`([a-z |]+)`', name, what[1:])}"


def _type_at(kind: Any, key: str) -> Any:
    """The type that stands at the dotted `key`; None when nothing does."""
    info: Any = inspect.type_info(kind)
    for part in filter(None, re.sub(r"\[(\.\.\.|\d+)\]", "", key).split(".")):
        fields = {f.encode_name: f.type for f in getattr(_struct_in(info), "fields", ())}
        if part not in fields:
            return None
        info = fields[part]
    return info


def _inside(info: Any) -> list[Any]:
    """The types that an optional, a list or an annotated type is made of."""
    return [*getattr(info, "types", ()), *(getattr(info, n) for n in ("item_type", "type") if hasattr(info, n))]


def _struct_in(info: Any) -> Any:
    """The struct inside an optional, a list or itself; None when there is none."""
    if isinstance(info, inspect.StructType):
        return info
    return next((found for found in map(_struct_in, _inside(info)) if found is not None), None)


def _choices(info: Any) -> list[Any]:
    """The values that a literal inside the type allows."""
    if isinstance(info, inspect.LiteralType):
        return list(info.values)
    return [value for inner in _inside(info) for value in _choices(inner)]
