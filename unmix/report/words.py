"""Figures put into words: what a reader takes along from the first screen.

Words are chosen by the words correct that two published mappings predict from STOI (`unmix.metrics.words`); the verdict
claims the lower of the two.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from unmix.metrics.grades import TalkerGrade
from unmix.metrics.words import words_dantale_percent, words_ieee_percent

__all__ = ["Verdict", "figure_text", "talker_verdict", "understandable", "words_right_percent"]

UNDERSTOOD, PARTLY = 95.0, 50.0
"""Percent of words from which somebody can be understood, or half understood: a choice, not a standard."""
UNDEFINED = "\u2013"


@dataclass(frozen=True)
class Verdict:
    """One talker in one sentence.

    level     "good", "fair" or "poor" after separation; "unknown" without figures
    headline  the finding in three or four words
    sentence  the figures behind it
    """

    name: str
    level: str
    headline: str
    sentence: str


def words_right_percent(stoi: float) -> tuple[float, float]:
    """The lower and the higher of the two predictions."""
    ieee, dantale = words_ieee_percent(stoi), words_dantale_percent(stoi)
    return min(ieee, dantale), max(ieee, dantale)


def figure_text(value: float | None, digits: int, *, signed: bool = False) -> str:
    """A figure as text with a true minus sign; a dash when there is none."""
    if value is None or not math.isfinite(value):
        return UNDEFINED
    value = round(value, digits) + 0.0  # no minus before a nought
    return f"{value:{'+' if signed else ''}.{digits}f}".replace("-", "\u2212")


def talker_verdict(grade: TalkerGrade) -> Verdict:
    """Who can be understood, before and after."""
    before, after = grade.unprocessed.stoi, grade.stoi
    if after is None:
        why = grade.undefined.get("stoi", "no figure")
        return Verdict(grade.name, "unknown", "cannot be judged", f"Intelligibility undefined: {why}.{_others(grade)}")
    level, headline = _standing(after)
    was = "" if before is None else f" (before: {figure_text(before, 2)}, {_share(before)})"
    if before is not None and after < before - 0.005:
        headline += ", worse than before"
    elif before is not None and _standing(before)[0] == level:
        headline += ", as before"
    return Verdict(grade.name, level, headline, f"STOI {figure_text(after, 2)}: {_share(after)}{was}.{_others(grade)}")


def understandable(stoi: float) -> bool:
    """Whether somebody with this intelligibility can be understood."""
    return _standing(stoi)[0] == "good"


def _standing(stoi: float) -> tuple[str, str]:
    words = words_right_percent(stoi)[0]
    if words >= UNDERSTOOD:
        return "good", "can be understood"
    if words >= PARTLY:
        return "fair", "can be understood in part"
    return "poor", "cannot be understood"


def _share(stoi: float) -> str:
    low = words_right_percent(stoi)[0]
    if low > 99.0:
        return "over 99 % of words"
    return "under 1 % of words" if low < 1.0 else f"about {low:.0f} % of words"


def _others(grade: TalkerGrade) -> str:
    if grade.sir_db is None:
        return ""
    gain = grade.gain.sir_db
    if grade.sir_db >= 0.0:
        text = f" The others lie {grade.sir_db:.0f} dB below"
    else:
        text = f" The others lie {-grade.sir_db:.0f} dB above"
    return f"{text}, {_change(gain)}." if gain is not None else f"{text}."


def _change(gain_db: float) -> str:
    return f"{gain_db:.0f} dB further down than before" if gain_db >= 0.0 else f"{-gain_db:.0f} dB less than before"
