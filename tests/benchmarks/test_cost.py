"""What a modal solve and its derivatives cost, as ratios measured in one run."""

import statistics
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from assemblies import built

from inverse.assembly.assembly import Assembly
from inverse.assembly.bodies import Mass
from inverse.assembly.links import Spring
from inverse.matrices.equilibrium import at_rest
from inverse.matrices.stack import Matrices
from inverse.modal.sensitivity import pull_eigenvalues, to_dimensions
from inverse.modal.solution import solve_modes

STUDIES = Path(__file__).parents[2] / "studies"


def tree(n: int) -> Assembly:
    rng = np.random.default_rng(0)
    return Assembly(
        bodies=tuple(Mass(name=f"m{i}", mass=1 + rng.random()) for i in range(n)),
        links=tuple(
            Spring(name=f"k{i}", between=(f"m{i}", f"m{rng.integers(0, i)}" if i else "ground"), rate=1 + rng.random())
            for i in range(n)
        ),
    )


def grid(side: int) -> Assembly:
    rng = np.random.default_rng(0)

    def name(i: int, j: int) -> str:
        return f"m{i}_{j}"

    pairs = [(name(i, j), name(i + 1, j)) for i in range(side - 1) for j in range(side)]
    pairs += [(name(i, j), name(i, j + 1)) for i in range(side) for j in range(side - 1)]
    pairs.append((name(0, 0), "ground"))
    return Assembly(
        bodies=tuple(Mass(name=name(i, j), mass=1 + rng.random()) for i in range(side) for j in range(side)),
        links=tuple(Spring(name=f"k{i}", between=p, rate=1 + rng.random()) for i, p in enumerate(pairs)),
    )


def median(function, repeats: int) -> float:
    function()
    times = []
    for _ in range(repeats):
        began = time.perf_counter()
        function()
        times.append(time.perf_counter() - began)
    return statistics.median(times)


@pytest.mark.parametrize("n", [6, 20, 60, 200])
def test_solve_against_bare_lapack(benchmark, n):
    """Dimensions to modes, everything included, against numpy.linalg.eigh of the ready matrix."""
    model = tree(n).compile()
    matrices = built(model)
    m = np.diag(matrices.mass.matrix()[0])
    ready = matrices.stiffness.matrix()[0] / np.sqrt(np.outer(m, m))
    base = matrices.point.values

    def ours():
        return solve_modes(Matrices(model, at_rest(model, base)), rigid=0)

    benchmark.pedantic(ours, rounds=20, warmup_rounds=2)
    ratio = median(ours, 200) / median(lambda: np.linalg.eigh(ready), 200)
    benchmark.extra_info["times LAPACK"] = round(ratio, 2)


@pytest.mark.parametrize("side", [100, 316])
def test_jacobian_of_a_large_network(benchmark, side):
    """Twenty modes by every spring and mass, on top of the sparse eigensolve."""
    model = grid(side).compile()
    matrices = built(model)
    began = time.perf_counter()
    modes = solve_modes(matrices, 20, rigid=0)
    solve = time.perf_counter() - began
    cotangent = np.eye(20)[None]

    def jacobian():
        out = np.zeros((1, 20, len(model.monomials)))
        pull_eigenvalues(matrices, modes, cotangent, out)
        return to_dimensions(matrices, out)

    result = benchmark.pedantic(jacobian, rounds=3, warmup_rounds=1)
    benchmark.extra_info["bodies"] = side * side
    benchmark.extra_info["share of the eigensolve"] = round(median(jacobian, 3) / solve, 3)
    assert result.shape == (1, 20, len(model.parameters.dimensions))


def test_whole_process_against_bare_imports(benchmark):
    """`modewright size` on the lantern pair against a process that imports what a script would."""
    command = [sys.executable, "-m", "inverse", "size", str(STUDIES / "lantern_pair.toml"), "--quiet"]
    bare = [sys.executable, "-c", "import numpy, scipy.optimize, pandas, matplotlib.pyplot"]

    def run(arguments, folder):
        subprocess.run(arguments, check=True, cwd=folder, capture_output=True)

    import tempfile

    with tempfile.TemporaryDirectory() as folder:
        benchmark.pedantic(lambda: run([*command, "--out", folder], folder), rounds=5, warmup_rounds=1)
        ours = median(lambda: run([*command, "--out", folder], folder), 7)
        theirs = median(lambda: run(bare, folder), 7)
    benchmark.extra_info["times bare imports"] = round(ours / theirs, 2)
