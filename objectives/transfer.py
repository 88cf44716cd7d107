"""Energy and amplitude handed from one body to another.

Symbols
-------
c_j      modal amplitudes of the release: ``from`` displaced by one unit, all else at rest; ``E = Σ c²``
q_j(t)   ``c_j e^{iω_j t}``
S        ``Φᵀ M_b Φ``, the mass terms of the receiving owner in the modes
s(t)     ``qᴴ S q / E``, the owner's share of the energy: in [0, 1], and all shares sum to one
δ_j      ``ω_j − ω_0`` against the mode that has most of the energy: s holds differences of frequencies only, and
         phases that turn no faster than they must keep their digits for longer

Derivatives follow the motion, not single modes. With ``X = M̂⁻¹K̂`` in frozen shapes the change of ``g(X)c`` is
``dq_i = Σ_j g[λ_i, λ_j] (dK̂_ij − λ_j dM̂_ij) c_j`` with divided differences of ``g(λ) = e^{i√λ t}`` [1]_. In closed
form these are ``i t e^{i(ω_i + ω_j)t/2} sinc((ω_i − ω_j)t/2)/(ω_i + ω_j)``: nothing is divided by a vanishing gap.
Rigid modes stay rigid, so that nothing moves among them.

References
----------
.. [1] Ju. L. Daletskii and S. G. Krein, 1951; N. J. Higham, Functions of Matrices, SIAM 2008, theorem 3.11
   (from memory).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray

from objectives.base import EDGE_SLACK, Objective, Pursuit, Target, scaled
from objectives.identity import clusters
from objectives.state import (
    Array,
    Eigenvalues,
    FrozenDisplacement,
    Gradient,
    IntArray,
    MassForm,
    Measured,
    OwnerForm,
    ReleasedAmplitudes,
    State,
    StiffnessForm,
)

TURN = 2 * np.pi

EXCITED = 1e-6
"""Share of ``Σ c²`` from which a mode counts as excited."""

FIRST = 0.9
"""The first maximum that reaches this share of the greatest is the transfer."""

REPORTED = 0.8
"""Maxima from this share of the greatest are reported."""

SWITCH = 0.02
"""A maximum this close to the threshold may become, or cease to be, the first."""

HEARD = 1e-12
"""Modes with less of the energy leave no mark on where maxima are looked for."""

STILL = 1e-12
"""A share that varies by less has no maxima but those of rounding."""

PER_CYCLE = 16
"""Samples over the fastest cycle when maxima are looked for."""

MOST = 2**20
"""Samples of one build: 65536 of the fastest cycles. A longer horizon is searched so far only."""

BUDGET = 2**20
"""Numbers held at a time while sampling."""

FINE = 64
"""Samples in an interval that is searched for the greatest amplitude without being halved before."""

INTERVALS = 4096
"""Intervals kept in that search; only a motion that hardly beats has more, and then all are nearly as good."""


@dataclass(frozen=True, slots=True)
class Exchange:
    """Releases watched at an owner: ``ω`` and ``c`` (..., r), ``S`` (..., r, r), of one build or a batch.

    A build without stable rest has zeros: nothing is released.
    """

    omega: Array
    c: Array
    S: Array

    @classmethod
    def of(cls, state: State, source: str, target: str | None = None) -> Exchange:
        """All builds of a state, released at a component; without a `target` the whole is watched."""
        lam, c = state[Eigenvalues()], state[ReleasedAmplitudes(source)]
        S = np.broadcast_to(np.eye(c.shape[1]), (*c.shape, c.shape[1])) if target is None else state[OwnerForm(target)]
        sound = np.all(lam >= 0, axis=1)[:, None]
        omega = np.sqrt(np.where(sound, lam, 0.0))
        return cls(omega, np.where(sound, c, 0.0), np.where(sound[:, None], S, 0.0))

    def take(self, builds: IntArray) -> Exchange:
        """Some of the builds, in any order and number."""
        return Exchange(self.omega[builds], self.c[builds], self.S[builds])

    @property
    def sound(self) -> NDArray[np.bool_]:
        """Which builds are released, shape (...)."""
        return np.asarray(self.c.any(axis=-1))

    @property
    def energy(self) -> Array:
        """``Σ c²``, shape (...); one where nothing is released."""
        return np.where(self.sound, np.sum(self.c**2, axis=-1), 1.0)

    @property
    def offset(self) -> Array:
        """``δ``, shape (..., r)."""
        most = np.argmax(self.c**2, axis=-1)[..., None]
        return np.asarray(self.omega - np.take_along_axis(self.omega, most, axis=-1))

    def fastest(self) -> Array:
        """The greatest difference of circular frequencies that the shares hold, shape (...)."""
        heard = self.c**2 > HEARD * self.energy[..., None]
        span = np.where(heard, self.omega, 0.0).max(axis=-1) - np.where(heard, self.omega, np.inf).min(axis=-1)
        return np.where(self.sound, span, 0.0)

    def share(self, t: Array) -> tuple[Array, Array]:
        """``s`` and ``ds/dt`` at instants (..., T)."""
        q, Sq = self._turned(t)
        dq = 1j * self.offset[..., None, :] * q
        E = self.energy[..., None]
        return np.sum(Sq * q, axis=-1).real / E, 2 * np.sum(Sq * dq, axis=-1).real / E

    def bend(self, t: Array) -> Array:
        """``d²s/dt²`` at instants (..., T)."""
        q, Sq = self._turned(t)
        delta = self.offset[..., None, :]
        dq = 1j * delta * q
        bent = np.sum((dq.conj() @ self.S) * dq - Sq * delta**2 * q, axis=-1)
        return np.asarray(2 * bent.real / self.energy[..., None])

    def _turned(self, t: Array) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
        q = self.c[..., None, :] * np.exp(1j * t[..., None] * self.offset[..., None, :])
        return q, q.conj() @ self.S


@dataclass(frozen=True, slots=True)
class Beat:
    """Longest beat period among excited modes (B,), NaN with fewer than two, and the positions of its modes."""

    period: Array
    low: IntArray
    high: IntArray

    def slopes(self, exchange: Exchange) -> Array:
        """Derivatives of the period over ``λ``, shape (B, r)."""
        rows, slopes = np.arange(len(self.period)), np.zeros_like(exchange.omega)
        factor = np.nan_to_num(self.period**2) / (2 * TURN)
        for place, sign in ((self.low, 1.0), (self.high, -1.0)):
            omega = exchange.omega[rows, place]
            slopes[rows, place] += np.divide(sign * factor, omega, out=np.zeros_like(omega), where=omega > 0)
        return slopes


def longest_beat(exchange: Exchange) -> Beat:
    """Of a batch. Where modes share a frequency their energies count together, for single ones are arbitrary there."""
    omega, c2, cluster = exchange.omega, exchange.c**2, clusters(exchange.omega)
    builds, modes = omega.shape
    rows, position = np.arange(builds), np.arange(modes)
    together = np.zeros_like(c2)
    np.add.at(together, (rows[:, None], cluster), c2)
    excited = np.take_along_axis(together, cluster, axis=1) > EXCITED * exchange.energy[:, None]
    before = np.maximum.accumulate(np.where(excited, position, -1), axis=1)
    before = np.concatenate([np.full((builds, 1), -1), before[:, :-1]], axis=1)
    other = excited & (before >= 0)
    before = np.maximum(before, 0)
    other &= np.take_along_axis(cluster, before, axis=1) != cluster
    gap = np.where(other, omega - np.take_along_axis(omega, before, axis=1), np.inf)
    high = gap.argmin(axis=1)
    least = gap[rows, high]
    period = np.divide(TURN, least, out=np.full_like(least, np.nan), where=np.isfinite(least))
    return Beat(period, before[rows, high], high)


@dataclass(frozen=True, slots=True, kw_only=True)
class Maxima:
    """Maxima of a share within the horizon, of a batch of builds, and the one that counts in each.

    Attributes
    ----------
    time, share : ndarray, shape (B,)
        Of the maximum that counts. NaN with fewer than two excited modes; the time is NaN also where nothing is
        handed over, or where no maximum reaches the completeness asked for.
    at_end : ndarray of bool, shape (B,)
        Nothing inside the horizon counts, but an end of it does.
    near_switch : ndarray of bool, shape (B,)
        A small change would make another maximum count.
    horizon, greatest, greatest_time : ndarray, shape (B,)
        How far was searched, and the greatest share so far.
    build, times, shares : ndarray, shape (P,)
        All maxima from `REPORTED` of the greatest on, by build and time.
    """

    time: Array
    share: Array
    at_end: NDArray[np.bool_]
    near_switch: NDArray[np.bool_]
    horizon: Array
    greatest: Array
    greatest_time: Array
    build: IntArray
    times: Array
    shares: Array

    def of(self, build: int) -> tuple[Array, Array]:
        """Times and shares of the maxima of one build."""
        own = self.build == build
        return self.times[own], self.shares[own]


def maxima(
    state: State, source: str, target: str, horizon: float | None = None, completeness: float | None = None
) -> Maxima:
    """Maxima of the share of `target` after a release at `source`.

    The one that counts is the first that reaches `FIRST` of the greatest share within the horizon and, where it
    is given, `completeness` too; an end of the horizon only if no maximum inside it does.

    Parameters
    ----------
    state : State
        The builds.
    source, target : str
        A component, and the owner of mass terms.
    horizon : float, optional
        How far to look [s]; by default the longest beat period among excited modes.
    completeness : float, optional
        Share that must be reached.
    """
    exchange = Exchange.of(state, source, target)
    reach = _reach(exchange, horizon)
    build, times, shares = _peaks(exchange, reach)
    ends = np.stack([np.zeros_like(reach), reach], axis=1)
    at_ends = np.where(np.isnan(ends).any(axis=1, keepdims=True), np.nan, exchange.share(np.nan_to_num(ends))[0])
    greatest, greatest_time = at_ends.max(axis=1), np.where(at_ends[:, 0] > at_ends[:, 1], 0.0, reach)
    np.maximum.at(greatest, build, shares)
    peak = shares >= greatest[build]
    greatest_time[build[peak]] = times[peak]
    kept = shares >= REPORTED * greatest[build]
    build, times, shares = build[kept], times[kept], shares[kept]

    level = np.maximum(FIRST * greatest, -np.inf if completeness is None else completeness) * (1 - EDGE_SLACK)
    # The end before the beginning, at which nothing has been handed over yet; NaN levels are reached by neither.
    which = np.where(at_ends[:, 1] >= level, 1, 0)
    rows = np.arange(len(reach))
    at_end = (at_ends[rows, which] >= level) & (greatest > STILL)
    time = np.where(at_end, ends[rows, which], np.nan)
    share = np.where(at_end, at_ends[rows, which], greatest)
    enough = np.flatnonzero(shares >= level[build])
    inside, first = np.unique(build[enough], return_index=True)
    time[inside], share[inside], at_end[inside] = times[enough[first]], shares[enough[first]], False
    doubtful = (np.abs(shares - level[build]) < SWITCH * greatest[build]) & (at_end[build] | (times <= time[build]))
    return Maxima(
        time=time,
        share=share,
        at_end=at_end,
        near_switch=np.bincount(build[doubtful], minlength=len(time)) > 0,
        horizon=reach,
        greatest=greatest,
        greatest_time=greatest_time,
        build=build,
        times=times,
        shares=shares,
    )


def _reach(exchange: Exchange, horizon: float | None) -> Array:
    """How far is searched, (B,): the horizon, but no more than `MOST` samples; NaN with fewer than two tones."""
    period, fastest = longest_beat(exchange).period, exchange.fastest()
    farthest = np.divide(TURN * MOST / PER_CYCLE, fastest, out=np.full_like(period, np.inf), where=fastest > 0)
    return np.where(np.isnan(period), np.nan, np.minimum(period if horizon is None else horizon, farthest))


def _peaks(exchange: Exchange, horizon: Array) -> tuple[IntArray, Array, Array]:
    """Builds, times and shares of all maxima that may be reported, in order."""
    count = np.ceil(np.nan_to_num(horizon) * exchange.fastest() / TURN * PER_CYCLE).astype(np.intp) + PER_CYCLE
    # Builds are sampled together where they need about as many samples.
    count = np.where(np.isfinite(horizon), 2 ** np.ceil(np.log2(count)).astype(np.intp), 0)
    highest, lowest = np.zeros_like(horizon), np.ones_like(horizon)
    found: list[tuple[NDArray[Any], ...]] = [(np.empty(0, np.intp), np.empty(0), np.empty(0), np.empty(0))]
    for builds, t in _samples(horizon, count, exchange.c.shape[1]):
        s, slope = exchange.take(builds).share(t)
        highest[builds] = np.maximum(highest[builds], s.max(axis=1))
        lowest[builds] = np.minimum(lowest[builds], s.min(axis=1))
        row, k = np.nonzero((slope[:, :-1] > 0) & (slope[:, 1:] <= 0))
        found.append((builds[row], t[row, k], t[row, k + 1], np.maximum(s[row, k], s[row, k + 1])))
    build, low, high, level = (np.concatenate(column) for column in zip(*found, strict=True))
    # Between samples a share rises by a hundredth at most: 16 of them to the fastest cycle.
    worth = (level >= 0.95 * REPORTED * highest[build]) & (highest[build] - lowest[build] > STILL)
    build, low, high = build[worth], low[worth], high[worth]
    times, shares = np.empty_like(low), np.empty_like(low)
    piece = max(1, BUDGET // exchange.c.shape[1] ** 2)
    for i in range(0, len(build), piece):
        at = slice(i, i + piece)
        times[at], shares[at] = _polished(exchange.take(build[at]), low[at], high[at])
    order = np.lexsort((times, build))
    return build[order], times[order], shares[order]


def _samples(horizon: Array, count: IntArray, modes: int) -> Iterator[tuple[IntArray, Array]]:
    """Builds (b,) and instants (b, T) that together sample every horizon; pieces share their end points."""
    for n in np.unique(count[count > 0]).tolist():
        builds = np.flatnonzero(count == n)
        piece = min(n, max(PER_CYCLE, BUDGET // modes))
        group = max(1, BUDGET // (piece * modes))
        for i in range(0, len(builds), group):
            some = builds[i : i + group]
            for k in range(0, n, piece):
                yield some, horizon[some, None] / n * np.arange(k, min(k + piece, n) + 1)


def _polished(exchange: Exchange, low: Array, high: Array) -> tuple[Array, Array]:
    """Maxima between brackets (P,) and their shares: Newton on ``ds/dt``, kept in the bracket by bisection."""
    t = (low + high) / 2
    for _ in range(60):
        slope, bend = exchange.share(t[:, None])[1][:, 0], exchange.bend(t[:, None])[:, 0]
        low, high = np.where(slope > 0, t, low), np.where(slope > 0, high, t)
        newton = t - np.divide(slope, bend, out=np.zeros_like(t), where=bend < 0)
        inside = (newton >= low) & (newton <= high) & (bend < 0)
        step = np.where(inside, newton, (low + high) / 2) - t
        t = t + step
        if np.all(np.abs(step) <= 1e-14 * np.abs(t)):
            break
    return t, exchange.share(t[:, None])[0][:, 0]


def share_slopes(state: State, source: str, target: str, t: Array) -> tuple[Measured, Measured, Array]:
    """``s`` and ``ds/dt`` at one instant per build, (B, 1) each with gradients at fixed time; and ``d²s/dt²`` (B,)."""
    exchange, t = Exchange.of(state, source, target), np.nan_to_num(t)[:, None]
    lam, c, S, delta, E = exchange.omega**2, exchange.c, exchange.S, exchange.offset, exchange.energy
    turn = np.exp(1j * delta * t)
    q, dq = c * turn, 1j * delta * c * turn
    Sq, Sdq = (np.einsum("bij,bj->bi", S, x).conj() for x in (q, dq))
    g, dg = _divided_differences(exchange.omega, delta, t[:, :, None])

    def measured(value: Array, by_X: Array, by_S: Array, by_c: Array) -> Measured:
        """With ``E = cᵀ M̂ c`` the whole changes too."""
        K = by_X * c[:, None, :]
        M = -K * lam[:, None, :] - value[:, None, None] * c[:, :, None] * c[:, None, :]
        parts: Gradient = {
            StiffnessForm(): K,
            MassForm(): M,
            OwnerForm(target): by_S,
            ReleasedAmplitudes(source): by_c - 2 * value[:, None] * c,
        }
        gradient: Gradient = {
            quantity: (part / E.reshape(-1, *[1] * (part.ndim - 1)))[:, None] for quantity, part in parts.items()
        }
        return Measured(np.where(exchange.sound, value, np.nan)[:, None], gradient)

    cross = (q.conj()[:, :, None] * dq[:, None, :]).real
    s = measured(
        np.sum(Sq * q, axis=1).real / E,
        2 * (Sq[:, :, None] * g).real,
        (q.conj()[:, :, None] * q[:, None, :]).real,
        2 * (Sq * turn).real,
    )
    slope = measured(
        2 * np.sum(Sq * dq, axis=1).real / E,
        2 * (Sdq[:, :, None] * g + Sq[:, :, None] * dg).real,
        cross + np.swapaxes(cross, 1, 2),
        2 * (Sdq * turn + Sq * 1j * delta * turn).real,
    )
    return s, slope, exchange.bend(t)[:, 0]


def _divided_differences(omega: Array, delta: Array, t: Array) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
    """``g[λ_i, λ_j]`` of ``e^{iδt}`` and its time derivative, (B, r, r); zero between rigid modes."""
    total = omega[:, :, None] + omega[:, None, :]
    mean, half = ((delta[:, :, None] + sign * delta[:, None, :]) / 2 for sign in (1.0, -1.0))
    turn, sinc = np.exp(1j * mean * t), np.sinc(half * t / np.pi)
    turn = np.divide(turn, total, out=np.zeros_like(turn), where=total > 0)
    return 1j * t * turn * sinc, turn * (1j * np.cos(half * t) - mean * t * sinc)


def _times(m: Measured, factor: Array) -> Gradient:
    """The gradient of one column, each build's times a factor (B,)."""
    return {q: g * factor.reshape(-1, *[1] * (g.ndim - 1)) for q, g in m.gradient.items()}


@dataclass(frozen=True, slots=True, kw_only=True)
class TransferTime(Objective):
    """When the share of `target` has its first great maximum after a release at `source` [s].

    The time is that of the first maximum which reaches `FIRST` of the greatest share within the horizon, by default the
    longest beat period among excited modes. With `completeness` it must reach that share too: maxima that do not are
    passed over, and if none does there is no time.
    """

    kind: ClassVar[str] = "transfer time"
    unit: ClassVar[str] = "s"

    source: str
    target: str
    horizon: float | None = None
    completeness: float | None = None

    @property
    def modes_needed(self) -> int | None:
        """All: a release excites every mode."""
        return None

    def maxima(self, state: State) -> Maxima:
        """What is judged, and what else might have been."""
        return maxima(state, self.source, self.target, self.horizon, self.completeness)

    def measure(self, state: State) -> Measured:
        """The time; its slope from ``ds/dt = 0`` by the implicit function theorem."""
        found = self.maxima(state)
        _, slope, bend = share_slopes(state, self.source, self.target, found.time)
        inside = ~found.at_end & (bend < 0)
        factor = np.divide(-1.0, bend, out=np.zeros_like(bend), where=inside)
        gradient = _times(slope, factor) | _with_horizon(state, self, found, np.ones_like(bend))
        return Measured(found.time[:, None], gradient)

    def pursue(self, state: State, choice: IntArray | None = None) -> Pursuit:
        """A maximum at the asked time, and a great one: ``ds/dt = 0`` and ``s`` at least `FIRST` of the greatest there.

        With `completeness`, at least that too.
        """
        if not isinstance(self.requirement, Target):
            return Objective.pursue(self, state)
        T, within = self.requirement.value, self.requirement.within
        s, slope, _ = share_slopes(state, self.source, self.target, np.full(state.builds, T))
        # A full exchange sin²(πt/2T) bends by π²/2T² at its maximum.
        bend = np.pi**2 / (2 * T**2)
        found = self.maxima(state)
        top, _, _ = share_slopes(state, self.source, self.target, found.greatest_time)
        none = np.isnan(found.greatest)
        enough = FIRST * np.where(none, 1.0, found.greatest)
        lost = _times(top, np.where(none, 0.0, -FIRST))
        room = Measured(s.values - enough[:, None], {q: g + lost[q] for q, g in s.gradient.items()})
        if self.completeness is not None:
            complete = scaled(s, 1.0, self.completeness)
            room = Measured(
                np.concatenate([room.values, complete.values], axis=1),
                {q: np.concatenate([g, complete.gradient[q]], axis=1) for q, g in room.gradient.items()},
            )
        return Pursuit(scaled(slope, -1 / (bend * within)), room)


def _with_horizon(state: State, objective: TransferTime | TransferCompleteness, found: Maxima, rate: Array) -> Gradient:
    """What moves with the end of a horizon that is a beat period, at `rate` per second (B,)."""
    exchange = Exchange.of(state, objective.source, objective.target)
    beat = longest_beat(exchange)
    follows = found.at_end & (found.time == beat.period) & (objective.horizon is None)
    return {Eigenvalues(): (beat.slopes(exchange) * np.where(follows, rate, 0.0)[:, None])[:, None]}


@dataclass(frozen=True, slots=True, kw_only=True)
class TransferCompleteness(Objective):
    """The share of `target` at its first great maximum, or at a given `time`."""

    kind: ClassVar[str] = "transfer completeness"
    unit: ClassVar[str] = "1"

    source: str
    target: str
    horizon: float | None = None
    time: float | None = None

    @property
    def modes_needed(self) -> int | None:
        """All: a release excites every mode."""
        return None

    def maxima(self, state: State) -> Maxima:
        """What is judged, and what else might have been."""
        return maxima(state, self.source, self.target, self.horizon)

    def measure(self, state: State) -> Measured:
        """The share; at a maximum its slope is that at fixed time."""
        if self.time is not None:
            distinct = ~np.isnan(longest_beat(Exchange.of(state, self.source, self.target)).period)
            s, _, _ = share_slopes(state, self.source, self.target, np.full(state.builds, self.time))
            return Measured(np.where(distinct[:, None], s.values, np.nan), s.gradient)
        found = self.maxima(state)
        s, slope, _ = share_slopes(state, self.source, self.target, found.time)
        gradient = s.gradient | _with_horizon(state, self, found, slope.values[:, 0])
        return Measured(found.share[:, None], gradient)


@dataclass(frozen=True, slots=True, kw_only=True)
class HandedAmplitude(Objective):
    """Greatest displacement of `target` over the initial one of `source`, real motion ``Σ c_j φ_j cos ω_j t``.

    The default horizon is the longest beat period among excited modes, as for a transfer.
    """

    kind: ClassVar[str] = "handed amplitude"
    unit: ClassVar[str] = "1"

    source: str
    target: str
    horizon: float | None = None

    @property
    def modes_needed(self) -> int | None:
        """All: a release excites every mode."""
        return None

    def measure(self, state: State) -> Measured:
        """The greatest size; its slope is that at fixed time."""
        exchange, u = Exchange.of(state, self.source), state[FrozenDisplacement(self.target)]
        omega, c, beat = exchange.omega, exchange.c, longest_beat(exchange)
        horizon = beat.period if self.horizon is None else np.where(exchange.sound, self.horizon, np.nan)
        t = np.array([_greatest(omega[b], c[b] * u[b], horizon[b]) for b in range(state.builds)])
        at = np.nan_to_num(t)[:, None]
        cosine = np.cos(omega * at)
        x = np.sum(c * u * cosine, axis=1)
        sign = np.sign(x)[:, None]
        mean, half = (omega[:, :, None] + omega[:, None, :]) / 2, (omega[:, :, None] - omega[:, None, :]) / 2
        T = at[:, :, None]
        # Divided differences of cos(√λ t), analytic also at λ = 0.
        g = -(T**2) / 2 * np.sinc(mean * T / np.pi) * np.sinc(half * T / np.pi)
        K = sign[:, :, None] * u[:, :, None] * g * c[:, None, :]
        velocity = -sign[:, 0] * np.sum(c * u * omega * np.sin(omega * at), axis=1)
        at_end = (t == horizon) & (self.horizon is None)
        gradient: Gradient = {
            StiffnessForm(): K[:, None],
            MassForm(): (-K * omega[:, None, :] ** 2)[:, None],
            FrozenDisplacement(self.target): (sign * c * cosine)[:, None],
            ReleasedAmplitudes(self.source): (sign * u * cosine)[:, None],
            Eigenvalues(): (beat.slopes(exchange) * np.where(at_end, velocity, 0.0)[:, None])[:, None],
        }
        return Measured(np.where(np.isnan(t), np.nan, np.abs(x))[:, None], gradient)


def _greatest(omega: Array, a: Array, horizon: float) -> float:
    """When ``|Σ a_j cos ω_j t|`` is greatest up to the horizon.

    It stays below its envelope ``|Σ a_j e^{iω_j t}|``, which holds differences of frequencies only. Intervals whose
    envelope cannot reach what was already found are dropped, the others halved until they are short against
    the fastest cycle.
    """
    heard = np.abs(a) > HEARD * np.abs(a).sum()
    if not np.isfinite(horizon) or not heard.any():
        return float(horizon)
    omega, a = omega[heard], a[heard]
    delta = omega - (omega.max() + omega.min()) / 2
    # The envelope of a sum of tones lies less than this times h² above the higher end of an interval h.
    curvature = float(np.abs(a) @ delta**2) / 8

    def envelope(t: Array) -> Array:
        return np.asarray(np.abs(np.exp(1j * t[:, None] * delta) @ a))

    cycles = horizon * np.ptp(omega) / TURN
    edges = np.linspace(0.0, horizon, int(min(MOST, np.ceil(cycles * PER_CYCLE))) + PER_CYCLE)
    h, size = float(edges[1]), envelope(edges)
    low, bound = edges[:-1], np.maximum(size[:-1], size[1:])
    period = TURN / omega.max() if omega.max() > 0 else horizon
    top = float(edges[size.argmax()])
    best, when = _tallest(omega, a, np.clip(top + np.linspace(-0.5, 0.5, FINE) * period, 0.0, horizon), horizon)
    while True:
        reach = bound + curvature * h**2
        kept = np.flatnonzero(reach >= best)
        if len(kept) > INTERVALS:
            kept = kept[np.argsort(-reach[kept], kind="stable")[:INTERVALS]]
        low = np.sort(low[kept])
        if h * PER_CYCLE <= FINE * period:
            break
        h /= 2
        low = np.concatenate([low, low + h])
        bound = np.maximum(envelope(low), envelope(low + h))
    if len(low):
        inner = np.linspace(0.0, h, int(np.ceil(PER_CYCLE * h / period)) + 2)
        higher, time = _tallest(omega, a, (low[:, None] + inner).ravel(), horizon)
        when = time if higher > best else when
    return when


def _tallest(omega: Array, a: Array, t: Array, horizon: float) -> tuple[float, float]:
    """The greatest size near instants (T,), and when: those that may lead to it are brought to rest by Newton steps."""
    step = TURN / PER_CYCLE / max(float(omega.max()), TURN / horizon)
    sizes = np.concatenate([_sizes(omega, a, t[k : k + INTERVALS]) for k in range(0, len(t), INTERVALS)])
    # Between samples a cosine rises by (π/16)²/2 at most.
    t = np.unique(t[sizes >= 0.96 * sizes.max()])
    start = t
    for _ in range(6):
        phase = t[:, None] * omega
        velocity, bend = np.sin(phase) @ (a * omega), np.cos(phase) @ (a * omega**2)
        moved = t - np.divide(velocity, bend, out=np.zeros_like(t), where=bend != 0)
        t = np.clip(np.clip(moved, start - step, start + step), 0.0, horizon)
    both = np.concatenate([start, t])
    sizes = _sizes(omega, a, both)
    return float(sizes.max()), float(both[sizes.argmax()])


def _sizes(omega: Array, a: Array, t: Array) -> Array:
    return np.asarray(np.abs(np.cos(t[:, None] * omega) @ a))
