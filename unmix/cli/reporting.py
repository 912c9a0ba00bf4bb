"""The report that commands write beside their results."""

from __future__ import annotations

import warnings
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from unmix.errors import FileError, UnmixError, UnmixWarning
from unmix.files import refuse_to_replace

if TYPE_CHECKING:
    from unmix.report.material import SceneMaterial

__all__ = ["REPORT", "no_report_option", "refuse_report", "write_batch_report", "write_report"]

Decorated = TypeVar("Decorated", bound=Callable[..., Any])

REPORT = "report.html"

no_report_option: Callable[[Decorated], Decorated] = click.option(
    "--no-report", is_flag=True, help=f"Write no {REPORT}."
)


def refuse_report(folder: Path, *, overwrite: bool, renew: bool = False) -> None:
    """Raise FileError before the work when there is a report that may not be replaced.

    renew  whether one that `solve` wrote may be: grading adds to it and takes nothing away
    """
    path = folder / REPORT
    if overwrite or not path.exists():
        return
    if not renew:
        refuse_to_replace(path, overwrite=False)
    from unmix.report.page import kind_of_page
    from unmix.report.scene_page import UNGRADED

    if kind_of_page(path) != UNGRADED:
        raise FileError(f"{path}: exists already, and not as `solve` wrote it; pass --overwrite or --no-report")


def write_report(material: Callable[[], SceneMaterial], folder: Path, *, overwrite: bool) -> Path | None:
    """Write the report; when that fails the results stand all the same, and a warning says what happened."""
    from unmix.report.scene_page import write_scene_report

    try:
        return write_scene_report(material(), folder / REPORT, overwrite=overwrite).path
    except UnmixError as error:
        warnings.warn(f"no report was written: {error}", UnmixWarning, stacklevel=2)
        return None


def write_batch_report(folder: Path) -> Path | None:
    """Write or renew the report of a batch, as its tables are; one without voices or names stays without.

    When that fails the batch stands all the same, and a warning says what happened.
    """
    from unmix.report.batch_material import material_of_batch
    from unmix.report.batch_page import kind_of_batch
    from unmix.report.batch_page import write_batch_report as write
    from unmix.report.page import kind_of_page

    path = folder / REPORT
    kind = kind_of_page(path) or ""
    try:
        if path.exists() and not kind.startswith("batch"):
            raise FileError(f"{path} is not a batch's; move it, or name another file: unmix report {folder} --out FILE")
        options = {"audio": "without sound" not in kind, "hide_names": "without names" in kind}
        material = material_of_batch(folder)
        if kind == kind_of_batch(material, **options):
            return path
        return write(material, path, overwrite=True, **options).path
    except UnmixError as error:
        warnings.warn(f"no report was written: {error}", UnmixWarning, stacklevel=2)
        return None
