"""What errors of dimensions do to objectives, first and second order."""

import numpy as np
import pytest
from assemblies import pair
from numpy.testing import assert_allclose

from inverse.evaluation.evaluator import Evaluator
from inverse.tolerance.distributions import Errors, Limit, Tolerance
from inverse.tolerance.sensitivities import sensitivities, sentence
from objectives import BeatPeriod, Frequency, Target, TransferCompleteness

T = Target(1.0, 0.1)


def pendulums() -> tuple[Evaluator, Errors, list[str]]:
    """Two equal pendulums of 1 m on a 20 s beat; lengths to 1 mm each, and a common error of 2 mm."""
    model = pair().compile()
    objectives = (
        Frequency(requirement=T, label="f", mode=1),
        BeatPeriod(requirement=T, label="beat", between=(1, 2)),
        TransferCompleteness(requirement=T, label="whole", source="east.x", target="west"),
    )
    names = [dimension.name for dimension in model.parameters.dimensions]
    lengths = tuple(names.index(name) for name in ("east.length", "west.length"))
    errors = Errors.of([Tolerance(dimensions=lengths, each=Limit(1e-3), batch=Limit(2e-3))], len(names))
    return Evaluator(model, objectives), errors, names


def test_slopes_and_curvatures_are_those_of_small_changes():
    """Central differences of first and second order over the dimension itself (common practice, no source)."""
    evaluator, errors, names = pendulums()
    rows = {(row.label, row.moves): row for row in sensitivities(evaluator, np.zeros(0), errors)}
    base = evaluator.nominal(np.zeros((1, 0)))[0]
    h = 1e-3
    for i, label in enumerate(("f", "beat", "whole")):
        d = np.tile(base, (3, 1))
        d[:, names.index("east.length")] += [-h, 0.0, h]
        low, here, high = evaluator.of_dimensions(d, np.zeros((3, 0))).values()[:, i]
        row = rows[label, ("east.length",)]
        scale = abs(here)
        assert_allclose(row.first, (high - low) / (2 * h), rtol=1e-4, atol=1e-4 * scale)
        assert_allclose(row.second, (high - 2 * here + low) / h**2, rtol=2e-3, atol=1e-3 * scale)


def test_the_common_error_moves_the_frequency_as_both_lengths_do():
    """f ∝ L^(−1/2) where both lengths change alike: −½ percent per percent (any text)."""
    evaluator, errors, _ = pendulums()
    rows = sensitivities(evaluator, np.zeros(0), errors)
    common = next(row for row in rows if row.label == "f" and len(row.moves) == 2)
    assert_allclose(common.first * 1.0 / common.value, -0.5, rtol=1e-6)


def test_sentences_say_what_it_means_for_the_shop():
    evaluator, errors, _ = pendulums()
    words = [sentence(row) for row in sensitivities(evaluator, np.zeros(0), errors)]
    assert any(line.startswith("3 mm on east.length moves f by") for line in words)
    assert all(line.isprintable() for line in words)


@pytest.mark.parametrize("label", ["f", "beat", "whole"])
def test_greatest_effect_comes_first(label):
    evaluator, errors, _ = pendulums()
    effects = [row.effect for row in sensitivities(evaluator, np.zeros(0), errors) if row.label == label]
    assert effects == sorted(effects, reverse=True)
