# SPDX-License-Identifier: MIT
"""The program as a process of its own: started in both ways, quick to help, stopped by Ctrl-C."""

import signal
import subprocess
import sys
from pathlib import Path

import pytest

HEAVY = ("scipy", "numba", "laspy", "open3d", "matplotlib", "numpy", "pydantic", "rich", "pyproj")


def python(*arguments, **options):
    command = [sys.executable, *arguments]
    return subprocess.run(command, capture_output=True, check=False, timeout=120, **{"encoding": "utf-8", **options})


def test_the_module_and_the_script_are_the_same_program():
    script = Path(sys.executable).with_name("scanstrain")
    by_script = subprocess.run([script, "--help"], capture_output=True, text=True, check=False)
    by_module = python("-m", "scanstrain", "--help")
    assert by_script.returncode == by_module.returncode == 0
    assert by_script.stdout == by_module.stdout
    assert "compare" in by_module.stdout


def test_help_loads_nothing_heavy():
    """What makes `--help` answer at once."""
    code = (
        "import sys; from scanstrain.cli import main; main(['--help']); main(['compare', '--help'])\n"
        f"sys.exit(', '.join(set({HEAVY!r}) & set(sys.modules)) or 0)"
    )
    done = python("-c", code)
    assert (done.returncode, done.stderr) == (0, ""), done.stderr


def test_exit_codes_reach_the_shell(tmp_path):
    assert python("-m", "scanstrain", "compare", "a.las", "b.las", "--out", "x", "--thickness", "-1").returncode == 2
    assert python("-m", "scanstrain", "inspect", str(tmp_path / "none.las")).returncode == 1


@pytest.mark.parametrize("encoding", ["iso8859-5", "cp437"])
def test_a_terminal_without_greek_letters_does_not_stop_the_program(tmp_path, scans, encoding):
    import os

    environment = {**os.environ, "PYTHONIOENCODING": encoding, "PYTHONUTF8": "0"}
    done = python("-m", "scanstrain", "inspect", str(scans[0]), env=environment, encoding=encoding)
    assert done.returncode == 0
    assert "points per m" in done.stdout


def test_ctrl_c_gives_130_and_one_sentence(tmp_path):
    """A batch file that is a pipe nobody writes to keeps the program waiting until the signal comes."""
    import os
    import time

    pipe = tmp_path / "batch.toml"
    os.mkfifo(pipe)
    code = (
        "import sys, scanstrain.config; from scanstrain.cli import main\n"
        "print('ready', flush=True); sys.exit(main(sys.argv[1:]))"
    )
    process = subprocess.Popen(
        [sys.executable, "-c", code, "run", str(pipe)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.default_int_handler),  # a parent may ignore it
    )
    assert process.stdout.readline() == "ready\n"
    time.sleep(0.5)
    process.send_signal(signal.SIGINT)
    _, err = process.communicate(timeout=60)
    assert process.returncode == 130
    assert err.strip().splitlines() == [
        "Error: interrupted; nothing half-finished is left; the same command goes on where it was."
    ]
