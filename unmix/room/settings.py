"""Moved: the settings of every part stand in `unmix/settings.py`; edit them there."""

from unmix.settings import *  # noqa: F403
