# SPDX-License-Identifier: MIT
"""A batch: which comparisons run, what happens when one fails, and that nothing runs into a wrong folder."""

import hashlib
import json
import os
import sys
import types
from pathlib import Path

import pytest

from scanstrain.batch import in_words, outcomes_data, run_batch
from scanstrain.config import load_config
from scanstrain.errors import InputFileError, OptionError, OutputError

TEXT = """\
{how}
assume_same_crs = true
[output]
folder = "results"
no_data = -9999.0
[strain]
structure = "wall"
"""


class Made(str):
    """Stands in for a result."""

    def close(self):
        """Let nothing go."""


@pytest.fixture
def batch(tmp_path):
    """Load a batch of epochs a, b, c, whose files exist."""

    def loaded(how="", labels="abc"):
        epochs = "".join(f'[[epoch]]\nlabel = "{label}"\nfile = "{label}.laz"\n' for label in labels)
        for label in labels:
            (tmp_path / f"{label}.laz").write_text(f"scan {label}", encoding="utf-8")
        path = tmp_path / "batch.toml"
        path.write_text(TEXT.format(how=how) + epochs, encoding="utf-8")
        return load_config(path)

    return loaded


@pytest.fixture
def calls(monkeypatch):
    """Replace the pipeline and the writer; return what they were called with. Scans named in `broken` fail."""
    made = types.SimpleNamespace(compared=[], written=[], broken={}, indexed=[])

    def compare_files(reference, current, config, *, progress=None, assume_same_crs=False, labels=None, **_):
        made.compared.append((reference.stem, current.stem, config, assume_same_crs))
        if progress:
            progress("registration", 0.0)
            progress("registration", 1.0)
        if current.stem in made.broken:
            raise made.broken[current.stem]
        return Made(current.stem)

    def write_result(result, folder, **options):
        made.written.append((result, options))
        folder.mkdir(parents=True, exist_ok=True)
        (folder / "summary.json").write_text(json.dumps({"of": result}), encoding="utf-8")
        return [folder / "summary.json"]

    pipeline = types.ModuleType("scanstrain.pipeline")
    pipeline.compare_files = compare_files
    monkeypatch.setitem(sys.modules, "scanstrain.pipeline", pipeline)
    monkeypatch.setattr("scanstrain.outputs.write_result", write_result)
    monkeypatch.setattr("scanstrain.outputs.report.write_index", lambda *about: made.indexed.append(about))
    return made


def test_every_comparison_runs_with_the_options_of_the_file(batch, calls, tmp_path):
    outcomes = run_batch(batch())
    assert [outcome.name for outcome in outcomes] == ["a_to_b", "a_to_c"]
    assert [outcome.folder for outcome in outcomes] == [
        tmp_path / "results" / "a_to_b",
        tmp_path / "results" / "a_to_c",
    ]
    assert [outcome.summary for outcome in outcomes] == [{"of": "b"}, {"of": "c"}]
    reference, current, config, assume_same_crs = calls.compared[0]
    assert (reference, current, assume_same_crs) == ("a", "b", True)
    assert config.strain.structure == "wall"
    result, options = calls.written[0]
    request = options.pop("request")
    assert (result, options) == (
        "b",
        {
            "colour_by": "disp_n",
            "colour_limits": None,
            "no_data": -9999.0,
            "only_significant": False,
            "report": True,
            "ply": True,
            "colour_map": None,
        },
    )
    assert request["inputs"]["current"] == hashlib.sha256(b"scan b").hexdigest()
    assert request["labels"] == [["a", None], ["b", None]]


def test_a_comparison_that_fails_does_not_stop_the_others(batch, calls):
    calls.broken["b"] = InputFileError("b.laz: required points; got none; export it again.")
    seen = []
    first, second = run_batch(batch(), finished=seen.append)
    assert not first.done
    assert first.error == "b.laz: required points; got none; export it again."
    assert "InputFileError" in first.details
    assert second.done
    assert seen == [first, second]
    assert calls.indexed == [([first, second], first.folder.parent)]
    assert not first.folder.exists()


@pytest.mark.parametrize("error", [ValueError("odd"), MemoryError(), RecursionError("deep")])
def test_unforeseen_errors_are_put_in_words_too(batch, calls, error):
    calls.broken["b"] = error
    first, second = run_batch(batch())
    assert first.error.endswith(".")
    assert ": required " in first.error
    assert second.done


def test_an_interruption_is_not_taken_for_a_failure(batch, calls):
    calls.broken["b"] = KeyboardInterrupt()
    with pytest.raises(KeyboardInterrupt):
        run_batch(batch())
    assert len(calls.compared) == 1


@pytest.mark.parametrize(
    ("only", "names"),
    [
        (["b"], ["a_to_b"]),
        (["a"], ["a_to_b", "a_to_c"]),
        (["a_to_c"], ["a_to_c"]),
        (["c", "b"], ["a_to_b", "a_to_c"]),
    ],
)
def test_only_some(batch, calls, only, names):
    assert [outcome.name for outcome in run_batch(batch(), only=only)] == names


def test_only_something_unknown(batch, calls):
    with pytest.raises(OptionError, match="did you mean 'a_to_b'"):
        run_batch(batch(), only=["a_to_bb"])
    assert calls.compared == []


def test_workers_below_one_are_refused(batch, calls):
    with pytest.raises(OptionError, match="workers"):
        run_batch(batch(), workers=0)


def test_progress_names_the_comparison(batch, calls):
    steps = []
    run_batch(batch(), only=["b"], progress=lambda step, share: steps.append((step, share)))
    assert [step for step, _ in steps] == ["a_to_b: check", "a_to_b: registration", "a_to_b: write"]
    assert [share for _, share in steps] == [0.0, 0.0, 0.9]


def test_an_input_in_the_place_of_an_output_is_refused_before_anything_runs(batch, calls, tmp_path):
    config = batch()
    place = tmp_path / "results" / "a_to_c"
    place.mkdir(parents=True)
    scan = place / "strain.laz"
    scan.write_bytes(b"a scan")
    epochs = (*config.epoch[:2], config.epoch[2].model_copy(update={"file": scan}))
    with pytest.raises(OptionError, match="leaves the inputs alone"):
        run_batch(config.model_copy(update={"epoch": epochs}))
    assert calls.compared == []
    assert scan.read_bytes() == b"a scan"


def test_a_file_in_the_place_of_a_result_folder_is_refused_before_anything_runs(batch, calls, tmp_path):
    (tmp_path / "results").write_text("mine", encoding="utf-8")
    with pytest.raises(OptionError, match="is a file"):
        run_batch(batch())
    assert calls.compared == []
    assert (tmp_path / "results").read_text(encoding="utf-8") == "mine"


def test_outcomes_as_data_are_strict_json(batch, calls):
    calls.broken["b"] = OutputError("disk: required room; got none; free some.")
    data = json.loads(json.dumps(outcomes_data(run_batch(batch())), allow_nan=False))
    first, second = data["comparisons"]
    assert (first["name"], first["done"], first["summary"]) == ("a_to_b", False, None)
    assert first["error"].startswith("disk: ")
    assert (second["done"], second["error"], second["summary"]) == (True, None, {"of": "c"})


def test_worker_processes_report_errors_as_outcomes(batch, tmp_path):
    """Through real processes and whatever really reads scans: these files hold no points, so every comparison fails."""
    outcomes = run_batch(batch(), workers=2)
    assert [outcome.name for outcome in outcomes] == ["a_to_b", "a_to_c"]
    for outcome in outcomes:
        assert not outcome.done
        assert "a.laz" in outcome.error
        assert outcome.details.startswith("Traceback")
    assert not (tmp_path / "results").exists()


def test_errors_made_by_the_program_say_so():
    assert in_words(InputFileError("as it is")) == "as it is"
    assert "ZeroDivisionError: by zero" in in_words(ZeroDivisionError("by zero"))
    assert "got ValueError: first;" in in_words(ValueError("\nfirst\nsecond\n"))
    assert "got ValueError: no text;" in in_words(ValueError())


def test_this_module_leaves_the_numerical_libraries_to_the_workers():
    """A worker sets its number of threads before they load, so importing the batch must not load them."""
    import subprocess

    code = "import scanstrain.batch, sys; sys.exit('numpy' in sys.modules)"
    environment = {**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])}
    assert subprocess.run([sys.executable, "-c", code], env=environment, check=False).returncode == 0
