# SPDX-License-Identifier: MIT
"""What each command does when all is well, and that results and words go where they belong."""

import json
import tomllib

import pytest

from scanstrain.config import BatchConfig, load_config
from scanstrain.errors import RegistrationError


def test_compare_passes_the_options_on_and_shows_the_verdict(call, fake, scans, tmp_path):
    said = call(
        "compare", "a.las", "b.las", "--out", "result", "--gauge-length", "0.8", "--gauge-spacing", "auto",
        "--structure", "wall", "--thickness", "0.3", "--measure", "hencky", "--colour-by", "tilt",
        "--no-data", "-9999", "--assume-same-crs",
    )  # fmt: skip
    assert (said.code, said.errors) == (0, [])
    config, assume_same_crs = fake.configs[0]
    assert (config.neighbourhood.gauge_length, config.neighbourhood.gauge_spacing) == (0.8, "auto")
    assert (config.strain.structure, config.strain.thickness, config.strain.measure) == ("wall", 0.3, "hencky")
    assert (config.output.colour_by, config.output.no_data, assume_same_crs) == ("tilt", -9999.0, True)
    # 11 gauges could be evaluated and 3 of them moved, by up to 6.2 mm: see outputs_result.py
    assert "3 of the 11 gauges that could be evaluated changed" in said.out
    assert "6.20 ± 0.29 mm" in said.out
    assert "Warning: Twice said." in said.out
    assert (tmp_path / "result" / "strain_tilt.laz").exists()
    assert "Written to result" in said.out


def test_the_table_shows_values_in_the_unit_for_a_person_and_a_dash_for_none(call, fake, scans):
    rows = [line.split() for line in call("compare", "a.las", "b.las", "--out", "result").out.splitlines()]
    # 11 finite normal displacements: median 0, detection limit 0.29 mm, 11 of 12 observable, 3 of 11 changed
    assert ["disp_n", "[mm]", "-2.10", "0.00", "5.65", "0.29", "92", "%", "27", "%"] in rows
    assert ["spin", "[mrad]", "-", "-", "-", "-", "0", "%", "-"] in rows


def test_progress_goes_to_standard_error_as_plain_lines(call, fake, scans):
    said = call("compare", "a.las", "b.las", "--out", "result")
    steps = [line.partition(";")[0] for line in said.err.splitlines()]
    assert steps == [
        *(f"  0 %  {name}" for name in ("check", "registration", "neighbourhood", "strain")),
        " 90 %  write",
    ]
    assert "0 %  strain" not in said.out
    assert "\x1b" not in said.err + said.out


@pytest.mark.parametrize("arguments", [("--json", "compare"), ("compare", "--json")])
def test_json_is_the_summary_and_nothing_else_on_standard_output(call, fake, scans, tmp_path, arguments):
    said = call(*arguments, "a.las", "b.las", "--out", "result")
    assert json.loads(said.out) == json.loads((tmp_path / "result" / "summary.json").read_text(encoding="utf-8"))
    assert json.loads(said.out)["inputs"]["reference"]["file"] == "a.las"


def test_quiet_is_silent(call, fake, scans):
    said = call("-q", "compare", "a.las", "b.las", "--out", "result")
    assert (said.code, said.out, said.err) == (0, "", "")


def test_verbose_adds_cautions_and_times(call, fake, scans):
    plain = call("compare", "a.las", "b.las", "--out", "one").out
    verbose = call("compare", "a.las", "b.las", "--out", "two", "--verbose").out
    assert "Caution: " in verbose
    assert "neighbourhood: 1.5 s" in verbose
    assert "Caution: " not in plain


def test_run_compares_everything_and_ends_with_a_table(call, fake, batch_file, tmp_path):
    said = call("run", batch_file())
    assert (said.code, said.errors) == (0, [])
    heads, first, second, written = said.out.splitlines()
    assert heads.split()[:4] == ["comparison", "result", "gauges", "changed"]
    assert first.split()[:9] == ["a_to_b", "done", "11", "of", "12", "3", "6.2", "mm", "0.29"]
    assert second.split()[:2] == ["a_to_c", "done"]
    assert written == f"Written to {tmp_path / 'results'}"
    assert sorted(path.name for path in (tmp_path / "results").iterdir()) == ["a_to_b", "a_to_c", "index.html"]
    assert "  0 %  a_to_b: registration" in said.err


def test_run_goes_on_after_a_failure_and_says_so_with_exit_3(call, fake, batch_file, tmp_path):
    fake.broken["b.las"] = RegistrationError("b.las: required an overlap; got none; check the coordinates.")
    said = call("run", batch_file())
    assert said.code == 3
    assert said.errors == ["Error: a_to_b: b.las: required an overlap; got none; check the coordinates."]
    assert "Traceback" not in said.err
    assert not (tmp_path / "results" / "a_to_b").exists()
    assert (tmp_path / "results" / "a_to_c" / "summary.json").exists()


def test_run_with_verbose_shows_where_it_failed(call, fake, batch_file):
    fake.broken["b.las"] = RegistrationError("not converged")
    assert "Traceback" in call("run", batch_file(), "-v").err


def test_run_as_json(call, fake, batch_file):
    fake.broken["b.las"] = RegistrationError("not converged")
    said = call("run", batch_file(), "--json")
    first, second = json.loads(said.out)["comparisons"]
    assert (said.code, first["error"], second["error"]) == (3, "not converged", None)
    assert second["summary"]["gauges"]["count"] == 12


def test_run_only(call, fake, batch_file, tmp_path):
    assert call("run", batch_file(), "--only", "c").code == 0
    assert sorted(path.name for path in (tmp_path / "results").iterdir()) == ["a_to_c", "index.html"]


def test_an_interruption_gives_130_and_leaves_nothing(call, fake, batch_file, tmp_path):
    fake.broken["b.las"] = KeyboardInterrupt()
    said = call("run", batch_file())
    assert said.code == 130
    assert len(said.errors) == 1
    assert not (tmp_path / "results").exists()


def test_inspect_shows_a_screen_for_each_scan_and_the_overlap(call, scans):
    said = call("inspect", "a.las", "b.las")
    assert (said.code, said.errors) == (0, [])
    first, second = said.out.split("\n\n")
    assert first.startswith("a.las\n")
    for words in (
        "LAS 1.4, point format 6",
        "1 600",
        "0.78 x 0.01 x 0.78 m",
        "x 482310.000 to 482310.780",
        "unit metre",
    ):
        assert words in first
    assert "Overlap: 100 % of the points lie within 0.3 m of a.las." in second


def test_inspect_as_json(call, scans):
    first, second = json.loads(call("inspect", "--json", "a.las", "b.las").out)
    assert first["found"]["points"] == 1600
    assert first["found"]["noise"] == pytest.approx(1e-3, rel=0.15)
    assert (first["overlap"], second["overlap"], second["against"]) == (None, 1.0, "a.las")


def test_inspect_goes_on_after_a_file_that_cannot_serve(call, scans, tmp_path):
    (tmp_path / "cut.las").write_bytes(scans[0].read_bytes()[:5000])
    said = call("inspect", "cut.las", "a.las")
    assert said.code == 1
    assert len(said.errors) == 1
    assert "cut.las" in said.errors[0]
    assert "1 600" in said.out


def test_colour_passes_its_options_on(call, monkeypatch, tmp_path):
    asked = []

    def recolour(cloud, attribute, **options):
        asked.append((cloud.name, attribute, options))
        return [tmp_path / "strain_tilt.laz", tmp_path / "strain_tilt.png"]

    monkeypatch.setattr("scanstrain.outputs.recolour", recolour)
    said = call("colour", "strain.laz", "--by", "tilt", "--limits", "0", "0.001", "--only-significant")
    assert asked == [
        (
            "strain.laz",
            "tilt",
            {"limits": (0.0, 0.001), "colour_map": None, "only_significant": True, "ply": True, "out": None},
        )
    ]
    assert said.out.splitlines() == [str(tmp_path / "strain_tilt.laz"), str(tmp_path / "strain_tilt.png")]
    call("colour", "strain.laz", "--by", "tilt", "--no-ply")
    assert (asked[1][2]["limits"], asked[1][2]["ply"]) == (None, False)


def test_sample_writes_scans_and_batch_files_that_run_on_them(call, monkeypatch, tmp_path):
    names = [f"{scene}_{date}.laz" for scene, date in (
        ("adit", "2031-03-04"), ("adit", "2031-06-10"), ("adit", "2031-09-12"),
        ("wall", "2031-03-05"), ("wall", "2031-09-13"),
    )]  # fmt: skip

    def write_sample(folder):
        folder.mkdir()
        for name in names:
            (folder / name).touch()
        return [folder / name for name in names]

    monkeypatch.setattr("scanstrain.synthetic.write_sample", write_sample)
    said = call("sample", "demo")
    assert said.code == 0
    assert said.out.splitlines() == [f"demo/{name}" for name in [*names, "adit.toml", "wall.toml"]]
    for name in ("adit.toml", "wall.toml"):
        assert call("config", "check", f"demo/{name}").code == 0
    assert load_config(tmp_path / "demo" / "adit.toml").output.folder == tmp_path / "demo" / "results" / "adit"


def test_sample_does_not_replace_an_edited_batch_file(call, monkeypatch, tmp_path):
    (tmp_path / "wall.toml").write_text("mine", encoding="utf-8")
    monkeypatch.setattr("scanstrain.synthetic.write_sample", lambda folder: pytest.fail("must not be reached"))
    said = call("sample", ".")
    assert said.code == 2
    assert (tmp_path / "wall.toml").read_text(encoding="utf-8") == "mine"
    assert not (tmp_path / "adit.toml").exists()


def test_the_names_of_the_demonstration_scans_are_those_in_the_batch_files():
    from scanstrain.config.demonstration import demonstration_configs
    from scanstrain.synthetic import NAMES

    texts = demonstration_configs(clouds="", results="").values()
    files = [epoch["file"] for text in texts for epoch in tomllib.loads(text)["epoch"]]
    assert files == [f"{name}.laz" for name in NAMES]


def test_config_new_prints_or_writes_a_file_that_config_check_accepts(call, tmp_path):
    printed = call("config", "new")
    (tmp_path / "printed.toml").write_text(printed.out, encoding="utf-8")
    assert call("config", "new", "written.toml").code == 0
    assert (tmp_path / "written.toml").read_text(encoding="utf-8") == printed.out
    said = call("config", "check", "printed.toml")
    assert said.code == 0
    assert "valid" in said.out


def test_config_new_for_scans_and_run_it(call, fake, scans, tmp_path):
    assert call("config", "new", "mine.toml", "a.las", "b.las").code == 0
    assert "1 to compare: a_to_b" in call("config", "check", "mine.toml").out
    assert call("run", "mine.toml").code == 0
    assert (tmp_path / "results" / "a_to_b" / "gauges.csv").exists()


def test_config_schema_is_that_of_the_model(call):
    assert json.loads(call("config", "schema").out) == BatchConfig.model_json_schema()


@pytest.mark.parametrize("command", ["run", "compare", "inspect", "forecast", "prove", "sample", "colour", "config"])
def test_every_command_has_help(call, command):
    said = call(command, "--help")
    assert said.code == 0
    assert said.out.startswith(f"Usage: scanstrain {command}")


def test_the_version_is_that_of_the_package(call):
    from importlib.metadata import version

    assert version("scanstrain") in call("--version").out


def test_forecast_says_what_a_set_up_can_show_and_what_it_cannot(call):
    said = call("forecast", "--thickness", "0.3")
    assert said.code == 0
    assert "not observable: a bare surface shows nothing in its own plane" in said.out
    assert "bending strain at the face" in said.out
    data = json.loads(call("forecast", "--json", "--contrast", "6").out)
    found = {each["name"]: each for each in data["quantities"]}
    assert found["strain"]["detection_limit"] == pytest.approx(1.96 * found["strain"]["standard_error"])
    assert data["set_up"]["contrast"] == 6


def test_forecast_refuses_millimetres(call):
    said = call("forecast", "--spacing", "5", "--gauge-length", "0.5")
    assert said.code == 2
    assert "check that both are in metres" in said.err
