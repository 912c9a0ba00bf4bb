"""Templates into one file: style and scripts inside, nothing fetched from anywhere.

The page forbids itself every connection (Content-Security-Policy), so that a voice cannot leave it. Names reach it
through autoescaping or as JSON whose `<` is escaped; none is ever put together as markup.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

from unmix.files import write_aside
from unmix.version import __version__

if TYPE_CHECKING:
    from jinja2 import Environment

__all__ = ["PageFile", "kind_of_page", "render_page", "versions", "write_page"]

_HEAD_BYTES = 4096


@dataclass(frozen=True)
class PageFile:
    """A page that was written: where, and how large."""

    path: Path
    bytes: int


@lru_cache(maxsize=1)
def _environment() -> Environment:
    from jinja2 import Environment, PackageLoader, StrictUndefined

    from unmix.report.words import figure_text

    environment = Environment(
        loader=PackageLoader("unmix.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters["figure"] = figure_text
    return environment


def render_page(template: str, scripts: Sequence[str], *, kind: str, **context: Any) -> str:
    """The page of a template, with the style and the named scripts inside it.

    kind  what sort of page it is, for `kind_of_page`
    """
    environment = _environment()
    loader = environment.loader
    sources = {
        name: loader.get_source(environment, name)[0] if loader is not None else "" for name in ("report.css", *scripts)
    }
    return environment.get_template(template).render(
        css=sources["report.css"],
        script="\n".join(sources[name] for name in scripts),
        kind=kind,
        program=f"unmix {__version__}",
        **context,
    )


def write_page(path: Path, text: str, *, overwrite: bool = False) -> PageFile:
    """Write a page, aside and renamed. Raises FileError when it exists and `overwrite` is not given."""
    data = text.encode("utf-8", errors="replace")
    with write_aside(path, overwrite=overwrite) as aside:
        aside.write_bytes(data)
    return PageFile(path, len(data))


def kind_of_page(path: Path) -> str | None:
    """What kind of page a file is, as `render_page` was told; None when this program did not write it."""
    import re

    try:
        with path.open("rb") as stream:
            head = stream.read(_HEAD_BYTES).decode("utf-8", errors="replace")
    except OSError:
        return None
    found = re.search(r'<meta name="unmix-page" content="([^"]*)">', head)
    return found.group(1) if found else None


def versions() -> str:
    """The program and what its numbers rest on."""
    import platform
    from importlib.metadata import version

    parts = ", ".join(f"{name} {version(name)}" for name in ("numpy", "scipy"))
    return f"unmix {__version__}, {parts}, Python {platform.python_version()}"
