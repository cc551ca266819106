# SPDX-License-Identifier: MIT
"""Rigid motions from files: text and JSON that serve, and the mistakes that are named."""

import json
import runpy
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from scanstrain.errors import InputFileError
from scanstrain.io.transform import read_transform
from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.registered import write_registered

MATRIX = np.eye(4)
MATRIX[:3, :3] = Rotation.from_euler("xyz", [5, -10, 30], degrees=True).as_matrix()
MATRIX[:3, 3] = [100, -50, 7.5]


def written(matrix, form="{:.12g}", mark=" "):
    return "\n".join(mark.join(form.format(value) for value in row) for row in matrix) + "\n"


def read(tmp_path, text, name="start.txt"):
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    return read_transform(path)


@pytest.mark.parametrize("mark", [" ", "\t", ", ", ";"])
@pytest.mark.parametrize("head", ["", "# current to reference\n", "\ufeff"])
def test_sixteen_numbers_are_a_matrix(tmp_path, mark, head):
    found = read(tmp_path, head + written(MATRIX, mark=mark))
    np.testing.assert_allclose(found.T_ref_cur, MATRIX, rtol=1e-11)
    assert found.covariance is None
    assert found.pivot is None


def test_what_the_program_writes_is_read_again(tmp_path):
    made = runpy.run_path(str(Path(__file__).parents[1] / "outputs_result.py"))
    result = made["make_result"]()
    known = replace(result.registration, covariance=np.diag([1.0, 2, 3, 4, 5, 6]) * 1e-9)
    result = replace(result, registration=known)
    found = read_transform(write_registered(result, tmp_path, OutputOptions()))
    np.testing.assert_array_equal(found.T_ref_cur, result.registration.file_matrix())
    np.testing.assert_array_equal(found.covariance, result.registration.covariance)
    np.testing.assert_array_equal(found.pivot, result.registration.pivot + result.registration.origin)


def changed(**fields):
    content = {"reads": "…", "unit": "metre", "matrix": MATRIX.tolist(), "pivot": [0, 0, 0]}
    return json.dumps(content | {"covariance": np.eye(6).tolist()} | fields)


@pytest.mark.parametrize(
    ("text", "says"),
    [
        (written(MATRIX.T), "a transposed matrix"),
        (written(MATRIX * [[1], [1], [1], [2]]), "a last row of"),
        (written(MATRIX[:3]), "12 numbers"),
        ("a b c d\n" + written(MATRIX), "'a'"),
        (written(np.diag([1.0, 1, -1, 1])), "mirrors"),
        (written(np.diag([1.0002, 1.0002, 1.0002, 1])), "scales by 1.0002"),
        (written(np.diag([1000.0, 1000, 1000, 1])), "scales by 1000"),
        (written(np.diag([1.0, 1, 1.01, 1])), "no rotation"),
        (written(np.zeros((3, 4))) + "0 0 0 1\n", "no rotation"),
        (written(MATRIX, "{:.4f}"), "at least nine digits"),
        (written(MATRIX).replace("100", "nan"), "NaN"),
        ("{", "JSON that cannot be read"),
        ("[1, 2]", "JSON of something else"),
        (json.dumps({"matrix": MATRIX.tolist()}), "JSON of something else"),
        (changed(unit="millimetre"), "the unit 'millimetre'"),
        (changed(matrix=[[1, 2]]), "matrix as finite numbers"),
        (changed(matrix="none"), "matrix as numbers"),
        (changed(matrix=MATRIX.T.tolist()), "a transposed matrix"),
        (changed(covariance=[1]), "covariance as finite numbers"),
        (changed(pivot=None), "pivot as finite numbers"),
        (changed(covariance_order=["x"]), "a covariance in the order"),
        ("", "empty file"),
        ("0 " * 600_000, "far larger"),
    ],
)
def test_mistakes_are_named(tmp_path, text, says):
    with pytest.raises(InputFileError, match=says):
        read(tmp_path, text)


def test_a_json_without_covariance_is_a_bare_motion(tmp_path):
    found = read(tmp_path, changed(covariance=None), "registered.json")
    np.testing.assert_allclose(found.T_ref_cur, MATRIX)
    assert found.covariance is None


def test_no_text_is_no_matrix(tmp_path):
    path = tmp_path / "scan.las"
    path.write_bytes(b"\xff\xfe\x00LASF")
    with pytest.raises(InputFileError, match="not text"):
        read_transform(path)
