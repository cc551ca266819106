# SPDX-License-Identifier: MIT
"""Work on a Dask cluster: real scheduler and workers on loopback, and every way in which they cannot serve."""

import functools
import math
import operator
import os
import socket
import subprocess
import sys
import time
from pathlib import Path

import pytest

from scanstrain.cluster import _check_workers, map_on_cluster
from scanstrain.errors import MissingDependencyError, OptionError
from scanstrain.program import identity

ROOT = Path(__file__).parents[2]
needs_dask = pytest.mark.skipif(
    subprocess.run([sys.executable, "-c", "import distributed"], capture_output=True, check=False).returncode != 0,
    reason="distributed is not installed",
)


def start(*arguments):
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    command = [sys.executable, "-m", "dask", *arguments]
    return subprocess.Popen(command, env=environment, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)


def start_worker(address, *options):
    return start("worker", address, "--host", "127.0.0.1", "--no-dashboard", "--no-nanny", *options)


@pytest.fixture(scope="module")
def scheduler():
    with socket.socket() as found:
        found.bind(("127.0.0.1", 0))
        port = found.getsockname()[1]
    process = start("scheduler", "--host", "127.0.0.1", "--port", str(port), "--no-dashboard")
    yield f"tcp://127.0.0.1:{port}"
    process.terminate()
    process.wait()


@pytest.fixture(scope="module")
def workers(scheduler):
    """Two workers; a test may end one of them and start another."""
    running = [start_worker(scheduler, "--nthreads", "1") for _ in range(2)]
    yield running
    for process in running:
        process.terminate()
        process.wait()


def answers(scheduler, items, folder, *, inputs=()):
    folder.mkdir(exist_ok=True)
    found = map_on_cluster(
        operator.call, items, scheduler=scheduler, lost=lambda item: "lost", folder=folder, inputs=inputs
    )
    return dict(found)


@needs_dask
def test_answers_come_with_their_positions_from_other_processes(scheduler, workers, tmp_path):
    work = [functools.partial(math.sqrt, 4.0), functools.partial(math.sqrt, 9.0), os.getpid]
    found = answers(scheduler, work, tmp_path)
    assert (found[0], found[1]) == (2.0, 3.0)
    assert found[2] in {process.pid for process in workers}
    assert list(tmp_path.iterdir()) == []


@needs_dask
def test_a_worker_that_dies_loses_nothing(scheduler, workers, tmp_path):
    """Each item waits and then says which process it was in; one worker is killed in the middle."""
    wait = functools.partial(os.popen, "sleep 1")
    work = [functools.partial(functools.reduce, lambda _, call: call(), [None, lambda: wait().read(), os.getpid])] * 4
    arriving = map_on_cluster(
        operator.call, work, scheduler=scheduler, lost=lambda item: "lost", folder=tmp_path, inputs=[]
    )
    found = dict([next(arriving)])
    workers[0].kill()
    found |= dict(arriving)
    assert sorted(found) == [0, 1, 2, 3]
    assert "lost" not in found.values()
    assert workers[1].pid in found.values()
    workers[0].wait()
    workers[0] = start_worker(scheduler, "--nthreads", "1")


@needs_dask
def test_a_batch_says_there_what_it_says_here(scheduler, workers, tmp_path):
    """These files hold no points, so what comes back are errors in words; `bench_batch.py` compares results."""
    from scanstrain.batch import run_batch
    from scanstrain.config import load_config

    lines = ['[output]\nfolder = "results"']
    for label in "abc":
        (tmp_path / f"{label}.laz").write_text(f"scan {label}", encoding="utf-8")
        lines.append(f'[[epoch]]\nlabel = "{label}"\nfile = "{label}.laz"')
    (tmp_path / "job.toml").write_text("\n".join(lines), encoding="utf-8")
    config = load_config(tmp_path / "job.toml")
    seen = []
    there = run_batch(config, scheduler=scheduler, progress=lambda step, share: seen.append(step))
    here = run_batch(config)
    assert [(each.name, each.error) for each in there] == [(each.name, each.error) for each in here]
    assert seen == [f"{number} of 2 comparisons done" for number in range(3)]
    assert not (tmp_path / "results").exists()


@needs_dask
def test_workers_that_do_not_see_the_files_are_refused(scheduler, workers, tmp_path, monkeypatch):
    with pytest.raises(OptionError, match=r"workers that see the scans; got .*which does not see .*none\.laz"):
        answers(scheduler, [os.getpid], tmp_path, inputs=[tmp_path / "none.laz"])
    monkeypatch.setattr("scanstrain.cluster.facts_of_worker", _blind)
    wanted = r"workers that see the output folder .*; use a folder that all machines share"
    with pytest.raises(OptionError, match=wanted):
        answers(scheduler, [os.getpid], tmp_path)


def _blind(token, inputs):
    return {"program": identity(), "token": "", "missing": []}


@needs_dask
def test_workers_with_another_version_are_refused(scheduler, workers, tmp_path, monkeypatch):
    monkeypatch.setattr("scanstrain.program.identity", lambda: {**identity(), "numpy": "1.0", "source": "x"})
    with pytest.raises(OptionError, match=r"with other modules; numpy \d\S+ in place of 1\.0 on tcp://"):
        answers(scheduler, [os.getpid], tmp_path)


@needs_dask
def test_workers_of_several_threads_are_refused(scheduler, workers, tmp_path):
    more = start_worker(scheduler, "--nthreads", "2")
    end, said = time.monotonic() + 60, ""
    try:
        while not said and time.monotonic() < end:
            try:
                answers(scheduler, [os.getpid], tmp_path)
            except OptionError as error:
                said = str(error)
    finally:
        more.terminate()
        more.wait()
    assert "required workers of one thread; got 2 threads on " in said


@needs_dask
@pytest.mark.parametrize("address", ["tcp://127.0.0.1:9", "nonsense", "what://ever:1"])
def test_a_scheduler_that_does_not_answer_is_one_sentence(tmp_path, monkeypatch, address):
    monkeypatch.setattr("scanstrain.cluster.CONNECT", 0.5)
    with pytest.raises(OptionError) as raised:
        answers(address, [os.getpid], tmp_path)
    assert f"--scheduler {address}: required a Dask scheduler that answers; got " in str(raised.value)
    assert "\n" not in str(raised.value)


def test_a_scheduler_without_workers_is_refused(tmp_path):
    class Lonely:
        def wait_for_workers(self, count, timeout):
            raise TimeoutError

    with pytest.raises(OptionError) as raised:
        _check_workers(Lonely(), "tcp://host:8786", tmp_path, [])
    assert "required at least one worker; got none within 10 s" in str(raised.value)
    assert "start some with `dask worker tcp://host:8786 --nthreads 1`" in str(raised.value)


def test_without_the_extra_the_way_to_get_it_is_said(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(MissingDependencyError, match=r'pip install "scanstrain\[dask\]"'):
        answers("tcp://127.0.0.1:9", [os.getpid], tmp_path)
