"""First-order effects of a source's independent variables against the errors that it draws."""

import numpy as np
import pytest

from wakeledger.confidence.sampling import SourceErrors
from wakeledger.confidence.sources import InputLayout, Source


def layouts(*, scattered=False):
    rng = np.random.default_rng(2)
    if scattered:
        places = rng.uniform(0, 1, (150, 2))
    else:
        yy, zz = np.meshgrid(np.linspace(0, 1, 15), np.linspace(0, 0.5, 10))
        places = np.stack([yy.ravel(), zz.ravel()], axis=1)
    row = np.repeat(np.arange(10), 15)
    field = InputLayout(rng.uniform(1, 2, 150), positions=places, row=row, std=rng.uniform(0.1, 1, 150))
    return {"a": field, "b": field, "c": InputLayout(3.0)}


@pytest.mark.parametrize("scattered", [False, True])
@pytest.mark.parametrize(
    "source",
    [
        Source("s", ("a", "b", "c"), "random", 0.2),
        Source("s", ("a",), "random", 0.3, relative=True),
        Source("s", ("a",), "random", 1.0, from_samples=True),
        Source("s", ("a", "c"), "systematic", 0.2, degrees_of_freedom=6),
        Source("s", ("b",), "per_row", 0.2),
        Source("s", ("a", "b"), "random", 0.2, correlation_length=0.13),
    ],
    ids=["random", "relative", "samples", "systematic", "per_row", "correlated"],
)
def test_effects_are_the_transpose_of_the_errors(source, scattered):
    given = layouts(scattered=scattered)
    rng = np.random.default_rng(7)
    slopes = {name: rng.standard_normal((4, one.size)) for name, one in given.items()}
    slopes["c"] = slopes["c"][:, 0]
    errors = SourceErrors(source, given, seed=1)
    effects = np.concatenate([errors.effects(slopes)[name] for name in source.applies_to], axis=1)
    assert effects.shape == (4, errors.latents)
    for latent in range(0, errors.latents, max(1, errors.latents // 7)):
        deviation = errors.deviation(latent)
        expected = sum(
            slopes[name] * one if np.ndim(one) == 0 or one.shape == (1,) else slopes[name] @ one[0]
            for name, one in deviation.items()
        )
        np.testing.assert_allclose(effects[:, latent], expected, rtol=1e-11, atol=1e-13)
    assert np.abs(effects).max() > 0
