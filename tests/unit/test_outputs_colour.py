# SPDX-License-Identifier: MIT
"""Colours and their keys."""

import re

import numpy as np
import pytest
from cmcrameri import cm

from scanstrain.attributes import ATTRIBUTES, BY_NAME
from scanstrain.errors import OptionError
from scanstrain.outputs.colour import NOT_OBSERVABLE, NOT_SIGNIFICANT, choose_scale, colours, round_up
from scanstrain.outputs.colour_maps import _ROUND, SUITED
from scanstrain.outputs.key import write_key
from scanstrain.outputs.notes import KeyNotes

MM = 1e-3


def eight_bit(rgb):
    assert rgb.dtype == np.uint16
    assert (rgb % 257 == 0).all()
    return (rgb // 257).tolist()


def table(name, index):
    return np.round(255 * np.array(cm.cmaps[name](index))[:3]).astype(int).tolist()


def test_signed_values_take_the_ends_and_the_middle_of_the_diverging_table():
    scale = choose_scale(BY_NAME["disp_n"], np.zeros(1), limits=5 * MM)
    low, tiny_minus, tiny_plus, high, beyond = eight_bit(
        colours(np.array([-5, -1e-6, 1e-6, 5, 80]) * MM, scale)
    )  # fmt: skip
    assert low == table("vik", 0)
    assert high == beyond == table("vik", 255)
    # either side of zero is the palest pair of the table, one step apart
    assert tiny_minus == table("vik", 127)
    assert tiny_plus == table("vik", 128)
    assert min(tiny_minus + tiny_plus) > 200


def test_opposite_values_stand_opposite_in_the_table():
    scale = choose_scale(BY_NAME["spin"], np.array([-3e-3, 1e-3]))
    values = np.linspace(1e-5, 2.9e-3, 50)
    assert (scale.rows(values) + scale.rows(-values) == 255).all()


@pytest.mark.parametrize(
    ("name", "values", "low", "high"),
    [
        ("disp_n", np.linspace(-4.1, 4.1, 1001) * MM, -5 * MM, 5 * MM),
        ("disp_n", np.full(10, -0.3 * MM), -0.5 * MM, 0.5 * MM),
        ("shear_max", np.full(10, 640e-6), 0, 1000e-6),
        ("tilt_sd", np.full(10, 0.02e-3), 0, 0.02e-3),
        ("disp_n", np.full(10, np.nan), -1 * MM, 1 * MM),
        ("strain_1", np.zeros(10), -1e-6, 1e-6),
        ("gauge_points", np.full(10, 812, np.uint16), 0, 1000),
        ("significance", np.full(10, 0.5), 1e-4, 1),
    ],
)
def test_limits_that_nobody_gave_are_round_numbers_in_the_unit_for_a_person(name, values, low, high):
    scale = choose_scale(BY_NAME[name], values)
    assert (scale.low, scale.high) == pytest.approx((low, high), rel=1e-12)


def test_one_outlier_in_a_thousand_does_not_stretch_the_scale():
    values = np.append(np.linspace(-1, 1, 999), 500.0) * MM
    assert choose_scale(BY_NAME["disp_z"], values).high == pytest.approx(1 * MM)


@pytest.mark.parametrize(
    ("value", "rounded"), [(1.0, 1.0), (1.01, 2.0), (2.0, 2.0), (2.1, 5.0), (5.1, 10.0), (0.00051, 0.001), (3e7, 5e7)]
)
def test_round_up_gives_one_two_or_five(value, rounded):
    assert round_up(value) == rounded


def test_no_data_and_not_significant_have_greys_of_their_own():
    values = np.array([np.nan, 1 * MM, 1 * MM, np.nan])
    scale = choose_scale(BY_NAME["disp_n"], values)
    significant = np.array([True, True, False, False])
    missing, changed, quiet, missing_too = eight_bit(colours(values, scale, significant=significant))
    assert missing == missing_too == list(NOT_OBSERVABLE)
    assert quiet == list(NOT_SIGNIFICANT)
    assert changed == table("vik", 255)


@pytest.mark.parametrize("name", ["disp_n_sd", "significance", "status", "observed"])
def test_errors_p_values_and_codes_are_never_greyed_as_not_significant(name):
    values = np.zeros(4, BY_NAME[name].numpy_dtype)
    scale = choose_scale(BY_NAME[name], values)
    greyed = colours(values, scale, significant=np.zeros(4, bool))
    assert (greyed == colours(values, scale)).all()


@pytest.mark.parametrize("attribute", ATTRIBUTES, ids=lambda a: a.name)
def test_greys_are_told_from_every_colour_of_every_table(attribute):
    scale = choose_scale(attribute, np.ones(5, attribute.numpy_dtype))
    inner = scale.table[1:] if scale.form == "steps" else scale.table
    for grey in (NOT_OBSERVABLE, NOT_SIGNIFICANT):
        assert np.linalg.norm(inner.astype(float) - grey, axis=1).min() > 15


@pytest.mark.parametrize("name", ["disp_n", "tilt", "disp_n_sd", "significance", "chainage", "clock"])
def test_every_table_on_offer_is_told_from_the_greys(name):
    attribute = BY_NAME[name]
    turning = attribute.kind == "place" and attribute.unit == "rad"
    for each in _ROUND if turning else SUITED[attribute.kind]:
        table = choose_scale(attribute, np.ones(5, np.float32), colour_map=each).table.astype(float)
        back = choose_scale(attribute, np.ones(5, np.float32), colour_map=f"{each}_r").table
        assert np.abs(table - back[::-1]).max() <= 1, each
        for grey in (NOT_OBSERVABLE, NOT_SIGNIFICANT):
            assert np.linalg.norm(table - grey, axis=1).min() > 15, each


@pytest.mark.parametrize(
    ("name", "colour_map", "said"),
    [
        ("disp_n", "rome", "did you mean 'roma'"),
        ("tilt", "vik", "colour map of tilt: required one of lajolla, "),
        ("clock", "batlow", "required one of romaO"),
        ("status", "batlow", "because it is a code"),
    ],
)
def test_a_table_that_does_not_suit_is_refused(name, colour_map, said):
    with pytest.raises(OptionError, match=re.escape(said)):
        choose_scale(BY_NAME[name], np.ones(5, BY_NAME[name].numpy_dtype), colour_map=colour_map)


def test_small_p_values_have_room_of_their_own():
    scale = choose_scale(BY_NAME["significance"], np.ones(1))
    rows = scale.rows(np.array([0.0, 1e-9, 1e-4, 1e-2, 1.0]))
    assert rows.tolist() == [0, 0, 0, 128, 255]


def test_observed_is_coloured_by_how_many_components_are_observed():
    scale = choose_scale(BY_NAME["observed"], np.zeros(1, np.uint8))
    assert scale.rows(np.array([0, 1, 64, 7, 127], np.uint8)).tolist() == [0, 1, 1, 3, 7]


def test_status_codes_of_a_later_version_do_not_break_the_map():
    scale = choose_scale(BY_NAME["status"], np.zeros(1, np.uint8))
    assert scale.labels[0] == "fine"
    assert scale.rows(np.array([0, 200], np.uint8)).tolist() == [0, len(scale.labels) - 1]


@pytest.mark.parametrize(
    ("name", "limits", "said"),
    [
        ("disp_n", (-1e-3, 2e-3), "symmetric"),
        ("disp_n", (2e-3, -2e-3), "lower one first"),
        ("tilt", 0.0, "lower one first"),
        ("tilt", (0.0, np.inf), "finite"),
        ("significance", (0.0, 1.0), "above 0"),
        ("status", 3.0, "code"),
    ],
)
def test_limits_that_would_mislead_are_refused(name, limits, said):
    with pytest.raises(OptionError, match=said) as caught:
        choose_scale(BY_NAME[name], np.ones(3, BY_NAME[name].numpy_dtype), limits=limits)
    assert name in str(caught.value)
    assert caught.value.exit_code == 2


def read_png(path):
    from PIL import Image

    return np.asarray(Image.open(path).convert("RGB")).astype(int)


def holds(picture, colour):
    return (np.abs(picture - np.array(colour)).max(axis=2) <= 1).sum() > 50


@pytest.mark.parametrize("attribute", ATTRIBUTES, ids=lambda a: a.name)
def test_every_attribute_gets_a_key_with_the_colours_of_its_cloud(attribute, tmp_path):
    # values and names for the longest texts: 20 000 microstrain and more, limits on both sides exceeded
    low = -30_000 if attribute.kind == "signed" else 0
    values = (np.linspace(low, 30_000, 600) / attribute.factor).astype(attribute.numpy_dtype)
    scale = choose_scale(attribute, values, limits=20_000 / attribute.factor if attribute.person else None)
    target = tmp_path / "key.png"
    notes = KeyNotes(gauge_length=0.6, detection_limit=0.2, epochs="upper adit 2031-03 → upper adit 2031-09")
    assert write_key(scale, values, target, notes=notes) == target
    picture = read_png(target)
    # ramps are drawn with 512 columns, so every 16th row of the table shows
    for row in scale.table[:: 1 if scale.form == "steps" else 16]:
        assert holds(picture, row)
    # no text leaves the picture
    assert (picture[:, :6] == 255).all()
    assert (picture[:, -6:] == 255).all()
    assert (picture[:4] == 255).all()


def test_key_shows_the_greys_only_where_the_cloud_can(tmp_path):
    values = np.array([1e-3, np.nan] * 20)
    scale = choose_scale(BY_NAME["disp_n"], values)
    with_one, with_both = tmp_path / "one.png", tmp_path / "both.png"
    write_key(scale, values, with_one, notes=KeyNotes())
    write_key(scale, values, with_both, notes=KeyNotes(), significant=np.zeros(40, bool))
    assert holds(read_png(with_one), NOT_OBSERVABLE)
    assert not holds(read_png(with_one), NOT_SIGNIFICANT)
    assert holds(read_png(with_both), NOT_OBSERVABLE)
    assert holds(read_png(with_both), NOT_SIGNIFICANT)


def test_key_has_the_same_bytes_every_time_and_survives_a_map_without_values(tmp_path):
    values = np.full(9, np.nan, np.float32)
    scale = choose_scale(BY_NAME["curv_1"], values)
    one, two = (write_key(scale, values, tmp_path / name, notes=KeyNotes()) for name in ("1.png", "2.png"))
    assert one.read_bytes() == two.read_bytes()
