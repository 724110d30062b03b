"""The curvature of a large fit and the leverage of its points, in blocks of rows between which others may act.

Each block of the Jacobian is factorised as Q R, and the R together are decomposed instead of the Jacobian
(tall-and-skinny QR: Demmel, Grigori, Hoemmen & Langou, SIAM J. Sci. Comput. 34 (2012) A206). Only orthogonal
transformations are used, so nothing is lost against decomposing it whole.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.fitting.uncertainty import Curvature, curvature

Floats = NDArray[np.float64]
FEWEST_ROWS = 2048
ROWS_PER_COLUMN = 16  # so that the R together are much shorter than the Jacobian


def curvature_and_leverage(
    jacobian: Floats,
    residuals: Floats,
    prior_sds: Floats,
    prior_residuals: Floats,
    fixed: NDArray[np.bool_],
    scales: Floats,
    on_work: Callable[[], None] | None = None,
) -> tuple[Curvature, Floats]:
    """`curvature` and the diagonal of the hat matrix.

    Parameters
    ----------
    jacobian : ndarray, shape (v, p)
    residuals : ndarray, shape (v,)
    prior_sds, prior_residuals, fixed, scales : ndarray, shape (p,), as for `curvature`
    on_work : called after each block

    Returns
    -------
    Curvature
        Of the problem reduced by the transformations: everything as of the whole one, apart from ``basis``,
        which has a row for each row of the R.
    ndarray, shape (v,)
        Leverage of each point.
    """
    v, p = jacobian.shape
    rows = max(FEWEST_ROWS, ROWS_PER_COLUMN * p)
    blocks = [slice(begin, begin + rows) for begin in range(0, v, rows)]
    factors: list[tuple[Floats, Floats]] = []
    for block in blocks:
        q, r = np.linalg.qr(jacobian[block])
        factors.append((q, r))
        _tell(on_work)
    reduced = np.vstack([np.zeros((0, p)), *(r for _, r in factors)])
    along = np.concatenate(
        [np.zeros(0), *(q.T @ residuals[b] for (q, _), b in zip(factors, blocks, strict=True))]
    )
    found = curvature(reduced, along, prior_sds, prior_residuals, fixed, scales)
    leverage = np.zeros(v)
    begin = 0
    for (q, r), block in zip(factors, blocks, strict=True):
        leverage[block] = np.sum((q @ found.basis[begin : begin + len(r)]) ** 2, axis=1)
        begin += len(r)
        _tell(on_work)
    return found, leverage


def _tell(on_work: Callable[[], None] | None) -> None:
    if on_work is not None:
        on_work()
