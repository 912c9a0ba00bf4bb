"""`unmix completion`: the script that lets a shell complete commands, options and preset names."""

from __future__ import annotations

import click
from click.shell_completion import get_completion_class

__all__ = ["command"]


@click.command("completion")
@click.argument("shell", type=click.Choice(["bash", "zsh", "fish"]))
def command(shell: str) -> None:
    """Print the script that completes commands in a shell.

    \b
    bash:  unmix completion bash >> ~/.bashrc
    zsh:   unmix completion zsh >> ~/.zshrc
    fish:  unmix completion fish > ~/.config/fish/completions/unmix.fish
    """
    from unmix.cli.group import unmix

    kind = get_completion_class(shell)
    if kind is None:
        raise click.UsageError(f"there is no completion for {shell}")
    click.echo(kind(unmix, {}, "unmix", "_UNMIX_COMPLETE").source())
