# SPDX-License-Identifier: MIT
"""Halves of a scan, a known change put into one of them, and what comes back."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain import CompareConfig
from scanstrain.errors import OptionError
from scanstrain.neighbourhood.result import AffineField
from scanstrain.proof import halves, prove_pair
from scanstrain.proof.batch import still_pair
from scanstrain.proof.change import Change, expected
from scanstrain.synthetic import Scene, Still, Wall, sample_epoch

MEASURES = runpy.run_path(str(Path(__file__).parents[1] / "scenes" / "scene_measures.py"))
CONFIG = CompareConfig(
    neighbourhood={"gauge_length": 0.4, "gauge_spacing": 0.2, "required_strain_sd": 0.005}, strain={"structure": "wall"}
)
CHANGE = Change(np.array([0.2, -0.1, 0.0]), np.array([0.0, 0.0, 1.0]), 0.5, 2e-3, 1e-3)


def gauge(position, length, shape=(0.0, 0.0, 0.0)):
    """One gauge that looks along z."""
    n = len(position)
    return AffineField(
        position=np.asarray(position, float), frame=np.repeat(np.eye(3)[None], n, 0), displacement=np.zeros((n, 3)),
        gradient=np.zeros((n, 3, 2)), hessian=np.zeros((n, 3)), covariance=np.zeros((n, 12, 12)),
        shape=np.tile(shape, (n, 1)), observable=np.ones((n, 12), bool), status=np.zeros(n, np.uint8),
        points=np.full(n, 100), residual_normal=np.ones(n), residual_intensity=np.ones(n), gauge_length=length,
        gauge_spacing=length / 2,
    )  # fmt: skip


@pytest.fixture(scope="module")
def scans():
    """A textured and a bare wall of 3 m, at a spacing that two halves can share."""
    made = {"textured": MEASURES["textured"](Wall(3.0, 3.0), Still()), "bare": Scene(Wall(3.0, 3.0))}
    return {
        name: sample_epoch(scene, deformed=False, spacing=0.012, intensity_noise=20.0, seed=7)
        for name, scene in made.items()
    }


@pytest.fixture(scope="module")
def proofs(scans):
    return {name: prove_pair(*halves(epoch), CONFIG, name=name) for name, epoch in scans.items()}


def test_halves_share_no_point_and_lose_none(scans):
    epoch = scans["textured"]
    first, second = halves(epoch, seed=3)
    assert abs(len(first) - len(second)) <= 1
    together = np.concatenate([first.points, second.points])
    assert np.array_equal(np.unique(together, axis=0), np.unique(epoch.points, axis=0))
    assert len(first.intensity) == len(first)
    assert not np.array_equal(halves(epoch, seed=4)[0].points, first.points)


def test_a_short_gauge_sees_the_derivatives_of_the_change():
    places = np.array([[0.2, -0.1, 0.0], [0.5, 0.3, 0.0]])
    found = expected(gauge(places, 1e-3), CHANGE)
    arm = places - CHANGE.centre
    fade = np.exp(-0.5 * (arm**2).sum(1) / 0.25)
    # d/dx of s x exp(-r^2 / 2 w^2) is s (1 - x^2 / w^2) exp(...), of the bulge -h x / w^2 exp(...)
    assert found[:, 0] == pytest.approx(2e-3 * arm[:, 0] * fade, abs=1e-9)
    assert found[:, 3] == pytest.approx(2e-3 * (1 - arm[:, 0] ** 2 / 0.25) * fade, abs=1e-8)
    assert found[:, 4] == pytest.approx(2e-3 * (-arm[:, 0] * arm[:, 1] / 0.25) * fade, abs=1e-8)
    assert found[:, 7] == pytest.approx(-1e-3 * arm[:, 0] / 0.25 * fade, abs=1e-8)
    assert found[:, 9] == pytest.approx(1e-3 * (arm[:, 0] ** 2 / 0.25 - 1) / 0.25 * fade, rel=1e-4, abs=1e-9)


def test_a_long_gauge_sees_their_average():
    # Mean of (1 - x^2 / w^2) exp(-r^2 / 2 w^2) with the weights of a slope over a disc, by plain numerical integration.
    x, y = (np.indices((801, 801)) - 400) * (0.6 / 400)
    inside = np.hypot(x, y) <= 0.6
    u = 2e-3 * x * np.exp(-0.5 * (x**2 + y**2) / 0.25)
    slope = (u * x)[inside].sum() / (x * x)[inside].sum()
    assert expected(gauge([CHANGE.centre], 1.2), CHANGE)[0, 3] == pytest.approx(slope, rel=0.01)


def test_without_change_the_claims_are_few_and_the_errors_honest(proofs):
    for proof in proofs.values():
        alarms = proof.alarms
        assert alarms.gauges > 150
        assert alarms.share <= 0.05 + 3 * alarms.share_sd
        assert alarms.discoveries == 0
        # some 70 independent gauges: the mean square of one component has a standard deviation of 17 %; sparse halves
        # reach past the rim of a short gauge, which makes stated errors too large rather than too small
        assert all(0.3 < value < 1.5 for value in alarms.scatter.values()), alarms.scatter


def test_what_was_put_in_comes_back(proofs):
    found = {each.name: each for each in proofs["textured"].recovered}
    assert found["strain_u"].values > 400
    assert found["strain_u"].ratio == pytest.approx(1, abs=3 * found["strain_u"].ratio_sd)
    assert found["strain_u"].ratio_sd < 0.2
    assert found["tilt"].coverage > 0.9
    assert proofs["textured"].found > 0.8


def test_a_bare_wall_does_not_answer_for_what_it_cannot_show(proofs):
    found = {each.name: each for each in proofs["bare"].recovered}
    assert found["strain_u"].values == 0
    assert np.isnan(found["strain_u"].coverage)
    assert found["disp_n"].values > 150
    assert "strain_u" not in proofs["bare"].alarms.scatter


def test_the_size_of_the_change_can_be_chosen_and_nonsense_is_refused(scans):
    epoch = scans["bare"]
    with pytest.raises(OptionError, match="strain"):
        prove_pair(*halves(epoch), CONFIG, name="x", strain=-1e-3)
    with pytest.raises(OptionError, match="height"):
        prove_pair(*halves(epoch), CONFIG, name="x", height=float("nan"))


def test_the_pair_without_change_must_be_two_labels_of_the_batch():
    assert still_pair(("a", "b"), ["a", "b", "c"]) == ("a", "b")
    with pytest.raises(OptionError, match="did you mean 'march'"):
        still_pair(("marhc", "b"), ["march", "b"])
    with pytest.raises(OptionError, match="two different"):
        still_pair(("a", "a"), ["a", "b"])
