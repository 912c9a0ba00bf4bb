"""`convex`: the block problem in cvxpy, for what has no closed form.

    minimise  loss(R^(-1/2) (y - H z)) + || Q^(1/2) z ||^2
    subject to (H z)_i >= c where y_i is clipped at +c, <= -c where at -c;  |z| <= peak

`loss` is the sum of squares, or Huber's with threshold M: quadratic within +-M, linear beyond, so that clicks and
drop-outs do not drag the answer along. A clipped sample leaves the sum and becomes an inequality. The problem is built
once per block length and set of delays; samples enter as parameters (DPP), so nothing is compiled again.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.errors import UnsolvableError
from unmix.model.mixing import Mixing
from unmix.solvers.problem import Problem

__all__ = ["ConvexBlock", "mixing_matrix"]

Floats = NDArray[np.float64]


class ConvexBlock:
    """A block of given length and delays, compiled; `solve` takes the samples.

    huber    threshold M in whitened units, None for least squares
    clip     magnitude at and above which a sample counts as clipped, one for all channels or (channels,) with infinity
             for those that never clip; None for none (white noise only)
    peak     bound on the magnitude of each talker, None for none
    solver   "CLARABEL" or "OSQP"
    """

    def __init__(
        self,
        problem: Problem,
        samples: int,
        *,
        huber: float | None = None,
        clip: float | Floats | None = None,
        peak: float | None = None,
        solver: str = "CLARABEL",
    ) -> None:
        import cvxpy

        cp: Any = cvxpy

        if clip is not None and problem.noise.taps is not None:
            raise UnsolvableError('clipped samples need noise = "white": whitening mixes them with sound ones')
        if problem.prior.weight == 0.0 and problem.mixing.talkers > 1:
            raise UnsolvableError('method `convex` needs a prior with two talkers or more; set prior = "flat"')
        self._problem, self.samples, self._solver = problem, samples, solver
        self._clip = None if clip is None else np.repeat(np.broadcast_to(clip, problem.mixing.channels), samples)
        self._matrix = mixing_matrix(problem.whitened, samples)
        rows, unknowns = self._matrix.shape
        self._z = cp.Variable(unknowns)
        self._y = cp.Parameter(rows)
        self._right = cp.Parameter(unknowns)
        constraints: list[Any] = []
        heard = self._matrix @ self._z
        if clip is not None:
            self._sound, self._sign, self._level = (
                cp.Parameter(rows, nonneg=True),
                cp.Parameter(rows),
                cp.Parameter(rows),
            )
            constraints.append(cp.multiply(self._sign, heard) >= self._level)
            heard = cp.multiply(self._sound, heard)
        if peak is not None:
            constraints.append(cp.abs(self._z) <= peak)
        if huber is not None:
            loss = cp.sum(cp.huber(self._y - heard, huber))
        elif clip is not None:
            loss = cp.sum_squares(self._y - heard)
        else:
            # Written out, the squares need no variable per sample: the same problem, a fraction of the size.
            normal = (self._matrix.T @ self._matrix).tocsc()
            loss = cp.quad_form(self._z, normal, assume_PSD=True) - 2 * self._right @ self._z
        objective = loss + cp.sum_squares(_prior_root(problem, samples) @ self._z)
        # Plain least squares can be solved to the last digits; with inequalities such tolerances stall.
        tight = 1e-13 if huber is None and not constraints else 1e-9
        self._tolerances: dict[str, Any] = (
            {"tol_gap_abs": tight, "tol_gap_rel": tight, "tol_feas": tight}
            if solver == "CLARABEL"
            else {"eps_abs": 1e-9, "eps_rel": 1e-9, "max_iter": 20000}
        )
        self._compiled = cp.Problem(cp.Minimize(objective), constraints)

    def solve(self, whitened: Floats) -> Floats:
        """Talkers (talkers, samples) of a whitened block. Raises UnsolvableError when the solver finds no answer."""
        import cvxpy

        cp: Any = cvxpy
        y = whitened.ravel()
        if self._clip is None:
            self._y.value = y
        else:
            over = np.abs(y) >= self._clip
            self._sound.value = np.where(over, 0.0, 1.0)
            self._sign.value = np.where(over, np.sign(y), 0.0)
            # Rows of sound samples read 0 >= -1: always true, and never on the border, where interior points stall.
            self._level.value = np.where(over, self._clip, -1.0)
            self._y.value = np.where(over, 0.0, y)
        self._right.value = self._matrix.T @ y
        try:
            self._compiled.solve(solver=self._solver, enforce_dpp=True, warm_start=False, **self._tolerances)
        except cp.SolverError as error:
            raise UnsolvableError(f"{self._solver} found no answer ({error}); loosen the peak bound") from None
        if self._z.value is None:
            raise UnsolvableError(f"the convex problem is {self._compiled.status}; loosen the peak bound")
        r = self._problem.reach
        return np.asarray(self._z.value.reshape(-1, self._problem.mixing.talkers)[r : r + self.samples].T)


def mixing_matrix(mixing: Mixing, samples: int) -> Any:
    """A of a block, sparse: rows by channel and then time, columns by time (from -R) and then talker."""
    from scipy.sparse import csr_matrix

    taps = mixing.taps if mixing.taps.ndim == 4 else mixing.taps[None]
    width = taps.shape[-1]
    group = np.arange(samples) // mixing.hold if mixing.hold else np.zeros(samples, np.int64)
    n, k, m, a = (
        v.ravel()
        for v in np.meshgrid(
            np.arange(samples), np.arange(mixing.talkers), np.arange(mixing.channels), np.arange(width), indexing="ij"
        )
    )
    values = taps[group[n], k, m, a]
    shape = (mixing.channels * samples, (samples + width - 1) * mixing.talkers)
    return csr_matrix((values, (m * samples + n, (n + a) * mixing.talkers + k)), shape=shape)


def _prior_root(problem: Problem, samples: int) -> Any:
    """Rows of Q^(1/2): the prior's filter over each talker, zeros beyond the block."""
    from scipy.sparse import csr_matrix, diags_array, kron

    length = samples + 2 * problem.reach
    taps = np.sqrt(problem.prior.weight) * problem.prior.taps
    shape = (length + len(taps) - 1, length)
    filters = diags_array(list(taps), offsets=[-i for i in range(len(taps))], shape=shape)
    return csr_matrix(kron(filters, np.eye(problem.mixing.talkers)))
