"""The variants of a plan: presets and files as they are, then those whose fields are varied."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from unmix.batch.plan import Plan, VaryTable, refuse_namesakes
from unmix.errors import InputError
from unmix.files import convert_tree
from unmix.variant import PRESETS, Variant, load_variant

__all__ = ["count_variants", "plan_variants"]


def count_variants(plan: Plan, base: Path) -> int:
    """How many variants the plan names, without making them."""
    varied = (_count(vary) for vary in plan.vary)
    return sum(len(_named(entry, base)) for entry in plan.variants) + sum(varied)


def _count(vary: VaryTable) -> int:
    counts = [len(values) for values in vary.fields.values()]
    return math.prod(counts) if vary.how == "grid" else counts[0]


def plan_variants(plan: Plan, base: Path) -> list[Variant]:
    """The variants, in the plan's order; `base` is the folder that files are relative to.

    Raises InputError for an unknown preset or field (with the nearest known one), a pattern that fits no file, or two
    variants of one name; FileError for a missing file.
    """
    variants = [load_variant(name) for entry in plan.variants for name in _named(entry, base)]
    for index, vary in enumerate(plan.vary):
        variants += _varied(vary, base, f"key `vary[{index}].fields`")
    refuse_namesakes("variants", [v.name for v in variants], "give one of them another `name`")
    return variants


def _named(entry: str, base: Path) -> list[str | Path]:
    """A preset's name, or the files that an entry stands for."""
    if entry in PRESETS:
        return [entry]
    if not any(sign in entry for sign in "*?["):
        return [base / entry if entry.endswith(".toml") else entry]
    found = sorted(base.glob(entry))
    if not found:
        raise InputError(f"key `variants`: no file fits {entry!r} in {base}; correct the pattern")
    return list(found)


def _varied(vary: VaryTable, base: Path, key: str) -> Iterator[Variant]:
    [name, *more] = _named(vary.base, base)
    if more:
        raise InputError(f"{key}: `base` {vary.base!r} stands for several files; name one")
    start = load_variant(name)
    labels = _labels(list(vary.fields))
    rows = itertools.product(*vary.fields.values()) if vary.how == "grid" else zip(*vary.fields.values(), strict=True)
    for values in rows:
        tree = start.to_dict()
        for field, value in zip(vary.fields, values, strict=True):
            _set(tree, field, value, f"{key}: base {start.name!r}")
        said = ",".join(f"{label}={_text(value)}" for label, value in zip(labels, values, strict=True))
        tree |= {"name": f"{start.name}:{said}", "summary": ""}
        yield convert_tree(tree, Variant, where=key)


def _labels(fields: list[str]) -> list[str]:
    """The last part of each field's key where that tells them apart, else the whole key."""
    last = [field.rsplit(".", 1)[-1] for field in fields]
    return [short if last.count(short) == 1 else field for short, field in zip(last, fields, strict=True)]


def _text(value: Any) -> str:
    if isinstance(value, float) and float(f"{value:g}") == value:
        return f"{value:g}"
    return str(value).lower() if isinstance(value, bool) else str(value)


def _set(tree: dict[str, Any], field: str, value: Any, where: str) -> None:
    *tables, last = field.split(".")
    at = tree
    for depth, table in enumerate(tables, 1):
        if at.get(table, {}) is None:
            raise InputError(f"{where} has no `{'.'.join(tables[:depth])}` whose `{last}` could be varied")
        at = at.setdefault(table, {})
        if not isinstance(at, dict):
            raise InputError(f"{where}: `{'.'.join(tables[:depth])}` is no table")
    # A key that is not known is named, with the nearest known one, when the tree becomes a variant.
    at[last] = float(value) if isinstance(at.get(last), float) and isinstance(value, int) else value
