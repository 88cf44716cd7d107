"""The design a second time, by a path that shares neither the assembly nor the eigenvalue algorithm.

Small models: matrices added up term by term, and QR iteration on the pencil (LAPACK ``dsygv``) instead of divide and
conquer on the squares. Large ones: the number of eigenvalues just below and just above each frequency, by
Sylvester's law of inertia.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import scipy.linalg as sl
import scipy.sparse as sp

from inverse.assembly.terms import Array
from inverse.evaluation.evaluator import Evaluation
from inverse.matrices.stack import Stack
from inverse.modal.solution import SPARSE_SIZE, ModalSolution, negative_pivots

AGREEMENT = 1e-8
"""Relative difference at which both paths still count as agreeing, where the spread of rates allows it."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Verification:
    """How the second path compares: `largest_difference` is relative, over all objectives."""

    method: str
    largest_difference: float
    agrees: bool


def verify(evaluation: Evaluation) -> Verification:
    """Recompute one design and compare what its objectives measure."""
    state = evaluation.state
    if state.matrices.model.size >= SPARSE_SIZE:
        return _verify_by_counting(evaluation)
    modes = state.modes
    K, M = (_added_up(stack) for stack in (state.matrices.stiffness, state.matrices.mass))
    values, shapes = sl.eigh(K, M, driver="gv")
    values[: modes.rigid] = 0.0
    second = ModalSolution(values[None], shapes[None], modes.rigid, modes.stable)
    again = Evaluation(evaluation.evaluator, evaluation.x, replace(state, given=second))
    here, there = evaluation.values()[0], again.values()[0]
    with np.errstate(invalid="ignore", divide="ignore"):
        difference = np.abs(here - there) / np.maximum(np.abs(here), np.abs(there))
    largest = float(np.nan_to_num(difference[here != there], nan=np.inf).max(initial=0.0))
    spread = float(modes.eigenvalues[0, -1] / modes.eigenvalues[0, modes.rigid :].min(initial=np.inf))
    allowed = max(AGREEMENT, 100 * np.finfo(float).eps * spread)
    method = "matrices added up term by term, eigenvalues by QR iteration (LAPACK dsygv)"
    return Verification(method=method, largest_difference=largest, agrees=largest <= allowed)


def _added_up(stack: Stack) -> Array:
    """``Σ w r rᵀ``, one square after the other."""
    squares = stack.squares
    total = np.zeros((squares.size, squares.size))
    for t, weight in enumerate(stack.weights[0]):
        own = squares.entry_row == t
        columns, entries = squares.entry_column[own], stack.a[0, squares.entry[own]]
        row = np.zeros(squares.size)
        np.add.at(row, columns, entries)
        total[np.ix_(columns, columns)] += weight * np.outer(row[columns], row[columns])
    return total


def _verify_by_counting(evaluation: Evaluation) -> Verification:
    state = evaluation.state
    K, M = state.matrices.stiffness.sparse_matrix(), state.matrices.mass.sparse_matrix()
    values = state.modes.eigenvalues[0]
    wrong = 0
    for j in range(state.rigid, len(values)):
        below, above = values[j] * (1 - 2 * AGREEMENT), values[j] * (1 + 2 * AGREEMENT)
        counts = [negative_pivots(sp.csc_array(K - shift * M)) for shift in (below, above)]
        wrong += counts != [int(np.sum(values < below)), int(np.sum(values < above))]
    method = "eigenvalues counted on both sides of each frequency (Sylvester's inertia)"
    return Verification(method=method, largest_difference=AGREEMENT if not wrong else np.inf, agrees=not wrong)
