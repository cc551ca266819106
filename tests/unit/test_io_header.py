# SPDX-License-Identifier: MIT
"""Damaged, cut and mislabelled files: each is refused with one sentence that names the file, and none hangs."""

import io
import runpy
import struct
from pathlib import Path

import laspy
import numpy as np
import pytest

from scanstrain.errors import InputFileError
from scanstrain.io import read_scan

MADE = runpy.run_path(str(Path(__file__).parents[1] / "io_samples.py"))
las, vlr, evlr, DATA = MADE["las"], MADE["vlr"], MADE["evlr"], MADE["DATA"]


def patched(data, at, code, *values):
    out = bytearray(data)
    struct.pack_into(code, out, at, *values)
    return bytes(out)


def laz(fmt=6, n=400):
    header = laspy.LasHeader(point_format=fmt, version="1.4" if fmt >= 6 else "1.2")
    header.scales = [0.001] * 3
    points = laspy.ScaleAwarePointRecord.zeros(n, header=header)
    raw = MADE["wall"](n)
    points["X"], points["Y"], points["Z"] = raw[:, 0], raw[:, 1], raw[:, 2]
    stream = io.BytesIO()
    with laspy.open(stream, "w", header=header, do_compress=True, closefd=False) as writer:
        writer.write_points(points)
    return stream.getvalue()


PLAIN = las()
NEW = las(fmt=6)
DAMAGE = {
    "empty file": (b"", "0 bytes"),
    "wrong signature": (b"%PDF" + PLAIN[4:], "LASF"),
    "text": (b"this is no scan at all", "LASF"),
    "header cut": (PLAIN[:150], "header of at least 227"),
    "version 1.9": (patched(PLAIN, 25, "B", 9), "version 1.9"),
    "version 2.0": (patched(PLAIN, 24, "BB", 2, 0), "version 2.0"),
    "header size 0": (patched(PLAIN, 94, "<H", 0), "header of 227"),
    "points before the header's end": (patched(PLAIN, 96, "<I", 100), "points from byte 100"),
    "points behind the file's end": (patched(PLAIN, 96, "<I", 10**9), "points from byte 1000000000"),
    "VLR count 4e9": (patched(PLAIN, 100, "<I", 4_000_000_000), "4000000000"),
    "VLR count one too many": (patched(las(vlrs=[vlr("x", 1, b"")]), 100, "<I", 2), "VLR count of 2"),
    "VLR that runs over the points": (patched(las(vlrs=[vlr("x", 1, b"abcd")]), 227 + 20, "<H", 9), "record 1 of 1"),
    "format 99": (patched(PLAIN, 104, "B", 63), "format 63"),
    "format 6 in version 1.2": (patched(las(fmt=3, minor=2), 104, "B", 6), "format 6 in version 1.2"),
    "record length too small": (patched(PLAIN, 105, "<H", 19), "19 bytes"),
    "no points": (patched(PLAIN, 107, "<I", 0), "0 points"),
    "two counts": (patched(las(fmt=3, minor=4), 107, "<I", 7), "7 and 400"),
    "count 1e9": (patched(PLAIN, 107, "<I", 10**9), "the file is cut"),
    "count 1e18": (patched(NEW, 247, "<Q", 10**18), "the file is cut"),
    "body cut": (PLAIN[:-1], "the file is cut"),
    "scale 0": (patched(PLAIN, 131, "<d", 0.0), "scales above 0"),
    "scale negative": (patched(PLAIN, 139, "<d", -0.001), "scales above 0"),
    "scale NaN": (patched(PLAIN, 147, "<d", np.nan), "scales above 0"),
    "scale infinite": (patched(PLAIN, 131, "<d", np.inf), "scales above 0"),
    "offset NaN": (patched(PLAIN, 155, "<d", np.nan), "offsets"),
    "offset 1e300": (patched(PLAIN, 155, "<d", 1e300), "offsets"),
    "scale 1e-300": (patched(PLAIN, 131, "<3d", 1e-300, 1e-300, 1e-300), "scales above 0"),
    "EVLR count 4e9": (patched(NEW, 235, "<QI", len(NEW), 4_000_000_000), "EVLRs"),
    "EVLR behind the end": (patched(las(fmt=6, evlrs=[evlr("x", 1, b"1")]), 235, "<Q", 10**12), "EVLRs"),
    "EVLR too long": (las(fmt=6, evlrs=[evlr("x", 1, b"12345")])[:-1], "past the end"),
    "99 points": (las(MADE["wall"](99)), "at least 100 points"),
    "all points in one place": (las(np.full((400, 3), 7)), "all points in one place"),
}


@pytest.mark.parametrize("kind", DAMAGE)
def test_damaged_las_is_refused_in_one_sentence(tmp_path, kind):
    data, said = DAMAGE[kind]
    path = tmp_path / "scan.las"
    path.write_bytes(data)
    with pytest.raises(InputFileError) as caught:
        read_scan(path)
    message = str(caught.value)
    assert str(path) in message
    assert said in message
    assert "\n" not in message
    assert path.read_bytes() == data


LAZ6, LAZ3 = laz(6), laz(3)
AT6, AT3 = struct.unpack_from("<I", LAZ6, 96)[0], struct.unpack_from("<I", LAZ3, 96)[0]
LAZ_DAMAGE = {
    "body cut": (LAZ3[: AT3 + 300], "cut"),
    "last byte cut": (LAZ3[:-1], "decoded"),
    "layers cut": (LAZ6[: AT6 + 300], "cut"),
    "random bytes in the middle": (LAZ6[: AT6 + 60] + bytes(range(200)) + LAZ6[AT6 + 260 :], "decoded"),
    "count 1e9": (patched(patched(LAZ6, 247, "<Q", 10**9), 107, "<I", 0), "compressed chunks"),
    "count one chunk too high": (patched(LAZ3, 107, "<I", 50_001), "compressed chunks"),
    "count too high inside the chunk": (patched(LAZ3, 107, "<I", 450), "decoded"),
    "count too low inside the chunk": (patched(LAZ6, 247, "<Q", 390), "400"),
    "a layer of 4 GB": (patched(LAZ6, AT6 + 8 + 30 + 4, "<I", 2**32 - 1), "a layer longer than its chunk"),
    "chunk table in the header": (patched(LAZ6, AT6, "<q", 5), "table of the compressed chunks"),
    "no record on the compression": (patched(LAZ6, 375 + 18, "<H", 1), "how the points are compressed"),
    "unknown compressor": (LAZ6.replace(struct.pack("<HHBB", 3, 0, 2, 2), struct.pack("<HHBB", 77, 0, 2, 2)), "dec"),
    "VLR count 4e9": (patched(LAZ6, 100, "<I", 4_000_000_000), "4000000000"),
}  # fmt: skip


@pytest.mark.parametrize("kind", LAZ_DAMAGE)
def test_damaged_laz_is_refused_in_one_sentence(tmp_path, kind):
    data, said = LAZ_DAMAGE[kind]
    path = tmp_path / "scan.laz"
    path.write_bytes(data)
    with pytest.raises(InputFileError) as caught:
        read_scan(path)
    assert str(path) in str(caught.value)
    assert said in str(caught.value)
    assert "\n" not in str(caught.value)


def test_the_undamaged_samples_are_read(tmp_path):
    for name, data in {"a.las": PLAIN, "b.las": NEW, "c.laz": LAZ3, "d.laz": LAZ6}.items():
        (tmp_path / name).write_bytes(data)
        assert len(read_scan(tmp_path / name)) == 400


def test_missing_file_folder_and_unknown_suffix(tmp_path):
    with pytest.raises(InputFileError, match="no such file"):
        read_scan(tmp_path / "scan.las")
    (tmp_path / "folder.las").mkdir()
    with pytest.raises(InputFileError, match="a folder"):
        read_scan(tmp_path / "folder.las")
    (tmp_path / "scan.docx").write_bytes(PLAIN)
    with pytest.raises(InputFileError, match=r"\.las, \.laz.*'\.docx'"):
        read_scan(tmp_path / "scan.docx")


def test_a_file_without_permission_is_refused_in_one_sentence(tmp_path, monkeypatch):
    path = tmp_path / "scan.las"
    path.write_bytes(PLAIN)

    def denied(self, *args, **kwargs):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "open", denied)  # the superuser may read anything, so the mode of the file will not do
    with pytest.raises(InputFileError, match=r"scan\.las.*Permission denied.*check the permissions"):
        read_scan(path)


def test_user_bytes_in_the_header_are_allowed(tmp_path):
    data = patched(las(gap=b"\xdd\xcc"), 94, "<H", 229)  # the header size is what byte 94 says, never a constant
    path = tmp_path / "scan.las"
    path.write_bytes(data)
    assert len(read_scan(path)) == 400


def test_points_that_the_header_does_not_count_are_told(tmp_path):
    path = tmp_path / "scan.las"
    path.write_bytes(patched(PLAIN, 107, "<I", 390))
    epoch = read_scan(path)
    assert len(epoch) == 390
    assert any("200 bytes after the last point" in notice for notice in epoch.provenance.notices)


def test_the_three_false_vlr_counts_do_not_depend_on_the_size_of_the_file(tmp_path):
    """A count that fits the file but not the room before the points is refused too: such a file made laspy hang."""
    path = tmp_path / "scan.las"
    for count in (10, 1000, 2**32 - 1):
        path.write_bytes(patched(las(MADE["wall"](20_000)), 100, "<I", count))
        with pytest.raises(InputFileError, match="VLR count"):
            read_scan(path)


def test_real_files_keep_their_points():
    outcome = {}
    # the street pair repeats points exactly, which are dropped
    for path in sorted(set(DATA.glob("*.la[sz]")) - set(DATA.glob("street*"))):
        try:
            epoch = read_scan(path)
        except InputFileError as error:
            outcome[path.name] = str(error).split("got ")[1].split(";")[0]
            continue
        with laspy.open(path) as stream:
            assert stream.header.point_count == len(epoch) == epoch.provenance.file_points
        outcome[path.name] = len(epoch)
    assert outcome == {
        "1_4_w_evlr.las": 1000, "1_4_w_evlr.laz": 1000, "extra.laz": 1065, "extrabytes.las": 1065, "plane.laz": 28185,
        "simple.copc.laz": 1065, "simple.las": 1065, "simple1_3.las": 999, "unregistered_extra_bytes.las": "4",
    }  # fmt: skip
