"""Brings the README up to date: runs every command of its console blocks and takes the pictures of its reports.

    python docs/readme.py            # both; needs the dev extra, and Chromium for the pictures
    python docs/readme.py --no-pictures

Commands are run in one empty folder, in the README's order, on a terminal of 120 columns.
"""

from __future__ import annotations

import argparse
import os
import pty
import re
import shlex
import shutil
import struct
import subprocess
import sys
import tempfile
import termios
from collections.abc import Iterator
from fcntl import ioctl
from pathlib import Path

ROOT = Path(__file__).parents[1]
README = ROOT / "README.md"
PICTURES = ROOT / "docs" / "pictures"
BLOCK = re.compile(r"```console\n\$ (?P<command>[^\n]+)\n(?P<output>.*?)```", re.DOTALL)
COLUMNS = 120
ESCAPES = re.compile(r"\x1b\[[0-9;]*m")


def blocks(text: str) -> Iterator[tuple[str, str]]:
    """Command and output of each console block, in order."""
    for match in BLOCK.finditer(text):
        yield match["command"], match["output"]


def run(command: str, folder: Path) -> str:
    """What a command of the README prints on a terminal, warnings first. Raises RuntimeError when it fails."""
    program, *arguments = shlex.split(command)
    if program != "unmix":
        raise RuntimeError(f"the README runs {program!r}; only unmix is run here")
    ours, theirs = pty.openpty()
    ioctl(theirs, termios.TIOCSWINSZ, struct.pack("HHHH", 60, COLUMNS, 0, 0))
    environment = os.environ | {"TERM": "xterm", "COLUMNS": str(COLUMNS), "NO_COLOR": "1"}
    done = subprocess.Popen(
        [sys.executable, "-m", "unmix", *arguments],
        cwd=folder,
        env=environment,
        stdin=subprocess.DEVNULL,
        stdout=theirs,
        stderr=subprocess.PIPE,
        text=True,
    )
    os.close(theirs)
    said = _until_closed(ours)
    warnings = done.communicate()[1]
    if done.returncode != 0:
        raise RuntimeError(f"{command}: exit status {done.returncode}: {warnings}")
    plain = ESCAPES.sub("", warnings + said.replace("\r\n", "\n"))
    lines = [line.rstrip() for line in plain.splitlines()]
    return "\n".join(lines).strip("\n") + "\n"


def _until_closed(handle: int) -> str:
    """Everything that is written to a terminal until the last writer closes it."""
    parts = []
    while True:
        try:
            part = os.read(handle, 65536)
        except OSError:  # Linux says so when the other end is closed
            break
        if not part:
            break
        parts.append(part)
    os.close(handle)
    return b"".join(parts).decode("utf-8")


def renewed(text: str, folder: Path) -> str:
    """The README with the output of every console block as it is now."""

    def block(match: re.Match[str]) -> str:
        print(f"$ {match['command']}", flush=True)
        return f"```console\n$ {match['command']}\n{run(match['command'], folder)}```"

    return BLOCK.sub(block, text)


def take_pictures(folder: Path) -> None:
    """Pictures of the reports that the README's commands have left in the folder."""
    from playwright.sync_api import sync_playwright

    program = next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))), None)
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=program, args=["--no-sandbox"])
        page = browser.new_page(viewport={"width": 1100, "height": 640})
        page.goto((folder / "demo_out" / "report.html").as_uri())
        shots = {"verdict.png": {"x": 0, "y": 0, "width": 1100, "height": 430}}
        page.add_style_tag(content=".transport { position: static !important; }")
        for name, clip in shots.items():
            page.screenshot(path=PICTURES / name, clip=clip)
        page.locator(".spectrograms").scroll_into_view_if_needed()
        box = page.locator(".spectrograms").bounding_box()
        top = box["y"] + page.evaluate("scrollY")
        whole = {"x": box["x"] - 8, "y": top - 4, "width": box["width"] + 16, "height": 226}
        page.screenshot(path=PICTURES / "spectrograms.png", clip=whole, full_page=True)
        browser.close()
    for path in sorted(PICTURES.glob("*.png")):
        _make_small(path)


def _make_small(path: Path) -> None:
    """Fewer colours: text and flat areas need no more, and the file is a third."""
    from PIL import Image

    with Image.open(path) as picture:
        small = picture.convert("RGB").quantize(128)
    small.save(path, optimize=True)
    print(f"{path.relative_to(ROOT)}: {path.stat().st_size / 1000:.0f} kB")


def main() -> None:
    """Run the commands, write the README, take the pictures."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--no-pictures", action="store_true", help="only the commands' output")
    options = parser.parse_args()
    PICTURES.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory(prefix="readme-") as name:
        text = renewed(README.read_text(encoding="utf-8"), Path(name))
        README.write_text(text, encoding="utf-8")
        if not options.no_pictures:
            take_pictures(Path(name))


if __name__ == "__main__":
    main()
