"""Where the demo's clips and its rendering spec are."""

from __future__ import annotations

from pathlib import Path

from unmix.errors import FileError

__all__ = ["demo_spec_path"]


def demo_spec_path() -> Path:
    """The demo's rendering spec: inside the installed package, or beside it in a source tree.

    Raises FileError when neither is there.
    """
    package = Path(__file__).parents[1]
    for folder in (package / "demo_data", package.parent / "demo_data"):
        if (folder / "demo.toml").exists():
            return folder / "demo.toml"
    raise FileError(f"{package / 'demo_data'}: the demo's files are missing; install the package again")
