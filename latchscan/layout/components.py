"""Connected components of a graph given as edges."""

from __future__ import annotations

import numpy as np
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from latchscan.layout.model import Ints


def connected(count: int, one: Ints, other: Ints) -> Ints:
    """(count,) number of each node's connected component under the edges one[i]-other[i]."""
    if not count:
        return np.zeros(0, dtype=np.int64)
    links = np.ones(len(one), dtype=np.int8)
    graph = coo_matrix((links, (one, other)), shape=(count, count))
    return np.asarray(connected_components(graph, directed=False)[1], dtype=np.int64)
