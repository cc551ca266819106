# SPDX-License-Identifier: MIT
"""Text, PLY and E57 scans: what is read, what is refused, and the LAS file that results are written to."""

import runpy
import struct
import sys
import types
from pathlib import Path

import numpy as np
import plyfile
import pytest

from scanstrain.errors import InputFileError, MissingDependencyError, OptionError
from scanstrain.io import FORMATS, read_result_cloud, read_scan, write_result_cloud

MADE = runpy.run_path(str(Path(__file__).parents[1] / "io_samples.py"))
POINTS = np.random.default_rng(0).random((150, 3)).round(4) + np.array([482_310.0, 5_391_270.0, 100.0])
GREY = np.random.default_rng(1).integers(0, 4096, 150)
RGB = np.random.default_rng(2).integers(0, 256, (150, 3))


def lines(*columns, sep=" "):
    table = np.column_stack(columns)
    kinds = ["%.4f"] * 3 + ["%d"] * (table.shape[1] - 3)
    return "".join(sep.join(k % v for k, v in zip(kinds, row, strict=True)) + "\n" for row in table)


def put(tmp_path, name, content):
    path = tmp_path / name
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


def world(epoch):
    return epoch.points + epoch.origin


def test_every_format_is_registered_once():
    suffixes = [s for name in FORMATS for s in FORMATS[name].suffixes]
    assert sorted(suffixes) == [".e57", ".las", ".laz", ".ply", ".pts", ".txt", ".xyz"]


@pytest.mark.parametrize("sep", [" ", "\t", ";", ","])
def test_text_columns(tmp_path, sep):
    for columns in ([], [GREY], [RGB], [GREY, RGB]):
        epoch = read_scan(put(tmp_path, "a.xyz", "# a comment\n" + lines(POINTS, *columns, sep=sep)))
        np.testing.assert_allclose(world(epoch), POINTS, atol=2e-9)
        for values, truth in ((epoch.intensity, GREY), (epoch.colour, RGB)):
            assert (values is None) == (not any(c is truth for c in columns))
            if values is not None:
                np.testing.assert_array_equal(values, truth)
        assert any("no coordinate system" in notice for notice in epoch.provenance.notices)


def test_text_with_a_heading(tmp_path):
    assert len(read_scan(put(tmp_path, "a.txt", "x y z\n" + lines(POINTS)))) == 150


def test_pts_counts_every_setup(tmp_path):
    text = f"100\n{lines(POINTS[:100], GREY[:100])}50\n{lines(POINTS[100:], GREY[100:])}"
    epoch = read_scan(put(tmp_path, "a.pts", text))
    np.testing.assert_allclose(world(epoch), POINTS, atol=2e-9)
    assert np.bincount(epoch.setup).tolist() == [0, 100, 50]


BAD_TEXT = {
    "empty": ("\n\n", "got none"),
    "binary": (bytes(range(256)) * 20, "lines of numbers"),
    "words": (lines(POINTS) + "and so on\n", "lines of numbers"),
    "two columns": ("1.5 2.5\n" * 150, "got 2 columns"),
    "decimal commas": (lines(POINTS).replace(".", ","), "a dot as decimal sign"),
    "a cut count": ("151\n" + lines(POINTS), "151 points.*got 150: the file is cut"),
    "more than the count": ("149\n" + lines(POINTS), "more"),
    "a line cut": (lines(POINTS)[:-12], "lines of numbers; got the number of columns changed"),
    "too few": (lines(POINTS[:99]), "at least 100"),
}


@pytest.mark.parametrize("kind", BAD_TEXT)
def test_text_that_cannot_serve(tmp_path, kind):
    content, said = BAD_TEXT[kind]
    with pytest.raises(InputFileError, match=said) as caught:
        read_scan(put(tmp_path, "scan.pts", content))
    assert "scan.pts" in str(caught.value)
    assert "\n" not in str(caught.value)


def ply(text=False, order="<", kind="f8", faces=True):
    vertices = np.empty(150, [("x", kind), ("y", kind), ("z", kind), ("Intensity", "u2"),
                              ("red", "u1"), ("green", "u1"), ("blue", "u1")])  # fmt: skip
    for axis, name in enumerate("xyz"):
        vertices[name] = POINTS[:, axis]
    vertices["Intensity"] = GREY
    for channel, name in enumerate(("red", "green", "blue")):
        vertices[name] = RGB[:, channel]
    elements = [plyfile.PlyElement.describe(vertices, "vertex")]
    if faces:
        face = np.empty(1, [("vertex_indices", "i4", (3,))])
        face["vertex_indices"] = [[0, 1, 2]]
        elements.append(plyfile.PlyElement.describe(face, "face"))
    return plyfile.PlyData(elements, text=text, byte_order=order, comments=["written by another library"])


@pytest.mark.parametrize(("text", "order"), [(True, "="), (False, "<"), (False, ">")])
def test_ply_from_another_library(tmp_path, text, order):
    path = tmp_path / "scan.ply"
    ply(text, order).write(str(path))
    epoch = read_scan(path)
    np.testing.assert_allclose(world(epoch), POINTS, atol=2e-9)
    np.testing.assert_array_equal(epoch.intensity, GREY)
    np.testing.assert_array_equal(epoch.colour, RGB)


def test_float32_at_survey_coordinates_is_told(tmp_path):
    """float32 has steps of 0.5 m at 5.4e6 m."""
    path = tmp_path / "scan.ply"
    ply(kind="f4").write(str(path))
    assert any("steps of 500 mm" in notice for notice in read_scan(path).provenance.notices)


def bad_ply():
    header = "ply\nformat binary_little_endian 1.0\nelement vertex {n}\n{p}end_header\n"
    plain = header.replace("binary_little_endian", "ascii")
    xyz = "property double x\nproperty double y\nproperty double z\n"
    body = POINTS.tobytes()
    return {
        "signature": (b"plx\n", "begins with ply"),
        "no end": (b"ply\nformat ascii 1.0\n", "end_header"),
        "body cut": (header.format(n=150, p=xyz).encode() + body[:-1], "150 vertices; got room for 149"),
        "count 1e9": (header.format(n=10**9, p=xyz).encode() + body, "the file is cut"),
        "ascii cut": (plain.format(n=200, p=xyz) + lines(POINTS), "200 ver"),
        "ascii count 1e12": (plain.format(n=10**12, p=xyz) + "1", "is cut"),
        "no z": (header.format(n=150, p=xyz.replace(" z", " w")).encode() + body, "none called z"),
        "a list": (header.format(n=150, p="property list uchar int v\n").encode(), "vertices of plain numbers"),
        "a name twice": (header.format(n=150, p=xyz + xyz).encode() + body * 2, "names of their own"),
        "faces first": (
            "ply\nformat ascii 1.0\nelement face 1\nelement vertex 1\n" + xyz + "end_header\n1 2 3", "first element"
        ),
        "NaN": (header.format(n=150, p=xyz).encode() + struct.pack("<450d", *[np.nan] * 450), "most points serve"),
    }  # fmt: skip


@pytest.mark.parametrize("kind", bad_ply())
def test_ply_that_cannot_serve(tmp_path, kind):
    content, said = bad_ply()[kind]
    with pytest.raises(InputFileError, match=said):
        read_scan(put(tmp_path, "scan.ply", content))


class FakeE57:
    """Stands for pye57, which is an extra: two set-ups, the second without colour."""

    scan_count = 2

    def __init__(self, path):
        if b"bad" in Path(path).read_bytes():
            raise RuntimeError("checksum mismatch")
        text = types.SimpleNamespace(value=lambda: "")
        self.root = {"coordinateMetadata": text}
        self.root = type("Root", (dict,), {"isDefined": lambda self, name: name in self})(self.root)

    def __enter__(self):
        return self

    def __exit__(self, *args):
        return None

    def read_scan(self, number, *, intensity, colors, ignore_missing_fields):
        assert intensity
        assert colors
        assert ignore_missing_fields
        part = slice(0, 100) if number == 0 else slice(100, 150)
        scan = dict(zip(("cartesianX", "cartesianY", "cartesianZ"), POINTS[part].T, strict=True))
        scan["intensity"] = GREY[part] / 4096
        if number == 0:
            scan |= dict(zip(("colorRed", "colorGreen", "colorBlue"), RGB[part].T, strict=True))
        return scan


@pytest.fixture
def pye57(monkeypatch):
    error = type("E57Exception", (Exception,), {})
    fake = types.SimpleNamespace(E57=FakeE57, libe57=types.SimpleNamespace(E57Exception=error))
    monkeypatch.setitem(sys.modules, "pye57", fake)


def test_e57_joins_the_setups(tmp_path, pye57):
    epoch = read_scan(put(tmp_path, "scan.e57", "ASTM-E57 and so on"))
    np.testing.assert_allclose(world(epoch), POINTS, atol=2e-9)
    np.testing.assert_allclose(epoch.intensity, GREY / 4096, rtol=1e-6)
    assert epoch.colour is None
    assert np.bincount(epoch.setup).tolist() == [0, 100, 50]


def test_e57_that_cannot_serve(tmp_path, pye57):
    with pytest.raises(InputFileError, match="begins with ASTM-E57"):
        read_scan(put(tmp_path, "scan.e57", "something else"))
    with pytest.raises(InputFileError, match="undamaged E57 file; got checksum mismatch"):
        read_scan(put(tmp_path, "scan.e57", "ASTM-E57 bad"))


def test_e57_without_its_package_names_the_command(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "pye57", None)
    with pytest.raises(MissingDependencyError, match=r'pip install "scanstrain\[e57\]"'):
        read_scan(put(tmp_path, "scan.e57", "ASTM-E57 and so on"))


def test_results_of_a_scan_that_is_no_las_go_into_a_fresh_one(tmp_path):
    source = put(tmp_path, "a.xyz", lines(POINTS, GREY, RGB) + "nan nan nan 1 2 3 4\n")
    values = {"disp_n": np.arange(151, dtype="f4"), "status": np.zeros(151, "u1")}
    for suffix in (".las", ".laz"):
        target = write_result_cloud(source, tmp_path / f"b{suffix}", values)
        epoch, found = read_result_cloud(target)
        np.testing.assert_allclose(world(epoch), POINTS, atol=2e-9)  # the text has four decimals, as the scale
        np.testing.assert_array_equal(found["disp_n"], np.arange(150))
        np.testing.assert_array_equal(epoch.intensity, GREY)
        np.testing.assert_array_equal(epoch.colour, RGB * 257)
    parts = MADE["take_apart"]((tmp_path / "b.las").read_bytes())
    assert (parts["minor"], parts["format"], parts["encoding"], parts["header_size"]) == (4, 7, 16, 375)
    assert struct.unpack_from("<3d", parts["scaling"]) == (1e-4, 1e-4, 1e-4)
    np.testing.assert_array_equal(struct.unpack_from("<3d", parts["scaling"], 24), epoch.origin)
    assert (parts["rows"][:, 14] == 0x11).all()
    with pytest.raises(OptionError, match="one row per point of the file"):
        write_result_cloud(source, tmp_path / "c.las", {"disp_n": np.zeros(149, "f4")})
