# SPDX-License-Identifier: MIT
"""The names, types and order of what is written: users rely on them."""

import pytest

from scanstrain.attributes import ATTRIBUTES
from scanstrain.outputs.words import STANDARD_ERROR, TITLES

PUBLISHED = [
    ("disp_x", "m", "float32"),
    ("disp_y", "m", "float32"),
    ("disp_z", "m", "float32"),
    ("disp_n", "m", "float32"),
    ("disp_n_sd", "m", "float32"),
    ("strain_xx", "1", "float32"),
    ("strain_yy", "1", "float32"),
    ("strain_zz", "1", "float32"),
    ("strain_xy", "1", "float32"),
    ("strain_xz", "1", "float32"),
    ("strain_yz", "1", "float32"),
    ("strain_1", "1", "float32"),
    ("strain_2", "1", "float32"),
    ("strain_1_sd", "1", "float32"),
    ("strain_2_sd", "1", "float32"),
    ("shear_max", "1", "float32"),
    ("dilation", "1", "float32"),
    ("strain_u", "1", "float32"),
    ("strain_v", "1", "float32"),
    ("shear_uv", "1", "float32"),
    ("rot_x", "rad", "float32"),
    ("rot_y", "rad", "float32"),
    ("rot_z", "rad", "float32"),
    ("tilt", "rad", "float32"),
    ("tilt_sd", "rad", "float32"),
    ("spin", "rad", "float32"),
    ("spin_sd", "rad", "float32"),
    ("curv_1", "1/m", "float32"),
    ("curv_2", "1/m", "float32"),
    ("curv_sd", "1/m", "float32"),
    ("bend_1", "1", "float32"),
    ("bend_2", "1", "float32"),
    ("significance", "1", "float32"),
    ("discovery", "1", "uint8"),
    ("observed", "1", "uint8"),
    ("status", "1", "uint8"),
    ("stable", "1", "uint8"),
    ("gauge_points", "1", "uint16"),
    ("chainage", "m", "float32"),
    ("clock", "rad", "float32"),
]


def test_attributes_are_the_published_ones():
    assert [(a.name, a.unit, a.numpy_dtype.name) for a in ATTRIBUTES] == PUBLISHED


def test_every_attribute_has_a_title_and_no_title_is_left_over():
    assert list(TITLES) == [name for name, _, _ in PUBLISHED]


@pytest.mark.parametrize("attribute", ATTRIBUTES, ids=lambda a: a.name)
def test_attribute_fits_its_descriptor(attribute):
    # ASPRS LAS 1.4 R15, extra bytes descriptor: 32 bytes each for name and description
    assert len(attribute.name.encode()) <= 32
    assert len(attribute.description.encode()) <= 32
    assert attribute.description.isascii()


@pytest.mark.parametrize("attribute", [a for a in ATTRIBUTES if a.dtype == "float32"], ids=lambda a: a.name)
def test_description_starts_with_the_unit(attribute):
    assert attribute.description.split()[0] == attribute.unit


def test_standard_errors_are_attributes_of_kind_error():
    kinds = {a.name: a.kind for a in ATTRIBUTES}
    assert {kinds[name] for name in STANDARD_ERROR.values()} == {"error"}
    assert {a.name for a in ATTRIBUTES if a.kind == "error"} == set(STANDARD_ERROR.values())
