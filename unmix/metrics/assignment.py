"""Which estimate is which talker's: by best score, or by name."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.errors import InputError

__all__ = ["best_assignment", "match_names"]


def best_assignment(scores: NDArray[np.floating[Any]]) -> list[int | None]:
    """The estimate of each reference such that the mean score is highest; None where there are too few estimates.

    Solved as a linear assignment, in polynomial time (the Hungarian method [1]_ and its successors).

    Parameters
    ----------
    scores : (estimates, references)
        Higher is better; NaN is worse than any number.

    .. [1] H. W. Kuhn, "The Hungarian method for the assignment problem", Naval Research Logistics Quarterly 2, 1955.
    """
    from scipy.optimize import linear_sum_assignment

    found: list[int | None] = [None] * scores.shape[1]
    known = scores[np.isfinite(scores)]
    worst = float(known.min()) - 1000.0 if known.size else 0.0
    rows, columns = linear_sum_assignment(np.where(np.isfinite(scores), scores, worst), maximize=True)
    for estimate, reference in zip(rows, columns, strict=True):
        found[int(reference)] = int(estimate)
    return found


def match_names(estimates: Sequence[str], references: Sequence[str]) -> list[int | None]:
    """The estimate of each reference of the same name; None where there is none. Raises InputError on a name twice."""
    for names, what in ((estimates, "estimates"), (references, "references")):
        twice = sorted({name for name in names if list(names).count(name) > 1})
        if twice:
            raise InputError(f"two {what} are called {twice[0]!r}; rename one, or match by best assignment")
    at = {name: index for index, name in enumerate(estimates)}
    return [at.get(name) for name in references]
