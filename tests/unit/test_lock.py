# SPDX-License-Identifier: MIT
"""Locks of output folders: one run at a time, dead ones are taken over, those of other machines are not."""

import json
import os
import subprocess
import sys
import threading
from pathlib import Path

import pytest

from scanstrain.errors import OutputError
from scanstrain.lock import check_free, lock_path, locked


def written(folder, **changes):
    """Write the lock of this very process, changed."""
    with locked(folder):
        content = json.loads(lock_path(folder).read_text(encoding="utf-8"))
    lock_path(folder).write_text(json.dumps(content | changes), encoding="utf-8")
    return content


def test_a_lock_is_there_while_it_is_held_and_says_who_holds_it(tmp_path):
    folder = tmp_path / "results"
    with locked(folder):
        content = json.loads(lock_path(folder).read_text(encoding="utf-8"))
        assert content["process"] == os.getpid()
        assert [path.name for path in tmp_path.iterdir()] == [".results.lock"]
    assert list(tmp_path.iterdir()) == []


def test_folders_that_were_made_for_a_lock_go_with_it_unless_they_are_used(tmp_path):
    with locked(tmp_path / "deep" / "down" / "results"):
        pass
    assert list(tmp_path.iterdir()) == []
    with locked(tmp_path / "deep" / "down" / "results"):
        (tmp_path / "deep" / "down" / "results").mkdir()
    assert (tmp_path / "deep" / "down" / "results").exists()


def test_two_at_once_are_refused_with_a_sentence(tmp_path):
    busy = f"process {os.getpid()} at work there since"
    with locked(tmp_path / "results"), pytest.raises(OutputError, match=busy), locked(tmp_path / "results"):
        pytest.fail("both hold it")
    with locked(tmp_path / "results"):
        pass


def test_a_run_on_the_folder_above_holds_those_below(tmp_path):
    for inner in ("results/a_to_b", "results/place/a_to_b"):
        wanted = "results: required an output folder"
        with locked(tmp_path / "results"), pytest.raises(OutputError, match=wanted), locked(tmp_path / inner):
            pytest.fail("both hold it")
        assert not lock_path(tmp_path / inner).exists()
    with locked(tmp_path / "results" / "a_to_b"), pytest.raises(OutputError, match="a_to_b"):
        check_free(tmp_path / "results" / "a_to_b")
    check_free(tmp_path / "results" / "a_to_b")


def test_the_lock_of_a_killed_process_is_taken_over(tmp_path):
    folder = tmp_path / "results"
    code = (
        "import os, signal, sys, pathlib\nfrom scanstrain.lock import locked\n"
        "with locked(pathlib.Path(sys.argv[1])): os.kill(os.getpid(), signal.SIGKILL)"
    )
    environment = {**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])}
    subprocess.run([sys.executable, "-c", code, str(folder)], env=environment, check=False)
    assert lock_path(folder).exists()
    check_free(folder)
    with locked(folder):
        pass
    assert list(tmp_path.iterdir()) == []


def test_a_number_that_was_used_again_is_another_process(tmp_path, monkeypatch):
    folder = tmp_path / "results"
    written(folder, began="long ago")
    # Not every system tells when a process began; here it does.
    monkeypatch.setattr("scanstrain.lock._beginning", lambda _number: "just now")
    with locked(folder):
        pass


@pytest.mark.parametrize("changes", [{"host": "elsewhere", "process": 2**22 + 1}, {"process": "x"}])
def test_what_cannot_be_judged_from_here_is_refused_and_left(tmp_path, changes):
    folder = tmp_path / "results"
    written(folder, **changes)
    with pytest.raises(OutputError) as raised, locked(folder):
        pytest.fail("it was taken over")
    if "host" in changes:
        assert "on elsewhere since" in str(raised.value)
        assert f"remove {lock_path(folder)} if nothing runs" in str(raised.value)
    assert lock_path(folder).exists()


@pytest.mark.parametrize("text", ["", "[]", "{", "\udcff"])
def test_a_lock_that_says_nothing_is_refused(tmp_path, text):
    lock_path(tmp_path / "results").write_bytes(text.encode("utf-8", "surrogateescape"))
    with pytest.raises(OutputError, match="an unknown machine"), locked(tmp_path / "results"):
        pytest.fail("it was taken over")


def test_of_many_that_want_a_dead_lock_one_gets_it(tmp_path):
    folder = tmp_path / "results"
    written(folder, process=2**22 + 1)
    inside, most, refused = [], [], []
    gate = threading.Barrier(8)

    def want():
        gate.wait()
        try:
            with locked(folder):
                inside.append(1)
                most.append(len(inside))
                threading.Event().wait(0.05)
                inside.pop()
        except OutputError as error:
            refused.append(str(error))

    threads = [threading.Thread(target=want) for _ in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert set(most) == {1}
    assert len(most) + len(refused) == 8
    assert list(tmp_path.iterdir()) == []
