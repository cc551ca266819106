# SPDX-License-Identifier: MIT
"""A result folder appears whole or not at all, and nothing of the user's is lost."""

import errno
import os

import pytest

from scanstrain.errors import OptionError, OutputError
from scanstrain.outputs.folder import check_folder, finished_only, is_ours, recover


def names(folder):
    return sorted(path.name for path in folder.iterdir())


def put(target, *, error=None, retire=None, text="new", also=()):
    with finished_only(target, retire=retire) as work:
        fill(work, text, also)
        if error is not None:
            raise error


def fill(work, text="new", also=()):
    for name in ("strain.laz", "summary.json", *also):
        (work / name).write_text(text)


def test_new_folder_is_renamed_into_place_with_its_parents(tmp_path):
    target = tmp_path / "results" / "a_to_b"
    with finished_only(target) as work:
        fill(work)
        assert not target.exists()
    assert names(target) == ["strain.laz", "summary.json"]
    assert names(target.parent) == ["a_to_b"]


def test_failure_leaves_nothing_behind(tmp_path):
    target = tmp_path / "out"
    with pytest.raises(ValueError, match="half"):
        put(target, error=ValueError("half way"))
    assert names(tmp_path) == []


def test_interrupt_leaves_the_old_result(tmp_path):
    fill(tmp_path, "old")
    with pytest.raises(KeyboardInterrupt):
        put(tmp_path, error=KeyboardInterrupt(), retire=is_ours)
    assert names(tmp_path) == ["strain.laz", "summary.json"]
    assert (tmp_path / "strain.laz").read_text() == "old"


def test_finished_result_replaces_ours_and_leaves_the_rest(tmp_path):
    fill(tmp_path, "old", also=("strain_tilt.laz", "strain_tilt.png", "site notes.txt", "strain_photo.png"))
    (tmp_path / ".cache").mkdir()
    (tmp_path / ".cache" / "stage").write_text("kept")
    put(tmp_path, retire=is_ours)
    # the coloured cloud of the old result would now belong to other numbers
    assert names(tmp_path) == [".cache", "site notes.txt", "strain.laz", "strain_photo.png", "summary.json"]
    assert (tmp_path / "strain.laz").read_text() == "new"
    assert (tmp_path / "site notes.txt").read_text() == "old"
    assert names(tmp_path / ".cache") == ["stage"]


def test_exchange_that_fails_half_way_is_rolled_back(tmp_path, monkeypatch):
    fill(tmp_path, "old", also=("strain_tilt.laz",))
    rename, moved_in = os.rename, []

    def breaks(self, target):
        if "before" not in str(target) and self.parent.name.endswith(".partial"):
            moved_in.append(self.name)
            if len(moved_in) == 2:
                raise OSError(errno.EIO, "Input/output error")
        rename(self, target)
        return target

    monkeypatch.setattr("pathlib.Path.rename", breaks)
    with pytest.raises(OutputError, match="Input/output error"):
        put(tmp_path, retire=is_ours)
    assert len(moved_in) == 2
    assert names(tmp_path) == ["strain.laz", "strain_tilt.laz", "summary.json"]
    assert {path.read_text() for path in tmp_path.iterdir()} == {"old"}


def test_full_disk_is_said_in_one_sentence(tmp_path):
    with pytest.raises(OutputError, match=r"No space left on device; free some space") as caught:
        put(tmp_path / "out", error=OSError(errno.ENOSPC, "No space left on device"))
    assert str(tmp_path / "out") in str(caught.value)
    assert caught.value.exit_code == 1
    assert names(tmp_path) == []


def test_errors_of_ours_pass_unchanged(tmp_path):
    with pytest.raises(OptionError, match=r"^as it was$"):
        put(tmp_path / "out", error=OptionError("as it was"))


@pytest.mark.parametrize(
    ("name", "ours"),
    [("strain.laz", True), ("gauges.csv", True), ("registered.json", True), ("strain_disp_n.png", True),
     ("strain_disp_n.txt", False), ("strain_site.laz", False), ("disp_n.laz", False), ("scan.laz", False)],
)  # fmt: skip
def test_only_names_of_the_result_are_ours(name, ours):
    assert is_ours(name) is ours


def test_check_writes_nothing_and_gives_an_absolute_path(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert check_folder("new/deeper", inputs=["a.laz"]) == tmp_path / "new" / "deeper"
    assert names(tmp_path) == []


def test_output_folder_that_is_a_file_or_an_input_is_refused(tmp_path):
    scan = tmp_path / "a.laz"
    scan.write_text("scan")
    with pytest.raises(OutputError, match="a file of that name"):
        check_folder(scan)
    with pytest.raises(OutputError, match=r"the input a\.laz"):
        check_folder(scan, inputs=[scan])
    with pytest.raises(OutputError, match=r"a\.laz is a file"):
        check_folder(scan / "below")
    assert scan.read_text() == "scan"


def test_input_in_the_place_of_an_output_is_refused(tmp_path):
    earlier = tmp_path / "strain.laz"
    earlier.write_text("a result that serves as an input")
    (tmp_path / "same").symlink_to(tmp_path)
    for folder in (tmp_path, tmp_path / "same", tmp_path / "deeper" / ".."):
        with pytest.raises(OutputError, match="leaves the inputs alone"):
            check_folder(folder, inputs=[earlier])
    assert check_folder(tmp_path, inputs=[tmp_path / "scan.laz"]) == tmp_path


def test_folder_without_permission_is_refused(tmp_path, monkeypatch):
    monkeypatch.setattr("scanstrain.outputs.folder.os.access", lambda path, mode: path != tmp_path)
    with pytest.raises(OutputError, match="no permission to write there; choose another"):
        check_folder(tmp_path / "out")


def test_what_others_are_at_work_on_beside_is_left_alone(tmp_path):
    for name in (
        ".x_to_y.0123abcd.partial",
        ".x_to_y.2.0123abcd.partial",
        ".x_to_y.2.partial",
        ".other.0123abcd.partial",
    ):
        (tmp_path / name).mkdir()
    recover(tmp_path / "x_to_y")
    assert {path.name for path in tmp_path.iterdir()} == {
        ".x_to_y.2.0123abcd.partial", ".x_to_y.2.partial", ".other.0123abcd.partial",
    }  # fmt: skip
