# SPDX-License-Identifier: MIT
"""Intensity of several set-ups: level goes, texture stays."""

import numpy as np
import pytest

from scanstrain.epoch import Epoch
from scanstrain.neighbourhood.intensity import comparable_intensity

WIDTH, FINE = 0.6, 0.03


def wall(rng, *, setups=2, count=60_000, offset=0.0):
    """A wall seen from both ends: intensity falls with range, by another law for each set-up, over one texture."""
    uv = rng.uniform(0, [4.0, 2.0], (count, 2))
    texture = 0.2 * np.sin(2 * np.pi * uv[:, 0] / 0.12) * np.sin(2 * np.pi * uv[:, 1] / 0.15)
    setup = rng.integers(1, setups + 1, count).astype(np.uint16)
    level = np.where(setup == 1, 3000 / (1 + uv[:, 0]), 900 / (1.2 + (4 - uv[:, 0])))
    epoch = Epoch(
        points=np.c_[uv, np.zeros(count)], origin=np.zeros(3),
        intensity=(level * (1 + texture) + offset).astype(np.float32), setup=setup,
    )  # fmt: skip
    return epoch, texture


@pytest.fixture
def rng():
    return np.random.default_rng(4)


def inner(epoch):
    return (np.abs(epoch.points[:, 0] - 2) < 1.6) & (np.abs(epoch.points[:, 1] - 1) < 0.7)


def test_two_levels_become_one_texture(rng):
    epoch, texture = wall(rng)
    found = comparable_intensity(epoch, WIDTH, FINE)
    use = inner(epoch)
    assert np.std((found - texture)[use]) < 0.1 * np.std(texture)
    first, second = use & (epoch.setup == 1), use & (epoch.setup == 2)
    slope = [np.polyfit(texture[s], found[s], 1)[0] for s in (first, second)]
    assert slope == pytest.approx([1.0, 1.0], abs=0.03)


def test_one_setup_is_left_as_it_is(rng):
    epoch, _ = wall(rng, setups=1)
    np.testing.assert_array_equal(comparable_intensity(epoch, WIDTH, FINE), epoch.intensity.astype(float))


def test_signed_intensity_is_not_divided(rng):
    epoch, texture = wall(rng, offset=-2000.0)
    found = comparable_intensity(epoch, WIDTH, FINE)
    assert np.isfinite(found).all()
    use = inner(epoch) & (epoch.setup == 1)
    assert np.corrcoef(found[use], texture[use])[0, 1] > 0.9


@pytest.mark.parametrize("intensity", [None, np.full(500, 7, np.float32), np.full(500, np.nan, np.float32)])
def test_nothing_to_see_gives_nothing(rng, intensity):
    epoch = Epoch(points=rng.normal(size=(500, 3)), origin=np.zeros(3), intensity=intensity)
    assert comparable_intensity(epoch, WIDTH, FINE) is None
