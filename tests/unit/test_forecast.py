# SPDX-License-Identifier: MIT
"""What a plan is said to show, against closed forms, brute force, an independent bound, and a fit of scans."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from scanstrain.errors import OptionError
from scanstrain.forecast import ALLOWANCE_IN_PLANE, ALLOWANCE_NORMAL, SetUp, disc_errors, forecast, tangential_error
from scanstrain.synthetic import Scene, Wall, normal_displacement_bound, sample_epoch

PLAN = SetUp(spacing=0.005, noise=0.001, gauge_length=0.5, shared=0.0)


def places(plan):
    """Points of a square grid on the disc of a gauge [m]."""
    half = int(plan.gauge_length / 2 / plan.spacing)
    xy = np.stack(np.meshgrid(*[np.arange(-half, half + 1) * plan.spacing] * 2), axis=-1).reshape(-1, 2)
    return xy[np.hypot(*xy.T) <= plan.gauge_length / 2]


@pytest.mark.parametrize("length", [0.25, 0.5, 1.0, 2.0])
@pytest.mark.parametrize("point", [0.5e-3, 2e-3, 10e-3])
def test_strain_follows_the_closed_form_of_a_disc(length, point):
    # sd(e_xx) = 4 sqrt(2) s / (L sqrt N) with N = (pi / 4) (L / p)^2: second moment R^2 / 4 of a disc, two epochs
    plan = replace(PLAN, gauge_length=length, contrast=0.03 / (np.sqrt(2) * point))
    count = np.pi / 4 * (length / 0.005) ** 2
    expected = 4 * np.sqrt(2) * point / (length * np.sqrt(count))
    assert tangential_error(plan) == pytest.approx(point)
    # A grid of points fills the disc to within its rim: 0.4 % of the area at 50 points across.
    found = {each.name: each.sd for each in forecast(plan)}
    assert found["strain"] / ALLOWANCE_IN_PLANE == pytest.approx(expected, rel=0.005)
    assert found["spin"] == pytest.approx(found["strain"] / np.sqrt(2))


def test_without_shared_noise_it_is_the_bound_of_two_quadratic_surfaces():
    xy = places(PLAN)
    bound = normal_displacement_bound(xy, xy, reference_variance=1e-6, current_variance=1e-6, order=2)
    expected = ALLOWANCE_NORMAL * np.sqrt(np.diag(bound))[[0, 1, 3]]
    assert [each.sd for each in forecast(PLAN)[:3]] == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("order", [0, 1, 2])
def test_shared_noise_as_by_the_whole_covariance_matrix(order):
    plan = replace(PLAN, spacing=0.02, shared=0.3, shared_length=0.07)
    xy = places(plan)
    distance = np.hypot(*(xy[:, None] - xy[None]).transpose(2, 0, 1))
    S = 0.7 * np.eye(len(xy)) + 0.3 * np.exp(-distance / 0.07)
    x, y = xy.T / 0.25
    A = np.stack([np.ones_like(x), x, y, x * x / 2, x * y, y * y / 2], axis=1)[:, : (1, 3, 6)[order]]
    estimate = np.linalg.pinv(A)
    assert disc_errors(plan, order=order) == pytest.approx(np.sqrt(np.diag(estimate @ S @ estimate.T)), rel=1e-6)


def test_a_small_share_of_shared_noise_costs_a_factor():
    # 489 points with fully shared noise over 0.1 m in a 0.5 m gauge weigh as 6; 10 % shared makes the error of the
    # mean 3 times, that of the strain 2.3 times as large (a Monte Carlo run apart from this code).
    plan = replace(PLAN, spacing=0.02, shared=1.0, shared_length=0.1)
    assert disc_errors(plan, order=0)[0] ** -2 == pytest.approx(6, abs=0.5)
    some = disc_errors(replace(plan, shared=0.1), order=1) / disc_errors(replace(plan, shared=0.0), order=1)
    assert some[:2] == pytest.approx([3.0, 2.3], abs=0.07)


def test_the_fit_of_two_scans_errs_as_was_forecast():
    from scanstrain.neighbourhood import fit_affine

    scene, noise = Scene(Wall(2.0, 2.0)), 0.002
    pair = [sample_epoch(scene, deformed=False, spacing=0.01, noise=noise, seed=seed) for seed in (3, 4)]
    field = fit_affine(*pair, gauge_length=0.4, gauge_spacing=0.2)
    found = forecast(SetUp(spacing=0.01, noise=noise, gauge_length=0.4, shared=0.0))
    inside = (np.abs(field.position[:, [0, 2]] + pair[0].origin[[0, 2]] - 1.0) < 0.75).all(axis=1)
    for name, values in zip(
        ("normal displacement", "tilt", "change of curvature"),
        (field.displacement[:, 2], field.gradient[:, 2], field.hessian[:, [0, 2]]),
        strict=True,
    ):
        spread = np.sqrt(np.mean(values[inside] ** 2))
        plan = next(each.sd for each in found if each.name == name)
        # 49 gauges, half of them independent: 15 % of a standard deviation, twice. Predictions reach past the rim of so
        # short a gauge by some cells, 7 % of its radius, which a curvature feels with the third power.
        assert 0.6 < spread / (plan / ALLOWANCE_NORMAL) < 1.3


def test_the_datum_counts_for_displacements_only():
    plain, with_datum = forecast(replace(PLAN, contrast=5.0)), forecast(replace(PLAN, contrast=5.0, datum_sd=0.01))
    for before, after in zip(plain, with_datum, strict=True):
        grew = after.sd > 1.5 * before.sd
        assert grew == ("displacement" in before.name)


def test_bending_strain_is_half_the_thickness_times_the_change_of_curvature():
    found = {each.name: each for each in forecast(replace(PLAN, thickness=0.3))}
    assert found["bending strain at the face"].sd == pytest.approx(0.15 * found["change of curvature"].sd)
    assert found["tilt"].limit == pytest.approx(1.96 * found["tilt"].sd)
    assert found["tilt"].with_power == pytest.approx(2.8 * found["tilt"].sd)


@pytest.mark.parametrize(("change", "word"), [({}, "bare"), ({"contrast": 5.0, "texture_length": 0.008}, "narrower")])
def test_what_a_surface_cannot_show_has_a_reason_and_no_number(change, word):
    hidden = forecast(replace(PLAN, **change))[3:]
    assert [each.name for each in hidden] == ["in-plane displacement", "strain", "spin"]
    assert all(each.sd is None and each.limit is None and each.with_power is None for each in hidden)
    assert all(word in each.reason for each in hidden)


@pytest.mark.parametrize(
    ("change", "word"),
    [
        ({"spacing": 5.0}, "gauge_length"),
        ({"spacing": 1e-5}, "gauge_length"),
        ({"noise": 0.0}, "noise"),
        ({"noise": float("nan")}, "noise"),
        ({"shared": 1.5}, "shared"),
        ({"contrast": -1.0}, "contrast"),
        ({"thickness": 0.0}, "thickness"),
        ({"datum_sd": -0.1}, "datum_sd"),
    ],
)
def test_nonsense_is_refused_with_its_name(change, word):
    with pytest.raises(OptionError, match=word):
        replace(PLAN, **change)
