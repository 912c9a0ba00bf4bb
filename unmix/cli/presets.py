"""Variant names on the command line: a preset or a file, both completed by the shell."""

from __future__ import annotations

import click
from click.shell_completion import CompletionItem

__all__ = ["complete_variant"]


def complete_variant(ctx: click.Context, param: click.Parameter, incomplete: str) -> list[CompletionItem]:
    """Presets that start so, then files."""
    from unmix.variant import PRESETS

    found = [CompletionItem(name, help=v.summary) for name, v in PRESETS.items() if name.startswith(incomplete)]
    return [*found, CompletionItem(incomplete, type="file")]
