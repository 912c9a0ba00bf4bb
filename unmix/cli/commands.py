"""The commands, one line each.

A command called `name` lives in `unmix/cli/name.py` as the click command `command`. Its module is imported only when
the command is invoked or asked for its own help. To add one: write the module, add its line here.
"""

from __future__ import annotations

__all__ = ["COMMANDS"]

COMMANDS: dict[str, str] = {
    "demo": "Render, solve and grade a small scene: the whole job at a glance.",
    "solve": "Separate the talkers of a scene: one audio file each.",
    "grade": "Grade talker signals against references, before and after.",
    "locate": "Find the talkers of a scene: where, how many, who speaks when.",
    "check": "Check recording and array before anything is separated.",
    "calibrate": "Find each channel's gain, delay, polarity and position from takes.",
    "limits": "What an array can achieve at best, before anything is built.",
    "render": "Render a scene with known truth: mixture, references, scene file.",
    "live": "Separate talkers while they speak, from a pipe into a pipe.",
    "export": "Write a variant's filters for a device, with what they cost.",
    "batch": "Run scenes x variants, grade them, and rank the variants.",
    "report": "Turn the folder of a job into one HTML file to look at and listen to.",
    "variants": "List the presets and every field of a variant.",
    "completion": "Print the script that completes commands in a shell.",
}
"""Command names and their one-line help, in the order of the help page."""
