"""Energy handed from one body to another.

Symbols
-------
c_j      modal amplitudes of the release: ``from`` displaced by one unit, all else at rest
q_j(t)   ``c_j e^{iω_j t}``
S        ``Φᵀ M_b Φ``, the mass terms of the receiving owner in the modes
s(t)     ``qᴴ S q / Σ c²``, the owner's share of the energy: in [0, 1], and all shares sum to one

Derivatives follow the motion, not single modes. With ``X = M̂⁻¹K̂`` in frozen shapes the change of ``g(X)c`` is
``dq_i = Σ_j g[λ_i, λ_j] (dK̂_ij − λ_j dM̂_ij) c_j`` with divided differences of ``g(λ) = e^{i√λ t}`` [1]_, in closed form
``i t e^{i m t} sinc(δ t/2)/(2m)``, ``m`` the mean of both circular frequencies and ``δ`` their difference: nothing is
divided by a vanishing gap.

References
----------
.. [1] Ju. L. Daletskii and S. G. Krein, 1951; N. J. Higham, Functions of Matrices, SIAM 2008, theorem 3.11
   (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from objectives.base import Objective, Pursuit, Target, scaled
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

EXCITED = 1e-6
"""Share of ``Σ c²`` from which a mode counts as excited."""

ONE = 1e-9
"""Frequencies that agree to this share count as one."""

FIRST = 0.9
"""The first maximum that reaches this share of the greatest is the transfer."""

REPORTED = 0.8
"""Maxima from this share of the greatest are reported."""

SWITCH = 0.02
"""A maximum this close to the threshold may become, or cease to be, the first."""

PER_CYCLE = 16
"""Samples over the fastest cycle when maxima are looked for."""

CHUNK = 4096


@dataclass(frozen=True, slots=True)
class Exchange:
    """Release at `source`, watched at `target`, of a single build: ``ω``, ``c`` (r,) and ``S`` (r, r)."""

    omega: Array
    c: Array
    S: Array

    @property
    def energy(self) -> float:
        """``Σ c²``."""
        return float(self.c @ self.c)

    def horizon(self) -> float:
        """Longest beat period among excited modes; NaN with fewer than two distinct ones."""
        excited = np.sort(self.omega[self.c**2 > EXCITED * self.energy])
        gaps = np.diff(excited)
        gaps = gaps[gaps > ONE * excited[1:]] if len(excited) > 1 else gaps
        return float(2 * np.pi / gaps.min()) if len(gaps) else float("nan")

    def share(self, t: Array) -> tuple[Array, Array, Array]:
        """``s`` and its first and second time derivatives at instants (T,)."""
        parts = [self._share(t[k : k + CHUNK]) for k in range(0, max(len(t), 1), CHUNK)]
        s, first, second = (np.concatenate(column) for column in zip(*parts, strict=True))
        return s, first, second

    def _share(self, t: Array) -> tuple[Array, Array, Array]:
        q = self.c * np.exp(1j * np.outer(t, self.omega))
        dq = 1j * self.omega * q
        Sq = q.conj() @ self.S
        s = np.sum(Sq * q, axis=1).real
        first = 2 * np.sum(Sq * dq, axis=1).real
        bent = np.sum(Sq * (-(self.omega**2) * q), axis=1).real
        second = 2 * (bent + np.sum((dq.conj() @ self.S) * dq, axis=1).real)
        return s / self.energy, first / self.energy, second / self.energy


@dataclass(frozen=True, slots=True)
class Maxima:
    """Maxima of a share within the horizon that reach `REPORTED` of the greatest, and the one that counts.

    `at_end` tells that nothing inside reaches `FIRST` of the greatest, so that the end counts;
    `near_switch` that a small change would make another maximum count.
    """

    times: Array
    shares: Array
    first: int
    at_end: bool
    near_switch: bool


def maxima(exchange: Exchange, horizon: float) -> Maxima | None:
    """Look for the transfer; None where nothing is exchanged."""
    if not np.isfinite(horizon) or not horizon > 0:
        return None
    heard = exchange.c**2 > 1e-12 * exchange.energy
    fastest = float(np.ptp(exchange.omega[heard]))
    count = int(np.ceil(horizon * fastest / (2 * np.pi) * PER_CYCLE)) + PER_CYCLE
    t = np.linspace(0.0, horizon, count)
    s, _, _ = exchange.share(t)
    inner = np.flatnonzero((s[1:-1] >= s[:-2]) & (s[1:-1] >= s[2:])) + 1
    greatest = s.max()
    inner = inner[s[inner] >= 0.95 * REPORTED * greatest]
    times = _polished(exchange, t[inner], t[1])
    shares = exchange.share(times)[0] if len(times) else np.empty(0)
    end = float(s[-1])
    greatest = max(float(shares.max(initial=0.0)), end)
    kept = shares >= REPORTED * greatest
    times, shares = times[kept], shares[kept]
    high = np.flatnonzero(shares >= FIRST * greatest)
    if not len(high):
        return Maxima(np.append(times, horizon), np.append(shares, end), len(times), True, False)
    first = int(high[0])
    doubtful = np.abs(shares[: first + 1] / greatest - FIRST) < SWITCH
    return Maxima(times, shares, first, False, bool(doubtful.any()))


def _polished(exchange: Exchange, t: Array, step: float) -> Array:
    """Bracketed maxima brought to ``ds/dt = 0``: Newton, kept in the bracket by bisection."""
    low, high = t - step, t + step
    for _ in range(60):
        _, slope, bend = exchange.share(t)
        low, high = np.where(slope > 0, t, low), np.where(slope > 0, high, t)
        with np.errstate(divide="ignore", invalid="ignore"):
            newton = t - slope / bend
        inside = (newton > low) & (newton < high) & (bend < 0)
        following = np.where(inside, newton, (low + high) / 2)
        if np.all(np.abs(following - t) <= 1e-15 * np.abs(t)):
            break
        t = following
    return t


def exchanges(state: State, source: str, target: str) -> list[Exchange | None]:
    """The exchange of every build; None for a build without modes."""
    lam = state[Eigenvalues()]
    c, S = state[ReleasedAmplitudes(source)], state[OwnerForm(target)]
    sound = np.asarray(np.isfinite(lam).all(axis=1) & (lam >= 0).all(axis=1))
    return [Exchange(np.sqrt(lam[b]), c[b], S[b]) if sound[b] else None for b in range(state.builds)]


def share_slopes(state: State, source: str, target: str, t: Array) -> tuple[Measured, Measured, Array]:
    """``s`` and ``ds/dt`` at one instant per build, (B, 1) each with gradients at fixed time; and ``d²s/dt²`` (B,)."""
    lam = np.maximum(np.nan_to_num(state[Eigenvalues()]), 0.0)
    c, S = state[ReleasedAmplitudes(source)], state[OwnerForm(target)]
    omega, t = np.sqrt(lam), np.nan_to_num(t)[:, None]
    energy = np.sum(c**2, axis=1)[:, None, None]
    turn = np.exp(1j * omega * t)
    q, dq = c * turn, 1j * omega * c * turn
    Sq, Sdq = (np.einsum("bij,bj->bi", S, x).conj() for x in (q, dq))
    g, dg = _divided_differences(omega, t[:, :, None])

    def measured(value: Array, by_X: Array, by_S: Array, by_c: Array) -> Measured:
        K = by_X * c[:, None, :] / energy
        M = -K * lam[:, None, :] - value[:, None, None] * c[:, :, None] * c[:, None, :] / energy
        amplitudes = (by_c - 2 * value[:, None] * c) / energy[:, :, 0]
        gradient: Gradient = {
            StiffnessForm(): K[:, None],
            MassForm(): M[:, None],
            OwnerForm(target): (by_S / energy)[:, None],
            ReleasedAmplitudes(source): amplitudes[:, None],
        }
        return Measured(value[:, None], gradient)

    s = np.sum(Sq * q, axis=1).real / energy[:, 0, 0]
    first = 2 * np.sum(Sq * dq, axis=1).real / energy[:, 0, 0]
    second = 2 * (np.sum(Sdq * dq, axis=1) - np.sum(Sq * lam * q, axis=1)).real / energy[:, 0, 0]
    cross = (q.conj()[:, :, None] * dq[:, None, :]).real
    return (
        measured(
            s,
            2 * (Sq[:, :, None] * g).real,
            (q.conj()[:, :, None] * q[:, None, :]).real,
            2 * (Sq * turn).real,
        ),
        measured(
            first,
            2 * (Sdq[:, :, None] * g + Sq[:, :, None] * dg).real,
            cross + np.swapaxes(cross, 1, 2),
            2 * (Sdq * turn + Sq * 1j * omega * turn).real,
        ),
        second,
    )


def _divided_differences(omega: Array, t: Array) -> tuple[Array, Array]:
    """``g[λ_i, λ_j]`` and its time derivative, (B, r, r); zero between rigid modes, whose forms vanish."""
    total = omega[:, :, None] + omega[:, None, :]
    half = (omega[:, :, None] - omega[:, None, :]) * t / 2
    turn, sinc = np.exp(1j * total * t / 2), np.sinc(half / np.pi)
    with np.errstate(divide="ignore", invalid="ignore"):
        inverse = np.where(total > 0, 1 / total, 0.0)
    g = 1j * t * turn * sinc * inverse
    dg = np.where(total > 0, turn * (-(t / 2) * sinc + 1j * np.cos(half) * inverse), 0.0)
    return g, dg


@dataclass(frozen=True, slots=True, kw_only=True)
class TransferTime(Objective):
    """When the share of `target` has its first great maximum after a release at `source` [s].

    With `completeness` it is the first maximum that reaches that share, and there is none if none does.
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

    def judged(self, state: State) -> tuple[Array, list[Maxima | None]]:
        """The time that counts in each build, NaN where there is none, and all maxima."""
        found = [find(exchange, self.horizon) for exchange in exchanges(state, self.source, self.target)]
        times = np.array([np.nan if m is None else self._time(m) for m in found])
        return times, found

    def _time(self, m: Maxima) -> float:
        if self.completeness is None:
            return float(m.times[m.first])
        reached = np.flatnonzero(m.shares >= self.completeness)
        return float(m.times[reached[0]]) if len(reached) else float("nan")

    def measure(self, state: State) -> Measured:
        """The time; its slope from ``ds/dt = 0`` by the implicit function theorem."""
        t, found = self.judged(state)
        _, slope, bend = share_slopes(state, self.source, self.target, t)
        moving = np.array([m is not None and not m.at_end for m in found]) & (bend < 0)
        factor = np.where(moving, -1 / np.where(bend < 0, bend, -1.0), 0.0)
        gradient = {q: g * factor.reshape(-1, *[1] * (g.ndim - 1)) for q, g in slope.gradient.items()}
        return Measured(t[:, None], gradient)

    def pursue(self, state: State, choice: IntArray | None = None) -> Pursuit:
        """A maximum at the asked time, and a great one: ``ds/dt = 0`` and ``s ≥ 0.9`` of the greatest there."""
        if not isinstance(self.requirement, Target):
            return Objective.pursue(self, state)
        T, within = self.requirement.value, self.requirement.within
        s, slope, _ = share_slopes(state, self.source, self.target, np.full(state.builds, T))
        # A full exchange sin²(πt/2T) bends by π²/2T² at its maximum.
        bend = np.pi**2 / (2 * T**2)
        enough = np.array([self._enough(exchange) for exchange in exchanges(state, self.source, self.target)])
        room = Measured(s.values - enough[:, None], s.gradient)
        return Pursuit(scaled(slope, -1 / (bend * within)), room)

    def _enough(self, exchange: Exchange | None) -> float:
        if self.completeness is not None:
            return self.completeness
        found = None if exchange is None else find(exchange, self.horizon)
        return FIRST * float(found.shares.max()) if found is not None else FIRST


def find(exchange: Exchange | None, horizon: float | None) -> Maxima | None:
    """Maxima within a horizon, by default the longest beat period."""
    if exchange is None or not np.isfinite(longest := exchange.horizon()):
        return None
    return maxima(exchange, longest if horizon is None else horizon)


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

    def measure(self, state: State) -> Measured:
        """The share; at a maximum its slope is that at fixed time."""
        if self.time is not None:
            t = np.full(state.builds, self.time)
        else:
            found = [find(exchange, self.horizon) for exchange in exchanges(state, self.source, self.target)]
            t = np.array([np.nan if m is None else m.times[m.first] for m in found])
        s, _, _ = share_slopes(state, self.source, self.target, t)
        return Measured(np.where(np.isnan(t)[:, None], np.nan, s.values), s.gradient)


@dataclass(frozen=True, slots=True, kw_only=True)
class HandedAmplitude(Objective):
    """Greatest displacement of `target` over the initial one of `source`, real motion ``Σ c_j φ_j cos ω_j t``."""

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
        lam = np.maximum(np.nan_to_num(state[Eigenvalues()]), 0.0)
        omega, c, u = np.sqrt(lam), state[ReleasedAmplitudes(self.source)], state[FrozenDisplacement(self.target)]
        t = np.array([self._when(omega[b], c[b], u[b]) for b in range(state.builds)])
        at = np.nan_to_num(t)[:, None]
        cosine = np.cos(omega * at)
        x = np.sum(c * u * cosine, axis=1)
        sign = np.sign(x)[:, None]
        mean, half = (omega[:, :, None] + omega[:, None, :]) / 2, (omega[:, :, None] - omega[:, None, :]) / 2
        T = at[:, :, None]
        # Divided differences of cos(√λ t), analytic also at λ = 0.
        g = -(T**2) / 2 * np.sinc(mean * T / np.pi) * np.sinc(half * T / np.pi)
        K = sign[:, :, None] * u[:, :, None] * g * c[:, None, :]
        gradient: Gradient = {
            StiffnessForm(): K[:, None],
            MassForm(): (-K * lam[:, None, :])[:, None],
            FrozenDisplacement(self.target): (sign * c * cosine)[:, None],
            ReleasedAmplitudes(self.source): (sign * u * cosine)[:, None],
        }
        value = np.where(np.isnan(t), np.nan, np.abs(x))
        return Measured(value[:, None], gradient)

    def _when(self, omega: Array, c: Array, u: Array) -> float:
        """The instant of the greatest size: fine samples, then Newton on the velocity."""
        longest = Exchange(omega, c, np.eye(len(c))).horizon()
        if not np.isfinite(longest):
            return float("nan")
        horizon = longest if self.horizon is None else self.horizon
        count = int(np.ceil(horizon * omega.max() / (2 * np.pi) * PER_CYCLE)) + PER_CYCLE
        best, when = -1.0, 0.0
        samples = np.linspace(0.0, horizon, count)
        for k in range(0, count, CHUNK):
            size = np.abs(np.cos(np.outer(samples[k : k + CHUNK], omega)) @ (c * u))
            if size.max() > best:
                best, when = float(size.max()), float(samples[k + int(size.argmax())])
        for _ in range(20):
            velocity = float(np.sum(c * u * omega * np.sin(omega * when)))
            bend = float(np.sum(c * u * omega**2 * np.cos(omega * when)))
            step = velocity / bend if bend else 0.0
            if not 0 <= when - step <= horizon or abs(step) > samples[1]:
                break
            when -= step
        return when
