# SPDX-License-Identifier: MIT
"""Two epochs must be in one coordinate system and one unit."""

import numpy as np
import pytest
from pyproj import CRS

from scanstrain.epoch import Provenance, make_epoch
from scanstrain.errors import InputFileError
from scanstrain.io import check_same_frame

POINTS = np.random.default_rng(0).random((200, 3))


def epoch(name, crs=None, factors=(1.0, 1.0, 1.0), unit="metre"):
    text = CRS.from_user_input(crs).to_wkt() if crs else None
    return make_epoch(POINTS, label=name, provenance=Provenance(path=name, crs=text, unit_factors=factors, unit=unit))


def test_equal_systems_pass_without_a_word():
    assert check_same_frame(epoch("a", "EPSG:25832"), epoch("b", "EPSG:25832")) == ()
    assert check_same_frame(epoch("a"), epoch("b")) == ()


def test_one_system_spelt_in_two_ways_is_one_system():
    a = epoch("a", "EPSG:25832")
    text = CRS.from_epsg(25832).to_wkt("WKT1_GDAL")
    b = make_epoch(POINTS, label="b", provenance=Provenance(path="b", crs=text))
    assert text != a.provenance.crs
    assert check_same_frame(a, b) == ()


def test_different_systems_are_refused_unless_only_a_label_is_wrong():
    a, b = epoch("a", "EPSG:25832"), epoch("b", "EPSG:25833")
    with pytest.raises(InputFileError, match=r"one coordinate system; got .*zone 32N and .*zone 33N"):
        check_same_frame(a, b)
    (notice,) = check_same_frame(a, b, assume_same_crs=True)
    assert "taken as the same" in notice


def test_a_silent_file_is_named():
    (notice,) = check_same_frame(epoch("a", "EPSG:25832"), epoch("b"))
    assert notice.startswith("b states no coordinate system")
    (notice,) = check_same_frame(epoch("a"), epoch("b", "EPSG:25832"))
    assert notice.startswith("a states no coordinate system")


def test_a_height_system_on_one_side_only_is_told():
    (notice,) = check_same_frame(epoch("a", "EPSG:25832+7837"), epoch("b", "EPSG:25832"))
    assert "height system" in notice
    with pytest.raises(InputFileError):
        check_same_frame(epoch("a", "EPSG:25832+7837"), epoch("b", "EPSG:25832+5783"))


@pytest.mark.parametrize("assume", [False, True])
def test_different_units_are_refused_whatever_is_assumed(assume):
    foot = epoch("b", None, (0.3048, 0.3048, 0.3048), "foot")
    with pytest.raises(InputFileError, match=r"one unit; got metre .* foot"):
        check_same_frame(epoch("a"), foot, assume_same_crs=assume)
