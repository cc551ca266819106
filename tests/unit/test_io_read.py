# SPDX-License-Identifier: MIT
"""What an epoch holds after reading: coordinates, fields, units, and what was dropped and why."""

import hashlib
import runpy
import struct
from pathlib import Path

import numpy as np
import pytest
from pyproj import CRS

from scanstrain.errors import InputFileError
from scanstrain.io import read_scan
from scanstrain.io.screening import screen

MADE = runpy.run_path(str(Path(__file__).parents[1] / "io_samples.py"))
las, vlr, wall, take_apart, DATA = (MADE[k] for k in ("las", "vlr", "wall", "take_apart", "DATA"))


def read(tmp_path, data, **options):
    path = tmp_path / "scan.las"
    path.write_bytes(data)
    return read_scan(path, **options)


def wkt_vlr(crs):
    return vlr("LASF_Projection", 2112, crs.to_wkt("WKT1_GDAL").encode() + b"\0")


def geo_keys(**keys):
    entries = [(int(key[1:]), 0, 1, value) for key, value in keys.items()]
    payload = struct.pack("<4H", 1, 1, 0, len(entries)) + b"".join(struct.pack("<4H", *e) for e in entries)
    return vlr("LASF_Projection", 34735, payload)


@pytest.mark.parametrize("fmt", range(11))
def test_every_format_gives_the_fields_of_the_standard(tmp_path, fmt):
    """Positions: ASPRS LAS 1.4 R15, point data record formats."""
    data = las(fmt=fmt, offset=(482_310.0, 5_391_270.0, 100.0))
    epoch = read(tmp_path, data)
    rows = take_apart(data)["rows"]
    raw = rows[:, :12].copy().view("<i4")
    expected = raw * 0.001 + [482_310.0, 5_391_270.0, 100.0]
    np.testing.assert_allclose(epoch.points + epoch.origin, expected, rtol=0, atol=2e-9)
    np.testing.assert_array_equal(epoch.intensity, rows[:, 12:14].copy().view("<u2")[:, 0])
    wide = fmt >= 6
    np.testing.assert_array_equal(epoch.classification, rows[:, 16] if wide else rows[:, 15] & 31)
    at = 20 if wide else 18
    np.testing.assert_array_equal(epoch.setup, rows[:, at : at + 2].copy().view("<u2")[:, 0])
    rgb = {2: 20, 3: 28, 5: 28, 7: 30, 8: 30, 10: 30}.get(fmt)
    if rgb is None:
        assert epoch.colour is None
    else:
        np.testing.assert_array_equal(epoch.colour, rows[:, rgb : rgb + 6].copy().view("<u2"))


@pytest.mark.parametrize("minor", range(5))
def test_every_version_is_read(tmp_path, minor):
    assert len(read(tmp_path, las(minor=minor))) == 400


def test_provenance_says_where_the_points_came_from(tmp_path):
    data = las()
    epoch = read(tmp_path, data, label="spring", origin=[1.0, 2.0, 3.0])
    kept = epoch.provenance
    assert kept.sha256 == hashlib.sha256(data).hexdigest()
    assert (kept.path, kept.file_points, kept.dropped_points, kept.kept) == (str(tmp_path / "scan.las"), 400, 0, None)
    assert (kept.date, kept.unit, kept.unit_factors, kept.crs) == ("2024-02-29", "metre", (1.0, 1.0, 1.0), None)
    assert epoch.label == "spring"
    np.testing.assert_array_equal(epoch.origin, [1.0, 2.0, 3.0])
    assert read(tmp_path, data).label == "scan"


def test_laz_and_copc_are_read_like_las():
    plain, packed = read_scan(DATA / "1_4_w_evlr.las"), read_scan(DATA / "1_4_w_evlr.laz")
    np.testing.assert_array_equal(plain.points, packed.points)
    np.testing.assert_array_equal(plain.intensity, packed.intensity)
    copc = read_scan(DATA / "simple.copc.laz")
    simple = read_scan(DATA / "simple.las").points + read_scan(DATA / "simple.las").origin
    level = np.sort((copc.points + copc.origin)[:, 0])
    np.testing.assert_allclose(level, np.sort(simple[:, 0]), atol=0.011)  # the same points, in another order


def test_constant_intensity_is_no_texture(tmp_path):
    data = bytearray(las())
    for point in range(400):
        data[227 + 20 * point + 12 : 227 + 20 * point + 14] = b"\x05\x00"
    assert read(tmp_path, bytes(data)).intensity is None


def test_points_without_value_are_dropped_and_counted(tmp_path):
    raw = wall()
    raw[[3, 77], [0, 2]] = -(2**31)  # what laspy leaves for NaN
    epoch = read(tmp_path, las(raw))
    assert len(epoch) == 398
    assert epoch.provenance.dropped_points == 2
    assert np.flatnonzero(~epoch.provenance.kept).tolist() == [3, 77]
    assert "2 points have no coordinates: dropped" in epoch.provenance.notices


@pytest.mark.parametrize(("fmt", "at", "bit"), [(0, 15, 0x80), (3, 15, 0x80), (6, 15, 0x04), (8, 15, 0x04)])
def test_withheld_points_are_dropped(tmp_path, fmt, at, bit):
    data, start = bytearray(las(fmt=fmt)), len(las(fmt=fmt)) - 400 * MADE["SIZES"][fmt]
    for point in (5, 6, 399):
        data[start + point * MADE["SIZES"][fmt] + at] |= bit
    epoch = read(tmp_path, bytes(data))
    assert np.flatnonzero(~epoch.provenance.kept).tolist() == [5, 6, 399]
    assert "3 points are flagged as withheld: dropped" in epoch.provenance.notices


def test_a_stray_point_far_outside_is_dropped_with_a_notice(tmp_path):
    raw = wall()
    raw[10] = [2_000_000_000, 0, 0]  # 2 000 km
    epoch = read(tmp_path, las(raw))
    assert np.flatnonzero(~epoch.provenance.kept).tolist() == [10]
    assert any("strays" in notice for notice in epoch.provenance.notices)
    assert abs(epoch.origin[0]) < 3


def test_lost_pulses_at_the_origin_are_dropped_but_one_real_point_there_is_kept():
    points = wall() * 0.001 + [0.0, 5.0, 0.0]
    points[7] = 0.0
    assert screen(points).dropped == 0
    points[20:40] = 0.0
    screening = screen(points)
    assert screening.dropped == 21
    assert "lost pulses" in screening.notices[0]


def test_a_long_tunnel_seen_thinly_at_its_ends_loses_nothing():
    """Points of one set-up in a tube of radius 3 m fall off as 1/x^2 along it: to 400 m both ways."""
    rng = np.random.default_rng(0)
    along = 3.0 * np.tan(rng.uniform(-1, 1, 50_000) * np.arctan(400 / 3))
    angle = rng.uniform(0, 2 * np.pi, 50_000)
    assert screen(np.stack([along, 3 * np.cos(angle), 3 * np.sin(angle)], 1)).dropped == 0


def test_only_what_a_scanner_cannot_reach_is_a_stray():
    """Beyond 1 km and beyond 20 diagonals: a far target of a small object, and a far end of a large one, stay."""
    points = wall() * 0.001
    points[9, 1] = 990.0
    assert screen(points).dropped == 0
    points[9, 1] = 1010.0
    assert np.flatnonzero(~screen(points).kept).tolist() == [9]
    points = wall() * 0.1  # a face 200 m wide: its diagonal is 283 m, and 20 of them are 5.6 km
    points[9, 1] = 5000.0
    assert screen(points).dropped == 0


def test_nan_is_dropped_and_counted():
    points = wall() * 0.001
    points[[1, 2], 1] = [np.nan, np.inf]
    screening = screen(points)
    assert np.flatnonzero(~screening.kept).tolist() == [1, 2]
    assert screening.notices == ("2 points have no coordinates: dropped",)


def test_a_file_of_which_most_points_are_useless_is_refused(tmp_path):
    raw = wall()
    raw[:250, 1] = -(2**31)
    with pytest.raises(InputFileError, match="most points serve; got 250 points have no coordinates"):
        read(tmp_path, las(raw))


def test_feet_are_scaled_only_where_the_crs_says_so(tmp_path):
    """US survey foot = 1200/3937 m (EPSG unit 9003), international foot = 0.3048 m (9002)."""
    raw, foot = wall(), 1200 / 3937
    feet = read(tmp_path, las(raw, fmt=6, vlrs=[wkt_vlr(CRS.from_epsg(2903))]))
    np.testing.assert_allclose(feet.points + feet.origin, raw * (0.001 * foot), atol=1e-9)
    assert feet.provenance.unit == "US survey foot"
    assert feet.provenance.unit_factors == pytest.approx((foot, foot, foot), rel=1e-15)
    assert any("US survey foot" in notice for notice in feet.provenance.notices)
    keys = read(tmp_path, las(raw, vlrs=[geo_keys(k1024=1, k3072=32767, k3076=9002)]))
    np.testing.assert_allclose(keys.points + keys.origin, raw * (0.001 * 0.3048), atol=1e-12)
    metre = read(tmp_path, las(raw, fmt=6, vlrs=[wkt_vlr(CRS.from_epsg(25832))]))
    np.testing.assert_allclose(metre.points + metre.origin, raw * 0.001, atol=1e-12)
    assert metre.provenance.notices == ()


def test_heights_may_have_another_unit():
    """The sample states metres for x and y and US survey feet for heights (its own WKT)."""
    epoch = read_scan(DATA / "simple.copc.laz")
    assert epoch.provenance.unit_factors == pytest.approx((1.0, 1.0, 1200 / 3937))
    assert any("heights" in notice for notice in epoch.provenance.notices)


def test_degrees_are_refused(tmp_path):
    for records, options in [
        ([wkt_vlr(CRS.from_epsg(4326))], {"fmt": 6}),
        ([wkt_vlr(CRS.from_epsg(4326))], {"fmt": 3}),
        ([geo_keys(k1024=2, k2048=4326)], {"fmt": 3}),
        ([geo_keys(k2048=4326)], {"fmt": 0}),
    ]:
        with pytest.raises(InputFileError, match=r"scan\.las: required coordinates in metres or feet; got degrees"):
            read(tmp_path, las(vlrs=records, **options))


def test_a_crs_that_cannot_be_understood_counts_as_none(tmp_path):
    epoch = read(tmp_path, las(fmt=6, vlrs=[vlr("LASF_Projection", 2112, b"PROJCS[garbage\xff\0")]))
    assert epoch.provenance.crs is None
    assert any("cannot be understood" in notice for notice in epoch.provenance.notices)


def test_coarse_steps_and_false_bounds_are_told(tmp_path):
    epoch = read(tmp_path, las(scale=0.01))
    assert any("steps of 10 mm" in notice and "2.89 mm" in notice for notice in epoch.provenance.notices)
    data = bytearray(las())
    struct.pack_into("<d", data, 179, 0.5)  # largest x
    assert any("do not enclose" in notice for notice in read(tmp_path, bytes(data)).provenance.notices)
    assert not any("steps" in notice or "enclose" in notice for notice in read(tmp_path, las()).provenance.notices)
