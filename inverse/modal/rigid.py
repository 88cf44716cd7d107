"""Rigid modes counted by rank, and bodies that no force holds back named.

The rank of the stacked rows of all squares with nonzero weight is free of units and of how stiff
anything is, where a threshold on eigenvalues is neither.
"""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp
import scipy.sparse.csgraph as csgraph
import scipy.sparse.linalg as spla

from inverse.assembly.terms import Array, IntArray

RANK_TOLERANCE = 1e-10
"""Below this share of the greatest singular value of the normalised rows a direction is not resisted."""

LARGEST_DENSE = 1200
"""Up to this many coordinates in one connected group the rank comes from singular values."""


def count_rigid(rows: sp.csr_array, weights: Array) -> int:
    """Number of independent motions that stretch no square.

    Parameters
    ----------
    rows : sparse array, shape (T, n)
        Rows of the stiffness squares of one build.
    weights : ndarray, shape (T,)
        Their weights; squares of weight zero do not count.
    """
    kept = sp.csr_array(rows[weights != 0])
    kept.eliminate_zeros()
    n = kept.shape[1]
    joined = sp.csr_array(kept.T @ kept)
    groups, label = csgraph.connected_components(joined, directed=False)
    if groups == 1 or n <= LARGEST_DENSE:
        return _nullity(kept)
    order = np.argsort(label, kind="stable")
    bounds = np.searchsorted(label[order], np.arange(groups + 1))
    counts = np.diff(bounds)
    # Coordinates that stand alone need no matrix: they are held or they are not.
    alone = order[bounds[:-1][counts == 1]]
    held = np.zeros(n, bool)
    held[kept.indices] = True
    total = int(np.sum(~held[alone]))
    for g in np.flatnonzero(counts > 1):
        total += _nullity(_restricted(kept, order[bounds[g] : bounds[g + 1]]))
    return total


def _restricted(rows: sp.csr_array, columns: IntArray) -> sp.csr_array:
    """The rows that touch some columns."""
    part = sp.csr_array(sp.csc_array(rows)[:, columns])
    return sp.csr_array(part[np.diff(part.indptr) > 0])


def _nullity(rows: sp.csr_array) -> int:
    rows = _normalised(rows)
    n = rows.shape[1]
    if n <= LARGEST_DENSE:
        s = np.linalg.svd(rows.toarray(), compute_uv=False)
        return n - int(np.sum(s > RANK_TOLERANCE * max(s, default=1.0)))
    if np.diff(rows.indptr).max() <= 2:
        return _nullity_of_pairs(rows)
    return _nullity_by_shift(rows)


def _normalised(rows: sp.csr_array) -> sp.csr_array:
    """Rows of unit length over columns of one size, so that no unit of measure enters the rank."""
    for _ in range(2):
        columns = spla.norm(rows, axis=0)
        rows = sp.csr_array(rows @ sp.diags_array(1 / np.where(columns > 0, columns, 1.0)))
        lengths = spla.norm(rows, axis=1)
        rows = sp.csr_array(sp.diags_array(1 / np.where(lengths > 0, lengths, 1.0)) @ rows)
    return rows


def _nullity_of_pairs(rows: sp.csr_array) -> int:
    """Rows with at most two entries: a group is free exactly if ratios agree around every circle of links."""
    if np.any(np.diff(rows.indptr) == 1):
        return 0
    first, second = rows.indices[0::2], rows.indices[1::2]
    ratio = -rows.data[0::2] / rows.data[1::2]
    n = rows.shape[1]
    graph = sp.csr_array((np.ones(len(first)), (first, second)), shape=(n, n))
    order, before = csgraph.breadth_first_order(graph, 0, directed=False)
    gain = dict(zip(zip(first.tolist(), second.tolist(), strict=True), ratio.tolist(), strict=True))
    motion = np.ones(n)
    for node in order[1:].tolist():
        parent = int(before[node])
        step = gain[parent, node] if (parent, node) in gain else 1.0 / gain[node, parent]
        motion[node] = motion[parent] * step
    return int(np.all(np.abs(rows @ motion) <= RANK_TOLERANCE * (abs(rows) @ np.abs(motion))))


def _nullity_by_shift(rows: sp.csr_array) -> int:
    """Number of vanishing eigenvalues of ``RᵀR``, in growing batches until one does not vanish."""
    gram = sp.csc_array(rows.T @ rows)
    wanted = 8
    while wanted < gram.shape[0]:
        values = spla.eigsh(gram, k=wanted, sigma=-1e-6, return_eigenvectors=False)
        zeros = int(np.sum(values < RANK_TOLERANCE))
        if zeros < wanted:
            return zeros
        wanted *= 2
    return gram.shape[0]
