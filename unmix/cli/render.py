"""`unmix render`: a spec in, a scene with known truth out."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from unmix.cli.common import (
    consent_line,
    existing_file,
    json_option,
    overwrite_option,
    print_json,
    print_table,
    progress_bar,
    say,
)

__all__ = ["command"]


@click.command("render")
@click.argument("spec", metavar="SPEC", type=existing_file, required=False)
@click.option("--out", type=existing_file, metavar="DIR", help="Folder for mixture, references and scene file.")
@click.option("--explain", is_flag=True, help="Print every field of a spec with type, unit, range and default.")
@overwrite_option
@json_option
def command(spec: Path | None, out: Path | None, explain: bool, overwrite: bool, as_json: bool) -> None:
    """Render a scene with known truth: mixture, references, scene file.

    SPEC is a rendering spec (TOML): room, array, talkers and their clips, noise, faults. `--explain` lists what it may
    hold.
    """
    if explain:
        _explain(as_json)
        return
    if spec is None or out is None:
        raise click.UsageError("give SPEC and --out DIR, or --explain")
    from unmix.jobs.render import render

    with progress_bar("rendering") as report:
        rendered = render(spec, out, overwrite=overwrite, progress=report)
    tree = {"scene": str(rendered.scene_path), "files": list(rendered.files), "truth": rendered.truth}
    if as_json:
        print_json(tree)
        return
    _print(rendered.truth)
    say(f"Written to {out}: scene.toml, mix.wav, the references, {len(rendered.files)} files in all")
    say(consent_line())
    click.echo(f"Next: unmix solve {rendered.scene_path} --out DIR")


def _print(truth: dict[str, Any]) -> None:
    from unmix.cli.tables import number, plain_table

    columns = [("talker", "left"), ("level, dB FS", "right"), ("T20, s", "right"), ("direct/reverberant, dB", "right")]
    rows = [
        [t["name"], number(t["level_db"], 1), number(t["t20_s"], 2), number(t["drr_db"], 1)] for t in truth["talkers"]
    ]
    say(f"{truth['title'] or 'scene'}: {truth['duration_s']:.1f} s at {truth['sample_rate']} Hz")
    print_table(plain_table(columns, rows))


def _explain(as_json: bool) -> None:
    from unmix.cli.fields import fields_json, fields_table
    from unmix.explain import explain_fields
    from unmix.render.spec import RenderSpec

    fields = explain_fields(RenderSpec)
    if as_json:
        print_json({"fields": fields_json(fields)})
    else:
        print_table(fields_table(fields))
