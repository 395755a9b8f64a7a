"""Runs in columns: many lists laid end to end in one array, told apart by offsets."""

from __future__ import annotations

import numpy as np

from latchscan.layout.model import Ints


def offsets(lengths: Ints) -> Ints:
    """(n + 1,) offsets of runs of the given lengths."""
    return np.concatenate([np.zeros(1, np.int64), np.cumsum(lengths, dtype=np.int64)])


def within_runs(lengths: Ints) -> Ints:
    """0, 1, ... in runs of the given lengths."""
    return np.arange(int(lengths.sum())) - np.repeat(np.cumsum(lengths) - lengths, lengths)


def successors(first: Ints) -> Ints:
    """(n,) index of every point's successor in its ring; the last one's is the first."""
    following = np.arange(1, int(first[-1]) + 1)
    following[first[1:] - 1] = first[:-1]
    return following
