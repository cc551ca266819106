# SPDX-License-Identifier: MIT
"""Where the time of a comparison goes, phase by phase; used by the scripts beside it.

Functions of the program are wrapped from outside, so the program itself carries no clocks. A phase counts its own time
without that of phases inside it.
"""

from __future__ import annotations

import functools
import importlib
import time

NEIGHBOURHOOD = (
    ("spacing", "neighbourhood.piece", ("median_spacing",)),
    ("texture", "neighbourhood.plan", ("measure_texture",)),
    ("cells", "neighbourhood.level", ("make_cells", "block_density")),
    ("smooth surface", "neighbourhood.level", ("smooth_surface", "support_cells", "heights")),
    ("covariance", "neighbourhood.level", ("count_pairs", "measure_structure", "local_covariance")),
    ("gauges", "neighbourhood.plan", ("candidates_in", "choose_gauges", "lay_out")),
    ("frames", "neighbourhood.fitting", ("frames_at", "support_cells")),
    ("kriging solve", "neighbourhood.level", ("build_predictor",)),
    ("rows", "neighbourhood.rows", ("_against",)),
    ("present motion", "neighbourhood.level", ("nearest_gauges", "blend")),
    ("fit", "neighbourhood.fit", ("fit_gauges",)),
    ("shared noise, measured", "neighbourhood.plan", ("measure_shared",)),
    ("shared noise, counted", "neighbourhood.fitting", ("count_shared",)),
    ("bias of gauges", "neighbourhood.affine", ("gauge_bias",)),
)
"""Phases of the neighbourhood stage: name, module, functions as that module names them."""


class Phases:
    """Wall and processor seconds of named phases; what lies between them is not counted."""

    def __init__(self) -> None:
        self.wall: dict[str, float] = {}
        self.cpu: dict[str, float] = {}
        self._inner: list[list[float]] = []

    def run(self, phase, function, *args, **kwargs):
        """Call a function as part of a phase."""
        start, busy = time.perf_counter(), time.process_time()
        self._inner.append([0.0, 0.0])
        try:
            return function(*args, **kwargs)
        finally:
            wall, cpu = time.perf_counter() - start, time.process_time() - busy
            inner = self._inner.pop()
            self.wall[phase] = self.wall.get(phase, 0.0) + wall - inner[0]
            self.cpu[phase] = self.cpu.get(phase, 0.0) + cpu - inner[1]
            if self._inner:
                self._inner[-1][0] += wall
                self._inner[-1][1] += cpu

    def wrap(self, table=NEIGHBOURHOOD):
        """Time the functions of a table of phases from now on."""
        for phase, name, functions in table:
            module = importlib.import_module(f"scanstrain.{name}")
            for function in functions:
                setattr(module, function, functools.partial(self.run, phase, getattr(module, function)))

    def wrap_outputs(self):
        """Time every writer. Clouds are written beside the others: their seconds overlap."""
        from scanstrain.outputs.write import BESIDE, OUTPUTS

        for name in OUTPUTS:
            # the clouds' thread has a clock of its own, since phases nest within one thread only
            clock = Phases() if name in BESIDE else self
            clock.wall, clock.cpu = self.wall, self.cpu
            OUTPUTS._items[name] = functools.partial(clock.run, name, OUTPUTS[name])
