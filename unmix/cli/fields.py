"""Fields of strict files, listed for people and for scripts."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

from unmix.explain import FieldInfo

if TYPE_CHECKING:
    from rich.table import Table

__all__ = ["fields_json", "fields_table"]


def fields_json(fields: Sequence[FieldInfo]) -> list[dict[str, Any]]:
    """Plain values, one object per field."""
    return [asdict(field) for field in fields]


def fields_table(fields: Sequence[FieldInfo]) -> Table:
    """One row per field: its key, then what it means, what it takes, its default."""
    from unmix.cli.tables import plain_table

    columns = [("field", "left"), ("meaning (what it takes; default)", "left")]
    return plain_table(columns, [[f.key, f"{f.meaning} ({_takes(f)}; {_default(f)})"] for f in fields])


def _takes(field: FieldInfo) -> str:
    """Type, range and unit as one text: `number 0 to 10 dB`."""
    return " ".join(filter(None, (field.type.replace("'", ""), field.range, field.unit)))


def _default(field: FieldInfo) -> str:
    return field.default if field.default == "required" else f"default {field.default}"
