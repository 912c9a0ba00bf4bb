"""Variant names on the command line: a preset or a file, both completed by the shell."""

from __future__ import annotations

import click
from click.shell_completion import CompletionItem

__all__ = ["VariantName"]


class VariantName(click.ParamType[str]):
    """A preset's name or the path of a variant file; what it names is checked when the variant is loaded."""

    name = "variant"

    def shell_complete(self, ctx: click.Context, param: click.Parameter, incomplete: str) -> list[CompletionItem]:
        """Presets that start so, then files."""
        from unmix.variant import PRESETS

        found = [CompletionItem(n, help=v.summary) for n, v in PRESETS.items() if n.startswith(incomplete)]
        return [*found, CompletionItem(incomplete, type="file")]
