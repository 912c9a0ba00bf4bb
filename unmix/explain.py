"""What a strict file may hold, read off the structs that hold it: key, type, unit, range, default, meaning.

Types, ranges, defaults and meanings come from the struct's annotations (`msgspec.Meta`), units from the key's ending.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import msgspec
from msgspec import inspect

__all__ = ["FieldInfo", "explain_fields"]

_UNITS = (
    ("_db_spl", "dB SPL"),
    ("_m_s", "m/s"),
    ("_deg", "deg"),
    ("_hz", "Hz"),
    ("_db", "dB"),
    ("_ms", "ms"),
    ("_m", "m"),
    ("_s", "s"),
    ("_c", "deg C"),
    ("_percent", "%"),
    ("_rate", "Hz"),
)


_NAMES: dict[type, str] = {
    inspect.StrType: "text",
    inspect.IntType: "integer",
    inspect.FloatType: "number",
    inspect.BoolType: "yes/no",
}


@dataclass(frozen=True, slots=True)
class FieldInfo:
    """One key of a file: ``key`` is dotted, ``[]`` marks a table that repeats; texts are empty where none apply."""

    key: str
    type: str
    unit: str
    range: str
    default: str
    meaning: str


def explain_fields(kind: type[msgspec.Struct], prefix: str = "") -> list[FieldInfo]:
    """Every key that a file of struct ``kind`` may hold, tables inside tables included, in the struct's order."""
    return list(_rows(inspect.type_info(kind), prefix))


def _rows(info: Any, prefix: str) -> Iterator[FieldInfo]:
    for field in info.fields:
        key = prefix + field.encode_name
        inner, repeated = _table(field.type)
        if inner is not None:
            yield from _rows(inner, f"{key}[]." if repeated else f"{key}.")
            continue
        unit = next((unit for ending, unit in _UNITS if f"_{field.encode_name}".endswith(ending)), "")
        yield FieldInfo(key, _type(field.type), unit, _range(field.type), _default(field), _meaning(field.type))


def _table(info: Any) -> tuple[Any, bool]:
    """The struct that a field holds, and whether it holds a list of them."""
    info = _bare(info)
    if isinstance(info, inspect.StructType):
        return info, False
    if isinstance(info, inspect.ListType) and isinstance(_bare(info.item_type), inspect.StructType):
        return _bare(info.item_type), True
    return None, False


def _bare(info: Any) -> Any:
    """`info` without its metadata and without the alternative None."""
    while True:
        if isinstance(info, inspect.Metadata):
            info = info.type
        elif isinstance(info, inspect.UnionType) and len(some := _alternatives(info)) == 1:
            info = some[0]
        else:
            return info


def _alternatives(info: Any) -> list[Any]:
    return [t for t in info.types if not isinstance(t, inspect.NoneType)]


def _type(info: Any) -> str:
    info = _bare(info)
    if isinstance(info, inspect.UnionType):
        return " or ".join(_type(t) for t in _alternatives(info))
    if isinstance(info, inspect.LiteralType):
        return " | ".join(repr(v) if isinstance(v, str) else str(v) for v in info.values)
    if isinstance(info, inspect.ListType):
        count = f" of {info.min_length}" if info.min_length and info.min_length == info.max_length else ""
        return f"list{count} ({_type(info.item_type)})"
    if isinstance(info, inspect.VarTupleType):
        return f"list ({_type(info.item_type)})"
    if isinstance(info, inspect.TupleType):
        return f"list of {len(info.item_types)} ({', '.join(dict.fromkeys(map(_type, info.item_types)))})"
    if isinstance(info, inspect.DictType):
        return f"table ({_type(info.value_type)})"
    return _NAMES.get(type(info), type(info).__name__.removesuffix("Type").lower())


def _range(info: Any) -> str:
    info = _bare(info)
    if isinstance(info, inspect.UnionType):
        return " or ".join(dict.fromkeys(filter(None, map(_range, _alternatives(info)))))
    if isinstance(info, inspect.ListType):
        return _range(info.item_type)
    if not isinstance(info, inspect.IntType | inspect.FloatType):
        return ""
    bounds = []
    for symbol, value in ((">", info.gt), (">=", info.ge), ("<", info.lt), ("<=", info.le)):
        if value is not None:
            bounds.append(f"{symbol} {value:g}")
    if info.ge is not None and info.le is not None:
        return f"{info.ge:g} to {info.le:g}"
    return ", ".join(bounds)


def _default(field: Any) -> str:
    if field.required:
        return "required"
    value = field.default_factory() if field.default_factory is not msgspec.NODEFAULT else field.default
    if value is None:
        return "none"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, str):
        return repr(value)
    return f"{value:g}" if isinstance(value, float) else str(value)


def _meaning(info: Any) -> str:
    """The description, which may sit on the field or on one of its alternatives."""
    if isinstance(info, inspect.Metadata):
        return str((info.extra_json_schema or {}).get("description", "")) or _meaning(info.type)
    if isinstance(info, inspect.UnionType):
        return next(filter(None, map(_meaning, info.types)), "")
    return ""
