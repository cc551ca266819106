# SPDX-License-Identifier: MIT
"""Figures: what they show, in which colours, and that nothing in a label or a result breaks them."""

import io
import runpy
import xml.etree.ElementTree as ET
from dataclasses import replace
from pathlib import Path

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.collections import LineCollection
from matplotlib.image import imread
from matplotlib.quiver import Quiver

from scanstrain.attributes import BY_NAME
from scanstrain.errors import OptionError
from scanstrain.outputs.colour import NOT_OBSERVABLE, NOT_SIGNIFICANT, choose_scale, colours
from scanstrain.outputs.figures import FIGURES, draw_all, draw_map, draw_rates, draw_section, draw_series, lay_out
from scanstrain.outputs.figures.layout import map_directions
from scanstrain.outputs.figures.style import SET_ASIDE
from scanstrain.zones import Unrolled

MAKE = runpy.run_path(str(Path(__file__).parent.parent / "outputs_result.py"))
PNG = b"\x89PNG\r\n\x1a\n"
HOSTILE = '<script>alert("x")</script> $\\frac{ & Böschung \x00\n' + "y" * 200


class Structure:
    def __init__(self, name):
        self.name = name

    def model_dump(self, mode):
        return {"strain": {"structure": self.name}}


@pytest.fixture(scope="module")
def small():
    return MAKE["make_result"]()


def placed(small, position, normal, up, **values):
    """A result with gauges at given places; values are 0 and certain to 1 mm, 1 mrad, 100 µε unless given."""
    g = len(position)
    frame = np.stack([np.cross(up, normal), up, normal], axis=2)
    table = {name: np.zeros(g) for name in small.strain.values}
    for name in table:
        table[name] = np.full(g, {"m": 1e-3, "rad": 1e-3, "1": 1e-4}.get(BY_NAME[name].unit, 1e-3))
        if not name.endswith("_sd"):
            table[name] = np.zeros(g)
    table["observed"] = np.full(g, 127, np.uint8)
    table.update({name: np.asarray(value) for name, value in values.items() if name in table})
    limits = {"disp_n": 2e-3, "tilt": 2e-3, "spin": 2e-3, "strain": 2e-4, "curvature": 2e-3}
    strain = replace(
        small.strain, position=position, normal=normal, axes=frame[:, :, :2], values=table,
        status=np.zeros(g, np.uint8), detection_limit={k: np.full(g, v) for k, v in limits.items()}, gauge_spacing=0.1,
        details={"direction_1": values.get("direction_1", np.full(g, np.nan))},
    )  # fmt: skip
    field = replace(
        small.field, position=position, frame=frame, displacement=np.zeros((g, 3)),
        gradient=values.get("gradient", np.zeros((g, 3, 2))), covariance=np.tile(np.eye(12) * 1e-8, (g, 1, 1)),
        status=strain.status,
    )  # fmt: skip
    registration = replace(small.registration, covariance=np.eye(6) * 1e-12)
    points = {name: np.asarray(value)[:1].repeat(300) for name, value in table.items()}
    points["stable"] = registration.stable.astype(np.uint8)
    return replace(small, strain=strain, field=field, registration=registration, points=points)


def wall(small, n=12, **values):
    """A wall of n x n gauges, 0.1 m apart, seen by somebody who looks along +y."""
    x, z = (a.ravel() * 0.1 for a in np.meshgrid(np.arange(n), np.arange(n), indexing="ij"))
    normal = np.tile([0.0, -1.0, 0.0], (n * n, 1))
    up = np.tile([0.0, 0.0, 1.0], (n * n, 1))
    return placed(small, np.column_stack([x, np.zeros(n * n), z]), normal, up, **values)


def lining(small, **values):
    """A lining of radius 2 m about an axis along +x at height 1 m, clock angles of -1.5 to 1.5 rad."""
    x, t = (a.ravel() for a in np.meshgrid(np.arange(12) * 0.1, np.linspace(-1.5, 1.5, 61), indexing="ij"))
    # looking along +x with z up, the right-hand side is -y
    away = np.column_stack([np.zeros(len(x)), -np.sin(t), np.cos(t)])
    position = 2.0 * away + np.column_stack([x, np.zeros(len(x)), np.ones(len(x))])
    result = placed(small, position, -away, np.tile([1.0, 0.0, 0.0], (len(x), 1)), **values)
    return replace(result, config=Structure("tunnel")), x, t


def pixel(picture, x, y):
    """Colour of the first panel of a map at a place, 8 bit."""
    image = picture.figure.axes[0].images[0]
    left, right, bottom, top = image.get_extent()
    pixels = np.asarray(image.get_array())
    column = int((x - left) / (right - left) * pixels.shape[1])
    row = int((top - y) / (top - bottom) * pixels.shape[0])
    return pixels[row, column].tolist()


def collections(picture, kind):
    return [part for axes in picture.figure.axes for part in axes.collections if isinstance(part, kind)]


@pytest.fixture(scope="module")
def drawn(small):
    return dict(draw_all(small, limits={"disp_n": 5e-3}))


def test_every_figure_that_applies_is_drawn_in_the_order_of_the_registry(small, drawn):
    empty = {
        f"map_{name}" for name, values in small.strain.values.items() if not np.isfinite(values.astype(float)).any()
    }
    # no displacement vector is observable in this result, and too few gauges for a distribution
    left_out = empty | {"displacement_arrows", "standardised"}
    assert list(drawn) == [name for name in FIGURES if name not in left_out]
    assert "map_disp_n" in drawn
    for name in ("displacement_arrows", "standardised", "map_spin"):
        assert FIGURES[name](small) is None


@pytest.mark.parametrize("name", ["map_disp_n", "map_significance", "strain_crosses", "observability", "stable_ground"])
def test_the_same_figure_gives_the_same_bytes(small, drawn, name):
    again = draw_map(small, "disp_n", limits=5e-3) if name == "map_disp_n" else FIGURES[name](small)
    assert again.png() == drawn[name].png()
    vector = drawn[name].svg()
    assert again.svg() == vector
    assert ET.fromstring(vector).tag.endswith("svg")


def test_every_figure_is_a_png_with_words(drawn):
    for picture in drawn.values():
        assert picture.png().startswith(PNG)
        for text in (picture.title, picture.alt, picture.caption):
            assert text
            assert "_" not in text
        assert picture.alt.endswith(".")


def test_the_users_own_settings_of_matplotlib_change_nothing(small):
    plain = draw_map(small, "disp_n").png()
    with mpl.rc_context({"font.size": 30, "text.usetex": True, "axes.facecolor": "red", "savefig.facecolor": "red"}):
        assert draw_map(small, "disp_n").png() == plain


@pytest.mark.parametrize("label", [HOSTILE, "$\\frac{$", "東 \x07", "--></svg>", ""])
def test_labels_of_any_kind_do_no_harm(small, label, recwarn):
    hostile = replace(
        small, reference=replace(small.reference, label=label), current=replace(small.current, label=label)
    )
    picture = draw_map(hostile, "disp_n")
    tree = ET.fromstring(picture.svg())
    assert not [element for element in tree.iter() if str(element.tag).endswith("script")]
    assert picture.png().startswith(PNG)
    assert not set(picture.caption) & {"\x00", "\x07", "\n"}
    assert "y" * 100 not in picture.caption
    assert [str(each.message) for each in recwarn if "Glyph" in str(each.message)] == []


def test_an_attribute_without_values_has_no_map_and_an_unknown_one_is_named(small):
    assert draw_map(small, "bend_1") is None
    assert draw_map(small, "status") is None
    with pytest.raises(OptionError, match="did you mean 'disp_n'"):
        draw_map(small, "dispn")


@pytest.mark.parametrize("count", [1, 3])
def test_a_handful_of_gauges_draws(small, count):
    few = wall(small, 2, discovery=np.ones(4))
    rows = slice(0, count)
    strain = replace(
        few.strain, position=few.strain.position[rows], normal=few.strain.normal[rows], axes=few.strain.axes[rows],
        values={name: values[rows] for name, values in few.strain.values.items()}, status=few.strain.status[rows],
        detection_limit={name: limit[rows] for name, limit in few.strain.detection_limit.items()},
    )  # fmt: skip
    field = replace(
        few.field, frame=few.field.frame[rows], gradient=few.field.gradient[rows], covariance=few.field.covariance[rows]
    )
    for structure in ("wall", "tunnel", "free"):
        result = replace(few, strain=strain, field=field, config=Structure(structure))
        assert draw_map(result, "disp_n").figure.axes
    if count == 1:
        assert len(list(draw_all(result))) == len(FIGURES) - 1  # too few for a distribution


def test_cells_have_the_colours_of_the_clouds(small):
    disp = np.tile(np.linspace(-6e-3, 6e-3, 12)[:, None], (1, 12)).ravel()
    disp[7] = np.nan
    changed = np.ones(144, np.uint8)
    changed[40] = 0
    result = wall(small, disp_n=disp, discovery=changed)
    picture = draw_map(result, "disp_n", limits=5e-3)
    scale = choose_scale(BY_NAME["disp_n"], disp, limits=5e-3)
    expected = colours(disp, scale) // 257
    for gauge in (0, 30, 100, 143):
        x, _, z = result.strain.position[gauge]
        assert pixel(picture, x, z + 100.0) == expected[gauge].tolist()
    x, _, z = result.strain.position[40]
    assert pixel(picture, x, z + 100.0) == list(NOT_SIGNIFICANT)
    # this one changed in another component: 0.5 mm lie within the 2 mm that a gauge can tell
    x, _, z = result.strain.position[66]
    assert pixel(picture, x, z + 100.0) == list(NOT_SIGNIFICANT)
    shown = imread(io.BytesIO(picture.png()))[..., :3]
    found = {tuple(row) for row in np.round(255 * shown[::2, ::2]).astype(int).reshape(-1, 3).tolist()}
    assert {tuple(expected[0].tolist()), tuple(expected[100].tolist()), NOT_SIGNIFICANT} <= found
    whole = draw_map(result, "disp_n", limits=5e-3, only_significant=False)
    assert pixel(whole, x, z + 100.0) == expected[66].tolist()


def test_what_is_not_observable_is_hatched_in_its_grey(small):
    disp = np.zeros(144)
    disp[60:] = np.nan
    result = wall(small, disp_n=disp)
    image = np.asarray(draw_map(result, "disp_n").figure.axes[0].images[0].get_array())
    half = image[:, 2 * image.shape[1] // 3 :].reshape(-1, 3)
    hatched = (half == NOT_OBSERVABLE).all(axis=1).mean()
    assert 0.05 < hatched < 0.3
    assert not (half == NOT_SIGNIFICANT).all(axis=1).any()


def test_a_pair_without_change_is_grey_and_says_so(small):
    noise = np.random.default_rng(5).normal(0, 1e-3, 144)
    picture = draw_map(wall(small, disp_n=noise), "disp_n")
    assert "Nothing above the noise at any of 144 gauges; 95 % detection limit 2.0 mm" in picture.alt
    pixels = np.asarray(picture.figure.axes[0].images[0].get_array()).reshape(-1, 3)
    assert set(map(tuple, np.unique(pixels, axis=0).tolist())) == {NOT_SIGNIFICANT, (255, 255, 255)}


def test_the_largest_value_is_the_one_that_stands_out_in_a_region(small):
    disp, changed = np.zeros(144), np.zeros(144, np.uint8)
    disp[[65, 66, 77]] = [7e-3, 8e-3, 6e-3]
    # a single gauge far away is larger, and one in the region is larger but not certain
    disp[143], disp[78] = 20e-3, 30e-3
    sd = np.full(144, 1e-3)
    sd[78] = 20e-3
    changed[[65, 66, 77, 78, 143]] = 1
    picture = draw_map(wall(small, disp_n=disp, disp_n_sd=sd, discovery=changed), "disp_n")
    assert "5 of 144 gauges changed" in picture.alt
    assert "largest +8.0 ± 2.0 mm" in picture.alt
    assert "along the wall 0.50 m, height 100.60 m" in picture.alt


def test_a_wall_runs_to_the_right_of_somebody_who_faces_it(small):
    result = wall(small)
    layout = lay_out(result)
    np.testing.assert_allclose(layout.along, result.strain.position[:, 0], atol=1e-12)
    np.testing.assert_allclose(layout.across, result.strain.position[:, 2] + 100.0, atol=1e-12)
    right, up = map_directions(result.strain.position, result.strain.normal, layout, 0.1)
    np.testing.assert_allclose(right, np.tile([1.0, 0, 0], (144, 1)), atol=1e-9)
    np.testing.assert_allclose(up, np.tile([0, 0, 1.0], (144, 1)), atol=1e-9)


def test_what_stands_before_a_wall_hides_it(small):
    result = wall(small)
    position, normal = result.strain.position.copy(), result.strain.normal.copy()
    position[30] = position[31] + [0.01, -0.5, 0.0]
    normal[50] = [1.0, 0.0, 0.0]
    layout = lay_out(replace(result, strain=replace(result.strain, position=position, normal=normal)))
    hidden = np.flatnonzero(~layout.shown)
    assert 31 in hidden
    assert 50 in hidden
    assert 30 not in hidden


def test_a_lining_is_unrolled_by_chainage_and_arc_clockwise_from_the_crown(small):
    result, x, t = lining(small)
    layout = lay_out(result)
    assert layout.radius == pytest.approx(2.0, abs=1e-6)
    np.testing.assert_allclose(layout.along, x, atol=1e-6)
    np.testing.assert_allclose(layout.across, 2.0 * t, atol=1e-5)
    right, up = map_directions(result.strain.position, result.strain.normal, layout, 0.1)
    tangent = np.column_stack([np.zeros(len(t)), -np.cos(t), -np.sin(t)])
    np.testing.assert_allclose(right, np.tile([1.0, 0, 0], (len(t), 1)), atol=1e-3)
    np.testing.assert_allclose(up, tangent, atol=0.03)  # edges see neighbours on one side only


def test_a_floor_does_not_pull_the_circle_of_a_lining(small):
    result, _, t = lining(small)
    position, normal = result.strain.position.copy(), result.strain.normal.copy()
    floor = np.abs(t) > 1.2
    position[floor, 2], normal[floor] = 0.4, [0.0, 0.0, 1.0]
    layout = lay_out(replace(result, strain=replace(result.strain, position=position, normal=normal)))
    assert layout.radius == pytest.approx(2.0, abs=0.01)


def test_coordinates_of_the_structure_take_the_place_of_our_own(small):
    result, x, t = lining(small)
    given = Unrolled(along=x + 500.0, across=2.0 * t, clock=t)
    layout = lay_out(result, given)
    np.testing.assert_array_equal(layout.along, given.along)
    assert layout.radius == pytest.approx(2.0)
    picture = draw_map(result, "disp_n", unrolled=given)
    assert picture.figure.axes[0].get_xlim()[0] == pytest.approx(500.0, abs=0.2)
    assert draw_map(result, "disp_n", unrolled=layout).png() == picture.png()


def test_a_bulkhead_and_a_cabinet_are_kept_off_the_unrolled_lining(small):
    result, x, t = lining(small)
    y, z = (a.ravel() * 0.1 for a in np.meshgrid(np.arange(-8, 9), np.arange(2, 19), indexing="ij"))
    bulkhead = np.column_stack([np.full(len(y), 1.1), y, z])
    cabinet = np.array([[0.5, 0.0, 2.5]])  # half a metre below the crown, which it hides
    position = np.concatenate([result.strain.position, bulkhead, cabinet])
    normal = np.concatenate([result.strain.normal, np.tile([-1.0, 0, 0], (len(y), 1)), [[0.0, 0.0, -1.0]]])
    clock = np.concatenate([t, np.arctan2(-y, z - 1.0), [0.0]])
    given = Unrolled(along=np.concatenate([x, bulkhead[:, 0], [0.5]]), across=2.0 * clock, clock=clock)
    strain = replace(result.strain, position=position, normal=normal)
    shown = lay_out(replace(result, strain=strain), given).shown
    count = len(t)
    assert shown[:count].mean() > 0.9
    assert shown[count:-1].mean() < 0.1
    assert shown[-1]
    assert not shown[:count][(np.abs(x - 0.5) < 0.01) & (np.abs(t) < 0.01)].any()


def test_a_free_object_is_shown_along_its_two_principal_directions(small):
    result = replace(wall(small), config=Structure("free"))
    stretched = result.strain.position * [3.0, 1.0, 1.0]
    layout = lay_out(replace(result, strain=replace(result.strain, position=stretched)))
    np.testing.assert_allclose(layout.along, stretched[:, 0] - 1.65, atol=1e-9)
    assert layout.horizontal == "along (1.00, 0.00, 0.00) [m]"
    assert "principal directions" in layout.view


def test_only_vectors_outside_their_ellipse_become_arrows(small):
    # standard error 0.1 mm in each direction: the ellipse ends at 0.245 mm
    along = np.full(144, 0.24e-3)
    along[60:66] = 0.25e-3
    result = wall(small, disp_x=along, discovery=np.ones(144, np.uint8))
    picture = FIGURES["displacement_arrows"](result)
    assert "Significant at 6 of the 144 gauges shown" in picture.alt
    arrows = collections(picture, Quiver)[0]
    assert (arrows.U > 0).all()
    np.testing.assert_allclose(arrows.V, 0.0, atol=1e-12)
    assert "No significant vector" in FIGURES["displacement_arrows"](wall(small, disp_x=along)).alt


def test_tilt_arrows_point_where_the_normal_leans(small):
    gradient = np.zeros((144, 3, 2))
    gradient[:, 2, 1] = 5e-3  # the top moved towards the viewer, so the normal leans downwards
    result = wall(small, gradient=gradient, tilt=np.full(144, 5e-3), discovery=np.ones(144, np.uint8))
    arrows = collections(FIGURES["tilt_arrows"](result), Quiver)[0]
    np.testing.assert_allclose(arrows.U, 0.0, atol=1e-9)
    np.testing.assert_allclose(arrows.V, -5e-3, rtol=1e-6)


def test_pure_shear_gives_crosses_at_half_a_right_angle(small):
    shear = 1e-3
    result = wall(
        small, strain_1=np.full(144, shear), strain_2=np.full(144, -shear), shear_uv=np.full(144, shear),
        strain_1_sd=np.full(144, 1e-4), strain_2_sd=np.full(144, 1e-4), discovery=np.ones(144, np.uint8),
        direction_1=np.full(144, np.pi / 4),
    )  # fmt: skip
    lines = collections(FIGURES["strain_crosses"](result), LineCollection)[0]
    step = np.array([segment[1] - segment[0] for segment in lines.get_segments()])
    slope = step[:, 1] / step[:, 0]
    half = len(slope) // 2
    np.testing.assert_allclose(slope[:half], 1.0, rtol=1e-6)  # elongation along u = v
    np.testing.assert_allclose(slope[half:], -1.0, rtol=1e-6)
    assert not (lines.get_colors()[0] == lines.get_colors()[-1]).all()


def test_equal_principal_strains_have_no_cross(small):
    """Both are significant, but they have no direction."""
    result = wall(
        small, strain_1=np.full(144, 1e-3), strain_2=np.full(144, 1e-3), discovery=np.ones(144, np.uint8),
        strain_1_sd=np.full(144, 1e-4), strain_2_sd=np.full(144, 1e-4), direction_1=np.full(144, np.nan),
    )  # fmt: skip
    assert collections(FIGURES["strain_crosses"](result), LineCollection) == []


def test_stable_ground_follows_the_points(small):
    picture = FIGURES["stable_ground"](small)
    assert "62 % of the reference points on stable ground" in picture.alt
    # the first 186 of 300 points are stable: x below 1.24 m, the gauges at x = 0.25 and 0.75
    assert pixel(picture, 1.0, 100.25) == pixel(picture, 1.5, 100.25) == list(SET_ASIDE)
    # four detection limits of 0.29 mm, rounded up: the scale ends at 2 mm
    scale = choose_scale(BY_NAME["disp_n"], np.zeros(1), limits=2e-3)
    assert pixel(picture, 0.0, 100.25) == (colours(np.array([6.2e-3]), scale) // 257)[0].tolist()
    assert pixel(picture, 0.5, 100.25) == (colours(np.array([0.2e-3]), scale) // 257)[0].tolist()


def test_observability_states_the_share_of_every_component(small):
    alt = FIGURES["observability"](small).alt
    assert "normal displacement 92 %" in alt  # 11 of 12
    assert "in-plane strain 50 %" in alt


def test_the_histogram_counts_what_lies_beyond_the_interval(small):
    score = np.zeros(144)
    score[:36] = 2.5
    result = wall(small, disp_n=score * 1e-3)
    result = replace(result, points={**result.points, "stable": np.zeros(300, np.uint8)})
    assert "25 % of the 144 gauges of the whole map" in FIGURES["standardised"](result).alt


def test_a_section_draws_the_change_as_many_times_larger_as_it_says():
    theta = np.linspace(-1.5, 1.5, 31)
    change = np.where(np.abs(theta) < 0.5, 10e-3, 0.0)
    picture = draw_section(theta, np.full(31, 2.0), change, np.full(31, 1e-3), exaggeration=50, title="Section 4")
    assert "50 times larger" in picture.caption
    assert "+10.0 ± 2.0 mm" in picture.alt
    moved = collections(picture, LineCollection)[1].get_segments()
    lengths = [np.linalg.norm(place) for segment in moved for place in segment]
    assert min(lengths) == pytest.approx(2.0 - 50 * 10e-3)  # inwards
    assert max(lengths) == pytest.approx(2.0)


def test_noise_on_a_section_does_not_look_like_movement():
    rng = np.random.default_rng(2)
    theta = np.linspace(-1.5, 1.5, 31)
    change = np.clip(rng.normal(0, 1e-4, 31), -1.9e-4, 1.9e-4)
    picture = draw_section(theta, np.full(31, 2.0), change, np.full(31, 1e-4))
    assert "No change above 0.20 mm" in picture.alt
    moved = np.concatenate(collections(picture, LineCollection)[1].get_segments())
    assert np.abs(np.linalg.norm(moved, axis=1) - 2.0).max() < 0.15


@pytest.mark.parametrize(
    ("arrays", "options", "said"),
    [
        (([0.0, 1.0], [2.0], [0.0, 0.0], [1.0, 1.0]), {}, "of one length"),
        (([], [], [], []), {}, "of one length"),
        (([0.0], [2.0], [0.0], [1.0]), {"exaggeration": 0.0}, "a number above 0"),
    ],
)
def test_a_section_that_does_not_fit_is_refused(arrays, options, said):
    with pytest.raises(OptionError, match=said):
        draw_section(*arrays, **options)


def test_a_section_of_one_place_or_without_values_draws():
    assert draw_section([0.0], [2.0], [1e-3], [1e-4]).png().startswith(PNG)
    unknown = draw_section([0.0, 1.0], [2.0, 2.0], [np.nan, np.nan], [np.nan, np.nan])
    assert "No change is known" in unknown.alt
    assert unknown.svg()


def test_a_series_has_bars_of_95_per_cent_in_the_unit_for_a_person():
    picture = draw_series(
        ["2031-09-12", "2031-03-04"], [[-5e-3, 0.0]], [[1e-3, 0.0]], [HOSTILE],
        attribute=BY_NAME["disp_n"], title=HOSTILE,
    )  # fmt: skip
    assert picture.alt.endswith("−5.0 ± 2.0 mm.")  # of the latest date, wherever it stands in the list
    bars = np.concatenate(collections(picture, LineCollection)[0].get_segments())
    assert bars[:, 1].min() == pytest.approx(-5 - 1.96)
    assert bars[:, 1].max() == pytest.approx(0.0)
    assert ET.fromstring(picture.svg()) is not None


@pytest.mark.parametrize(
    ("dates", "values", "sd", "labels", "said"),
    [
        (["2031-03-04"], [[1.0, 2.0]], [[1.0]], ["a"], "one to 10 labels"),
        (["2031-03-04"], [[1.0]], [[1.0, 2.0]], ["a"], "one to 10 labels"),
        (["2031-03-04"], [[1.0]] * 11, [[1.0]] * 11, [str(k) for k in range(11)], "one to 10 labels"),
        (["4 March"], [[1.0]], [[1.0]], ["a"], "year-month-day"),
    ],
)
def test_a_series_that_does_not_fit_is_refused(dates, values, sd, labels, said):
    with pytest.raises(OptionError, match=said):
        draw_series(dates, values, sd, labels, attribute=BY_NAME["disp_n"], title="t")


def test_a_rate_is_grey_where_its_interval_contains_zero(small):
    result = wall(small)
    rate = np.full(144, 1.9e-3)
    rate[77] = 3e-3
    picture = draw_rates(
        lay_out(result), rate, np.full(144, 1e-3), name="disp_n", title="Rate", spacing=0.1, limits=5e-3
    )
    assert "zero at 1 of 144 gauges; largest +3.0 ± 2.0 mm per year" in picture.alt
    x, _, z = result.strain.position[77]
    scale = choose_scale(BY_NAME["disp_n"], rate, limits=5e-3)
    assert pixel(picture, x, z + 100.0) == (colours(rate[77:78], scale) // 257)[0].tolist()
    assert pixel(picture, 0.0, 100.0) == list(NOT_SIGNIFICANT)
    with pytest.raises(OptionError, match="144 rates"):
        draw_rates(lay_out(result), rate[:3], rate[:3], name="disp_n", title="Rate", spacing=0.1)


def test_a_long_lining_is_cut_into_strips_of_one_scale(small):
    result, x, t = lining(small)
    given = Unrolled(along=x * 200.0, across=2.0 * t, clock=t)
    picture = draw_map(result, "disp_n", unrolled=given)
    panels = [axes for axes in picture.figure.axes if axes.images and axes.get_ylim()[0] < -2.9]
    assert len(panels) > 3
    spans = [np.ptp(axes.get_xlim()) / axes.get_position().width for axes in panels]
    np.testing.assert_allclose(spans, spans[0])
    assert picture.figure.get_figheight() < 11.0
