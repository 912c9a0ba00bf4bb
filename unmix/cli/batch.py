"""`unmix batch`: a plan of scenes and variants in, a ranking out; killed and run again, it goes on."""

from __future__ import annotations

import shutil
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from unmix.cli.common import existing_file, json_option, print_json, print_table, progress_bar, say
from unmix.cli.reporting import REPORT, no_report_option, write_batch_report

if TYPE_CHECKING:
    from unmix.batch.run import BatchResult, Progress

__all__ = ["command"]

IN_PART = 3
MOST_FAILURES = 5
WIDE = 130


@click.command("batch")
@click.argument("plan", metavar="PLAN", type=existing_file, required=False)
@click.option("--out", type=existing_file, metavar="DIR", help="Folder for parts, rendered scenes and tables.")
@click.option(
    "--workers", type=click.IntRange(1, 1024), help="Processes, one BLAS thread each. [default: as many as cores]"
)
@click.option("--cluster", metavar="ADDRESS", help="Run on the dask scheduler at this address instead.")
@click.option("--dry-run", is_flag=True, help="Print items, time and disk that it would take; run nothing.")
@click.option("--yes", is_flag=True, help="Run a plan of more than 5,000 items without asking.")
@click.option("--retry", is_flag=True, help="Do failed items again, whatever they failed for.")
@click.option("--compare", "earlier", type=existing_file, metavar="DIR", help="Compare with an earlier batch's folder.")
@click.option("--query", "sql", metavar="SQL", help="Answer from the table `results` in --out; run nothing.")
@click.option("--explain", is_flag=True, help="Print every field of a plan with type, unit, range and default.")
@no_report_option
@json_option
def command(
    plan: Path | None,
    out: Path | None,
    workers: int | None,
    cluster: str | None,
    dry_run: bool,
    yes: bool,
    retry: bool,
    earlier: Path | None,
    sql: str | None,
    explain: bool,
    no_report: bool,
    as_json: bool,
) -> int | None:
    """Run scenes x variants, grade them, and rank the variants.

    PLAN is a TOML file that names scenes (or scenes to render), variants and fields to vary; `--explain` lists what it
    may hold. What is in --out already is not done again: after a crash or an interruption, run the same command. Exit
    status 3 when an item failed.
    """
    if explain:
        _explain(as_json)
        return None
    if plan is None:
        raise click.UsageError("give PLAN, or --explain")
    if dry_run:
        _dry_run(plan, out, workers, as_json)
        return None
    if out is None:
        raise click.UsageError("give --out DIR")
    if sql is not None:
        _query(out, sql, as_json)
        return None
    if workers is not None and cluster is not None:
        raise click.UsageError("--workers are this machine's; with --cluster the scheduler has its own")
    options = {"workers": workers, "cluster": cluster, "retry": retry, "earlier": earlier}
    return _run(plan, out, as_json, yes=yes, no_report=no_report, **options)


def _run(plan: Path, out: Path, as_json: bool, *, yes: bool, no_report: bool, **options: Any) -> int | None:
    from unmix.batch.run import run_batch

    yes = yes or _agreed(plan)
    with progress_bar("starting") as report:
        result = run_batch(plan, out, yes=yes, progress=lambda progress: _show(progress, report), **options)
        report(1.0, "writing the report")
        reported = None if no_report else write_batch_report(out)
    if as_json:
        print_json(result.to_dict())
    else:
        _print(result, out, reported=reported is not None)
    return IN_PART if result.in_part else None


def _agreed(plan_file: Path) -> bool:
    """Ask somebody who sits there before a plan of very many items; nobody there: `run_batch` refuses."""
    if not sys.stdin.isatty():
        return False
    from unmix.batch.items import MANY, count_items
    from unmix.batch.plan import Plan

    count = count_items(Plan.load(plan_file), plan_file.parent)
    return count > MANY and click.confirm(
        f"{plan_file} stands for {count:,} items. Run them all?", abort=True, err=True
    )


def _show(progress: Progress, report: Any) -> None:
    """The bar, and before it how many, how fast, how many failed, and what takes longest."""
    from unmix.cli.batch_tables import clock

    said = [f"{progress.done:,} of {progress.total:,}"]
    if progress.rate is not None:
        said.append(f"{60 * progress.rate:.0f}/min")
    if progress.failures:
        said.append(f"{progress.failures} failed")
    if progress.slowest is not None and progress.slowest.seconds > 30.0:
        slow = progress.slowest
        said.append(f"{slow.name} for {clock(slow.seconds)} on {slow.where}")
    report(progress.done / progress.total, ", ".join(said))


def _print(result: BatchResult, out: Path, *, reported: bool) -> None:
    from unmix.cli.batch_tables import change_lines, change_table, clock, ranking_lines, ranking_table

    ran = f"{result.ran:,} run now in {clock(result.seconds)}" if result.ran else "none of them run now"
    say(f"{result.plan.title or 'Batch'}: {result.items:,} items, {ran}")
    narrow = sys.stdout.isatty() and shutil.get_terminal_size().columns < WIDE
    print_table(ranking_table(result.analysis, narrow=narrow))
    for line in ranking_lines(result.analysis):
        say(line)
    if result.comparison is not None:
        print_table(change_table(result.comparison))
        for line in change_lines(result.comparison):
            say(line)
    written = result.written
    for name, why in list(written.failed.items())[:MOST_FAILURES]:
        say(f"Failed: {name}: {why}")
    if written.failures > MOST_FAILURES:
        say(f"{written.failures - MOST_FAILURES} more failed; they are rows with an `error` in the results")
    if written.missing:
        say(f"{written.missing:,} items are missing; run again to do them")
    files = [path.name for path in written.files] + ["batch.json"] + [REPORT] * reported
    say(f"Written to {out}: {', '.join(files)}")


def _dry_run(plan: Path, out: Path | None, workers: int | None, as_json: bool) -> None:
    from dataclasses import asdict

    from unmix.batch.run import forecast_batch
    from unmix.cli.batch_tables import clock

    found = forecast_batch(plan, out, workers=workers)
    if as_json:
        print_json(asdict(found))
        return
    say(f"{found.scenes:,} scenes x {found.variants:,} variants: {found.items:,} items, {found.done:,} of them done")
    say(f"To do: {found.todo:,} items, {found.to_render:,} scenes to render")
    basis = f"from {found.measured} items done" if found.measured else "a rough guess, nothing has been run yet"
    say(f"Time: about {clock(found.seconds)} ({basis}); disk: about {found.megabytes:,.0f} MB")


def _query(out: Path, sql: str, as_json: bool) -> None:
    from unmix.batch.results import query
    from unmix.cli.tables import plain_table

    columns, rows = query(out, sql)
    if as_json:
        print_json({"columns": columns, "rows": [[_plain(value) for value in row] for row in rows]})
        return
    sides = ["right" if any(isinstance(row[i], int | float) for row in rows) else "left" for i in range(len(columns))]
    print_table(plain_table(list(zip(columns, sides, strict=True)), [[_text(v) for v in row] for row in rows]))


def _plain(value: Any) -> Any:
    """A value as JSON has it; a number that is not finite is none."""
    if isinstance(value, float) and value - value != 0.0:
        return None
    return value if isinstance(value, str | int | float | bool | None) else str(value)


def _text(value: Any) -> str:
    if value is None:
        return "–"
    return f"{value:.6g}" if isinstance(value, float) else str(value)


def _explain(as_json: bool) -> None:
    from unmix.batch.plan import Plan
    from unmix.cli.fields import fields_json, fields_table
    from unmix.explain import explain_fields

    fields = explain_fields(Plan)
    if as_json:
        print_json({"fields": fields_json(fields)})
    else:
        print_table(fields_table(fields))
