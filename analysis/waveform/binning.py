"""Means of neighbouring samples: what is much shorter than an edge keeps all that the edge has to say."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from darkedge.analysis.captures import FloatArray

IntArray = NDArray[np.intp]


def group_means(values: FloatArray, begin: IntArray, end: IntArray) -> FloatArray:
    """Means of values[begin:end], for arrays of begins and ends of one shape, each begin before its end."""
    offset = values[0]
    sums = np.concatenate(([0.0], np.cumsum(values - offset)))
    return np.asarray((sums[end] - sums[begin]) / (end - begin) + offset)


def cut_rows(first: IntArray, length: IntArray, *, most: int) -> tuple[IntArray, IntArray, NDArray[np.bool_], IntArray]:
    """Lay stretches of a record out as rows of at most `most` groups of neighbouring samples.

    Parameters
    ----------
    first, length : arrays of int, shape (n,)
        Where each stretch begins, and its samples, at least one.
    most : int
        Most groups in a row.

    Returns
    -------
    begin, end : arrays of int, shape (n, m)
        Bounds of each group; padding repeats the first one.
    inside : array of bool, shape (n, m)
        Which groups are no padding.
    group : array of int, shape (n,)
        Samples in each group of a row. What is left of a stretch at its end is dropped.
    """
    group = np.maximum(1, -(-length // most))
    entries = length // group
    place = np.arange(int(np.max(entries)))
    inside = place < entries[:, None]
    begin = first[:, None] + group[:, None] * np.where(inside, place, 0)
    return begin, begin + group[:, None], inside, np.asarray(group, dtype=np.intp)
