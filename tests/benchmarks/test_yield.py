"""How fast builds are judged, beside dense eigenvalues of the same builds in the same run, to the same answer.

References: numpy's batched `eigvalsh` on matrices already put together and mass-normalised, which costs the other side
nothing for that; and a loop of `scipy.linalg.eigh` on a share of the builds. Judging starts from the dimensions of the
parts. Times are of the processor and the best of a few, for the machine may be shared.
"""

import time
from collections.abc import Callable

import numpy as np
import pytest
import scipy.linalg as sl
from assemblies import nominal

from inverse.assembly.assembly import Assembly, Model
from inverse.assembly.bodies import Mass
from inverse.assembly.links import Spring
from inverse.assembly.terms import Array, Point
from inverse.evaluation.evaluator import Evaluator
from inverse.matrices.stack import Matrices
from inverse.modal.inertia import Pencil, count_below
from inverse.tolerance.distributions import Cube, Errors, Limit, Tolerance, draw_builds
from inverse.tolerance.yields import Judge, measure_yield
from objectives.base import Objective, Target
from objectives.frequency import BeatPeriod, Frequency

NONE = np.zeros(0)
LOOPED = 200
"""Builds for the loop of single solves."""


def tied(pairs: list[tuple[int, int]], bodies: int, seed: int) -> Assembly:
    """Sliding masses and springs of random size; −1 is the ground."""
    rng = np.random.default_rng(seed)
    masses, rates = rng.uniform(0.5, 2.0, bodies), rng.uniform(50.0, 200.0, len(pairs))
    return Assembly(
        bodies=tuple(Mass(name=f"m{i}", mass=m) for i, m in enumerate(masses)),
        links=tuple(
            Spring(name=f"k{t}", between=(f"m{a}", f"m{b}" if b >= 0 else "ground"), rate=k)
            for t, ((a, b), k) in enumerate(zip(pairs, rates, strict=True))
        ),
    )


def tree(bodies: int, seed: int = 0) -> Assembly:
    """A random recursive tree on the ground."""
    rng = np.random.default_rng(seed)
    return tied([(i, int(rng.integers(i)) if i else -1) for i in range(bodies)], bodies, seed)


def lattice(side: int) -> Assembly:
    """A square grid of which one row is tied to the ground."""
    number = np.arange(side * side).reshape(side, side)
    first = np.concatenate([number[:-1].ravel(), number[:, :-1].ravel()])
    second = np.concatenate([number[1:].ravel(), number[:, 1:].ravel()])
    pairs = list(zip(first.tolist(), second.tolist(), strict=True))
    return tied(pairs + [(i, -1) for i in range(side)], side * side, 0)


def twins(bodies: int) -> Assembly:
    """Two equal trees with a weak tie: the two lowest modes are near-degenerate."""
    half = tree(bodies // 2, seed=1)
    return Assembly(
        bodies=tuple(Mass(name=f"{side}{b.name}", mass=b.mass) for side in "ab" for b in half.bodies),
        links=(
            *(
                Spring(
                    name=f"{side}{s.name}",
                    between=tuple(end if end == "ground" else side + end for end in s.between),
                    rate=s.rate,
                )
                for side in "ab"
                for s in half.links
            ),
            Spring(name="tie", between=(f"am{bodies // 2 - 1}", f"bm{bodies // 2 - 1}"), rate=2.0),
        ),
    )


def best(call: Callable[[], object], rounds: int) -> float:
    """Shortest of some runs [s]."""
    times = []
    for _ in range(rounds):
        began = time.process_time()
        call()
        times.append(time.process_time() - began)
    return min(times)


def builds_of(model: Model, share: float, builds: int) -> tuple[Errors, Array]:
    """Builds in which every part has an error of its own."""
    errors = Errors.of(
        (Tolerance(dimensions=tuple(range(len(model.parameters.dimensions))), each=Limit(share, relative=True)),),
        len(model.parameters.dimensions),
    )
    (points,) = Cube(errors.units, 1).chunks(builds, builds)
    return errors, draw_builds(errors, nominal(model)[0], points)


def matrices_of(model: Model, base: Array) -> tuple[Array, Array]:
    """``K`` and ``M`` of every build."""
    matrices = Matrices(model, Point(base, model.positive))
    return matrices.stiffness.matrix(), matrices.mass.matrix()


def normalised(model: Model, base: Array) -> Array:
    """``M^(-1/2) K M^(-1/2)`` of every build; ``M`` is diagonal."""
    out = np.empty((len(base), model.size, model.size))
    for b in range(0, len(base), 1024):
        K, M = matrices_of(model, base[b : b + 1024])
        scale = 1 / np.sqrt(np.einsum("bii->bi", M))
        out[b : b + 1024] = K * scale[:, :, None] * scale[:, None, :]
    return out


def dense_builds(bodies: int) -> int:
    """Builds whose dense matrices fit into some hundred megabytes."""
    return 2**14 if bodies <= 25 else 2**13


def compared(benchmark, model: Model, base: Array, judge: Callable[[Array], Array]) -> tuple[float, Array]:
    """Rates over those of the references, and all eigenvalues."""
    A, (K, M) = normalised(model, base), matrices_of(model, base[:LOOPED])
    benchmark(judge, base)
    ours = best(lambda: judge(base), 7)
    batched = best(lambda: np.linalg.eigvalsh(A), 3)
    looped = best(lambda: [sl.eigh(k, m, eigvals_only=True) for k, m in zip(K, M, strict=True)], 2)
    benchmark.extra_info["nanoseconds a build"] = round(1e9 * ours / len(base), 1)
    benchmark.extra_info["times batched eigenvalues"] = round(batched / ours, 1)
    benchmark.extra_info["times a loop of eigh"] = round(looped * len(base) / LOOPED / ours, 1)
    return batched / ours, np.linalg.eigvalsh(A)


EDGES = {
    "tree of 6": (tree(6), 30),
    "tree of 20": (tree(20), 80),
    "tree of 60": (tree(60), 150),
    "lattice of 5 by 5": (lattice(5), 25),
}


@pytest.mark.parametrize("name", EDGES)
def test_one_window_edge(benchmark, name):
    """Does mode 3 lie below a limit? Bounds are half of what was seen or less."""
    assembly, least = EDGES[name]
    model = assembly.compile()
    _, base = builds_of(model, 0.05, dense_builds(model.size))
    pencil = Pencil.of(model)
    limit = float(np.median(np.linalg.eigvalsh(normalised(model, base[:200]))[:, 2])) * (1 + 1e-9)

    def judge(base: Array) -> Array:
        return count_below(pencil, Point(base, model.positive), [limit])[0]

    ratio, values = compared(benchmark, model, base, judge)
    np.testing.assert_array_equal(judge(base), (values < limit).sum(axis=1))
    assert ratio > least


def met_by(values: Array, low: Array, high: Array) -> Array:
    return np.all((values >= low) & (values <= high), axis=1)


@pytest.mark.parametrize(("bodies", "least"), [(6, 4), (20, 14), (60, 30)])
def test_study_with_windows_on_three_modes(benchmark, bodies, least):
    """Goal: 20 times batched eigenvalues at 20 bodies, 60 at 60; bounds are half of what was seen."""
    model = tree(bodies).compile()
    _, base = builds_of(model, 0.03, dense_builds(bodies))
    middle = np.sqrt(np.linalg.eigvalsh(normalised(model, nominal(model)))[0, :3]) / (2 * np.pi)
    objectives: tuple[Objective, ...] = tuple(
        Frequency(requirement=Target(f, 0.01 * f), label="", mode=mode) for mode, f in enumerate(middle, start=1)
    )
    judge = Judge.of(Evaluator(model, objectives), NONE)
    ratio, values = compared(benchmark, model, base, judge.passes)
    f = np.sqrt(values[:, :3]) / (2 * np.pi)
    np.testing.assert_array_equal(judge.passes(base), met_by(f, 0.99 * middle, 1.01 * middle))
    assert ratio > least


@pytest.mark.parametrize(("bodies", "least"), [(6, 3), (20, 8), (60, 25)])
def test_beat_window(benchmark, bodies, least):
    """Goal: 4, 15 and 50 times batched eigenvalues, the check by inertia included."""
    model = twins(bodies).compile()
    _, base = builds_of(model, 0.01, dense_builds(bodies))
    omega = np.sqrt(np.linalg.eigvalsh(normalised(model, base[:200]))[:, :2])
    beats = 2 * np.pi / (omega[:, 1] - omega[:, 0])
    typical, within = float(np.median(beats)), float(np.ptp(np.quantile(beats, [0.25, 0.75])))
    beat = BeatPeriod(requirement=Target(typical, within), label="", between=(1, 2))
    judge = Judge.of(Evaluator(model, (beat,)), NONE)
    ratio, values = compared(benchmark, model, base, judge.passes)
    splitting = (values[:, 1] - values[:, 0]) / np.sqrt(values[:, :2]).sum(axis=1) / (2 * np.pi)
    expected = np.abs(1 / splitting - typical) <= within
    np.testing.assert_array_equal(judge.passes(base), expected)
    assert 0.05 < expected.mean() < 0.95
    assert ratio > least


def test_a_million_builds_of_twenty_bodies(benchmark):
    """Goal: about a second on two cores; this is one core, with the drawing of 40 normal errors a build."""
    model = tree(20).compile()
    errors, _ = builds_of(model, 0.03, 2)
    f = float(np.sqrt(np.linalg.eigvalsh(normalised(model, nominal(model)))[0, 0]) / (2 * np.pi))
    found = Evaluator(model, (Frequency(requirement=Target(f, 0.01 * f), label="", mode=1),))
    began = time.perf_counter()
    measured = benchmark.pedantic(lambda: measure_yield(found, NONE, errors, seed=1, builds=2**20), rounds=1)
    seconds = time.perf_counter() - began
    benchmark.extra_info["yield"] = measured.share
    benchmark.extra_info["seconds"] = round(seconds, 2)
    assert seconds < 5
