# SPDX-License-Identifier: MIT
"""Kept stages as bytes: every bit comes back, and nothing but the classes on the list can be made."""

import io
import json
import pickle
from dataclasses import dataclass, fields

import numpy as np
import pytest

from scanstrain.neighbourhood.result import Correlation, SharedNoise
from scanstrain.registration.result import StableGround, WeakDirection
from scanstrain.stages.classes import ALLOWED
from scanstrain.stages.encode import DamagedStageError, decode, encode


def same(one, other):
    assert type(one) is type(other)
    if isinstance(one, np.ndarray):
        assert (one.dtype, one.shape, one.tobytes("A")) == (other.dtype, other.shape, other.tobytes("A"))
        assert one.flags.f_contiguous == other.flags.f_contiguous
    elif isinstance(one, dict):
        assert list(one) == list(other)
        for key in one:
            same(one[key], other[key])
    elif isinstance(one, tuple):
        assert len(one) == len(other)
        for a, b in zip(one, other, strict=True):
            same(a, b)
    elif hasattr(one, "__dataclass_fields__"):
        for field in fields(one):
            same(getattr(one, field.name), getattr(other, field.name))
    else:
        assert one == other or (one != one and other != other)


@pytest.mark.parametrize(
    "value",
    [
        None, True, 3, -1.5e-300, "µ ± σ\n", (), {}, (1, (2.0, None)), {"b": 1, "a": (True,)},
        float("nan"), float("inf"), 0.1 + 0.2, np.float32(0.1), np.int64(-3), np.bool_(True),
        np.array([1.0, np.nan, -0.0, np.inf]), np.zeros((0, 3)), np.array(["ab", "ç"]),
        np.arange(12, dtype=np.uint16).reshape(3, 4), np.asfortranarray(np.arange(24.0).reshape(3, 4, 2)),
        WeakDirection("slide", np.arange(6.0), np.inf),
        Correlation(SharedNoise(0.1, 0.02), None, (1.0, 2.0)),
        (StableGround("auto", 0.5, 0.1, 1e-3, False), {"zone": np.array([True, False])}),
    ],
    ids=repr,
)  # fmt: skip
def test_every_bit_comes_back(value):
    same(decode(encode(value)), value)


def test_all_allowed_classes_are_frozen_dataclasses_of_this_package():
    for kind in ALLOWED.values():
        assert kind.__module__.startswith("scanstrain.")
        assert kind.__dataclass_params__.frozen


@dataclass(frozen=True)
class SharedNoiseTwin:
    share: float


SharedNoiseTwin.__name__ = "SharedNoise"


@pytest.mark.parametrize(
    "value",
    [object(), [1], {1: 2}, {1, 2}, b"ab", 1j, np.array([None]), np.array([1j]), SharedNoiseTwin(0.1)],
    ids=repr,
)
def test_what_may_not_be_kept_is_refused_when_it_is_written(value):
    with pytest.raises(TypeError, match="cannot be kept"):
        encode(value)


def made(tree, **arrays):
    stream = io.BytesIO()
    np.savez(stream, tree=np.array(json.dumps(tree)), **arrays)
    return stream.getvalue()


class Trap:
    sprung = False

    def __reduce__(self):
        return (setattr, (Trap, "sprung", True))


@pytest.mark.parametrize(
    "data",
    [
        b"", b"PK", pickle.dumps(Trap()),
        made({"class": "Popen", "fields": {"args": "true"}}),
        made({"class": "SharedNoise", "fields": {"share": 0.1}}),
        made({"class": "Shape", "fields": {"structure": "free"}}),
        made({"class": "SharedNoise", "fields": {"share": 0.1, "length": 0.2, "more": 1}}),
        made({"class": "SharedNoise", "fields": {"share": 0.1, "length": 0.2}, "more": 1}),
        made({"array": 0}), made({"array": 5}, a0=np.zeros(1)), made({"array": "0"}, a0=np.zeros(1)),
        made({"call": "print"}), made([1]), made({"dict": [[1, 2]]}), made({"dict": [1]}),
        made({"array": 0}, a0=np.array([Trap()], dtype=object)),
        made({"array": 0}, a0=np.zeros(2, dtype="V8")),
    ],
)  # fmt: skip
def test_bytes_from_elsewhere_make_nothing_else_and_run_nothing(data):
    with pytest.raises(DamagedStageError):
        decode(data)
    assert not Trap.sprung
