# SPDX-License-Identifier: MIT
"""Regions of gauges that changed, against layouts whose groups are plain to see."""

import numpy as np
import pytest

from scanstrain.strain.regions import NONE, find_regions

SPACING = 0.5
GRID = np.stack([*np.meshgrid(np.arange(12), np.arange(8), indexing="ij"), np.zeros((12, 8))], -1).reshape(-1, 3)
ROW = {tuple(place): row for row, place in enumerate(GRID[:, :2].astype(int).tolist())}
BLOCK = [ROW[x, y] for x in (1, 2, 3) for y in (1, 2)]
CORNERS = [ROW[6, 5], ROW[7, 6], ROW[8, 7]]  # touch by their corners only
ALONE = [ROW[11, 0], ROW[10, 4], ROW[11, 4]]


def regions(changed, values=None, sd=None):
    discovery = np.isin(np.arange(len(GRID)), changed)
    values = np.where(discovery, 1.0, 0.0)[:, None] if values is None else values
    sd = np.full_like(values, 0.1) if sd is None else sd
    return find_regions(GRID * SPACING, discovery, values, sd, spacing=SPACING)


def test_gauges_that_touch_by_a_side_or_a_corner_are_one_region_and_pairs_are_none():
    found, isolated = regions(BLOCK + CORNERS + ALONE)
    assert sorted(sorted(region.gauges) for region in found) == sorted([sorted(BLOCK), sorted(CORNERS)])
    assert isolated.tolist() == sorted(ALONE)


def test_a_region_has_a_square_of_one_spacing_for_each_gauge():
    found, _ = regions(BLOCK)
    assert found[0].area == pytest.approx(6 * 0.25)


def test_the_clearest_region_comes_first_and_not_the_one_with_the_largest_value():
    values, sd = np.zeros((len(GRID), 1)), np.full((len(GRID), 1), 1.0)
    values[BLOCK], values[CORNERS] = 8.0, 3.0
    sd[CORNERS] = 0.1
    found, _ = regions(BLOCK + CORNERS, values, sd)
    assert [region.strength for region in found] == pytest.approx([30.0, 8.0])


def test_both_ends_are_found_among_values_beyond_their_own_interval_only():
    values, sd = np.zeros((len(GRID), 2)), np.ones((len(GRID), 2))
    values[BLOCK, 0] = [5.0, 9.0, 1.9, -3.0, -1.9, np.nan]
    values[BLOCK, 1] = 1.0
    sd[BLOCK[1], 0] = 6.0  # the largest value, and within its own interval
    (region,), _ = regions(BLOCK, values, sd)
    assert (region.highest[0], region.lowest[0]) == (BLOCK[0], BLOCK[3])
    assert (region.highest[1], region.lowest[1]) == (NONE, NONE)


def test_nothing_changed_gives_no_region():
    assert [len(part) for part in regions([])] == [0, 0]
