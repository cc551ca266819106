# SPDX-License-Identifier: MIT
"""Intensity and colour as one texture: the best combination of channels, and only where it is worth it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from scanstrain import CompareConfig, compare_epochs
from scanstrain.colours import with_colour
from scanstrain.synthetic import Linear, RandomField, Scene, Wall, sample_epoch

SIZE, SPACING = 1.6, 0.012
FIELD = RandomField((SIZE, SIZE), rms=1.0, correlation_length=0.05, seed=4)
SCENE = Scene(Wall(SIZE, SIZE), Linear(((2e-3, 0.0), (0.0, 0.0), (0.0, 0.0)), (SIZE / 2, SIZE / 2)), texture=FIELD)


def coloured(noise, *, deformed, seed, grey_noise=3.0):
    """A wall whose colour shows the texture with noise of each channel, and whose intensity shows hardly any."""
    epoch = sample_epoch(SCENE, deformed=deformed, spacing=SPACING, intensity_noise=0.0, seed=seed)
    texture = np.asarray(epoch.intensity, float)
    texture = (texture - texture.mean()) / texture.std()
    rng = np.random.default_rng(seed)
    # Exposure and gain differ between the epochs, as of two photographs.
    colour = 120 + 30 * (1 + 0.3 * deformed) * (texture[:, None] + rng.normal(0, noise, (len(epoch), 3)))
    intensity = 500 + 40 * (texture + rng.normal(0, grey_noise, len(epoch)))
    return replace(epoch, colour=colour.astype(np.float32), intensity=intensity.astype(np.float32))


@pytest.fixture(scope="module")
def pair():
    return coloured((0.2, 0.4, 0.8), deformed=False, seed=1), coloured((0.2, 0.4, 0.8), deformed=True, seed=2)


def test_the_combination_weighs_channels_by_what_they_show_over_their_noise(pair):
    first, second, notices = with_colour(*pair)
    assert "intensity and colour together" in notices[0]
    for before, after in zip(pair, (first, second), strict=True):
        texture = sample_epoch(
            SCENE, deformed=before is pair[1], spacing=SPACING, intensity_noise=0.0, seed=1 + (before is pair[1])
        ).intensity
        combined = np.corrcoef(after.intensity, texture)[0, 1]
        # Channels with independent noise add up: 1 / s^2 = 25 + 6.25 + 1.6 + 0.1, a noise of 0.174 at a spread of 1.
        assert combined == pytest.approx(1 / np.sqrt(1 + 0.174**2), abs=0.003)
        assert combined > np.corrcoef(before.colour[:, 0], texture)[0, 1] + 0.002


def test_grey_colour_that_repeats_the_intensity_changes_nothing(pair):
    grey = [replace(e, colour=np.repeat(np.asarray(e.intensity)[:, None], 3, axis=1)) for e in pair]
    first, second, notices = with_colour(*grey)
    assert (first, second, notices) == (grey[0], grey[1], ())


@pytest.mark.parametrize("change", [{"colour": None}, {"colour": np.zeros((2, 3), np.float32)}])
def test_without_colour_in_both_nothing_changes(pair, change):
    other = replace(pair[1], colour=None if change["colour"] is None else np.zeros((len(pair[1]), 3), np.float32))
    first, second, notices = with_colour(pair[0], other)
    assert first is pair[0]
    assert second is other
    assert notices == ()


def test_colour_alone_serves_where_there_is_no_intensity(pair):
    bare = [replace(epoch, intensity=None) for epoch in pair]
    first, _, notices = with_colour(*bare)
    assert "taken from colour" in notices[0]
    assert first.intensity is not None


def test_strain_that_intensity_does_not_show_is_seen_by_colour():
    pair = [coloured((0.04, 0.08, 0.16), deformed=deformed, seed=3 + deformed) for deformed in (False, True)]
    given = {}
    for use in (True, False):
        config = CompareConfig(
            registration={"stable": "all"},
            neighbourhood={"gauge_length": 0.6, "gauge_spacing": 0.3, "use_colour": use},
            strain={"structure": "wall"},
        )
        field = compare_epochs(*pair, config).field
        given[use] = field.gradient[field.status == 0, 0, 0]
    assert np.isfinite(given[False]).mean() < 0.1
    assert np.isfinite(given[True]).mean() > 0.8
    # Standard errors of 1e-3 are required, and a handful of gauges are apart.
    assert np.nanmedian(given[True]) == pytest.approx(2e-3, abs=1e-3)
