"""How many nonzeros a Cholesky factor will have, without computing it.

Elimination tree (Liu, ACM TOMS 12 (1986)) and column counts by row-subtree leaves (Gilbert, Ng and Peyton, SIAM J.
Matrix Anal. Appl. 15 (1994) 1075-1091), on a graph whose nodes stand for several rows each.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from modesieve.reduce.arrays import Ints


def factor_nonzeros(graph: Any, weight: Ints, order: Ints) -> int:
    """Nonzeros of L, diagonal included.

    graph: symmetric CSR pattern (nodes, nodes) without loops; weight (nodes,): rows per node; order (nodes,): nodes in
    the order of elimination.

    >>> import scipy.sparse as sp
    >>> star = sp.csr_array(np.array([[0, 1, 1], [1, 0, 0], [1, 0, 0]]))
    >>> [factor_nonzeros(star, np.ones(3, int), np.array(order)) for order in ([0, 1, 2], [1, 2, 0])]
    [6, 5]
    """
    P = graph[order][:, order].tocsr()
    P.sort_indices()
    w = np.asarray(weight)[order].astype(np.int64)
    indptr, indices = P.indptr.tolist(), P.indices.tolist()
    parent = _elimination_tree(indptr, indices)
    below = _rows_below(indptr, indices, parent, w.tolist())
    return int(np.sum(w * (w + 1) // 2 + w * below))


def _elimination_tree(indptr: list[int], indices: list[int]) -> list[int]:
    n = len(indptr) - 1
    parent, ancestor = [-1] * n, [-1] * n
    for i in range(n):
        for p in range(indptr[i], indptr[i + 1]):
            j = indices[p]
            if j >= i:
                break
            while ancestor[j] != -1 and ancestor[j] != i:
                ancestor[j], j = i, ancestor[j]
            if ancestor[j] == -1:
                ancestor[j] = parent[j] = i
    return parent


def _postorder(parent: list[int]) -> list[int]:
    n = len(parent)
    children: list[list[int]] = [[] for _ in range(n)]
    for j in range(n - 1, -1, -1):
        if parent[j] >= 0:
            children[parent[j]].append(j)
    order: list[int] = []
    for root in (j for j in range(n) if parent[j] < 0):
        stack, reverse = [root], []
        while stack:
            j = stack.pop()
            reverse.append(j)
            stack.extend(reversed(children[j]))
        order.extend(reversed(reverse))
    return order


def _rows_below(indptr: list[int], indices: list[int], parent: list[int], w: list[int]) -> Any:
    """Rows below the diagonal block of every node's column: differences summed up the tree."""
    n = len(parent)
    post = _postorder(parent)
    first = _first_descendants(parent, post)
    delta = [0] * n
    highest, last_leaf, ancestor = [-1] * n, [-1] * n, list(range(n))
    for j in post:
        for p in range(indptr[j], indptr[j + 1]):
            i = indices[p]
            if i <= j or first[j] <= highest[i]:
                continue  # j is not a leaf of row i's subtree
            highest[i] = first[j]
            delta[j] += w[i]
            # every leaf starts a path that ends where it meets the last one, the first path ends at row i itself
            delta[i if last_leaf[i] < 0 else _root(ancestor, last_leaf[i])] -= w[i]
            last_leaf[i] = j
        if parent[j] >= 0:
            ancestor[j] = parent[j]
    return _sum_up(delta, parent, post, w)


def _first_descendants(parent: list[int], post: list[int]) -> list[int]:
    first = [-1] * len(parent)
    for k, start in enumerate(post):
        j = start
        while j != -1 and first[j] == -1:
            first[j] = k
            j = parent[j]
    return first


def _root(ancestor: list[int], j: int) -> int:
    root = j
    while root != ancestor[root]:
        root = ancestor[root]
    while j != root:
        ancestor[j], j = root, ancestor[j]
    return root


def _sum_up(delta: list[int], parent: list[int], post: list[int], w: list[int]) -> Any:
    total = delta[:]
    for j in post:
        if parent[j] >= 0:
            total[parent[j]] += total[j]
    return np.array(total, dtype=np.int64)
