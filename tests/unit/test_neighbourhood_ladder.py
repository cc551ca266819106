# SPDX-License-Identifier: MIT
"""The ladder of gauge lengths and the automatic choice, on fields whose best length is known and on plain scans."""

from __future__ import annotations

import runpy
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from scanstrain.errors import OptionError
from scanstrain.neighbourhood.gauge_length import MARGIN, choose_gauge_length
from scanstrain.neighbourhood.ladder import choose_rungs, fit_on_ladder, rungs
from scanstrain.neighbourhood.piece import InMemory
from scanstrain.synthetic import Scene, Still, Wall, sample_epoch

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))
MEASURES = runpy.run_path(str(Path(__file__).parents[1] / "scenes" / "scene_measures.py"))
PLACES = np.array([[0.0, 0, 0], [1.0, 0, 0], [2.0, 0, 0]])


def field(length, displacement, status=(0, 0, 0), sd=1e-3):
    shifts = np.zeros((3, 3))
    shifts[:, 2] = displacement
    return FIELDS["affine_field"](
        PLACES, np.eye(3), displacement=shifts, sd=np.full(12, sd), status=status, gauge_length=length
    )


def test_lengths_rise_by_the_root_of_two_up_to_the_longest():
    np.testing.assert_allclose(rungs(0.3, 0.6), [0.3, 0.3 * 2**0.5, 0.6])
    np.testing.assert_allclose(rungs(0.3, 0.5), [0.3, 0.3 * 2**0.5])
    with pytest.raises(OptionError, match="gauge_ladder"):
        rungs(0.3, 0.3)


def test_each_gauge_takes_the_longest_length_whose_intervals_overlap_all_shorter_ones():
    # intervals are +- 1.96 mm: 3 mm apart overlap, 5 mm apart do not; gauge 2 creeps by 3 mm a rung
    found = [field(0.3, [0, 0, 0]), field(0.4, [1e-3, 5e-3, 3e-3]), field(0.6, [1e-3, 0, 6e-3])]
    assert choose_rungs(found).tolist() == [2, 0, 1]


def test_lengths_without_a_fit_are_passed_over_below_the_first_and_end_the_climb_above_it():
    found = [field(0.3, [0, 0, 0], (1, 0, 3)), field(0.4, [0, 0, 0], (0, 3, 3)), field(0.6, [0, 0, 0], (0, 0, 3))]
    assert choose_rungs(found).tolist() == [2, 0, 0]


def test_the_merged_field_states_the_length_of_every_gauge():
    lengths = [0.3, 0.4, 0.6]
    found = dict(
        zip(lengths, [field(0.3, 0), field(0.4, [1e-3, 5e-3, 3e-3]), field(0.6, [2e-3, 0, 6e-3])], strict=True)
    )
    merged = fit_on_ladder(found.__getitem__, lengths)
    assert merged.gauge_lengths.tolist() == [0.6, 0.3, 0.4]
    assert merged.gauge_length == 0.3
    np.testing.assert_allclose(merged.displacement[:, 2], [2e-3, 0, 3e-3])


def test_frames_that_are_turned_are_compared_in_one_frame():
    turn = np.array([[0.0, -1, 0], [1, 0, 0], [0, 0, 1]])
    first = FIELDS["affine_field"](PLACES, np.eye(3), displacement=[5e-2, 0, 0], sd=np.full(12, 1e-3))
    # the same motion and none of its gradients, written in axes turned by a quarter
    second = FIELDS["affine_field"](PLACES, turn, displacement=[0, -5e-2, 0], sd=np.full(12, 1e-3))
    assert choose_rungs([first, second]).tolist() == [1, 1, 1]
    other = replace(second, displacement=first.displacement)
    assert choose_rungs([first, other]).tolist() == [0, 0, 0]


def scans(scene, noise=5e-4):
    return [
        sample_epoch(scene, deformed=False, spacing=0.012, noise=noise, intensity_noise=30.0, seed=s) for s in (1, 2)
    ]


def test_auto_is_long_enough_for_the_required_strain_where_texture_allows_it():
    scene = MEASURES["textured"](Wall(4.0, 3.0), Still())
    pair = scans(scene)
    chosen = choose_gauge_length(InMemory(*pair))
    # the bound of in-plane strain at the middle, surface and texture known
    q = scene.surface.project(pair[0].points)[0]
    bound = MEASURES["in_plane_bound"](scene, np.array([2.0, 1.5]), q, chosen.length / 2, 2 * 5e-4**2, 2 * 30.0**2)
    typical = MEASURES["rms"](bound[2:])
    assert 0.5 * MARGIN * 1e-3 < typical < 1.5 * MARGIN * 1e-3
    assert "are required" in chosen.reason


def test_auto_on_a_bare_wall_serves_what_is_normal_and_says_so():
    chosen = choose_gauge_length(InMemory(*scans(Scene(Wall(4.0, 3.0)))))
    assert chosen.length == pytest.approx(60 * 0.012, rel=0.15)
    assert "out of reach" in chosen.reason


def test_auto_is_at_most_a_quarter_of_the_object():
    scene = MEASURES["textured"](Wall(2.0, 1.5), Still())
    chosen = choose_gauge_length(InMemory(*scans(scene)), required_strain_sd=5e-5)
    assert chosen.length == pytest.approx(0.5, rel=0.03)
    assert "it would take" in chosen.reason
