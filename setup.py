"""Carries `demo_data/` into the installed package, so that the demo works wherever the package does."""

from pathlib import Path

from setuptools import setup
from setuptools.command.build_py import build_py

DEMO_FILES = ("*.flac", "*.toml", "README.md")


class BuildWithDemo(build_py):
    """The usual build, plus the demo's clips and spec as `unmix/demo_data/`."""

    def run(self):
        super().run()
        if self.editable_mode:
            return  # found beside the package
        here = Path(__file__).parent / "demo_data"
        there = Path(self.build_lib) / "unmix" / "demo_data"
        there.mkdir(parents=True, exist_ok=True)
        for pattern in DEMO_FILES:
            for source in sorted(here.glob(pattern)):
                self.copy_file(str(source), str(there / source.name))


setup(cmdclass={"build_py": BuildWithDemo})
