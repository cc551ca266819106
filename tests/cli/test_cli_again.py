# SPDX-License-Identifier: MIT
"""The same command again: up to date, forgotten on request, refused while another run is at work."""

import json
import socket

import pytest

from scanstrain.errors import RegistrationError
from scanstrain.lock import locked


def test_compare_again_does_nothing_and_says_so(call, fake, scans):
    call("compare", "a.las", "b.las", "--out", "result")
    again = call("compare", "a.las", "b.las", "--out", "result")
    assert (again.code, len(fake.configs)) == (0, 1)
    assert "Up to date: nothing had to be done (--fresh computes it again)." in again.err.splitlines()
    assert "3 of the 11 gauges that could be evaluated changed" in again.out
    fresh = call("compare", "a.las", "b.las", "--out", "result", "--fresh")
    assert len(fake.configs) == 2
    assert "Up to date" not in fresh.err


def test_run_again_says_for_each_comparison_what_became_of_it(call, fake, batch_file, scans):
    fake.broken["c.las"] = RegistrationError("c.las: required an overlap; got none; check the coordinates.")
    path = batch_file()
    call("run", path)
    said = call("run", path)
    rows = [line.split() for line in said.out.splitlines()]
    assert said.code == 3
    assert rows[1][:4] == ["a_to_b", "up", "to", "date"]
    assert rows[2][:2] == ["a_to_c", "failed"]
    assert said.errors == ["Error: a_to_c: c.las: required an overlap; got none; check the coordinates."]
    states = [each["state"] for each in json.loads(call("run", path, "--json").out)["comparisons"]]
    assert states == ["up to date", "failed"]
    before = len(fake.configs)
    call("run", path, "--fresh", "--only", "b")
    assert len(fake.configs) == before + 1


def test_a_result_of_an_older_version_is_named(call, fake, scans, tmp_path):
    call("compare", "a.las", "b.las", "--out", "result")
    (tmp_path / "result" / "manifest.json").unlink()
    said = call("compare", "a.las", "b.las", "--out", "result")
    wanted = "the result there was made by another version (a version that wrote no manifest); it is made anew."
    assert f"Note: result: {wanted}" in said.err.splitlines()


def test_a_second_run_on_the_same_folder_is_refused(call, fake, batch_file, tmp_path):
    with locked(tmp_path / "results"):
        for words in (("run", batch_file()), ("compare", "a.las", "b.las", "--out", "results/a_to_b")):
            said = call(*words)
            assert said.code == 1
            assert "required an output folder that no other run is at work on; got process" in said.errors[0]
    with locked(tmp_path / "results" / "a_to_b"):
        assert call("run", batch_file()).code == 1
    assert fake.configs == []


@pytest.mark.parametrize("address", ["tcp://127.0.0.1:9", "nonsense"])
def test_a_scheduler_that_does_not_answer_is_exit_2(call, fake, batch_file, tmp_path, monkeypatch, address):
    pytest.importorskip("distributed")
    monkeypatch.setattr("scanstrain.cluster.CONNECT", 0.5)
    said = call("run", batch_file(), "--scheduler", address)
    assert said.code == 2
    assert len(said.errors) == 1
    assert f"--scheduler {address}: required a Dask scheduler that answers" in said.errors[0]
    assert not (tmp_path / "results").exists()


def test_places_end_in_one_table(call, fake, scans, tmp_path):
    for place in ("north", "south"):
        (tmp_path / place).mkdir()
        for scan in scans:
            (tmp_path / place / scan.name).write_bytes(scan.read_bytes() + place.encode())
    epochs = "".join(f'[[epoch]]\nlabel = "{label}"\nfile = "{{place}}/{label}.las"\n' for label in "ab")
    path = tmp_path / "job.toml"
    path.write_text(f'[output]\nfolder = "results"\n[[place]]\nname = "*th"\n{epochs}', encoding="utf-8")
    said = call("run", path)
    assert said.code == 0
    assert [line.split()[0] for line in said.out.splitlines()[1:3]] == ["north/a_to_b", "south/a_to_b"]
    assert (tmp_path / "results" / "north" / "a_to_b" / "strain.laz").exists()
    assert set(json.loads(call("run", path, "--json").out)["series"]) == {"north", "south"}
    assert "2 to compare: north/a_to_b, south/a_to_b." in call("config", "check", path).out


def test_the_lock_names_this_machine(tmp_path):
    with locked(tmp_path / "results"):
        content = json.loads((tmp_path / ".results.lock").read_text(encoding="utf-8"))
    assert content["host"] == socket.gethostname()
