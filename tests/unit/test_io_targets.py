# SPDX-License-Identifier: MIT
"""Tables of targets: what is read, and what is refused with the line that is wrong."""

import numpy as np
import pytest

from scanstrain.errors import InputFileError
from scanstrain.io.targets import DEFAULT_SD, read_targets

HEAD = "name,ref_x,ref_y,ref_z,cur_x,cur_y,cur_z,ref_sd,cur_sd\n"
ROWS = "P1,482310.123,5391270.5,312,1,2,3,0.001,0.003\nP2,0,0,0,1,1,1,,0.002\n"


def read(tmp_path, text, encoding="utf-8"):
    path = tmp_path / "targets.csv"
    path.write_bytes(text.encode(encoding))
    return read_targets(path)


def test_names_coordinates_and_deviations_are_read(tmp_path):
    table = read(tmp_path, HEAD + ROWS)
    assert table.names == ("P1", "P2")
    np.testing.assert_array_equal(table.reference[0], [482310.123, 5391270.5, 312])
    np.testing.assert_array_equal(table.current[1], [1, 1, 1])
    np.testing.assert_array_equal(table.reference_sd, [0.001, DEFAULT_SD])
    np.testing.assert_array_equal(table.current_sd, [0.003, 0.002])
    assert not table.sd_stated


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig"])
@pytest.mark.parametrize("mark", [",", ";"])
@pytest.mark.parametrize("end", ["\n", "\r\n"])
def test_forms_that_spreadsheets_write(tmp_path, encoding, mark, end):
    text = '# targets of May\nCur_X, cur_y,cur_z,NAME,ref_x,ref_y,ref_z\n\n1,2,3,"Säule 1",4,5,6\n'
    table = read(tmp_path, text.replace(",", mark).replace("\n", end), encoding)
    assert table.names == ("Säule 1",)
    np.testing.assert_array_equal(table.reference, [[4, 5, 6]])
    np.testing.assert_array_equal(table.current_sd, [DEFAULT_SD])


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "empty file"),
        ("# only\n", "no line"),
        ("P1,1,2,3,4,5,6\n", "no column name, ref_x"),
        ("name,ref_x,ref_y,ref_z,cur_x,cur_y\n", "no column cur_z"),
        (HEAD.replace("ref_sd", "sigma") + ROWS, "the column 'sigma'"),
        (HEAD.replace("cur_sd", "ref_sd") + ROWS, "a column twice"),
        (HEAD + ROWS + "P3,1,2,3,4,5,6\n", "7 in line 4"),
        (HEAD + ROWS + "P1,1,2,3,4,5,6,,\n", "'P1' in lines 2 and 4"),
        (HEAD + ROWS + ",1,2,3,4,5,6,,\n", "none in line 4"),
        (HEAD + ROWS + "P3,1,2,3,,5,6,,\n", "current coordinates; got no cur_x of 'P3' in line 4"),
        (HEAD + ROWS + "P3,1,2,3,x,5,6,,\n", "'x' as cur_x in line 4"),
        (HEAD + ROWS + "P3,1,2,inf,4,5,6,,\n", "'inf' as ref_z in line 4"),
        (HEAD + ROWS + "P3,1,2,3,4,5,6,2,\n", "ref_sd in metres"),
        (HEAD + ROWS + "P3,1,2,3,4,5,6,,0\n", "cur_sd in metres"),
        (HEAD.replace(",", ";") + "P3;1,5;2;3;4;5;6;;\n", "decimal dots"),
    ],
)
def test_what_cannot_be_read_is_named_with_its_line(tmp_path, text, says):
    with pytest.raises(InputFileError, match=says):
        read(tmp_path, text)


def test_other_files_are_refused(tmp_path):
    with pytest.raises(InputFileError, match="not text"):
        read(tmp_path, "name,ä", "latin-1")
    with pytest.raises(InputFileError, match="no such file"):
        read_targets(tmp_path / "none.csv")
