# SPDX-License-Identifier: MIT
"""Whatever the layout of the reference, results come back bit for bit and the reference loses nothing."""

import runpy
import struct
import tempfile
from pathlib import Path

import laspy
import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from scanstrain.attributes import ATTRIBUTES
from scanstrain.errors import InputFileError
from scanstrain.io import read_result_cloud, read_scan, write_result_cloud

MADE = runpy.run_path(str(Path(__file__).parents[1] / "io_samples.py"))
las, vlr, take_apart = MADE["las"], MADE["vlr"], MADE["take_apart"]
SIZES = {1: 1, 2: 1, 3: 2, 4: 2, 5: 4, 6: 4, 7: 8, 8: 8, 9: 4, 10: 8}


@st.composite
def references(draw):
    """A LAS file of any format with foreign fields, some described and some not."""
    fmt, seed = draw(st.integers(0, 10)), draw(st.integers(0, 10**6))
    codes = draw(st.lists(st.integers(1, 10), max_size=4))
    bare = draw(st.integers(0, 7))
    width = sum(SIZES[code] for code in codes) + bare
    extra = np.random.default_rng(seed).integers(0, 256, (120, width), dtype=np.uint8) if width else None
    payload = b"".join(MADE["descriptor"](f"field {k}", code) for k, code in enumerate(codes))
    records = [vlr("LASF_Spec", 4, payload)] if codes else []
    offset = draw(st.tuples(*[st.sampled_from([0.0, 0.5, 482_310.0, -5_391_270.25])] * 3))
    raw = np.random.default_rng(seed).integers(-20_000, 20_000, (120, 3))
    return las(raw, fmt=fmt, vlrs=records, extra=extra, offset=offset, seed=seed)


@st.composite
def result_values(draw):
    """Some attributes in any order, with every kind of bit pattern that float32 and codes can hold."""
    rng = np.random.default_rng(draw(st.integers(0, 10**6)))
    chosen = draw(st.lists(st.sampled_from(ATTRIBUTES), min_size=1, max_size=6, unique=True))
    out = {}
    for a in chosen:
        bits = rng.integers(0, 2 ** (8 * a.numpy_dtype.itemsize), 120).astype(f"u{a.numpy_dtype.itemsize}")
        out[a.name] = bits.view(a.dtype)
        if a.dtype == "float32":
            out[a.name][~np.isfinite(out[a.name])] = np.nan
    return out


@settings(max_examples=60, deadline=None)
@given(references(), result_values(), st.sampled_from([".las", ".laz"]), st.booleans())
def test_results_and_reference_come_back(data, values, suffix, colour):
    rgb = np.random.default_rng(0).integers(0, 65536, (120, 3)).astype("u2") if colour else None
    with tempfile.TemporaryDirectory() as folder:
        source = Path(folder, "a.las")
        source.write_bytes(data)
        target = write_result_cloud(source, Path(folder, f"b{suffix}"), values, colour=rgb)
        _, found = read_result_cloud(target)
        assert set(found) == set(values)
        for name, array in values.items():
            assert found[name].tobytes() == array.tobytes()
        before, after = laspy.read(source), laspy.read(target)
        assert before.header.scales.tobytes() == after.header.scales.tobytes()
        assert before.header.offsets.tobytes() == after.header.offsets.tobytes()
        for name in before.point_format.dimension_names:
            if name in ("red", "green", "blue") and colour:
                continue
            new = name if name != "ExtraBytes" else "undocumented_1"
            kept = [d for d in after.point_format.dimension_names if d == new or d.startswith("undocumented")]
            a = np.asarray(before[name])
            b = np.asarray(after[new if new in kept else kept[0]])
            assert a.tobytes() == b.tobytes(), name
        if colour:
            np.testing.assert_array_equal(np.stack([after.red, after.green, after.blue], 1), rgb)


@settings(max_examples=150, deadline=None)
@given(
    st.sampled_from([0, 3, 6, 7]),
    st.lists(st.tuples(st.integers(4, 374), st.integers(0, 255)), min_size=1, max_size=4),
    st.integers(0, 400),
)
def test_a_spoilt_header_is_read_whole_or_refused(fmt, spots, cut):
    """Never another exception, never a number of points that the header does not say."""
    data = bytearray(las(fmt=fmt, vlrs=[vlr("x", 1, bytes(60))]))
    for at, value in spots:
        data[at] = value
    del data[len(data) - cut // 10 :]
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder, "a.las")
        path.write_bytes(data)
        try:
            epoch = read_scan(path)
        except InputFileError:
            return
    count = struct.unpack_from("<Q", data, 247)[0] if data[25] >= 4 else struct.unpack_from("<I", data, 107)[0]
    assert epoch.provenance.file_points == count
    assert len(epoch) == count - epoch.provenance.dropped_points
