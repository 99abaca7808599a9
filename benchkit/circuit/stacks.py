"""LAPACK over a stack of matrices, one a unit: a singular one is not a number and takes no other unit with it.

numpy refuses a whole stack for one singular matrix in it. In a batch of hypotheses there nearly always is a unit that
stands on an edge, so whoever works on such a stack goes through `each_its_own`.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

Stack = NDArray[np.float64]


def each_its_own(work: Callable[..., Stack], first: Stack, *others: Stack) -> Stack:
    """Apply ``work`` to stacks of matrices.

    Parameters
    ----------
    work : callable
        Takes the stacks and returns one, such as `numpy.linalg.solve` or `numpy.linalg.inv`.
    first, *others : arrays of shape (units, rows, columns)

    Returns
    -------
    array of shape (units, rows, columns)
        Not a number for a unit with a number that is not finite, and for one that ``work`` refuses as singular.
    """
    stacks = (first, *others)
    usable = np.ones(len(first), np.bool_)
    for stack in stacks:
        usable &= np.isfinite(stack).all(axis=(1, 2))
    result = np.full(stacks[-1].shape, np.nan)
    try:
        result[usable] = work(*(stack[usable] for stack in stacks))
    except np.linalg.LinAlgError:
        for unit in np.flatnonzero(usable):
            try:
                result[unit] = work(*(stack[unit : unit + 1] for stack in stacks))[0]
            except np.linalg.LinAlgError:
                continue
    return result
