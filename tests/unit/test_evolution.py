# SPDX-License-Identifier: MIT
"""Series out of finished comparisons: the right epochs, closed forms, grades, and what is left out."""

from __future__ import annotations

import csv
import datetime as dt
import json
import sys
import types
from pathlib import Path

import numpy as np
import pytest

from scanstrain.batch import Outcome, run_batch
from scanstrain.config import BatchConfig, load_config
from scanstrain.errors import InputFileError
from scanstrain.evolution import evolution_data, follow_epochs
from scanstrain.limits import NORMAL_95

START = dt.date(2031, 1, 1)
YEARS = (0.0, 0.5, 1.0, 1.5, 2.0)


def day(years):
    return START + dt.timedelta(days=round(365.25 * years))


def settings(folder, years=YEARS, **tables):
    """A batch of epochs e0, e1, ... at `years` after the first; None for one without a date."""
    epochs = [
        {"label": f"e{n}", "file": f"{n}.laz"} | ({} if t is None else {"date": day(t)}) for n, t in enumerate(years)
    ]
    return BatchConfig.model_validate({"output": {"folder": str(folder)}, "epoch": epochs, **tables})


class Made(dict):
    """Stands in for a result."""

    def close(self):
        """Let nothing go."""


def compared(years, *, rate=2e-3, sd=1e-4):
    """The parts of a summary that series are made of: a zone that comes forward and a section that gets squat."""
    shift = {"shift": rate * years, "shift_sd": sd, "lean": None, "lean_sd": None, "yaw": None, "yaw_sd": None}
    mean = {"mean": 2 * rate * years, "mean_sd": sd}
    section = {"chainage": 4.0, "vertical_diameter_change": -rate * years, "vertical_diameter_change_sd": sd}
    return {
        "rigid_motion": {"whole object": shift, "crown": shift},
        "zones": {"crown": {"quantities": {"disp_n": mean}}},
        "sections": {"rows": [section | {"crown_up": None, "crown_up_sd": None}]},
    }


def outcomes(years=YEARS, failed=(), **how):
    for number, t in enumerate(years[1:], start=1):
        summary = None if number in failed else compared(0.0 if t is None else t, **how)
        yield Outcome(f"e0_to_e{number}", Path("somewhere"), summary=summary)


def rows(evolution, place, quantity, kind="rate"):
    data = evolution_data(evolution)["rows"]
    return [row for row in data if (row["row"], row["place"], row["quantity"]) == (kind, place, quantity)]


def test_a_steady_rate_is_found_with_the_error_of_a_line_through_all_epochs(tmp_path):
    evolution = follow_epochs(settings(tmp_path), list(outcomes()))
    (rate,) = rows(evolution, "crown", "shift")
    assert rate["rate"] == pytest.approx(2e-3, rel=1e-3)
    # half the variance of each change is the first epoch's, so each epoch has sd / sqrt 2: a line through five of them
    epoch_sd = 1e-4 / np.sqrt(2)
    assert rate["rate_sd"] == pytest.approx(epoch_sd / np.sqrt(((np.array(YEARS) - 1.0) ** 2).sum()), rel=1e-3)
    assert (rate["model"], rate["epochs"]) == ("rate", 5)
    assert rate["first_significant"] == day(0.5).isoformat()
    (mean,) = rows(evolution, "crown", "mean_disp_n")
    assert mean["rate"] == pytest.approx(4e-3, rel=1e-3)
    (squat,) = rows(evolution, "section 4.00 m", "vertical_diameter_change")
    assert squat["rate"] == pytest.approx(-2e-3, rel=1e-3)


def test_changes_stand_against_the_first_and_the_previous_epoch(tmp_path):
    changes = rows(follow_epochs(settings(tmp_path), list(outcomes())), "whole object", "shift", "change")
    first, previous = (
        [row for row in changes if row["against"] == against] for against in ("first", "previous")
    )  # fmt: skip
    assert [row["epoch"] for row in first] == ["e1", "e2", "e3", "e4"]
    np.testing.assert_allclose([row["value"] for row in first], [1e-3, 2e-3, 3e-3, 4e-3])
    np.testing.assert_allclose([row["value"] for row in previous], [1e-3] * 4, rtol=1e-9)
    assert first[0]["high"] - first[0]["low"] == pytest.approx(2 * NORMAL_95 * 1e-4)


def test_what_is_not_known_makes_no_row(tmp_path):
    evolution = follow_epochs(settings(tmp_path), list(outcomes()))
    assert rows(evolution, "crown", "lean") == []
    assert rows(evolution, "section 4.00 m", "crown_up") == []
    assert rows(evolution, "whole object", "mean_disp_n") == []


def test_the_table_lies_beside_the_folders_of_the_comparisons(tmp_path):
    evolution = follow_epochs(settings(tmp_path), list(outcomes()))
    assert evolution.file == tmp_path / "series.csv"
    with evolution.file.open(encoding="utf-8", newline="") as stream:
        table = list(csv.DictReader(stream))[1:]
    assert len(table) == len(evolution.rows)
    assert {row["place"] for row in table} == {"whole object", "crown", "section 4.00 m"}
    assert follow_epochs(settings(tmp_path / "other"), list(outcomes()), write=False).file is None
    assert not (tmp_path / "other").exists()


def test_triggers_grade_the_changes_that_they_are_about(tmp_path):
    each = {"unit": "mm", "direction": "beyond", "levels": {"look": 1.5, "act": 3.0}}
    tables = {
        "strain": {"structure": "tunnel"},
        "zone": [{"name": "crown", "clock": [11, 1]}, {"name": "far", "chainage": [8.0, 9.0]}],
        "trigger": [
            {"name": "T", "quantity": "shift", "zone": "crown", **each},
            {"name": "V", "quantity": "vertical_diameter_change", **each},
            {"name": "F", "quantity": "vertical_diameter_change", "zone": "far", **each},
        ],
    }
    evolution = follow_epochs(settings(tmp_path, **tables), list(outcomes()))
    grades = {
        place: [row["grade"] for row in rows(evolution, place, quantity, "change") if row["against"] == "first"]
        for place, quantity in (("crown", "shift"), ("whole object", "shift"))
    }
    assert grades["crown"] == ["T: below", "T: look exceeded", "T: look exceeded, act possible", "T: act exceeded"]
    assert grades["whole object"] == [""] * 4
    (last,) = [
        row["grade"]
        for row in rows(evolution, "section 4.00 m", "vertical_diameter_change", "change")
        if (row["against"], row["epoch"]) == ("first", "e4")
    ]
    assert last == "V: act exceeded"


def test_failed_and_undated_epochs_are_left_out(tmp_path):
    years = (0.0, 0.5, None, 1.5, 2.0)
    evolution = follow_epochs(settings(tmp_path, years), list(outcomes(years, failed={3})))
    (rate,) = rows(evolution, "crown", "shift")
    assert rate["epochs"] == 3
    assert evolution.notes == (
        "Series: epoch 'e3' is left out, because its comparison with the first one failed.",
    )  # fmt: skip


def test_with_too_little_there_is_no_series_and_a_word_where_one_was_due(tmp_path):
    assert follow_epochs(settings(tmp_path, YEARS[:2]), list(outcomes(YEARS[:2]))).notes == ()
    broken = follow_epochs(settings(tmp_path), list(outcomes(failed={1, 2, 3})))
    assert broken.rows == ()
    assert "fewer than three epochs are left" in broken.notes[-1]
    assert list(tmp_path.iterdir()) == []


def test_equal_dates_are_one_sentence_and_stop_nothing_else(tmp_path):
    years = (0.0, 0.5, 0.5, 1.0)
    evolution = follow_epochs(settings(tmp_path, years), list(outcomes(years)))
    assert evolution.rows == ()
    assert evolution.notes == (
        f"Series: required a different date for each epoch; got {day(0.5)} twice; leave one of the two out.",
    )


def test_a_table_that_cannot_be_written_is_a_note(tmp_path):
    (tmp_path / "series.csv").mkdir()
    evolution = follow_epochs(settings(tmp_path), list(outcomes()))
    assert evolution.file is None
    assert "series.csv" in evolution.notes[-1]


def test_a_season_is_fitted_where_it_is_asked_for(tmp_path):
    years = (0.0, 0.25, 0.5, 0.75, 1.0, 1.5, 2.0, 2.25)
    made = list(outcomes(years))
    for outcome, t in zip(made, years[1:], strict=True):
        outcome.summary["rigid_motion"]["crown"]["shift"] += 1e-3 * np.sin(2 * np.pi * t)
    with_it = follow_epochs(settings(tmp_path, years, series={"season": True}), made)
    (rate,) = rows(with_it, "crown", "shift")
    assert rate["model"] == "rate and season"
    assert rate["rate"] == pytest.approx(2e-3, rel=0.02)
    assert rate["season_amplitude"] == pytest.approx(1e-3, rel=0.02)


WARMTH = (12.0, 20.0, 5.0, 18.0, 9.0)
"""Degrees Celsius of the object at the epochs."""
EXPANSION = 10e-6


def warm(t, warmth):
    """A zone and a diameter of 6 m that grow by 100 microstrain a year and by free expansion."""
    strain = 100e-6 * t + EXPANSION * (warmth - WARMTH[0])
    data = compared(t)
    data["zones"]["crown"]["quantities"]["strain_u"] = {"mean": strain, "mean_sd": 5e-6}
    data["sections"]["rows"][0] |= {
        "vertical_diameter_ref": 6.0, "vertical_diameter_change": 6.0 * strain, "vertical_diameter_change_sd": 3e-5,
    }  # fmt: skip
    return data


def followed_warm(folder, series, warmth=WARMTH):
    epochs = [
        {"label": f"e{n}", "file": f"{n}.laz", "date": day(t), "temperature": warmth[n]} for n, t in enumerate(YEARS)
    ]
    config = BatchConfig.model_validate({"output": {"folder": str(folder)}, "epoch": epochs, "series": series})
    made = [Outcome(f"e0_to_e{n}", Path("x"), summary=warm(t, WARMTH[n])) for n, t in enumerate(YEARS) if n]
    return follow_epochs(config, made)


THERMAL = {"free_expansion": EXPANSION, "free_expansion_sd": 1e-6, "temperature_sd": 0.5}


def test_free_expansion_is_taken_off_strains_and_diameters_where_that_is_asked_for(tmp_path):
    plain, taken = followed_warm(tmp_path, {}), followed_warm(tmp_path, THERMAL)
    for place, quantity, rate in (
        ("crown", "mean_strain_u", 100e-6),
        ("section 4.00 m", "vertical_diameter_change", 600e-6),
    ):
        (without,), (with_it,) = rows(plain, place, quantity), rows(taken, place, quantity)
        assert without["model"] == "rate"
        assert without["rate"] != pytest.approx(rate, rel=0.05)
        assert with_it["model"] == "rate, less temperature"
        assert with_it["rate"] == pytest.approx(rate, rel=2e-3)
    # a movement depends on where the object is held
    assert rows(taken, "crown", "shift")[0]["model"] == "rate"


def test_expansion_takes_a_temperature_for_every_epoch_and_all_its_numbers(tmp_path):
    with pytest.raises(ValueError, match=r"a temperature for each epoch.*none for e2"):
        followed_warm(tmp_path, THERMAL, warmth=(*WARMTH[:2], None, *WARMTH[3:]))
    with pytest.raises(ValueError, match="add temperature_sd"):
        followed_warm(tmp_path, {"free_expansion": 1e-5, "free_expansion_sd": 1e-6})


def test_a_batch_from_its_file_to_the_table(tmp_path, monkeypatch):
    """Through `run_batch` with comparisons made by hand, one of which fails."""

    def compare_files(reference, current, config, *, progress=None, assume_same_crs=False, labels=None, **_):
        if current.stem == "2":
            raise InputFileError("2.laz: required points; got none; export it again.")
        return Made(compared(YEARS[int(current.stem)]))

    def write_result(result, folder, **options):
        folder.mkdir(parents=True)
        (folder / "summary.json").write_text(json.dumps(result), encoding="utf-8")

    pipeline = types.ModuleType("scanstrain.pipeline")
    pipeline.compare_files = compare_files
    monkeypatch.setitem(sys.modules, "scanstrain.pipeline", pipeline)
    monkeypatch.setattr("scanstrain.outputs.write_result", write_result)
    # the overview shows more of a summary than series are made of
    monkeypatch.setattr("scanstrain.outputs.report.write_index", lambda outcomes, folder: None)
    lines = ['[output]\nfolder = "results"']
    for number, t in enumerate(YEARS):
        (tmp_path / f"{number}.laz").write_text(f"scan {number}", encoding="utf-8")
        lines.append(f'[[epoch]]\nlabel = "e{number}"\nfile = "{number}.laz"\ndate = {day(t)}')
    path = tmp_path / "job.toml"
    path.write_text("\n".join(lines), encoding="utf-8")
    config = load_config(path)
    evolution = follow_epochs(config, run_batch(config))
    assert evolution.file == tmp_path / "results" / "series.csv"
    assert evolution.file.is_file()
    assert [note.split("'")[1] for note in evolution.notes] == ["e2"]
    (rate,) = rows(evolution, "crown", "shift")
    assert rate["epochs"] == 4
    assert json.loads(json.dumps(evolution_data(evolution), allow_nan=False))["file"] == str(evolution.file)
