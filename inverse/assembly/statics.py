"""Rest first: the equations that static equilibrium puts on settlements, link forces and rest angles.

Everything here is a polynomial in dimensions, so that the rest position has exact derivatives by the same
rule as every matrix. Symbols: u settlement of a coordinate, W weight, p preload (tension), F load of a link,
s and c sine and cosine of a rest angle, T tension of a horizontal spring.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from inverse.assembly.algebra import ONE, Monomial, Polynomial, Row, Square, collected, product, symbol, times
from inverse.assembly.book import Book, Definition
from inverse.assembly.terms import Array
from inverse.errors import ModelError

RANK_TOLERANCE = 1e-10
"""Below this share of the greatest singular value a normalised row adds nothing to the rank."""

LARGEST_CHECK = 300
"""Up to this many coordinates it is checked that weights are carried, even where no force at rest is needed."""

LARGEST_NULL_SPACE = 1500
"""Beyond this many coordinates no basis of the unresisted motions is computed: there must be none."""


@dataclass(frozen=True, slots=True)
class Deflection:
    """A static deflection that is asked for: of a component or link, under own weight or a force on a component."""

    of: str
    case: tuple[str, float] | None = None

    @property
    def name(self) -> str:
        """The dimension that holds it: displacement along the axis, or lengthening of the link."""
        return f"{self.of}.deflection" + ("" if self.case is None else f".{self.case[0]}.{self.case[1]!r}")


def settle(book: Book, nominal: dict[str, float], sags: Sequence[Deflection]) -> None:
    """Enter settlements and link forces where a geometric term or a `sag` asks for them.

    Parameters
    ----------
    book : Book
        All bodies and links entered.
    nominal : dict
        Values of the dimensions at a generic point, to see which motions nothing resists.
    sags : sequence of Deflection
        Deflections asked for.
    """
    if book.loads or any(sag.case is None for sag in sags):
        settled = {definition.name for definition in book.definitions}
        names = {c: settlement(c, None) for c in _carried(book) if settlement(c, None) not in settled}
        pushes = [(W, row) for _, W, row in book.weight] + book.preloads
        _balance(book, names, book.stiffness, pushes, nominal)
        for load in book.loads.values():
            stretched = _applied(load.elongation, names)
            inner = (*(load.rate * term for term in stretched), *((load.preload,) if load.preload else ()))
            vanishing = (symbol(load.name), *(-load.sign * term for term in inner))
            book.definitions.append(Definition(load.name, False, (), 1.0, vanishing))
    elif book.weight and len(carried := _carried(book)) <= LARGEST_CHECK:
        rows = [square.row for square in book.stiffness if set(square.row) & set(carried)]
        pushes = [(W, row) for _, W, row in book.weight]
        _refuse_unsupported(book, unresisted(rows, carried, nominal), carried, pushes, nominal)
    for sag in sags:
        names = {c: settlement(c, sag.case) for c in book.coordinates}
        if sag.case is not None:
            push = [(Monomial(-sag.case[1]), book.components[sag.case[0]])]
            _balance(book, names, [*book.stiffness, *book.geometric], push, nominal)
        settled = {definition.name for definition in book.definitions}
        names = {c: name for c, name in names.items() if name in settled}
        row = book.components.get(sag.of) or _elongation(book, sag.of)
        total = _applied(row, names)
        vanishing = (symbol(sag.name), *(-term for term in total))
        book.definitions.append(Definition(sag.name, False, (), 1.0, vanishing))


def _elongation(book: Book, link: str) -> Row:
    """How much a link lengthens: the row of its first square."""
    return next(square.row for square in book.stiffness if square.owner == link)


def settlement(coordinate: str, case: tuple[str, float] | None) -> str:
    """Name of the dimension that holds a settlement: under own weight, or under a force."""
    return f"{coordinate}.settlement" + ("" if case is None else f".{case[0]}.{case[1]!r}")


def _applied(row: Row, names: dict[str, str]) -> Polynomial:
    """``row · u``."""
    return collected(
        term * symbol(names[coordinate]) for coordinate, entry in row.items() if coordinate in names for term in entry
    )


def _carried(book: Book) -> list[str]:
    """Coordinates that feel a weight, a preload or each other through links."""
    reached = {c for _, _, row in book.weight for c in row} | {c for _, row in book.preloads for c in row}
    rows = [set(square.row) for square in book.stiffness]
    growing = True
    while growing:
        joined = {c for row in rows if row & reached for c in row}
        growing, reached = not joined <= reached, reached | joined
    return [c for c in book.coordinates if c in reached]


def _balance(
    book: Book,
    names: dict[str, str],
    squares: Iterable[Square],
    pushes: list[tuple[Monomial, Row]],
    nominal: dict[str, float],
) -> None:
    """``K u + Σ push = 0`` on the named coordinates."""
    equations: dict[str, list[Monomial]] = {c: [] for c in names}
    known = [square for square in squares if set(square.row) & set(names)]
    for square in known:
        stretch = _applied(times(square.static or square.weight, square.row), names)
        for c, entry in square.row.items():
            equations[c] += product(entry, stretch)
    for push, row in pushes:
        for c in set(row) & set(names):
            equations[c] += [push * term for term in row[c]]
    free = unresisted([square.row for square in known], list(names), nominal)
    _refuse_unsupported(book, free, list(names), pushes, nominal)
    # A settlement along a motion that nothing resists is set to zero; forces do not depend on it.
    for c, one in zip(names, free, strict=True):
        for other, two in zip(names, free, strict=True):
            if weight := float(one @ two):
                equations[c].append(weight * symbol(names[other]))
    for c, terms in equations.items():
        book.definitions.append(Definition(names[c], False, (), 1.0, collected(terms)))


def unresisted(rows: Sequence[Row], coordinates: list[str], nominal: dict[str, float]) -> Array:
    """Orthonormal basis (columns) of the motions that stretch no row, at the nominal point."""
    if len(coordinates) > LARGEST_NULL_SPACE:
        return np.zeros((len(coordinates), 0))
    table = np.array([[_number(row.get(c, ()), nominal) for c in coordinates] for row in rows], float).reshape(
        len(rows), len(coordinates)
    )
    scale = np.linalg.norm(table, axis=1, keepdims=True)
    table = table / np.where(scale > 0, scale, 1.0)
    columns = np.linalg.norm(table, axis=0)
    columns[columns == 0] = 1.0
    _, s, v = np.linalg.svd(table / columns, full_matrices=True)
    rank = int(np.sum(s > RANK_TOLERANCE * max(s, default=1.0)))
    basis, _ = np.linalg.qr((v[rank:] / columns).T)
    return np.asarray(basis)


def _refuse_unsupported(
    book: Book,
    free: Array,
    coordinates: list[str],
    pushes: list[tuple[Monomial, Row]],
    nominal: dict[str, float],
) -> None:
    total = np.zeros(len(coordinates))
    largest = np.zeros(len(coordinates))
    for push, row in pushes:
        part = np.array([_number(times(push, row).get(c, ()), nominal) for c in coordinates])
        total, largest = total + part, np.maximum(largest, abs(part))
    if free.size and np.linalg.norm(free.T @ total) > 1e-9 * np.linalg.norm(largest):
        worst = coordinates[int(np.argmax(np.abs(free @ (free.T @ total))))]
        raise ModelError(
            f"nothing carries the load on `{worst}`: the assembly does not rest in equilibrium; add a link to ground "
            'that resists this motion, or set gravity = "0 m/s^2" if it floats'
        )


def _number(terms: Polynomial, nominal: dict[str, float]) -> float:
    return sum(
        term.coefficient * float(np.prod([nominal[name] ** power for name, power in term.powers])) for term in terms
    )


def lean(book: Book) -> None:
    """Rest angles of pendulums that preloaded springs move, and what tension does at an angle.

    Moment about each pivot: ``s Σ m g L + Σ T ∂e/∂θ = 0`` with ``T = p + k e`` and ``e`` the sum of
    lever · sine over the hanging lengths and of the slides of sliding masses.
    """
    segments = {segment.pendulum: segment for chain, _ in book.hangings.values() for segment in chain if segment.sine}
    moments: dict[str, list[Monomial]] = {name: [] for name in segments}
    slides: dict[str, list[Monomial]] = {}
    for segment, moment in book.hanging:
        if segment.pendulum in moments:
            moments[segment.pendulum] += [moment * s for s in segment.sine]
    for pull in book.pulls:
        T = symbol(pull.name)
        stretch = [sign * lever * s for segment, lever, sign in pull.lever for s in segment.sine]
        stretch += [sign * symbol(settlement(c, None)) for c, sign in pull.slides]
        tension = (T, *(-pull.rate * e for e in stretch), *((-pull.preload,) if pull.preload else ()))
        book.definitions.append(Definition(pull.name, False, (), 1.0, tension))
        for segment, lever, sign in pull.lever:
            moments[segment.pendulum].append(sign * T * lever * segment.cosine)
            for s in segment.sine:
                book.geometric.append(Square(pull.name, "", -sign * T * lever * s, segment.angle))
        for c, sign in pull.slides:
            slides.setdefault(c, []).append(sign * T)
    for name, terms in moments.items():
        sine, cosine = f"{name}.rest_sine", f"{name}.rest_cosine"
        book.definitions.append(Definition(sine, False, (), 1.0, collected(terms)))
        unit = (symbol(sine) ** 2, symbol(cosine) ** 2, -ONE)
        book.definitions.append(Definition(cosine, True, (ONE,), 1.0, unit))
    for c, terms in slides.items():
        book.definitions.append(Definition(settlement(c, None), False, (), 1.0, collected(terms)))
