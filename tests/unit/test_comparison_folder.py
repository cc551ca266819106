# SPDX-License-Identifier: MIT
"""A real comparison into a folder: done once, resumed after a stop, redone in part; same bytes either way."""

import json
import os
import shutil
import subprocess

import laspy
import numpy as np
import pytest

from scanstrain.comparison import compare_alone, compare_to_folder
from scanstrain.config import config_from_options
from scanstrain.errors import InputFileError, OutputError
from scanstrain.lock import locked
from scanstrain.stages import STAGES

RESULTS = ("strain.laz", "strain_disp_n.laz", "strain_disp_n.png", "gauges.csv", "registered.json", "wall.csv")
EVERYTHING = tuple(STAGES)


@pytest.fixture(scope="module")
def scans(tmp_path_factory):
    """Two scans of a wall with a bulge and texture, some thousand points each."""
    folder, rng = tmp_path_factory.mktemp("scans"), np.random.default_rng(3)
    for number, name in enumerate("ab"):
        las = laspy.LasData(laspy.LasHeader(point_format=6, version="1.4"))
        las.header.scales, las.header.offsets = [1e-5] * 3, [482310.0, 5391270.0, 100.0]
        x, z = rng.uniform(0, 0.9, 4000), rng.uniform(0, 0.6, 4000)
        y = 0.05 * np.sin(2 * x) * np.cos(3 * z) + number * 3e-3 * np.exp(-((x - 0.4) ** 2 + (z - 0.3) ** 2) / 0.05)
        las.x, las.y, las.z = x + 482310.0, y + 5391270.0 + rng.normal(0, 1e-3, 4000), z + 100.0
        las.intensity = 2000 + 800 * np.sin(9 * x + 2 * z) * np.cos(7 * z - 3 * x) + rng.normal(0, 40, 4000)
        las.write(folder / f"{name}.laz")
    return folder / "a.laz", folder / "b.laz"


def options(**changed):
    return config_from_options({"gauge_length": 0.3, "structure": "wall", "report": False, **changed})


@pytest.fixture(scope="module")
def undisturbed(scans, tmp_path_factory):
    """The result of a run that nothing disturbed, with what it said."""
    folder = tmp_path_factory.mktemp("undisturbed") / "result"
    return folder, compare_to_folder(*scans, options(), folder)


@pytest.fixture
def done(undisturbed, tmp_path):
    """A copy of that result."""
    folder = tmp_path / "result"
    shutil.copytree(undisturbed[0], folder)
    return folder


def contents(folder):
    """The bytes of every result file; of the summary all but times and memory, which no two runs share."""
    found = {name: (folder / name).read_bytes() for name in RESULTS}
    summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    del summary["timing"]
    return found | {"summary.json": summary}


def test_a_first_run_computes_every_stage_and_lists_what_it_wrote(undisturbed, scans):
    folder, written = undisturbed
    assert (written.computed, written.taken, written.up_to_date, written.notes) == (EVERYTHING, (), False, ())
    assert sorted(path.name for path in folder.parent.iterdir()) == ["result"]
    manifest = json.loads((folder / "manifest.json").read_text(encoding="utf-8"))
    files = {path.name for path in folder.iterdir() if path.is_file()}
    assert set(manifest["outputs"]) == files - {"manifest.json"}
    sums = subprocess.run(["sha256sum", *scans], capture_output=True, text=True, check=True).stdout.split()
    assert [manifest["inputs"][name]["sha256"] for name in ("reference", "current")] == sums[::2]
    assert manifest["options"]["strain"]["structure"] == "wall"
    assert manifest["software"]["numpy"] == np.__version__


def test_kept_stages_change_no_number(undisturbed, scans):
    """The functions of Python keep nothing and write nothing; they give the numbers of the files."""
    from scanstrain.pipeline import compare_files

    result = compare_files(*scans, options())
    with laspy.open(undisturbed[0] / "strain.laz") as stream:
        points = stream.read()
    for name in ("disp_n", "strain_1", "tilt", "significance"):
        np.testing.assert_array_equal(np.asarray(points[name]), result.points[name])


def test_the_same_again_does_nothing(done, scans, monkeypatch):
    monkeypatch.setattr("scanstrain.pipeline.compare_files", lambda *_, **__: pytest.fail("it was computed again"))
    before = {path: path.stat().st_mtime_ns for path in done.rglob("*")}
    written = compare_to_folder(*scans, options(), done)
    assert (written.up_to_date, written.computed) == (True, ())
    assert {path: path.stat().st_mtime_ns for path in done.rglob("*")} == before
    # scans that lie elsewhere are the same scans
    other = [shutil.copy(scan, done.parent / scan.name) for scan in scans]
    assert compare_to_folder(*other, options(), done).up_to_date


@pytest.mark.parametrize("damage", ["missing", "changed"])
def test_an_output_that_is_missing_or_changed_is_written_again_from_the_kept_stages(undisturbed, done, scans, damage):
    target = done / "gauges.csv"
    if damage == "missing":
        target.unlink()
    else:
        target.write_bytes(target.read_bytes().replace(b"0", b"1", 1))
    written = compare_to_folder(*scans, options(), done)
    assert (written.up_to_date, written.computed, written.taken) == (False, (), EVERYTHING)
    assert f"gauges.csv {'is missing' if damage == 'missing' else 'was changed'}" in written.notes[0]
    assert contents(done) == contents(undisturbed[0])


@pytest.mark.parametrize(
    ("changed", "computed"),
    [
        ({"thickness": 0.3}, ("strain",)), ({"measure": "hencky"}, ("strain",)), ({"colour_by": "tilt"}, ()),
        ({"no_data": -9999.0}, ()), ({"gauge_spacing": 0.1}, ("field", "strain")),
    ],
    ids=str,
)  # fmt: skip
def test_changed_options_redo_only_what_depends_on_them(done, scans, changed, computed):
    written = compare_to_folder(*scans, options(**changed), done)
    assert written.computed == computed
    assert written.taken == tuple(name for name in STAGES if name not in computed)
    config = json.loads((done / "summary.json").read_text(encoding="utf-8"))["config"]
    told = {key: value for table in config.values() if isinstance(table, dict) for key, value in table.items()}
    assert changed.items() <= told.items()


def test_thickness_from_kept_stages_gives_the_same_bytes_as_from_nothing(done, scans, tmp_path):
    compare_to_folder(*scans, options(thickness=0.3), done)
    compare_to_folder(*scans, options(thickness=0.3), tmp_path / "new")
    assert contents(done) == contents(tmp_path / "new")


def test_fresh_forgets_the_stages_and_keeps_the_old_result_until_there_is_a_new_one(done, scans, monkeypatch):
    monkeypatch.setattr("scanstrain.pipeline.compare_files", stop)
    with pytest.raises(KeyboardInterrupt):
        compare_to_folder(*scans, options(), done, fresh=True)
    assert not (done / ".stages").exists()
    assert compare_to_folder(*scans, options(), done).up_to_date


def test_stages_are_kept_only_if_wanted_but_always_while_they_may_be_needed(begun, scans, tmp_path, monkeypatch):
    folder = begun(*STAGES)
    with monkeypatch.context() as patch:
        patch.setattr("scanstrain.strain.blend_to_points", stop)
        with pytest.raises(KeyboardInterrupt):
            compare_to_folder(*scans, options(keep_stages=False), folder)
    written = compare_to_folder(*scans, options(keep_stages=False), folder)
    assert written.taken == EVERYTHING
    assert not (folder / ".stages").exists()
    assert [path.name for path in tmp_path.iterdir()] == ["result"]
    assert compare_to_folder(*scans, options(), folder).up_to_date


def stop(*_, **__):
    raise KeyboardInterrupt


@pytest.fixture
def begun(undisturbed, tmp_path):
    """Leave what a run leaves that was stopped after some stages; return where its result was to go."""

    def left(*stages):
        place = tmp_path / ".result.stages"
        place.mkdir()
        for name in stages:
            shutil.copy(undisturbed[0] / ".stages" / f"{name}.stage", place)
        return tmp_path / "result"

    return left


@pytest.mark.parametrize(
    ("where", "taken"),
    [
        ("scanstrain.strain.compute_strain", ("registration", "field")),
        ("scanstrain.outputs.write_result", EVERYTHING),
    ],
)
def test_a_stopped_run_goes_on_where_it_was_and_gives_the_same_bytes(
    undisturbed, begun, scans, tmp_path, monkeypatch, where, taken
):
    folder = begun(*taken[:-1])
    with monkeypatch.context() as patch:
        patch.setattr(where, stop)
        with pytest.raises(KeyboardInterrupt):
            compare_to_folder(*scans, options(), folder)
    assert not folder.exists()
    written = compare_to_folder(*scans, options(), folder)
    assert written.taken == taken
    assert contents(folder) == contents(undisturbed[0])
    assert sorted(path.name for path in tmp_path.iterdir()) == ["result"]


def test_what_a_killed_run_left_is_tidied(undisturbed, done, scans):
    """A half-written result beside or inside, and an exchange of results that was cut in the middle."""
    (done.parent / ".result.12ab34cd.partial").mkdir()
    (done.parent / ".result.12ab34cd.partial" / "strain.laz").write_bytes(b"half")
    work = done / ".34cd.partial"
    (work / "before").mkdir(parents=True)
    (done / "gauges.csv").rename(work / "before" / "gauges.csv")
    (done / "gauges.csv").write_bytes(b"of the new result")
    (done / ".stages" / ".field.stage.ab.part").write_bytes(b"half")
    assert compare_to_folder(*scans, options(), done).up_to_date
    assert contents(done) == contents(undisturbed[0])
    assert sorted(path.name for path in done.parent.iterdir()) == ["result"]
    assert {path.name for path in (done / ".stages").iterdir()} == {f"{name}.stage" for name in STAGES}


def test_tiles_keep_their_stores_beside_the_result_and_leave_nothing(scans, tmp_path, monkeypatch):
    from scanstrain.neighbourhood import affine

    seen, fit_piece = [], affine.fit_piece

    def watched(*arguments):
        seen.extend(path.parent.name for path in tmp_path.glob(".result.*.partial/*.store"))
        return fit_piece(*arguments)

    monkeypatch.setattr(affine, "fit_piece", watched)
    asked = options().model_copy(
        update={"neighbourhood": options().neighbourhood.model_copy(update={"tiles": True, "tile_points": 3000})}
    )
    compare_to_folder(*scans, asked, tmp_path / "result")
    assert seen
    assert all(name.startswith(".result.") for name in seen)
    assert [path.name for path in tmp_path.iterdir()] == ["result"]


@pytest.mark.parametrize("text", ["{", "[]", '{"format": 1}', None, "older"])
def test_a_result_of_another_version_is_named_and_made_anew(done, scans, text):
    manifest = done / "manifest.json"
    if text is None:
        manifest.unlink()
    elif text == "older":
        content = json.loads(manifest.read_text(encoding="utf-8"))
        content["software"]["scanstrain"] = "0.0.9"
        manifest.write_text(json.dumps(content), encoding="utf-8")
    else:
        manifest.write_text(text, encoding="utf-8")
    written = compare_to_folder(*scans, options(), done)
    (note,) = written.notes
    assert {None: "a version that wrote no manifest", "older": "version 0.0.9"}.get(text, "cannot be read") in note
    assert note.endswith("it is made anew.")
    assert not written.up_to_date


def test_two_runs_on_one_folder_refuse_each_other(scans, tmp_path):
    with locked(tmp_path / "result"), pytest.raises(OutputError, match="at work there since"):
        compare_alone(*scans, options(), tmp_path / "result")
    assert list(tmp_path.iterdir()) == []


def test_too_little_room_is_said_before_anything_is_computed(scans, tmp_path, monkeypatch):
    monkeypatch.setattr("scanstrain.comparison.free_space", lambda folder: 1e6)
    monkeypatch.setattr("scanstrain.pipeline.compare_files", lambda *_, **__: pytest.fail("it was computed"))
    with pytest.raises(OutputError, match=r"about 0\.02\d GB of free space; got 0\.001 GB"):
        compare_to_folder(*scans, options(), tmp_path / "result")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("how", ["gone", "changed"])
def test_a_scan_that_vanishes_or_changes_on_the_way_is_named(begun, scans, tmp_path, monkeypatch, how):
    import scanstrain.strain

    copies = [shutil.copy(scan, tmp_path / scan.name) for scan in scans]
    blend = scanstrain.strain.blend_to_points

    def meanwhile(*arguments):
        copies[0].unlink()
        if how == "changed":
            shutil.copy(scans[1], copies[0])
        return blend(*arguments)

    monkeypatch.setattr("scanstrain.strain.blend_to_points", meanwhile)
    wanted = "no longer there" if how == "gone" else "changed meanwhile"
    with pytest.raises(InputFileError, match=rf"a\.laz: required a scan that stays .* got one that \w+ {wanted}"):
        compare_to_folder(*copies, options(), begun(*STAGES))
    assert {path.name for path in tmp_path.iterdir()} <= {"a.laz", "b.laz"}


def test_a_scan_that_changes_while_it_is_written_spoils_no_result(begun, scans, tmp_path, monkeypatch):
    import scanstrain.outputs

    copies = [shutil.copy(scan, tmp_path / scan.name) for scan in scans]
    write = scanstrain.outputs.write_result

    def meanwhile(*arguments, **options):
        shutil.copy(scans[0], copies[1])
        return write(*arguments, **options)

    monkeypatch.setattr("scanstrain.outputs.write_result", meanwhile)
    with pytest.raises(InputFileError, match=r"b\.laz: .* changed meanwhile"):
        compare_to_folder(*copies, options(), begun(*STAGES))
    assert {path.name for path in tmp_path.iterdir()} == {"a.laz", "b.laz"}


@pytest.fixture
def small_disk(tmp_path):
    """A disk of one megabyte."""
    place = tmp_path / "disk"
    place.mkdir()
    if (
        os.name != "posix"
        or subprocess.run(
            ["mount", "-t", "tmpfs", "-o", "size=700k", "tmpfs", place], capture_output=True, check=False
        ).returncode
    ):
        pytest.skip("no disk can be mounted here")
    yield place
    subprocess.run(["umount", place], check=True)


def test_a_full_disk_is_said_and_leaves_nothing_half_written(scans, small_disk, monkeypatch):
    monkeypatch.setattr("scanstrain.comparison.free_space", lambda folder: 1e12)
    before = [scan.read_bytes() for scan in scans]
    folder = small_disk / "result"
    with pytest.raises(OutputError, match=r"(?i)no space left"):
        compare_to_folder(*scans, options(), folder)
    assert not folder.exists()
    assert not list(small_disk.rglob("*.part*"))
    assert [scan.read_bytes() for scan in scans] == before


def test_a_disk_that_cannot_be_written_to_is_said_before_anything_is_computed(scans, small_disk, monkeypatch):
    monkeypatch.setattr("scanstrain.pipeline.compare_files", lambda *_, **__: pytest.fail("it was computed"))
    subprocess.run(["mount", "-o", "remount,ro", small_disk], check=True)
    with pytest.raises(ValueError, match="no permission to write there"):
        compare_alone(*scans, options(), small_disk / "result")
