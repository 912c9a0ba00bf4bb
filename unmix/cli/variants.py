"""`unmix variants`: presets, and every field of a variant with its meaning."""

from __future__ import annotations

from typing import Any

import click

from unmix.cli.common import json_option, print_json, print_table, say
from unmix.cli.presets import complete_variant

__all__ = ["command"]


@click.command("variants")
@click.argument("name", metavar="[NAME_OR_FILE]", shell_complete=complete_variant, required=False)
@json_option
def command(name: str | None, as_json: bool) -> None:
    """List the presets and every field of a variant, or show one variant.

    A variant file (TOML) holds only what differs from its `base` preset.
    """
    from unmix.variant import DEFAULT, PRESETS, describe_fields, load_variant

    if name is not None:
        variant = load_variant(name)
        if as_json:
            print_json(variant.to_dict())
        else:
            _print_one(variant.to_dict())
        return
    from unmix.cli.fields import fields_json, fields_table
    from unmix.cli.tables import plain_table

    fields = describe_fields()
    if as_json:
        presets = [variant.to_dict() for variant in PRESETS.values()]
        print_json({"default": DEFAULT, "presets": presets, "fields": fields_json(fields)})
        return
    rows = [[n + (" (default)" if n == DEFAULT else ""), v.summary] for n, v in PRESETS.items()]
    print_table(plain_table([("preset", "left"), ("what it does", "left")], rows))
    print_table(fields_table(fields))
    say('A variant file holds what differs from a preset, e.g.  base = "model"  and  solver.prior_weight = 1e-4')


def _print_one(tree: dict[str, Any]) -> None:
    """Every field of one variant, with its value and its meaning."""
    from unmix.cli.tables import plain_table
    from unmix.variant import describe_fields

    meanings = {field.key: field for field in describe_fields()}
    say(f"{tree['name']}: {tree['summary']}" if tree["summary"] else tree["name"])
    rows = []
    for key, value in _flat(tree):
        if key in meanings and key not in ("name", "summary", "base"):
            rows.append([key, _text(value, meanings[key].unit), meanings[key].meaning])
    columns = [("field", "left"), ("value", "left"), ("meaning", "left")]
    print_table(plain_table(columns, rows))


def _flat(tree: dict[str, Any], prefix: str = "") -> list[tuple[str, Any]]:
    rows: list[tuple[str, Any]] = []
    for key, value in tree.items():
        rows += _flat(value, f"{prefix}{key}.") if isinstance(value, dict) else [(prefix + key, value)]
    return rows


def _text(value: Any, unit: str) -> str:
    if value is None:
        return "–"
    if isinstance(value, bool):
        return "yes" if value else "no"
    return f"{value:g} {unit}".strip() if isinstance(value, float | int) else str(value)
