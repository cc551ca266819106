# SPDX-License-Identifier: MIT
"""A folder of kept stages, one file each: taken where the key fits and the bytes are whole, computed anew elsewhere."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TypeVar

from scanstrain.errors import OutputError
from scanstrain.io.atomic import replacing
from scanstrain.stages.encode import DamagedStageError, decode, encode

Kept = TypeVar("Kept")

HEAD = "scanstrain stage"
"""Begins every file; key and SHA-256 of the content stand behind it, in one line."""


class StageStore:
    """The kept stages of one comparison.

    Parameters
    ----------
    folder : Path
        Made when the first stage is kept.
    keys : mapping of str to str
        What each stage depends on, see `stage_keys`.

    Attributes
    ----------
    computed, taken : list of str
        Stages that ran, and those that did not have to.
    notes : list of str
        What went wrong with the store; none of it stops a run.
    """

    def __init__(self, folder: Path, keys: Mapping[str, str]) -> None:
        self.folder = folder
        self.keys = dict(keys)
        self.computed: list[str] = []
        self.taken: list[str] = []
        self.notes: list[str] = []

    def __call__(self, name: str, compute: Callable[[], Kept]) -> Kept:
        """Return the result of a stage: the kept one if there is one for this key, else that of `compute`.

        What was just computed is handed on as it reads back, so that a run that goes on later works with the same
        bytes in the same order as one that was never stopped.
        """
        path = self.folder / f"{name}.stage"
        if (data := self._read(path, self.keys[name])) is not None:
            try:
                kept: Kept = decode(data)
            except DamagedStageError as error:
                self.notes.append(f"{path}: {error}; the stage was computed again.")
            else:
                self.taken.append(name)
                return kept
        computed = compute()
        self.computed.append(name)
        data = encode(computed)
        self._write(path, self.keys[name], data)
        again: Kept = decode(data)
        return again

    def _read(self, path: Path, key: str) -> bytes | None:
        """Return the content of a file, or None where there is none for this key or it is damaged."""
        try:
            with path.open("rb") as stream:
                head = stream.readline(len(HEAD) + 200).decode("ascii", "replace").split("\n")[0]
                if head.startswith(f"{HEAD} ") and head.split()[2:3] != [key]:
                    return None  # other options, other inputs, another program: nothing is wrong with it
                data = stream.read()
        except FileNotFoundError:
            return None
        except OSError as error:
            self.notes.append(f"{path}: {error.strerror}; the stage was computed again.")
            return None
        if head != _head(key, data):
            self.notes.append(f"{path}: damaged; the stage was computed again.")
            return None
        return data

    def _write(self, path: Path, key: str, data: bytes) -> None:
        """Keep a stage if there is room; a result that can be written needs no kept stages."""
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
            with replacing(path) as temporary, temporary.open("wb") as stream:
                stream.write(f"{_head(key, data)}\n".encode())
                stream.write(data)
        except OutputError as error:
            self.notes.append(f"The stage is not kept. {error}")
        except OSError as error:
            self.notes.append(f"The stage is not kept. {path}: {error.strerror or error}.")


def _head(key: str, data: bytes) -> str:
    return f"{HEAD} {key} {hashlib.sha256(data).hexdigest()}"
