# SPDX-License-Identifier: MIT
"""What can look like an even strain: scale, temperature, map projection."""

from __future__ import annotations

import numpy as np
import pytest
from pyproj import CRS

from scanstrain.budget import point_factor, projection_line, scale_line, temperature_line
from scanstrain.errors import OptionError


def test_20_ppm_are_20_microstrain_and_40_of_dilation():
    line = scale_line(20.0, 5.0)
    assert (line.value, line.sd) == pytest.approx((20e-6, 5e-6))
    assert (line.dilation, line.dilation_sd) == pytest.approx((40e-6, 10e-6))


def test_a_scale_that_is_not_fixed_is_no_zero():
    line = scale_line(np.nan, np.nan)
    assert np.isnan(line.value)
    assert "not bounded" in line.note


def test_15_kelvin_are_150_microstrain():
    line = temperature_line(15.0, 2.0, 10e-6, 1e-6)
    assert line.value == pytest.approx(150e-6)
    rng = np.random.default_rng(5)
    draws = (15 + 2 * rng.normal(size=200_000)) * (10e-6 + 1e-6 * rng.normal(size=200_000))
    assert line.sd == pytest.approx(draws.std(), rel=0.01)


@pytest.mark.parametrize("given", [(np.nan, 1, 1e-5, 1e-6), (15, -1, 1e-5, 1e-6), (15, 1, 1e-5, -1e-6)])
def test_temperatures_without_numbers_are_refused(given):
    with pytest.raises(OptionError, match="standard errors of at least 0"):
        temperature_line(*given)


def test_the_scale_of_one_projection_cancels_and_of_two_does_not():
    same = projection_line(0.9996, 0.9996, same_system=True)
    assert (same.value, same.sd) == (0.0, 0.0)
    assert "cancels" in same.note
    assert projection_line(1.0, 0.9996, same_system=False).value == pytest.approx(-400e-6)
    assert projection_line(0.9996, 1.0, same_system=False).value == pytest.approx(400e-6, rel=1e-3)


def test_factor_of_a_transverse_mercator_grows_with_the_distance_from_its_meridian():
    wkt = CRS.from_epsg(32632).to_wkt()
    assert point_factor(wkt, 500_000.0, 5_200_000.0) == pytest.approx(0.9996, abs=1e-9)
    # k0 (1 + x^2 / (2 k0^2 R^2)), R = 6.38e6 m: the sphere is good to 1e-6 here
    series = 0.9996 * (1 + 200_000.0**2 / (2 * (0.9996 * 6.38e6) ** 2))
    assert point_factor(wkt, 700_000.0, 5_200_000.0) == pytest.approx(series, abs=1e-6)


def test_places_are_in_metres_whatever_the_unit_of_the_system_and_heights_do_not_matter():
    # one state-plane system in metres and in US survey feet
    metres, feet = (CRS.from_epsg(code).to_wkt() for code in (32118, 2263))
    assert point_factor(feet, 2e5, 6e4) == pytest.approx(point_factor(metres, 2e5, 6e4), abs=1e-6)
    with_heights = CRS.from_user_input("EPSG:25832+5783").to_wkt()
    assert point_factor(with_heights, 500_000.0, 5_200_000.0) == pytest.approx(0.9996, abs=1e-9)


def test_no_factor_where_there_is_no_map():
    assert np.isnan(point_factor(CRS.from_epsg(4326).to_wkt(), 9.0, 47.0))
    assert np.isnan(point_factor(CRS.from_epsg(32632).to_wkt(), 5e12, 5e6))
