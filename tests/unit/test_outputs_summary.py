# SPDX-License-Identifier: MIT
"""What the summary and the sentences say about a result made by hand."""

import json
import runpy
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from scanstrain.neighbourhood.result import Status
from scanstrain.outputs.cautions import ALWAYS, cautions
from scanstrain.outputs.findings import verdict
from scanstrain.outputs.notes import KeyNotes, notes_beside
from scanstrain.outputs.strict import plain
from scanstrain.outputs.summary import summary

MADE = runpy.run_path(str(Path(__file__).parents[1] / "outputs_result.py"))


@pytest.fixture
def result():
    return MADE["make_result"]()


def without_change(result):
    values = dict(result.strain.values, discovery=np.zeros(12, np.uint8))
    return replace(result, strain=replace(result.strain, values=values))


def test_statistics_over_gauges_are_those_of_numpy(result):
    found = summary(result)["results"]["disp_n"]
    values = MADE["DISP_N"][:11]
    assert found["minimum"] == -4.0e-3
    assert found["maximum"] == 6.2e-3
    assert found["median"] == 0.0
    assert found["p05"] == pytest.approx(np.quantile(values, 0.05), rel=1e-8)
    assert found["p95"] == pytest.approx(np.quantile(values, 0.95), rel=1e-8)
    assert found["detection_limit"] == 2.9e-4
    assert found["share_observable"] == pytest.approx(11 / 12)
    assert found["share_discovered"] == pytest.approx(3 / 11)
    assert found["largest_change"]["value"] == 6.2e-3
    assert found["largest_change"]["sd"] == 1.5e-4
    assert found["largest_change"]["at"] == [482310.25, 5391270.0, 100.25]
    assert found["points"]["maximum"] == pytest.approx(6.2e-3)
    assert found["points"]["minimum"] == pytest.approx(-4.0e-3)
    assert found["points"]["share_observable"] == pytest.approx(np.isfinite(result.points["disp_n"]).mean())


def test_what_nobody_measured_is_null_and_not_zero(result):
    found = summary(result)["results"]["curv_1"]
    assert [found[key] for key in ("minimum", "median", "maximum", "detection_limit")] == [None] * 4
    assert found["share_observable"] == 0
    assert found["share_discovered"] is None
    assert found["points"] == {"minimum": None, "maximum": None, "share_observable": 0}


def test_largest_change_may_be_negative_and_needs_a_discovery(result):
    sunk = MADE["DISP_N"].copy()
    sunk[4], sunk[2] = 0.5, -0.04  # gauge 4 is no discovery
    moved = dict(result.strain.values, disp_n=sunk)
    largest = summary(replace(result, strain=replace(result.strain, values=moved)))["results"]["disp_n"][
        "largest_change"
    ]
    assert (largest["value"], largest["gauge"]) == (-0.04, 2)
    assert summary(without_change(result))["results"]["disp_n"]["largest_change"] is None


def test_limit_of_strain_serves_its_components_but_not_the_others(result):
    results = summary(result)["results"]
    assert results["strain_u"]["detection_limit"] == 98e-6
    assert results["strain_1"]["detection_limit"] == 98e-6
    assert results["shear_max"]["detection_limit"] is None
    assert results["dilation"]["detection_limit"] is None


def test_codes_are_counted(result):
    results = summary(result)["results"]
    assert results["status"]["counts"] == {"0": 11, "3": 1}
    assert results["observed"]["counts"] == {"0": 1, "7": 5, "127": 6}
    assert results["discovery"]["counts"] == {"0": 9, "1": 3}


def test_gauges_and_tables_are_in_words(result):
    found = summary(result)
    assert found["gauges"]["count"] == 12
    assert found["gauges"]["by_status"] == {
        "fine": 11, "the patch is one-sided or has a gap: edge of the surface": 1,
    }  # fmt: skip
    assert sum(found["gauges"]["by_status"].values()) == found["gauges"]["count"]
    assert set(found["status_codes"]) == {str(int(code)) for code in Status}
    assert found["observed_bits"]["0"] == "normal displacement"
    assert found["observed_bits"]["6"] == "spin"
    assert found["no_data"]["value"] == "NaN"


def test_inputs_timing_config_and_warnings(result):
    found = summary(result)
    assert found["inputs"]["reference"]["file"] == "north_wall_0.laz"
    assert found["inputs"]["reference"]["points"] == 300
    assert found["inputs"]["reference"]["date"] == "2031-03-01"
    assert found["inputs"]["current"]["sha256"] == "cd" * 32
    assert found["timing"]["total"] == 3.0
    assert found["timing"]["points_per_second"] == 200.0
    assert found["timing"]["peak_memory"] > 10_000_000
    assert found["config"] == {"mode": "json", "gauge_length": 0.6, "structure": "wall"}
    assert found["warnings"] == ["Twice said."]


def test_registration_is_in_file_coordinates_and_unbounded_errors_are_null(result):
    found = summary(result)["registration"]
    assert found["pivot"] == [482310.5, 5391270.0, 100.5]
    assert found["rotation_vector"] == pytest.approx([0, 0, np.pi / 2])
    # the pivot (0.5, 0, 0.5) turns to (0, 0.5, 0.5) and shifts by (1, 2, 3)
    assert found["translation"] == pytest.approx([0.5, 2.5, 3.0])
    assert found["stable_fraction"] == 0.62
    assert found["weak_directions"] == [{"description": "slide up the wall", "vector": [0, 0, 0, 0, 0, 1], "sd": None}]
    json.dumps(found, allow_nan=False)


def test_plain_keeps_only_what_json_has():
    mixed = {"a": np.float32(1.5), 3: [np.nan, np.inf, np.bool_(True)], "c": (np.uint8(4), None, Path("x"))}
    assert plain(mixed) == {"a": 1.5, "3": [None, None, True], "c": [4, None, "x"]}


def test_open3d_is_not_imported_for_its_version():
    code = (
        "import sys, runpy, json;"
        "from scanstrain.outputs.summary import summary;"
        f"r = runpy.run_path({str(Path(__file__).parents[1] / 'outputs_result.py')!r})['make_result']();"
        "heavy = ('open3d', 'matplotlib', 'laspy');"
        "print(json.dumps([summary(r)['software'], [m for m in heavy if m in sys.modules]]))"
    )
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    software, imported = json.loads(run.stdout)
    assert imported == []
    assert software["open3d"].count(".") >= 1
    assert software["scanstrain"] is not None


def test_importing_the_outputs_loads_nothing_heavy():
    code = (
        "import sys; import scanstrain.outputs;"
        "print([m for m in ('matplotlib', 'laspy', 'open3d', 'cmcrameri') if m in sys.modules])"
    )
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert run.stdout.strip() == "[]"


def test_verdict_states_the_change_with_its_interval_and_place(result):
    text = " ".join(verdict(summary(result)))
    assert "3 of the 11 gauges that could be evaluated changed beyond the false-discovery control." in text
    # 1.96 x 0.15 mm = 0.29 mm
    assert "Normal displacement reaches +6.20 ± 0.29 mm (95 %) at x 482310.25, y 5391270.00, z 100.25" in text
    assert "detection limit 0.29 mm, median" in text
    assert "In-plane strain is observable at 55 % of these gauges" in text
    assert "at the other 45 % the surface carries too little texture or relief" in text
    assert "8 % of the 12 gauges carry no number, mostly because: the patch is one-sided" in text
    assert "not fixed by the surfaces: slide up the wall" in text


def test_verdict_without_change_names_the_limit(result):
    text = " ".join(verdict(summary(without_change(result))))
    assert "No change beyond the false-discovery control at any of the 11 gauges" in text
    assert "reaches" not in text
    assert "95 % detection limit 0.29 mm" in text


def test_verdict_on_a_smooth_wall_says_that_strain_is_not_observable(result):
    blank = {name: np.full(12, np.nan) for name in MADE["IN_PLANE"]}
    smooth = replace(result, strain=replace(result.strain, values=dict(result.strain.values, **blank)))
    assert "In-plane strain is not observable at 100 % of these gauges" in " ".join(verdict(summary(smooth)))


def test_verdict_of_a_map_without_any_gauge_claims_nothing(result):
    status = np.full(12, Status.NO_OVERLAP, np.uint8)
    values = {
        name: np.full(12, np.nan) if column.dtype.kind == "f" else np.zeros_like(column)
        for name, column in result.strain.values.items()
    }
    empty = replace(result, strain=replace(result.strain, status=status, values=values))
    sentences = verdict(summary(empty))
    assert sentences[0] == "None of the 12 gauges could be evaluated."
    assert not [sentence for sentence in sentences if "displacement" in sentence]


def test_verdict_reads_the_same_from_the_file(result):
    found = summary(result)
    assert verdict(json.loads(json.dumps(found, allow_nan=False))) == verdict(found)


def test_verdict_and_cautions_never_call_anything_safe(result):
    for each in (result, without_change(result)):
        sentences = [*verdict(summary(each)), *cautions(each)]
        assert 3 <= len(verdict(summary(each))) <= 6
        assert all(sentence.endswith(".") for sentence in sentences)
        assert not [sentence for sentence in sentences if "safe" in sentence.lower()]


def test_cautions_follow_from_the_numbers(result):
    text = " ".join(cautions(result)[len(ALWAYS) :])
    assert "gauge length of 0.60 m" in text
    assert "62 % of the reference points" in text
    assert "slide up the wall" in text
    assert "+30 ± 10 ppm" in text
    assert "bend_1" not in text
    calm = replace(result.registration, scale_ppm=8.0, weak_directions=(), converged=False)
    bent = dict(result.strain.values, bend_1=np.full(12, 1e-4))
    text = " ".join(cautions(replace(result, registration=calm, strain=replace(result.strain, values=bent))))
    assert "ppm" not in text
    assert "slide" not in text
    assert "plane sections" in text
    assert "did not converge" in text


def test_notes_of_a_key_are_the_same_from_a_result_and_from_its_summary(result, tmp_path):
    (tmp_path / "summary.json").write_text(json.dumps(summary(result)), encoding="utf-8")
    for name, limit in (("disp_n", 2.9e-4), ("strain_u", 98e-6), ("curv_1", None), ("disp_x", None)):
        notes = KeyNotes.of(result, name)
        assert notes == KeyNotes(gauge_length=0.6, detection_limit=limit, epochs="epoch 0 → epoch 1")
        assert notes_beside(tmp_path / "strain.laz", name) == notes


@pytest.mark.parametrize("content", [None, "not json", "[]", "{}"])
def test_notes_without_a_usable_summary_are_empty(tmp_path, content):
    if content is not None:
        (tmp_path / "summary.json").write_text(content)
    assert notes_beside(tmp_path / "strain.laz", "disp_n") == KeyNotes()


def with_tests(result, *, confirmed):
    """The result with the tests of the strain stage: gauges 0..2 are one cluster, two of eleven are no rigid motion."""
    p = np.where(np.arange(12) < 3, 1e-4, np.nan)
    rigid = np.where(np.arange(12) < 2, 1e-3, np.where(np.arange(12) < 11, 0.5, np.nan))
    strain = replace(
        result.strain, cluster_p=p, cluster_found=(np.arange(12) < 3) & confirmed, rigid_p=rigid,
        detectable_80={"disp_n": np.where(np.arange(12) < 11, 4.2e-4, np.nan)},
        bias={"disp_n": np.where(np.arange(12) < 3, 1e-4, 0.0)},
    )  # fmt: skip
    return replace(result, strain=strain)


def test_a_region_has_the_p_value_of_its_cluster_and_the_sentence_says_whether_it_counts(result):
    found = summary(with_tests(result, confirmed=True))
    (region,) = found["regions"]["found"]
    assert (region["p"], region["confirmed"]) == (1e-4, True)
    assert "control, in 1 region too large or too clear for chance." in " ".join(verdict(found))
    doubtful = summary(with_tests(result, confirmed=False))
    assert "in 1 region, of which none too large or too clear for chance." in " ".join(verdict(doubtful))


def test_power_bias_and_rigid_motion_are_in_the_summary(result):
    found = summary(with_tests(result, confirmed=True))
    assert found["results"]["disp_n"]["detectable_80"] == 4.2e-4
    assert found["results"]["disp_n"]["gauge_bias"] == {"median": 0.0, "p95": 1e-4, "maximum": 1e-4}
    assert found["results"]["tilt"]["gauge_bias"] is None
    assert "0.42 mm is found with 80 % probability" in " ".join(verdict(found))
    assert found["gauges"]["rigid"]["share_sufficient"] == pytest.approx(9 / 11)
    assert found["gauges"]["rigid"]["sentence"].startswith("At 82 % of the gauges a rigid motion describes")
