"""How many talkers: which clusters of the mixture are talkers, and how sure that is.

The maximum-likelihood mixture (see `mixture`) drops directions that explain nothing the others do not, so what is
left are talkers and, in reverberant rooms, traces of reflections. A talker has at least `TALKER_SHARE` of all bins,
and once, when the others pause, at least `TALKER_PEAK` of a stretch of half a second; what misses either by little, or
passes by little, makes the number ambiguous, and both are reported. The figures are set on simulated rooms (T20 up to
0.6 s, talkers' levels up to 6 dB apart): talkers had shares from 0.024 and peaks from 0.35, reflections shares up to
0.02 and peaks up to 0.19.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from unmix.bearings.mixture import SAME_TALKER, Cluster

__all__ = ["MOST_TALKERS", "TalkerCount", "count_talkers", "merge_sections", "talker_margin"]

MOST_TALKERS = 4
TALKER_SHARE = 0.012
TALKER_PEAK = 0.25
# Doubt begins and ends at these multiples of the two.
_DOUBT = (0.75, 1.5)
# A talker of a long recording need not speak in every section, but must be plain in one.
_PLAIN_SHARE = 0.05


@dataclass(frozen=True)
class TalkerCount:
    """Number of talkers, and the numbers that the recording leaves possible.

    estimated  what the recording says; used what was gone on with: the number asked for, if one was
    lowest, highest  equal to `estimated` when there is no doubt
    reason     why it is in doubt; None when it is not
    """

    estimated: int
    lowest: int
    highest: int
    used: int
    reason: str | None = None

    @property
    def ambiguous(self) -> bool:
        """Whether more than one number is possible."""
        return self.lowest != self.highest


def merge_sections(sections: list[list[Cluster]]) -> list[Cluster]:
    """Clusters of all sections as one list, heaviest first: nearby ones joined, their largest share kept."""
    pool = sorted((c for section in sections for c in section), key=lambda c: -c.weight)
    groups: list[list[Cluster]] = []
    for cluster in pool:
        near = [g for g in groups if np.linalg.norm(g[0].x - cluster.x) < SAME_TALKER]
        if near:
            min(near, key=lambda g: float(np.linalg.norm(g[0].x - cluster.x))).append(cluster)
        else:
            groups.append([cluster])
    merged = []
    for group in groups:
        weights = np.array([c.weight for c in group])
        x = weights @ np.array([c.x for c in group]) / weights.sum()
        merged.append(Cluster(np.asarray(x), float(weights.max())))
    if len(sections) > 1:
        merged = [c for c in merged if c.weight >= _PLAIN_SHARE]
    return sorted(merged, key=lambda c: -c.weight)


def talker_margin(cluster: Cluster) -> float:
    """By how much a cluster is a talker: 1 at the limit."""
    return min(cluster.weight / TALKER_SHARE, cluster.peak / TALKER_PEAK)


def count_talkers(found: list[Cluster], asked: int | None = None) -> TalkerCount:
    """The number of talkers among clusters; ``asked`` overrides it."""
    margins = sorted((talker_margin(c) for c in found), reverse=True)
    estimated = sum(m >= 1.0 for m in margins)
    possible, sure = (sum(m >= edge for m in margins) for edge in _DOUBT)
    reason = None
    if possible > sure:
        doubtful = sorted(found, key=talker_margin, reverse=True)[sure:possible]
        shares = ", ".join(f"{100 * c.weight:.1f} %" for c in doubtful)
        reason = f"{sure} to {possible} talkers are possible: {shares} of the bins, from a weak talker or a reflection"
    if estimated > MOST_TALKERS:
        reason = f"{estimated} directions stand out, more than the {MOST_TALKERS} talkers that are told apart"
    capped = [min(n, MOST_TALKERS) for n in (estimated, sure, max(possible, estimated))]
    return TalkerCount(capped[0], capped[1], capped[2], capped[0] if asked is None else asked, reason)
