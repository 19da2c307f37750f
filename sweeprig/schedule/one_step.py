"""One step ahead: what a trial that has not been made yet would tell, on average over its outcomes. Pure numbers.

weight (cells,): what is believed; chance (rows, cells): of an outcome of a candidate trial, if the cell were true;
makes (candidates, rows): 1 where the outcome is one of the candidate's, whose chances then sum to 1 in each cell.
What the cells stand for, and which candidates there are, is not known here.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from sweeprig.laws import Floats

Score = Callable[[Floats], Floats]
"""Weights after each outcome, not yet divided by their sum, (rows, cells) → score times that sum, (rows, functions)."""
_NONE = 1e-300


def expected(weight: Floats, chance: Floats, makes: Floats, score: Score) -> Floats:
    """The score that is expected after each candidate trial, (candidates, functions).

    With `entropy` it is the rule of Kontsevich and Tyler 1999 (psi method) and of Watson 2017; with `variance` the same
    rule for those who want a few functions of the cell and not all of it.
    """
    return np.asarray(makes @ score(chance * weight))


def entropy(joint: Floats) -> Floats:
    """Minus the sum of p·ln p of the weights after each outcome, nat."""
    total = joint.sum(axis=1)
    terms = joint * np.log(np.maximum(joint, _NONE))
    return np.asarray(total * np.log(np.maximum(total, _NONE)) - terms.sum(axis=1))[:, None]


def variance(values: Floats) -> Score:
    """The variance of each of `values` (functions, cells)."""
    count, size = values.shape
    columns = np.empty((size, 1 + 2 * count))
    columns[:, 0] = 1.0
    columns[:, 1 : 1 + count] = values.T
    columns[:, 1 + count :] = (values**2).T

    def score(joint: Floats) -> Floats:
        moments = joint @ columns
        first, second = moments[:, 1 : 1 + count], moments[:, 1 + count :]
        return np.asarray(np.maximum(second - first**2 / np.maximum(moments[:, :1], _NONE), 0.0))

    return score
