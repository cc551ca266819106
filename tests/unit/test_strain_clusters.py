# SPDX-License-Identifier: MIT
"""Clusters of small p-values: rare where nothing changed, found where something did."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter
from scipy.stats import binom, norm

from scanstrain.strain.clusters import FORMING, find_clusters

SIDE, SPACING, GAUGE = 24, 0.15, 0.6
GRID = np.stack([*np.meshgrid(np.arange(SIDE), np.arange(SIDE), indexing="ij"), np.zeros((SIDE, SIDE))], -1)
POSITION = GRID.reshape(-1, 3) * SPACING
SMOOTH = 1.2
"""Width of the smoothing that makes neighbours alike [spacings]."""


def chance(seed):
    """Scores of a map without change, with the correlation exp(-(d / 2.4 spacings)^2)."""
    wide = np.random.default_rng(seed).normal(size=(SIDE + 20, SIDE + 20))
    scale = 2 * SMOOTH * np.sqrt(np.pi)  # standard deviation of white noise smoothed by a Gaussian is 1 / that
    return scale * gaussian_filter(wide, SMOOTH)[10:-10, 10:-10]


def clusters(score, **options):
    return find_clusters(POSITION, norm.sf(score).ravel(), spacing=SPACING, gauge_length=GAUGE, rate=0.05, **options)


def test_maps_without_change_show_a_cluster_no_more_often_than_the_rate():
    maps = [clusters(chance(seed)) for seed in range(40)]
    assert sum(each.found.any() for each in maps) <= binom.ppf(0.999, 40, 0.05)
    p = np.concatenate([each.p for each in maps])
    assert len(p) > 60
    assert np.mean(p < 0.2) == pytest.approx(0.2, abs=0.1)


def test_a_region_that_changed_is_found_and_lonely_gauges_are_not():
    score = chance(3)
    score[8:13, 8:12] += 5.0
    score[20, 20] += 4.0
    found = clusters(score)
    p, sure = found.at_gauges()
    p, sure = p.reshape(SIDE, SIDE), sure.reshape(SIDE, SIDE)
    assert p[10, 10] < 1e-3
    assert sure[10, 10]
    assert not sure[20, 20]
    assert np.isnan(p[norm.sf(score) > FORMING]).all()


def test_dependence_of_neighbours_makes_a_cluster_less_telling():
    rng = np.random.default_rng(8)
    loose, tight = rng.normal(size=(SIDE, SIDE)), chance(8)
    for score in (loose, tight):
        score[np.abs(score) > 2.2] = 0.0
        score[8:10, 8:10] = 2.8
    assert clusters(loose).p.min() < 0.2 * clusters(tight).p.min()


def test_the_same_map_gives_the_same_p_values_and_places_without_a_test_belong_to_none():
    p = norm.sf(chance(5)).ravel()
    p[:40], p[300:304] = np.nan, 1e-9
    one, other = (find_clusters(POSITION, p, spacing=SPACING, gauge_length=GAUGE, rate=0.05) for _ in range(2))
    np.testing.assert_array_equal(one.p, other.p)
    assert (one.label[:40] == -1).all()


def test_nothing_small_gives_no_cluster():
    found = clusters(np.zeros((SIDE, SIDE)))
    assert len(found.p) == 0
    assert np.isnan(found.at_gauges()[0]).all()
