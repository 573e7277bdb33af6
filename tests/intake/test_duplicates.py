"""Repeated points: those that agree within the noise pass, contradictions are refused with both lines."""

from dataclasses import replace

import numpy as np
import pytest

from wakeledger.core.errors import DataError
from wakeledger.core.points import Channel, Points
from wakeledger.intake.gridding import check_duplicates

NOISE = 0.15


def survey(extra=(), *, noise=NOISE, std=None, scattered=False):
    """A 15 x 21 survey with repeats of point 100 that read `extra` more."""
    generator = np.random.default_rng(11)
    zz, yy = np.meshgrid(np.linspace(0, 1, 15), np.linspace(0, 2, 21), indexing="ij")
    y, z = yy.ravel(), zz.ravel()
    if scattered:
        y, z = y + generator.uniform(-0.03, 0.03, y.size), z + generator.uniform(-0.02, 0.02, y.size)
    u = 42 - 6 * np.exp(-((y - 1) ** 2 + (z - 0.5) ** 2) / 0.1) + noise * generator.normal(size=y.size)
    count = len(extra)
    y, z = np.append(y, [y[100]] * count), np.append(z, [z[100]] * count)
    u = np.append(u, u[100] + np.asarray(extra, dtype=float))
    deviations = {} if std is None else {"u": np.full(y.size, std)}
    return Points(y, z, {"u": Channel(u)}, np.arange(2, y.size + 2), "survey.csv", std=deviations)


@pytest.mark.parametrize("scattered", [False, True])
@pytest.mark.parametrize("extra", [(), (0.0,), (2 * NOISE,), (-3 * NOISE, 3 * NOISE), (np.nan,)])
def test_repeats_within_the_noise_pass(extra, scattered):
    check_duplicates(survey(extra, scattered=scattered))


@pytest.mark.parametrize("scattered", [False, True])
@pytest.mark.parametrize("extra", [(3.0,), (-5.0,), (0.1, 4.0)])
def test_contradictions_are_refused(extra, scattered):
    with pytest.raises(DataError, match=r"two values of u at the same place .* contradict") as caught:
        check_duplicates(survey(extra, scattered=scattered))
    assert caught.value.file == "survey.csv"
    assert "317" in caught.value.place or "318" in caught.value.place
    assert caught.value.remedy


def test_stated_deviations_widen_what_is_allowed():
    check_duplicates(survey((3.0,), std=0.5))
    with pytest.raises(DataError):
        check_duplicates(survey((7.0,), std=0.5))


def test_the_number_of_samples_narrows_it_again():
    wide = survey((3.0,), std=2.0)
    check_duplicates(wide)
    with pytest.raises(DataError):
        check_duplicates(replace(wide, samples=np.full(wide.n, 400)))


def test_noise_free_data_allow_the_last_digit():
    check_duplicates(survey((0.01,), noise=0.0))
    with pytest.raises(DataError):
        check_duplicates(survey((1.5,), noise=0.0))
