"""What objectives see of a batch of builds, and the way back from what they see to base dimensions.

For every quantity of `objectives.state` there is a value and a pullback: derivatives with respect to the quantity
become derivatives with respect to eigenvalues, shapes, forms, monomials, dimensions or variables, which
`Slopes` collects and turns into one Jacobian.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from inverse.assembly.statics import Deflection
from inverse.assembly.terms import Array, IntArray, Sums
from inverse.matrices.stack import Matrices
from inverse.modal.sensitivity import (
    clustered,
    pull_eigenvalues,
    pull_form,
    pull_owned,
    pull_shapes,
    to_dimensions,
)
from inverse.modal.solution import ModalSolution, solve_modes
from objectives.identity import Identification, identify
from objectives.state import (
    Changes,
    Displacement,
    Eigenvalues,
    Energy,
    FrozenDisplacement,
    Gradient,
    Like,
    MassBlock,
    MassForm,
    ModeReference,
    OwnerForm,
    PartCost,
    PartMass,
    Quantity,
    ReleasedAmplitudes,
    Sag,
    StiffnessForm,
)


@dataclass
class BuildState:
    """A batch of builds at rest, satisfying `objectives.State`.

    Parameters
    ----------
    matrices : Matrices
    likes : sequence of Like
        All modes of the study that are named by shape, so that two of them get different modes.
    wanted : int, optional
        Oscillating modes needed; None for all.
    rigid : int, optional
        Number of rigid modes where it is known.
    changes : ndarray, shape (B, P), optional
        Relative changes of the variables from their start values.
    given : ModalSolution, optional
        Modes computed elsewhere, to be used instead.
    """

    matrices: Matrices
    likes: Sequence[Like] = ()
    wanted: int | None = None
    known_rigid: int | None = None
    changes: Array | None = None
    given: ModalSolution | None = None
    _known: dict[Quantity, Array] = field(default_factory=dict, init=False)

    @property
    def builds(self) -> int:
        """Number of builds."""
        return self.matrices.point.builds

    @cached_property
    def modes(self) -> ModalSolution:
        """The modes, those of one frequency turned towards the shapes asked for."""
        modes = self.given or solve_modes(self.matrices, self.wanted, self.known_rigid)
        return self._turned(modes) if self.likes else modes

    @property
    def rigid(self) -> int:
        """Number of rigid modes."""
        return self.modes.rigid

    @cached_property
    def identification(self) -> Identification:
        """Which mode each shape asked for is."""
        return identify(list(self.likes), self)

    def index(self, mode: ModeReference) -> IntArray:
        """Position of a mode among all, -1 where there is none."""
        if isinstance(mode, Like):
            return self.identification.index[mode]
        position = self.rigid + mode - 1
        there = 0 < mode <= self.modes.eigenvalues.shape[1] - self.rigid
        return np.full(self.builds, position if there else -1, np.intp)

    def __getitem__(self, quantity: Quantity) -> Array:
        """Value of a quantity."""
        if quantity not in self._known:
            self._known[quantity] = self._value(quantity)
        return self._known[quantity]

    def _value(self, quantity: Quantity) -> Array:
        matrices = self.matrices
        if isinstance(quantity, MassBlock):
            parts = self._owned_parts(quantity.components)
            return np.asarray(np.sum([self._owned_block(*part) for part in parts], axis=0))
        modes = self.modes
        match quantity:
            case Eigenvalues():
                return modes.eigenvalues
            case Displacement(component) | FrozenDisplacement(component):
                return (self._rows((component,)) @ modes.shapes)[:, 0]
            case Energy(owner):
                chosen = matrices.owned(owner)
                E = matrices.mass.strains(modes.shapes)[:, chosen]
                return np.asarray(np.einsum("bt,btj->bj", matrices.mass.weights[:, chosen], E**2))
            case StiffnessForm():
                return modes.eigenvalues[:, :, None] * np.eye(modes.eigenvalues.shape[1])
            case MassForm():
                return np.broadcast_to(np.eye(modes.shapes.shape[2]), (self.builds,) + (modes.shapes.shape[2],) * 2)
            case OwnerForm(owner):
                chosen = matrices.owned(owner)
                E = matrices.mass.strains(modes.shapes)[:, chosen]
                return np.swapaxes(E * matrices.mass.weights[:, chosen, None], 1, 2) @ E
            case ReleasedAmplitudes(component):
                return self._released(component)
            case Sag():
                return self._sag(quantity)
            case PartMass(part):
                return matrices.model.part_mass.values(matrices.a)[:, matrices.model.parts.index(part)]
            case PartCost(part):
                return matrices.model.part_cost.values(matrices.a)[:, matrices.model.parts.index(part)]
            case Changes():
                return np.zeros((self.builds, 0)) if self.changes is None else self.changes

    def _rows(self, components: tuple[str, ...]) -> Array:
        return self.matrices.component_rows(components)

    def _selection(self, components: tuple[str, ...]) -> Array:
        """Unit motions of the components in the coordinates, shape (B, n, s)."""
        rows = self._rows(components)
        return np.swapaxes(np.divide(1.0, rows, out=np.zeros_like(rows), where=rows != 0), 1, 2)

    def _owned_parts(self, components: tuple[str, ...]) -> list[tuple[IntArray, Array]]:
        """Per body of some components, its mass squares and the unit motions they see, (B, n, s).

        Geared rotors share a coordinate: each one's own squares see the coordinate as its own rotation alone.
        """
        places = self.matrices.model.components
        motions, parts = self._selection(components), []
        for body in dict.fromkeys(component.rpartition(".")[0] for component in components):
            own = [i for i, component in enumerate(components) if component.rpartition(".")[0] == body]
            taken = {coordinate for i in own for coordinate, _ in places[components[i]]}
            seen = motions.copy()
            for i, component in enumerate(components):
                if i not in own and taken & {coordinate for coordinate, _ in places[component]}:
                    seen[:, :, i] = 0.0
            parts.append((self.matrices.owned(body), seen))
        return parts

    def _owned_block(self, chosen: IntArray, motions: Array) -> Array:
        E = self.matrices.mass.rows[:, chosen] @ motions
        return np.asarray(np.swapaxes(E * self.matrices.mass.weights[:, chosen, None], 1, 2) @ E)

    def _released(self, component: str) -> Array:
        q0 = self._selection((component,))
        return (np.swapaxes(self.modes.shapes, 1, 2) @ self._mass_times(q0))[:, :, 0]

    def _mass_times(self, q: Array) -> Array:
        mass = self.matrices.mass
        return np.asarray(np.swapaxes(mass.rows, 1, 2) @ (mass.weights[:, :, None] * (mass.rows @ q)))

    def _sag(self, quantity: Sag) -> Array:
        signs = sag_sign(self.matrices, quantity)
        return np.asarray(signs * self.matrices.point.values[:, self._deflection(quantity)])

    def _deflection(self, quantity: Sag) -> int:
        return self.matrices.model.names.index(deflection(quantity).name)

    def _turned(self, modes: ModalSolution) -> ModalSolution:
        """Within each cluster, turn the shapes so that they follow the shapes asked for, best first."""
        shapes = modes.shapes.copy()
        for b in range(self.builds):
            if not modes.stable[b]:
                continue
            same = clustered(modes.eigenvalues[b, modes.rigid :])
            for members in {tuple(np.flatnonzero(row)) for row in same if row.sum() > 1}:
                columns = np.array(members) + modes.rigid
                shapes[b][:, columns] = self._towards(b, shapes[b][:, columns])
        return ModalSolution(modes.eigenvalues, shapes, modes.rigid, modes.stable)

    def _towards(self, b: int, cluster: Array) -> Array:
        """Rotate an M-orthonormal basis: its first vectors follow the projections of the wanted shapes."""
        wanted = []
        for like in self.likes:
            a = np.array([value for _, value in like.pattern])
            rows = self._rows(like.components)[b] @ cluster
            W = self[MassBlock(like.components)][b]
            wanted.append(rows.T @ W @ a)
        size = [float(np.linalg.norm(w)) for w in wanted]
        order = np.argsort(size)[::-1]
        frame = np.array([wanted[i] for i in order if size[i] > 1e-12] or np.eye(cluster.shape[1]))
        q, r = np.linalg.qr(np.hstack([frame.T, np.eye(cluster.shape[1])]))
        return np.asarray(cluster @ (q[:, : cluster.shape[1]] * np.where(np.diag(r) < 0, -1.0, 1.0)))


def deflection(quantity: Sag) -> Deflection:
    """The static case behind a sag."""
    return Deflection(quantity.of, None if quantity.force is None else (quantity.of, quantity.force))


def sag_sign(matrices: Matrices, quantity: Sag) -> Array:
    """+1 or −1 so that a sag is positive: downward, along the force, or the size of a link's change."""
    place = matrices.model.names.index(deflection(quantity).name)
    if quantity.force is None and quantity.of in matrices.model.components:
        return np.full(matrices.point.builds, -1.0)
    return np.where(matrices.point.values[:, place] < 0, -1.0, 1.0)


class Slopes:
    """Collects derivatives of ``k`` values with respect to quantities of one state."""

    def __init__(self, state: BuildState, k: int) -> None:
        """Start with nothing."""
        self.state, self.k = state, k
        builds, model = state.builds, state.matrices.model
        self.by_monomial = np.zeros((builds, k, len(model.monomials)))
        self.by_dimension = np.zeros((builds, k, len(model.names)))
        self.by_change: Array | None = None
        self.by_eigenvalue: Array | None = None
        self.by_shape: Array | None = None

    def add(self, gradient: Gradient, first: int = 0) -> None:
        """Add the gradient of values ``first, first + 1, …``."""
        for quantity, cotangent in gradient.items():
            self._add(quantity, cotangent, slice(first, first + cotangent.shape[1]))

    def _add(self, quantity: Quantity, cotangent: Array, at: slice) -> None:
        state, matrices, modes = self.state, self.state.matrices, self.state.modes
        out = self.by_monomial[:, at]
        match quantity:
            case Eigenvalues():
                if self.by_eigenvalue is None:
                    self.by_eigenvalue = np.zeros((state.builds, self.k, cotangent.shape[2]))
                self.by_eigenvalue[:, at] += cotangent
            case Displacement(component):
                rows = state._rows((component,))
                self._through_shapes(at, rows[:, :, :, None] * cotangent[:, :, None, :])
                self._through_row(component, cotangent, out)
            case FrozenDisplacement(component):
                self._through_row(component, cotangent, out)
            case Energy(owner):
                self._through_shapes(at, pull_owned(matrices, modes, matrices.owned(owner), cotangent, out))
            case MassBlock(components):
                for chosen, motions in state._owned_parts(components):
                    pull_form(matrices.mass, motions, cotangent, out, chosen)
                    self._through_block(components, state._owned_block(chosen, motions), cotangent, out)
            case StiffnessForm():
                pull_form(matrices.stiffness, modes.shapes, cotangent, out)
            case MassForm():
                pull_form(matrices.mass, modes.shapes, cotangent, out)
            case OwnerForm(owner):
                pull_form(matrices.mass, modes.shapes, cotangent, out, matrices.owned(owner))
            case ReleasedAmplitudes(component):
                self._through_release(component, cotangent, out)
            case Sag():
                self.by_dimension[:, at, state._deflection(quantity)] += (
                    sag_sign(matrices, quantity)[:, None] * cotangent
                )
            case PartMass(part):
                self._through_sum(matrices.model.part_mass, part, cotangent, out)
            case PartCost(part):
                self._through_sum(matrices.model.part_cost, part, cotangent, out)
            case Changes():
                if self.by_change is None:
                    self.by_change = np.zeros((state.builds, self.k, cotangent.shape[2]))
                self.by_change[:, at] += cotangent

    def _through_shapes(self, at: slice, cotangent: Array) -> None:
        if self.by_shape is None:
            n, r = self.state.modes.shapes.shape[1:]
            self.by_shape = np.zeros((self.state.builds, self.k, n, r))
        self.by_shape[:, at] += cotangent

    def _through_row(self, component: str, cotangent: Array, out: Array) -> None:
        for coordinate, monomial in self.state.matrices.model.components[component]:
            out[:, :, monomial] += np.einsum("bkj,bj->bk", cotangent, self.state.modes.shapes[:, coordinate])

    def _through_block(self, components: tuple[str, ...], block: Array, cotangent: Array, out: Array) -> None:
        """A geared component scales its row and column of the block by 1/ratio each."""
        for i, component in enumerate(components):
            for _, monomial in self.state.matrices.model.components[component]:
                both = cotangent[:, :, i] + cotangent[:, :, :, i]
                slope = np.einsum("bks,bs->bk", both, block[:, i])
                out[:, :, monomial] -= slope / self.state.matrices.a[:, [monomial]]

    def _through_release(self, component: str, cotangent: Array, out: Array) -> None:
        """A geared component moves its mate by 1/ratio."""
        amplitudes = self.state[ReleasedAmplitudes(component)]
        for _, monomial in self.state.matrices.model.components[component]:
            slope = np.einsum("bkj,bj->bk", cotangent, amplitudes)
            out[:, :, monomial] -= slope / self.state.matrices.a[:, [monomial]]

    def _through_sum(self, sums: Sums, part: str, cotangent: Array, out: Array) -> None:
        model = self.state.matrices.model
        own = sums.term[sums.place == model.parts.index(part)]
        for monomial in own:
            out[:, :, monomial] += cotangent

    def over_dimensions(self) -> Array:
        """Derivatives over base dimensions in local coordinates, shape (B, k, D)."""
        matrices = self.state.matrices
        if self.by_eigenvalue is not None:
            pull_eigenvalues(matrices, self.state.modes, np.nan_to_num(self.by_eigenvalue), self.by_monomial)
            self.by_eigenvalue = None
        if self.by_shape is not None:
            pull_shapes(matrices, self.state.modes, np.nan_to_num(self.by_shape), self.by_monomial)
            self.by_shape = None
        return to_dimensions(matrices, np.nan_to_num(self.by_monomial), self.by_dimension)
