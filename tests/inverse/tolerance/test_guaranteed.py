"""Guaranteed ends of the tolerance box against exhaustive corners and dense samples."""

import numpy as np
import pytest
from assemblies import chain, pair

from inverse.evaluation.evaluator import Evaluator
from inverse.tolerance.distributions import Errors, Limit, Tolerance
from inverse.tolerance.guaranteed import certain_ends
from inverse.tolerance.worst_case import extremes
from objectives import BeatPeriod, Frequency, FrequencyRatio, Period, Splitting, Target

T = Target(1.0, 0.1)


def objectives():
    return (
        Frequency(requirement=T, label="f1", mode=1),
        Period(requirement=T, label="p2", mode=2),
        Splitting(requirement=T, label="s", between=(1, 2)),
        BeatPeriod(requirement=T, label="b", between=(1, 2)),
        FrequencyRatio(requirement=T, label="r", between=(1, 2)),
    )


def sampled(evaluator: Evaluator, errors: Errors, rng: np.random.Generator) -> np.ndarray:
    """Values at every corner and at 4000 builds inside."""
    corners = np.stack(np.meshgrid(*[[-1.0, 1.0]] * errors.units, indexing="ij"), axis=-1).reshape(-1, errors.units)
    u = np.vstack([corners, rng.uniform(-1, 1, (4000, errors.units))])
    nominal = evaluator.nominal(np.zeros((1, 0)))[0]
    base = nominal + (errors.slopes(nominal) @ u.T).T
    return evaluator.of_dimensions(base, np.zeros((len(u), 0))).values()


@pytest.mark.parametrize("seed", range(20))
@pytest.mark.parametrize("kind", ["chain", "pair"])
def test_no_build_lies_outside_and_little_lies_between(kind, seed):
    """Corners and dense samples of 40 small problems: never violated, single modes tight to a tenth of the range."""
    rng = np.random.default_rng(seed)
    if kind == "chain":
        assembly = chain(list(rng.uniform(1, 2, 3)), list(rng.uniform(50, 200, 3)))
    else:
        assembly = pair(length=rng.uniform(0.5, 2.0), rate=rng.uniform(0.5, 5.0))
    evaluator = Evaluator(assembly.compile(), objectives())
    names = [d.name for d in evaluator.model.parameters.dimensions]
    varied = tuple(i for i, name in enumerate(names) if name.endswith(("rate", "length")))
    errors = Errors.of([Tolerance(dimensions=varied, each=Limit(0.01, relative=True))], len(names))
    values = sampled(evaluator, errors, rng)
    ends = certain_ends(evaluator, np.zeros(0), errors)
    found = extremes(evaluator, np.zeros(0), errors, seed=seed)
    for i, ((low, high), extreme) in enumerate(zip(ends, found, strict=True)):
        assert low is not None
        assert low <= values[:, i].min()
        assert low <= extreme.low
        assert high is None or (values[:, i].max() <= high and extreme.high <= high)
        if kind == "chain" and i < 2:
            # Single frequencies; splittings and ratios bound their two frequencies apart and are looser.
            assert extreme.low - low < 0.1 * np.ptp(values[:, i])
