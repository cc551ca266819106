# SPDX-License-Identifier: MIT
"""Result files against the letter of the LAS standard, parsed from raw bytes with `struct` and no LAS library.

Source of every position and size: ASPRS LAS 1.4 R15 (July 2019). Colour multiplier 257: own choice.
"""

import datetime as dt
import math
import runpy
import struct
from pathlib import Path

import laspy
import numpy as np
import pytest

from scanstrain.attributes import ATTRIBUTES
from scanstrain.errors import InputFileError
from scanstrain.io import las_layout, read_scan, write_result_cloud

MADE = runpy.run_path(str(Path(__file__).parents[1] / "io_samples.py"))
las, vlr, evlr, take_apart, DATA = (MADE[k] for k in ("las", "vlr", "evlr", "take_apart", "DATA"))

# ASPRS LAS 1.4 R15: bytes of a point, formats 0 to 10
RECORD_BYTES = [20, 28, 26, 34, 57, 63, 30, 36, 38, 59, 67]
# ASPRS LAS 1.4 R15: header, 1.4; LAS 1.3, and 1.0 to 1.2 (from memory, confirmed on files)
HEADER_BYTES = {4: 375, 3: 235, 2: 227, 1: 227, 0: 227}
# ASPRS LAS 1.4 R15, extra bytes: data type codes
TYPE_CODES = {"uint8": 1, "uint16": 3, "float32": 9}


def results(n, seed=5):
    rng = np.random.default_rng(seed)
    out = {}
    for a in ATTRIBUTES:
        if a.dtype == "float32":
            out[a.name] = rng.normal(0, 1e-4, n).astype("f4")
            out[a.name][rng.random(n) < 0.2] = np.nan
        else:
            out[a.name] = rng.integers(0, 200, n).astype(a.dtype)
    return out


def written(tmp_path, data, values=None, suffix=".las", **options):
    source, target = tmp_path / "reference.las", tmp_path / f"strain{suffix}"
    source.write_bytes(data)
    values = results(take_apart(data)["count"]) if values is None else values
    assert write_result_cloud(source, target, values, **options) == target
    assert source.read_bytes() == data
    assert sorted(p.name for p in tmp_path.iterdir()) == ["reference.las", target.name]
    return take_apart(target.read_bytes())


def test_sizes_of_headers_and_records():
    assert [las_layout.RECORD_SIZE[f] for f in range(11)] == RECORD_BYTES
    assert {minor: las_layout.HEADER_SIZE[minor] for minor in HEADER_BYTES} == HEADER_BYTES
    assert (las_layout.VLR_HEADER, las_layout.EVLR_HEADER) == (2 + 16 + 2 + 2 + 32, 2 + 16 + 2 + 8 + 32)


@pytest.mark.parametrize("colour", [False, True])
@pytest.mark.parametrize("fmt", range(11))
def test_every_byte_of_the_reference_is_kept(tmp_path, fmt, colour):
    """Formats are raised for colour only: 0 to 2, 1 to 3, 4 to 5, 6 to 7, 9 to 10; its bytes go in at one place."""
    records = [vlr("somebody", 7, b"\x01\x02\x03", b"theirs"), vlr("LASF_Spec", 0, bytes(16))]
    behind = [evlr("somebody", 8, b"far behind" * 100)] if fmt >= 6 else []
    data = las(fmt=fmt, vlrs=records, evlrs=behind, gap=b"\xdd\xcc", offset=(482_310.0, 5_391_270.0, 0.0))
    rgb = np.random.default_rng(3).integers(0, 65536, (400, 3)).astype("u2") if colour else None
    before, after = take_apart(data), written(tmp_path, data, colour=rgb)
    raised = {0: 2, 1: 3, 4: 5, 6: 7, 9: 10}.get(fmt, fmt) if colour else fmt
    assert after["format"] == raised
    assert after["length"] == RECORD_BYTES[raised] + 35 * 4 + 4 * 1 + 2
    assert after["scaling"] == before["scaling"]
    assert after["gap"] == b"\xdd\xcc"
    assert after["vlrs"][:2] == before["vlrs"]
    assert [e[3] for e in after["evlrs"]] == [e[3] for e in before["evlrs"]]
    old, new = before["rows"], after["rows"]
    at = {2: 20, 3: 28, 5: 28, 7: 30, 8: 30, 10: 30}.get(raised)
    size = RECORD_BYTES[fmt]
    if not colour:
        np.testing.assert_array_equal(new[:, :size], old)
        return
    room = RECORD_BYTES[raised] - size or 0
    np.testing.assert_array_equal(new[:, :at], old[:, :at])
    np.testing.assert_array_equal(new[:, at : at + 6].copy().view("<u2"), rgb)
    back = at + (room or 6)  # the reference had colour bytes itself, or they were put in
    np.testing.assert_array_equal(new[:, back : RECORD_BYTES[raised]], old[:, at + (0 if room else 6) :])


@pytest.mark.parametrize("minor", range(5))
def test_the_version_is_raised_only_where_the_format_needs_it(tmp_path, minor):
    data = las(fmt=0, minor=minor)
    assert written(tmp_path, data)["minor"] == minor
    colour = np.zeros((400, 3), "u2")
    assert written(tmp_path, data, colour=colour)["minor"] == max(minor, 2)  # RGB formats came with 1.2


def test_descriptors_byte_for_byte(tmp_path):
    """Type 2, options 3, name 4, no_data 40, minimum 64, maximum 88, description 160; everything else zero."""
    values = results(400)
    after = written(tmp_path, las(fmt=6), values)
    (payload,) = [p for user, number, _, p in after["vlrs"] if (user, number) == ("LASF_Spec", 4)]
    assert len(payload) == 192 * 40
    at = 30
    for number, a in enumerate(ATTRIBUTES):
        stored = values[a.name]
        real = a.dtype == "float32"
        expected = bytearray(192)
        expected[2] = TYPE_CODES[a.dtype]
        expected[3] = 1 | 2 | 4 if real else 2 | 4  # bit 0 no_data, bit 1 minimum, bit 2 maximum
        expected[4 : 4 + len(a.name)] = a.name.encode()
        code = "<d" if real else "<Q"  # up-cast: float to double, unsigned to uint64
        if real:
            struct.pack_into("<d", expected, 40, math.nan)
        finite = stored[np.isfinite(stored)].tolist()
        struct.pack_into(code, expected, 64, min(finite))
        struct.pack_into(code, expected, 88, max(finite))
        text = a.description.encode()
        expected[160 : 160 + len(text)] = text
        assert payload[192 * number : 192 * number + 192] == bytes(expected), a.name
        column = after["rows"][:, at : at + stored.itemsize].copy().view(stored.dtype)[:, 0]
        assert column.tobytes() == stored.tobytes(), a.name
        at += stored.itemsize
    assert at == after["length"]


def test_every_description_fits_its_field_and_says_the_unit():
    for a in ATTRIBUTES:
        assert 0 < len(a.description.encode()) <= 32
        assert len(a.name.encode()) <= 32
        assert a.dtype != "float32" or a.description.startswith(a.unit + " ")


def test_minimum_and_maximum_are_true_where_the_common_library_has_them_wrong(tmp_path):
    """laspy 2.7.0 writes minimum = maximum = first point for (1e-4, 3e-4), and +-1.798e308 with a no_data value."""
    values = {"strain_1": np.linspace(3e-4, 1e-4, 400).astype("f4")}
    for no_data in (None, -9999.0):
        code, options, empty, least, most, _, _ = written(tmp_path, las(), values, no_data=no_data)["fields"][
            "strain_1"
        ]
        assert (code, options) == (9, 7)
        assert struct.unpack("<d", least)[0] == float(np.float32(1e-4))
        assert struct.unpack("<d", most)[0] == float(np.float32(3e-4))
        assert math.isnan(struct.unpack("<d", empty)[0]) if no_data is None else struct.unpack("<d", empty)[0] == -9999


def test_a_finite_no_data_value_stands_in_the_points_and_not_in_the_minimum(tmp_path):
    values = {"disp_n": np.full(400, np.nan, "f4")}
    values["disp_n"][5:8] = [1e-3, -2e-3, 5e-4]
    after = written(tmp_path, las(fmt=6), values, no_data=-9999.0)
    _, options, empty, least, most, _, at = after["fields"]["disp_n"]
    assert (options, struct.unpack("<d", empty)[0]) == (7, -9999.0)
    assert struct.unpack("<dd", least + most) == (float(np.float32(-2e-3)), float(np.float32(1e-3)))
    column = after["rows"][:, at : at + 4].copy().view("<f4")[:, 0]
    assert np.flatnonzero(column != -9999.0).tolist() == [5, 6, 7]


def test_without_any_value_minimum_and_maximum_are_not_claimed(tmp_path):
    after = written(tmp_path, las(), {"tilt": np.full(400, np.nan, "f4")})
    _, options, _, least, most, _, _ = after["fields"]["tilt"]
    assert (options, least, most) == (1, bytes(8), bytes(8))


@pytest.mark.parametrize("fmt", [6, 7, 8, 9, 10])
def test_wide_formats_have_the_wkt_bit_and_no_legacy_counts(tmp_path, fmt):
    """Formats 6 to 10 with the WKT bit clear are an error (R15, global encoding); their legacy counts are zero."""
    after = written(tmp_path, las(fmt=fmt, encoding=1))
    assert after["encoding"] == 1 | 16
    assert after["legacy"] == (0,) * 6
    assert (after["count"], after["by_return"][0]) == (400, 400)


def test_narrow_formats_keep_their_encoding_and_have_legacy_counts(tmp_path):
    after = written(tmp_path, las(fmt=3, minor=4, encoding=0))
    assert after["encoding"] == 0
    assert after["legacy"] == (400, 400, 0, 0, 0, 0)
    assert (after["count"], after["by_return"]) == (400, (400,) + (0,) * 14)


def test_bounds_stand_larger_first_and_are_those_of_the_points(tmp_path):
    """Max X 179, min X 187, max Y 195, min Y 203, max Z 211, min Z 219."""
    data = las(fmt=6, offset=(100.0, 200.0, 300.0))
    raw = take_apart(data)["rows"][:, :12].copy().view("<i4")
    after = written(tmp_path, data)
    for axis, offset in enumerate((100.0, 200.0, 300.0)):
        assert after["bounds"][2 * axis] == pytest.approx(raw[:, axis].max() * 0.001 + offset, abs=1e-12)
        assert after["bounds"][2 * axis + 1] == pytest.approx(raw[:, axis].min() * 0.001 + offset, abs=1e-12)


def test_header_says_what_the_file_is(tmp_path):
    """System identifier of a file computed from one other file: MODIFICATION; the day of creation counts from 1."""
    after = written(tmp_path, las(), created=dt.date(2024, 12, 31))
    assert after["system"] == b"MODIFICATION"
    assert after["program"].startswith(b"scanstrain ")
    assert after["day"] == (366, 2024)


def test_compressed_files_hold_the_same_points(tmp_path):
    data, values = las(fmt=6, vlrs=[vlr("somebody", 7, b"xyz")], evlrs=[evlr("somebody", 8, b"behind")]), results(400)
    plain = written(tmp_path, data, values)
    (tmp_path / "strain.las").unlink()
    packed = written(tmp_path, data, values, suffix=".laz")
    assert packed["compressed"]
    assert [v[:2] for v in packed["vlrs"]] == [("somebody", 7), ("LASF_Spec", 4), ("laszip encoded", 22204)]
    assert packed["evlrs"] == plain["evlrs"]
    for key in ("bounds", "count", "by_return", "legacy", "scaling", "fields", "length", "encoding"):
        assert packed[key] == plain[key]
    with laspy.open(tmp_path / "strain.laz") as stream:
        np.testing.assert_array_equal(stream.read().points.array.view(np.uint8).reshape(400, -1), plain["rows"])


def test_foreign_extra_bytes_keep_their_descriptors_and_values(tmp_path):
    payload = MADE["descriptor"]("amplitude", 4, 0, b"theirs") + MADE["descriptor"](
        "normal", 29
    )  # a triple, deprecated
    extra = np.random.default_rng(8).integers(0, 256, (400, 2 + 12), dtype=np.uint8)
    data = las(fmt=1, vlrs=[vlr("LASF_Spec", 4, payload)], extra=extra)
    after = written(tmp_path, data, {"status": np.zeros(400, "u1")})
    (kept,) = [p for user, number, _, p in after["vlrs"] if (user, number) == ("LASF_Spec", 4)]
    assert kept[:384] == payload
    assert after["fields"]["status"][-1] == 28 + 14
    np.testing.assert_array_equal(after["rows"][:, 28:42], extra)


def test_bytes_without_a_descriptor_are_described_as_undocumented(tmp_path):
    """Type 0, with the size in the options byte; without it our own descriptors would be read over foreign bytes.

    Sizes avoid 8 and 16, which laspy 2.7.0 takes for the option bits of scale and offset.
    """
    extra = np.random.default_rng(8).integers(0, 256, (400, 300), dtype=np.uint8)
    after = written(tmp_path, las(extra=extra), {"tilt": np.ones(400, "f4")})
    assert [(name, field[0], field[1]) for name, field in after["fields"].items()] == [
        ("undocumented_1", 0, 231), ("undocumented_2", 0, 69), ("tilt", 9, 7),
    ]  # fmt: skip
    np.testing.assert_array_equal(after["rows"][:, 20:320], extra)


def test_an_invalid_extra_bytes_record_is_refused(tmp_path):
    """More descriptors than actual bytes make the whole VLR invalid (R15)."""
    extra = np.zeros((400, 2), np.uint8)
    path = tmp_path / "scan.las"
    for bad in (MADE["descriptor"]("too_long", 10), MADE["descriptor"]("reserved", 77)):
        path.write_bytes(las(vlrs=[vlr("LASF_Spec", 4, bad)], extra=extra))
        with pytest.raises(InputFileError, match="descriptors for the 2 extra bytes"):
            read_scan(path)


@pytest.mark.parametrize(
    ("suffix", "name"), [(".las", "simple1_3.las"), (".laz", "simple1_3.las"), (".laz", "1_4_w_evlr.laz")]
)
def test_records_behind_the_points_of_real_files_are_kept(tmp_path, suffix, name):
    before = (DATA / name).read_bytes()
    parts, target = take_apart(before), tmp_path / f"out{suffix}"
    write_result_cloud(DATA / name, target, {"disp_n": np.zeros(parts["count"], "f4")})
    raw = target.read_bytes()
    after = take_apart(raw)
    if parts["minor"] == 3:  # the waveform record of LAS 1.3: header byte 227 says where it is
        assert raw[after["waveform_at"] :] == before[parts["waveform_at"] :]
        assert len(raw) - after["waveform_at"] == 160
    else:
        assert after["evlrs"] == parts["evlrs"]
        assert len(after["evlrs"]) == 1
    own = [v for v in parts["vlrs"] if v[0] != "laszip encoded"]
    assert after["vlrs"][: len(own)] == own


def test_copc_index_is_not_forwarded(tmp_path):
    write_result_cloud(DATA / "simple.copc.laz", tmp_path / "out.laz", {"disp_n": np.zeros(1065, "f4")})
    after = take_apart((tmp_path / "out.laz").read_bytes())
    assert "copc" not in {v[0] for v in after["vlrs"] + after["evlrs"]}
    assert ("LASF_Projection", 2112) in {v[:2] for v in after["vlrs"]}


def test_a_geotiff_crs_in_a_wide_format_is_stated_as_wkt_too(tmp_path):
    keys = struct.pack("<4H", 1, 1, 0, 1) + struct.pack("<4H", 3072, 0, 1, 25832)
    after = written(tmp_path, las(fmt=6, encoding=0, vlrs=[vlr("LASF_Projection", 34735, keys)]))
    (text,) = [p for user, number, _, p in after["vlrs"] if (user, number) == ("LASF_Projection", 2112)]
    assert text.endswith(b"\0")
    assert b"UTM zone 32N" in text
    assert after["encoding"] & 16


def test_a_scan_at_survey_coordinates_comes_back_to_the_last_bit(tmp_path):
    """Raw integers are copied, so nothing is scaled and rounded again: northing 5 391 270 at a scale of 0.1 mm."""
    data = las(fmt=6, scale=1e-4, offset=(482_310.0, 5_391_270.0, 100.0))
    source, target = tmp_path / "a.las", tmp_path / "b.laz"
    source.write_bytes(data)
    write_result_cloud(source, target, {"disp_n": np.zeros(400, "f4")})
    a, b = read_scan(source), read_scan(target)
    assert a.points.tobytes() == b.points.tobytes()
    assert a.origin.tobytes() == b.origin.tobytes()


def test_the_same_call_writes_the_same_bytes(tmp_path):
    (tmp_path / "a.las").write_bytes(las(fmt=6))
    day = dt.date(2024, 5, 1)
    for name in ("b.laz", "c.laz"):
        write_result_cloud(tmp_path / "a.las", tmp_path / name, results(400), created=day)
    assert (tmp_path / "b.laz").read_bytes() == (tmp_path / "c.laz").read_bytes()
