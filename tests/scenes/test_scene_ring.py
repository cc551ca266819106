# SPDX-License-Identifier: MIT
"""The ovalising lining from scan files to result files: bending of the right sign, and no hoop strain that is none.

Inextensible ring, R = 3 m, u_r = u0 cos 2t outwards, u_t = -(u0 / 2) sin 2t, u0 = 15 mm, t from the springline
(Rayleigh 1894). A reading of the motion along the normal alone would give a hoop strain u_r / R of +5000 microstrain
at the springlines, eight times the strain of bending and of the wrong sign; the mid-line's true strain is nil.
Expected values in `tests/reference/kinematics_values.toml` and `sections_values.toml`.
"""

from __future__ import annotations

import runpy
import tomllib
from pathlib import Path

import numpy as np
import pytest

from scanstrain.synthetic import Lining, Ovalisation, Scene

HERE = Path(__file__).parent
REFERENCE = HERE.parent / "reference"
RING = tomllib.loads((REFERENCE / "kinematics_values.toml").read_text())["ring"]
OVAL = tomllib.loads((REFERENCE / "sections_values.toml").read_text())["ovalising_ring"]
FILES = runpy.run_path(str(HERE / "scene_files.py"))
MEASURES = runpy.run_path(str(HERE / "scene_measures.py"))

ORIGIN = (5120.0, 7340.0, 212.0)
LINING = Lining(RING["radius"], 2.4)
MOTION = Ovalisation(RING["u0"])
BENDING_WITHIN = 0.05
"""Share of the closed form by which the mean over a sector may differ [1]."""
SECTOR = np.deg2rad(6)
PLACES = {"springline": 0.0, "crown": np.pi / 2}
STRAINS = ("strain_xx", "strain_yy", "strain_zz", "strain_xy", "strain_xz", "strain_yz", "strain_1", "strain_2",
           "shear_max", "dilation", "strain_u", "strain_v", "shear_uv")  # fmt: skip
OPTIONS = {
    "gauge_length": 1.0, "gauge_spacing": 0.25, "structure": "tunnel", "thickness": RING["thickness"], "start":
    "identity", "stable": "all", "chords": [[3, 12], [10.5, 1.5]], "section_spacing": 0.8, "section_thickness": 0.6,
    "compare_measures": True,
}  # fmt: skip
"""The whole lining moves; over a closed ring the ovalisation sums up to no rigid motion."""


def run(scene, folder, spacing):
    draw = {"spacing": spacing, "noise": 3e-4, "intensity_noise": 30.0}
    return FILES["compare_drawn"](scene, folder, seed=70, draw=draw, **OPTIONS)


@pytest.fixture(scope="session")
def bare_files(tmp_path_factory):
    """A lining of one colour, smooth."""
    return run(Scene(LINING, MOTION, origin=ORIGIN), tmp_path_factory.mktemp("bare ring"), 0.025)


@pytest.fixture(scope="session")
def textured_files(tmp_path_factory):
    """The same with relief of 1 mm and reflectance of 18 %."""
    plain = MEASURES["textured"](LINING, MOTION)
    scene = Scene(LINING, MOTION, relief=plain.relief, texture=plain.texture, origin=ORIGIN)
    return run(scene, tmp_path_factory.mktemp("textured ring"), 0.018)


@pytest.fixture(params=["bare_files", "textured_files"])
def files(request):
    return request.getfixturevalue(request.param)


def angles(gauges):
    """Angle of every gauge round the ring from the springline [rad]."""
    places = np.stack([gauges[axis] for axis in "xyz"], axis=1) - np.array(ORIGIN)
    return LINING.project(places)[0][:, 0] / LINING.radius


def at(gauges, place, name):
    """Values of a column within 6 degrees of a place of the ring or of the one opposite."""
    turn = np.angle(np.exp(2j * (angles(gauges) - PLACES[place]))) / 2
    values = gauges[name][(np.abs(turn) < SECTOR) & (gauges["status"] == 0)]
    assert len(values) >= 20
    return values


def test_a_bare_lining_gives_no_strain_at_any_point(bare_files):
    for name in STRAINS:
        assert np.isnan(np.asarray(bare_files.cloud[name])).all(), name
        assert np.isnan(bare_files.gauges[name]).all(), name
    assert bare_files.summary["results"]["strain_u"]["share_observable"] == 0
    assert any("not observable" in warning for warning in bare_files.summary["warnings"])


def test_curvature_changes_as_the_closed_form_says(files):
    """Sharper at the springlines: less convex towards the free side, hence the sign of the attribute is turned."""
    change = RING["ring_curvature_change"]
    assert np.mean(at(files.gauges, "springline", "curv_2")) == pytest.approx(-change["springline"], rel=BENDING_WITHIN)
    assert np.mean(at(files.gauges, "crown", "curv_1")) == pytest.approx(-change["crown"], rel=BENDING_WITHIN)


def test_the_intrados_bends_as_the_closed_form_says(files):
    expected = RING["intrados_ue"]
    for place, name in (("springline", "bend_2"), ("crown", "bend_1")):
        found = 1e6 * np.mean(at(files.gauges, place, name))
        assert found == pytest.approx(expected[place], rel=BENDING_WITHIN), place


def test_the_normal_displacement_is_that_of_the_ring(files):
    u0 = RING["u0"]
    assert np.mean(at(files.gauges, "springline", "disp_n")) == pytest.approx(-u0, abs=2e-4)
    assert np.mean(at(files.gauges, "crown", "disp_n")) == pytest.approx(u0, abs=2e-4)


def test_the_mid_line_of_a_textured_lining_keeps_its_length_within_its_interval(textured_files):
    strain = textured_files.result.strain
    hoop, sd = strain.values["strain_u"], strain.certainty["strain_u"].sd
    seen = np.isfinite(hoop)
    assert seen.sum() > 500
    # some 58 patches lie side by side on 45 m^2, so the share of one draw scatters by 3 % about 95 %: two such below
    assert MEASURES["coverage"](hoop[seen], sd[seen]) >= 0.89
    q = LINING.project(strain.position[seen] + textured_files.result.reference.origin - np.array(ORIGIN))[0]
    mean, error = MEASURES["mean_and_error"](hoop[seen], q, OPTIONS["gauge_length"])
    # the exact mean change of length is the mean square of the wall's rotation over 2, 14 microstrain
    assert abs(mean - 14e-6) < 3 * error
    assert error < 100e-6


@pytest.mark.parametrize("place", PLACES)
def test_nothing_like_the_naive_hoop_strain_is_reported(textured_files, place):
    naive = abs(RING["naive_hoop_ue"][place]) * 1e-6
    hoop = at(textured_files.gauges, place, "strain_u")
    assert abs(np.nanmean(hoop)) < 0.05 * naive
    every = textured_files.gauges["strain_u"]
    assert np.nanmax(np.abs(every)) < 0.5 * naive


def test_chords_change_as_the_closed_form_says(files):
    expected, within = OVAL["chords"], OVAL["tolerance_mm"]
    columns = {
        "horizontal": "horizontal_diameter_change",
        "vertical": "vertical_diameter_change",
        "springline_to_crown": "chord_3_12_change_inextensible",
        "shoulder_to_shoulder": "chord_10.5_1.5_change_inextensible",
    }
    for name, column in columns.items():
        found = 1e3 * files.sections[column]
        assert len(found) == 2
        np.testing.assert_allclose(found, expected[name], atol=within, err_msg=name)


def test_on_texture_material_chords_follow_from_displacements_of_gauges(textured_files):
    """Closure with the table of sections: the chord between the shoulders, from vectors of gauges near its ends."""
    gauges = textured_files.gauges
    moved = {}
    for name, angle in (("left", 0.75 * np.pi), ("right", 0.25 * np.pi)):
        near = np.abs(np.angle(np.exp(1j * (angles(gauges) - angle)))) < SECTOR
        # the axis runs east, so right is south: -y
        moved[name] = -np.nanmean(gauges["disp_y"][near & (gauges["status"] == 0)])
    longer = 1e3 * (moved["right"] - moved["left"])
    assert longer == pytest.approx(OVAL["chords"]["shoulder_to_shoulder"], abs=2.0)


def test_the_table_of_gauges_gives_few_directions_of_strains_that_are_noise(textured_files, bare_files):
    """Principal strains of a ring without strain differ by noise alone, so that 5 % of gauges have a direction."""
    gauges = textured_files.gauges
    seen = np.isfinite(gauges["strain_1"])
    assert np.isfinite(gauges["direction_1"][seen]).mean() < 0.15
    assert np.isnan(bare_files.gauges["direction_1"]).all()
    assert np.isfinite(bare_files.gauges["bend_u"]).any()
    assert np.isnan(bare_files.gauges["membrane_u"]).all()


def test_other_measures_stand_in_the_summary_where_they_are_asked_for(textured_files, bare_files):
    measure = textured_files.summary["strain_measure"]
    assert {measure["used"], *(row["measure"] for row in measure["compared"])} == {
        "small", "green_lagrange", "almansi", "hencky", "biot",
    }  # fmt: skip
    # strains up to s = 0.2 % differ by s^2 at most
    assert all(abs(row["difference"]) < 1e-5 for row in measure["compared"])
    assert all(row["gauge"] is None for row in bare_files.summary["strain_measure"]["compared"])


def test_the_summary_says_what_noise_adds_to_principal_values(textured_files):
    """Mean of the larger principal strain of pure noise: 0.886 standard errors of a normal strain (closed form)."""
    results = textured_files.summary["results"]
    assert results["strain_1"]["noise_bias"] > 0 > results["strain_2"]["noise_bias"]
    assert results["strain_u"]["noise_bias"] is None
    sd = np.nanmedian(textured_files.result.strain.certainty["strain_u"].sd)
    assert results["strain_1"]["noise_bias"] == pytest.approx(0.886 * sd, rel=0.15)
    mean = np.nanmean(textured_files.gauges["strain_1"])
    assert mean == pytest.approx(results["strain_1"]["noise_bias"], rel=0.25)
