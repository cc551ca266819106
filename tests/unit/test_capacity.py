# SPDX-License-Identifier: MIT
"""What a machine can carry: workers capped by cores, comparisons and memory; room on a disk."""

import os
import shutil

import pytest

from scanstrain import capacity
from scanstrain.capacity import free_memory, free_space, needed_memory, usable_workers, used_memory


@pytest.fixture
def machine(monkeypatch):
    """A machine of 16 cores with some gigabytes free."""

    def made(gigabytes):
        monkeypatch.setattr(capacity, "cores", lambda: 16)
        monkeypatch.setattr(capacity, "free_memory", lambda: None if gigabytes is None else gigabytes * 1e9)

    return made


@pytest.mark.parametrize(
    ("gigabytes", "points", "workers"),
    [
        (1000.0, [2_000_000] * 100, 16),  # as many as cores
        (1000.0, [2_000_000] * 3, 3),  # as many as there are
        (None, [2_000_000] * 100, 16),  # memory unknown
        # two million points take 0.6 + 1.4 GB, and 80 % of 16 GB is for six of that
        (16.0, [2_000_000] * 100, 6),
        (16.0, [100] * 100 + [2_000_000] * 2, 16),  # the small ones fit beside the two large ones
        (0.5, [2_000_000] * 100, 1),  # one at a time at least
        (16.0, [], 1),
    ],
)
def test_workers_are_capped_by_cores_comparisons_and_memory(machine, gigabytes, points, workers):
    machine(gigabytes)
    assert usable_workers(points) == workers


def test_the_estimate_of_memory_covers_what_was_measured():
    # 1709 MB with two scans of a million points: tests/benchmarks/bench_speed.py, 2 cores
    assert 1.709e9 < needed_memory(2_000_000) < 1.3 * 1.709e9


def test_a_limit_on_a_group_of_processes_counts(tmp_path, monkeypatch):
    (tmp_path / "memory.max").write_text("3000000000\n", encoding="ascii")
    (tmp_path / "memory.current").write_text("1000000000\n", encoding="ascii")
    monkeypatch.setattr(capacity, "GROUP", tmp_path)
    monkeypatch.setattr(capacity, "_free_on_machine", lambda: 9e9)
    assert free_memory() == 2e9
    (tmp_path / "memory.max").write_text("max\n", encoding="ascii")
    assert free_memory() == 9e9


def test_room_is_that_of_the_disk_on_which_a_folder_will_be(tmp_path):
    wanted = shutil.disk_usage(tmp_path).free
    assert free_space(tmp_path / "not" / "yet" / "there") == pytest.approx(wanted, rel=0.05)


def test_memory_of_processes_that_are_gone_is_none():
    assert used_memory([2**22 + 1]) is None
    assert used_memory([os.getpid()]) is None or used_memory([os.getpid()]) > 1e6
