"""`unmix variants`: presets, and every field of a variant with its meaning."""

from __future__ import annotations

from typing import Any

import click

from unmix.cli.common import console, json_option, print_json
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
    console().print(plain_table([("preset", "left"), ("what it does", "left")], rows))
    console().print(fields_table(fields))
    click.echo('A variant file holds what differs from a preset, e.g.  base = "model"  and  solver.prior_weight = 1e-4')


def _print_one(tree: dict[str, Any]) -> None:
    """One variant as the file that would give it, each field beside its meaning."""
    from unmix.cli.tables import plain_table
    from unmix.variant import describe_fields

    meanings = {field.key: field for field in describe_fields()}
    rows = []
    for key, value in _flat(tree):
        field = meanings.get(key)
        rows.append([key, _text(value), field.unit if field else "", field.meaning if field else ""])
    columns = [("field", "left"), ("value", "left"), ("unit", "left"), ("meaning", "left")]
    console().print(plain_table(columns, rows))


def _flat(tree: dict[str, Any], prefix: str = "") -> list[tuple[str, Any]]:
    rows: list[tuple[str, Any]] = []
    for key, value in tree.items():
        rows += _flat(value, f"{prefix}{key}.") if isinstance(value, dict) else [(prefix + key, value)]
    return rows


def _text(value: Any) -> str:
    if value is None or value == "":
        return "–"
    return f"{value:g}" if isinstance(value, float) else str(value)
