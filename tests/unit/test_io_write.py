# SPDX-License-Identifier: MIT
"""Writing results: what is refused, what is replaced, and that nothing half-done is ever left behind."""

import errno
import os
import resource
import runpy
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from scanstrain.attributes import ATTRIBUTES
from scanstrain.errors import InputFileError, OptionError, OutputError
from scanstrain.io import (
    atomic,
    expand_to_file,
    las_result,
    las_write,
    read_result_cloud,
    read_scan,
    write_result_cloud,
)

MADE = runpy.run_path(str(Path(__file__).parents[1] / "io_samples.py"))
las, vlr, take_apart, wall, DATA = (MADE[k] for k in ("las", "vlr", "take_apart", "wall", "DATA"))
N = 400


@pytest.fixture
def reference(tmp_path):
    path = tmp_path / "reference.las"
    path.write_bytes(las(fmt=6))
    return path


def results(n=N, seed=0):
    rng = np.random.default_rng(seed)
    return {
        "disp_n": np.where(rng.random(n) < 0.3, np.nan, rng.normal(0, 1e-3, n)).astype("f4"),
        "status": rng.integers(0, 8, n).astype("u1"),
        "gauge_points": rng.integers(0, 60000, n).astype("u2"),
    }


def left_in(folder):
    return sorted(p.name for p in folder.iterdir())


def test_results_read_back_with_the_epoch(tmp_path, reference):
    values = results()
    for suffix, no_data in ((".las", None), (".laz", None), (".laz", -9999.0)):
        target = write_result_cloud(reference, tmp_path / f"strain{suffix}", values, no_data=no_data)
        epoch, found = read_result_cloud(target)
        assert list(found) == ["disp_n", "status", "gauge_points"]
        for name, array in values.items():
            assert found[name].dtype == array.dtype
            np.testing.assert_array_equal(found[name], array)
        np.testing.assert_array_equal(epoch.points, read_scan(reference).points)


def test_table_order_does_not_depend_on_the_order_given(tmp_path, reference):
    values = dict(reversed(results().items()))
    write_result_cloud(reference, tmp_path / "strain.las", values)
    fields = take_apart((tmp_path / "strain.las").read_bytes())["fields"]
    order = [a.name for a in ATTRIBUTES if a.name in values]
    assert list(fields) == order == ["disp_n", "status", "gauge_points"]


def test_asking_for_results(tmp_path, reference):
    target = write_result_cloud(reference, tmp_path / "strain.laz", results())
    assert list(read_result_cloud(target, attributes=["status"])[1]) == ["status"]
    with pytest.raises(OptionError, match="did you mean 'status'"):
        read_result_cloud(target, attributes=["statsu"])
    with pytest.raises(InputFileError, match=r"strain\.laz: required the attribute tilt; got disp_n, status"):
        read_result_cloud(target, attributes=["tilt"])
    with pytest.raises(InputFileError, match=r"a cloud with results; got none in it"):
        read_result_cloud(reference)


def test_a_result_as_reference_gives_its_old_results_away(tmp_path, reference):
    first = write_result_cloud(reference, tmp_path / "first.laz", {**results(), "tilt": np.ones(N, "f4")})
    second = write_result_cloud(first, tmp_path / "second.las", results(seed=1))
    parts = take_apart(second.read_bytes())
    assert list(parts["fields"]) == ["disp_n", "status", "gauge_points"]
    assert parts["length"] == 30 + 7
    np.testing.assert_array_equal(read_result_cloud(second)[1]["disp_n"], results(seed=1)["disp_n"])
    assert [v[:2] for v in parts["vlrs"]] == [("LASF_Spec", 4)]


def test_a_foreign_field_of_the_same_name_is_kept_under_another(tmp_path):
    """Somebody else's "tilt" is no result of ours: its description and the program in the header say so."""
    payload = MADE["descriptor"]("tilt", 9, 0, b"degrees, theirs") + MADE["descriptor"]("tilt_input", 1)
    extra = np.random.default_rng(2).integers(0, 256, (N, 5), dtype=np.uint8)
    (tmp_path / "a.las").write_bytes(las(vlrs=[vlr("LASF_Spec", 4, payload)], extra=extra))
    target = write_result_cloud(tmp_path / "a.las", tmp_path / "b.las", {"tilt": np.ones(N, "f4")})
    parts = take_apart(target.read_bytes())
    assert {name: (f[0], f[5]) for name, f in parts["fields"].items()} == {
        "tilt_input2": (9, b"degrees, theirs"), "tilt_input": (1, b""), "tilt": (9, b"rad rotation of the normal"),
    }  # fmt: skip
    np.testing.assert_array_equal(parts["rows"][:, 20:25], extra)


def test_colour_alone_changes_nothing_else(tmp_path, reference):
    first = write_result_cloud(reference, tmp_path / "strain.laz", results())
    rgb = np.random.default_rng(0).integers(0, 65536, (N, 3)).astype("u2")
    second = write_result_cloud(first, tmp_path / "strain_disp_n.laz", {}, colour=rgb)
    epoch, found = read_result_cloud(second)
    for name, array in results().items():
        np.testing.assert_array_equal(found[name], array)
    np.testing.assert_array_equal(epoch.colour, rgb)


def test_dropped_points_get_no_data_and_the_given_reason(tmp_path):
    raw = wall()
    raw[[3, 77], [0, 2]] = -(2**31)
    (tmp_path / "a.las").write_bytes(las(raw, fmt=6))
    epoch = read_scan(tmp_path / "a.las")
    spread = expand_to_file(epoch, results(len(epoch)), dropped_status=6)
    assert np.isnan(spread["disp_n"][[3, 77]]).all()
    assert spread["status"][[3, 77]].tolist() == [6, 6]
    assert spread["gauge_points"][[3, 77]].tolist() == [0, 0]
    target = write_result_cloud(tmp_path / "a.las", tmp_path / "b.laz", spread)
    back, found = read_result_cloud(target)
    assert len(back) == len(epoch) == 398
    np.testing.assert_array_equal(found["disp_n"], results(398)["disp_n"])


def test_expanding_without_dropped_points_copies_nothing(reference):
    values = results()
    spread = expand_to_file(read_scan(reference), values, dropped_status=6)
    assert all(spread[name] is values[name] for name in values)


BAD_VALUES = {
    "unknown name": ({"strainxx": np.zeros(N, "f4")}, {}, "did you mean 'strain_xx'"),
    "too short": ({"tilt": np.zeros(N - 1, "f4")}, {}, r"shape \(400,\); got shape \(399,\)"),
    "too long": ({"tilt": np.zeros(N + 1, "f4")}, {}, r"got shape \(401,\)"),
    "code that wraps": ({"status": np.full(N, 300)}, {}, "codes from 0 to 255; got 300"),
    "negative code": ({"status": np.full(N, -1)}, {}, "got -1"),
    "code that truncates": ({"status": np.full(N, 0.5)}, {}, "whole numbers"),
    "infinite": ({"tilt": np.full(N, np.inf)}, {}, "finite values or NaN"),
    "beyond float32": ({"tilt": np.full(N, 1e300)}, {}, "finite values or NaN"),
    "complex": ({"tilt": np.full(N, 1j)}, {}, "real values"),
    "no_data that is a value": ({"tilt": np.full(N, -1.0)}, {"no_data": -1.0}, "a value that tilt never takes"),
    "no_data that is NaN": ({"tilt": np.zeros(N)}, {"no_data": np.nan}, "a finite float32 value"),
    "8-bit colour": ({}, {"colour": np.zeros((N, 3), "u1")}, "multiply 8-bit by 257"),
    "0-to-1 colour": ({}, {"colour": np.zeros((N, 3))}, "uint16"),
    "colour of a wrong length": ({}, {"colour": np.zeros((N, 4), "u2")}, r"\(400, 3\)"),
}


@pytest.mark.parametrize("kind", BAD_VALUES)
def test_values_that_would_be_stored_wrongly_are_refused(tmp_path, reference, kind):
    values, options, said = BAD_VALUES[kind]
    with pytest.raises(OptionError, match=said):
        write_result_cloud(reference, tmp_path / "strain.las", values, **options)
    assert left_in(tmp_path) == ["reference.las"]


@pytest.mark.parametrize("name", ["strain.copc.laz", "strain.txt", "strain", "reference.las"])
def test_targets_that_cannot_serve(tmp_path, reference, name):
    before = reference.read_bytes()
    with pytest.raises(OptionError, match="rename the output"):
        write_result_cloud(reference, tmp_path / name, results())
    assert reference.read_bytes() == before


def test_an_input_under_another_name_is_still_the_input(tmp_path, reference):
    (tmp_path / "link.las").symlink_to(reference)
    with pytest.raises(OptionError, match="the input itself"):
        write_result_cloud(reference, tmp_path / "link.las", results())


def test_a_missing_folder_and_a_folder_in_the_way(tmp_path, reference):
    with pytest.raises(OutputError, match="create the folder first"):
        write_result_cloud(reference, tmp_path / "none" / "strain.las", results())
    (tmp_path / "strain.las").mkdir()
    with pytest.raises(OutputError, match="give the name of a file"):
        write_result_cloud(reference, tmp_path / "strain.las", results())
    assert left_in(tmp_path) == ["reference.las", "strain.las"]


def test_no_permission_is_told(tmp_path, reference, monkeypatch):
    def denied(self, *args, **kwargs):
        raise PermissionError(errno.EACCES, os.strerror(errno.EACCES))

    monkeypatch.setattr(Path, "touch", denied)  # the superuser may write anywhere, so the mode of a folder will not do
    with pytest.raises(OutputError, match=r"strain\.las.*Permission denied.*choose a folder"):
        write_result_cloud(reference, tmp_path / "strain.las", results())
    assert left_in(tmp_path) == ["reference.las"]


@pytest.mark.parametrize("suffix", [".las", ".laz"])
def test_a_full_disk_leaves_the_old_result_and_nothing_else(tmp_path, suffix):
    """A limit on the size of files stands for the full disk: the system call fails in the middle of the points."""
    (tmp_path / "a.las").write_bytes(las(wall(20_000), fmt=6))
    (tmp_path / f"strain{suffix}").write_bytes(b"old result")
    code = f"""
import resource, signal, numpy as np
from scanstrain.errors import OutputError
from scanstrain.io import write_result_cloud
signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, {resource.RLIM_INFINITY}))
noise = np.random.default_rng(0).random(20_000)
try:
    write_result_cloud("a.las", "strain{suffix}", {{"disp_n": noise, "tilt": noise, "spin": noise}})
except OutputError as error:
    print(error)
"""
    run = subprocess.run([sys.executable, "-c", code], cwd=tmp_path, capture_output=True, text=True, check=True)
    assert run.stdout.startswith(f"strain{suffix}: required a file that can be written; got ")
    assert "File too large" in run.stdout
    assert left_in(tmp_path) == ["a.las", f"strain{suffix}"]
    assert (tmp_path / f"strain{suffix}").read_bytes() == b"old result"


def test_an_interruption_leaves_nothing(tmp_path, reference, monkeypatch):
    def stop(*args, **kwargs):
        raise KeyboardInterrupt

    monkeypatch.setattr(las_write, "assemble", stop)
    with pytest.raises(KeyboardInterrupt):
        write_result_cloud(reference, tmp_path / "strain.laz", results())
    assert left_in(tmp_path) == ["reference.las"]


SPOILT = {
    "a value": (30, "disp_n not as written"),
    "a coordinate": (4, "coordinates and fields of the reference not as written"),
    "a code": (34, "status not as written"),
}


@pytest.mark.parametrize("kind", SPOILT)
@pytest.mark.parametrize("suffix", [".las", ".laz"])
def test_what_does_not_read_back_as_written_is_not_delivered(tmp_path, reference, monkeypatch, kind, suffix):
    at, said = SPOILT[kind]
    honest = las_write.assemble

    def spoilt(*args):
        out = honest(*args)
        out[123, at] ^= 1
        return out

    monkeypatch.setattr(las_write, "assemble", spoilt)
    with pytest.raises(OutputError, match=said):
        write_result_cloud(reference, tmp_path / f"strain{suffix}", results())
    assert left_in(tmp_path) == ["reference.las"]


def test_a_spoilt_descriptor_or_evlr_is_not_delivered(tmp_path, monkeypatch):
    source = tmp_path / "a.las"
    source.write_bytes(las(fmt=6, evlrs=[MADE["evlr"]("x", 1, b"payload")]))
    honest = las_result.write_points
    for find, put, said in [(b"m displacement to", b"k displacement to", "VLRs"), (b"payload", b"paylord", "EVLR")]:

        def spoilt(path, *args, find=find, put=put, **options):
            tally = honest(path, *args, **options)
            path.write_bytes(path.read_bytes().replace(find, put))
            return tally

        monkeypatch.setattr(las_result, "write_points", spoilt)
        with pytest.raises(OutputError, match=f"{said} not as written"):
            write_result_cloud(source, tmp_path / "b.las", results())
        assert left_in(tmp_path) == ["a.las"]


def test_a_reference_that_is_cut_is_refused_and_nothing_is_written(tmp_path):
    (tmp_path / "a.laz").write_bytes((DATA / "plane.laz").read_bytes()[:-1000])
    with pytest.raises(InputFileError, match=r"a\.laz"):
        write_result_cloud(tmp_path / "a.laz", tmp_path / "b.laz", {"tilt": np.zeros(28185, "f4")})
    assert left_in(tmp_path) == ["a.laz"]


@pytest.mark.parametrize("fmt", [9, 10])
def test_waveform_formats_are_written_uncompressed(tmp_path, fmt):
    """lazrs 0.8.2 does not give back the waveform packets of formats 9 and 10 that it packed."""
    (tmp_path / "a.las").write_bytes(las(fmt=fmt))
    target = write_result_cloud(tmp_path / "a.las", tmp_path / "strain.laz", results())
    assert target == tmp_path / "strain.las"
    assert left_in(tmp_path) == ["a.las", "strain.las"]


def test_many_points_pass_in_pieces(tmp_path):
    n = 450_000
    raw = np.random.default_rng(0).integers(-(10**6), 10**6, (n, 3)).astype("<i4")
    (tmp_path / "a.las").write_bytes(las(raw, fmt=6))
    values = {"disp_n": np.arange(n, dtype="f4"), "status": (np.arange(n) % 7).astype("u1")}
    target = write_result_cloud(tmp_path / "a.las", tmp_path / "b.laz", values)
    epoch, found = read_result_cloud(target)
    np.testing.assert_array_equal(found["disp_n"], values["disp_n"])
    np.testing.assert_array_equal(np.rint((epoch.points + epoch.origin) / 0.001), raw)


def test_replacing_keeps_the_old_file_until_the_new_one_is_whole(tmp_path):
    target = tmp_path / "file"
    target.write_text("old")

    def write_half():
        with atomic.replacing(target) as path:
            path.write_text("half")
            assert target.read_text() == "old"
            raise RuntimeError

    with pytest.raises(RuntimeError):
        write_half()
    assert left_in(tmp_path) == ["file"]
    with atomic.replacing(target) as path:
        path.write_text("new")
    assert target.read_text() == "new"
