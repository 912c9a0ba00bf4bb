"""The rules of the house: layers, the public surface, what start-up may import, what no file may say."""

from __future__ import annotations

import ast
import importlib
import inspect
import pkgutil
import re
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import click
import pytest

import unmix
from unmix.cli.commands import COMMANDS

ROOT = Path(__file__).parents[1]
PACKAGE = ROOT / "unmix"

# From the top down; a module may import from its own layer and from those below it.
LAYERS = (
    "cli",
    "report",
    "batch",
    "export",
    "live",
    "jobs",
    "render",
    "room",
    "calibration",
    "limits",
    "bearings",
    "solvers",
    "model",
    "metrics",
)
GROUND = len(LAYERS)


def modules() -> list[Path]:
    return sorted(PACKAGE.rglob("*.py"))


def layer(name: str) -> int:
    """Depth of a dotted name inside the package; modules directly in it are the ground."""
    parts = name.split(".")
    if len(parts) > 1 and parts[1] in LAYERS:
        return LAYERS.index(parts[1])
    assert not (PACKAGE / parts[1]).is_dir() if len(parts) > 1 else True, f"{name}: give its folder a place in LAYERS"
    return GROUND


def imports(path: Path) -> Iterator[str]:
    """Every name of the package that a module imports, anywhere in it."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names if alias.name.split(".")[0] == "unmix")
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            if node.module and node.module.split(".")[0] == "unmix":
                yield node.module


def dotted(path: Path) -> str:
    return ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__")


@pytest.mark.parametrize("path", modules(), ids=dotted)
def test_imports_run_downward_only(path: Path) -> None:
    if path in (PACKAGE / "__init__.py", PACKAGE / "__main__.py"):
        return  # the public surface stands above all layers
    own = layer(dotted(path))
    for name in imports(path):
        assert layer(name) >= own, f"{dotted(path)} imports {name}, which stands above it"


def test_the_layers_are_told_apart() -> None:
    """A rule that sees nothing would pass everything."""
    assert layer("unmix.cli.solve") < layer("unmix.jobs.solve") < layer("unmix.metrics.grades") < layer("unmix.scene")
    assert "unmix.scene" in set(imports(PACKAGE / "jobs" / "solve.py"))


@pytest.mark.parametrize("path", modules(), ids=dotted)
def test_what_a_module_lists_it_has(path: Path) -> None:
    module = importlib.import_module(dotted(path)) if path.stem != "__main__" else None
    for name in getattr(module, "__all__", ()):
        assert hasattr(module, name), f"{dotted(path)}.__all__ lists {name}"


def test_the_public_surface_is_sorted_and_complete() -> None:
    assert list(unmix.__all__) == sorted(unmix.__all__)
    assert set(unmix._LAZY) | {"__version__"} <= set(unmix.__all__)
    assert dir(unmix) == list(unmix.__all__)
    with pytest.raises(AttributeError, match="separate"):
        _ = unmix.separate


@pytest.mark.parametrize("name", [n for n in unmix.__all__ if n != "__version__"])
def test_the_public_surface_is_documented(name: str) -> None:
    thing = getattr(unmix, name)
    text = inspect.getdoc(thing) or ""
    # Dataclasses and structs without a docstring get their signature for one.
    assert len(text) > 20 and not text.startswith(f"{name}("), f"unmix.{name} has no docstring"
    if inspect.isfunction(thing):
        assert re.search("[Rr]aise|errors", text), f"unmix.{name}: say what it raises"


def public_functions() -> Iterator[tuple[str, object]]:
    for info in pkgutil.walk_packages([str(PACKAGE)], "unmix."):
        if info.name.endswith("__main__"):
            continue
        module = importlib.import_module(info.name)
        for name in getattr(module, "__all__", ()):
            thing = getattr(module, name)
            if getattr(thing, "__module__", None) == info.name and (
                inspect.isfunction(thing) or inspect.isclass(thing)
            ):
                yield f"{info.name}.{name}", thing


def test_whatever_a_module_offers_has_a_docstring() -> None:
    bare = [
        name
        for name, thing in public_functions()
        if not thing.__doc__ or thing.__doc__.startswith(f"{name.rsplit('.', 1)[-1]}(")
    ]
    assert not bare


def test_input_is_never_checked_by_assert() -> None:
    found = [
        f"{dotted(path)}:{node.lineno}"
        for path in modules()
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
        if isinstance(node, ast.Assert)
    ]
    assert not found


def text_files() -> list[Path]:
    names = subprocess.run(
        ["git", "ls-files", "-z"], cwd=ROOT, capture_output=True, text=True, check=False
    ).stdout.split("\0")
    tracked = [ROOT / name for name in names if name] or [*ROOT.glob("*.md"), *modules()]
    kinds = {".py", ".md", ".toml", ".txt", ".html", ".css", ".js", ".in", ""}
    return [path for path in tracked if path.suffix in kinds and path.is_file() and path.name != "LICENSE"]


UNWANTED = {
    "a path of somebody's machine": re.compile(r"(?<![\w.~-])/(?:home|Users|root|work|tmp)/\w"),
    "a mark of unfinished work": re.compile(r"\b(?:TODO|FIXME|XXX|HACK)\b"),
    "a leftover of a merge": re.compile(r"^(?:<{7}|>{7}) ", re.MULTILINE),
}


@pytest.mark.parametrize("what", UNWANTED)
def test_no_file_holds(what: str) -> None:
    found = [
        f"{path.relative_to(ROOT)}: {match.group(0)!r}"
        for path in text_files()
        if path != Path(__file__)
        for match in UNWANTED[what].finditer(path.read_text(encoding="utf-8", errors="replace"))
    ]
    assert not found


def imported_by(*arguments: str) -> set[str]:
    code = (
        "import sys\n"
        f"sys.argv = ['unmix', *{list(arguments)!r}]\n"
        "try:\n    from unmix.cli import main; main()\n"
        "except SystemExit: pass\n"
        "print(*sorted({name.split('.')[0] for name in sys.modules}), file=sys.stderr)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    return set(done.stderr.split())


HEAVY = {"numpy", "scipy", "matplotlib", "cvxpy", "soundfile", "h5py", "duckdb", "rich", "msgspec"}


@pytest.mark.parametrize("arguments", [["--help"], ["--version"]])
def test_help_imports_nothing_heavy(arguments: list[str]) -> None:
    loaded = imported_by(*arguments)
    assert "click" in loaded
    assert not loaded & HEAVY


def test_importing_the_package_imports_nothing_heavy() -> None:
    code = "import sys, unmix; print(*sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert not {name.split(".")[0] for name in done.stdout.split()} & HEAVY


@pytest.mark.parametrize("name", COMMANDS)
def test_each_command_has_a_module_and_help(name: str) -> None:
    command = importlib.import_module(f"unmix.cli.{name}").command
    assert isinstance(command, click.Command)
    assert command.name == name
    assert COMMANDS[name].endswith(".")
    undocumented = [p.name for p in command.params if isinstance(p, click.Option) and not p.help]
    assert not undocumented
    if name != "completion":
        assert any("--json" in p.opts for p in command.params)


def test_no_command_is_left_out_of_the_table() -> None:
    found = {
        path.stem for path in (PACKAGE / "cli").glob("*.py") if re.search(r"^@click\.command\(", path.read_text(), re.M)
    }
    assert found == set(COMMANDS)
