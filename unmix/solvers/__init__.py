"""Block solvers and the driver that carries them along a recording.

problem.py     one weighted, constrained least-squares problem, ready for any of the methods
reduced.py     constraint eliminated, banded Cholesky, cached per set of delays
stationary.py  delays constant: the same solution as a filter bank
kkt.py         sparse saddle-point factorisation, the check on the two above
convex.py      cvxpy: Huber loss, clipped samples, a bound on the peak
snapshots.py   `free`: every snapshot alone
propagated.py  `propagated`: the Taylor transition between neighbouring samples
baselines.py   what a variant is compared with: filters made from delays alone
streaming.py   push chunks in, get talkers out, in bounded memory
"""
