# SPDX-License-Identifier: MIT
"""Tunnels and walls: diameters of sections, axis of a bent tunnel, lean of a wall; errors against the demands on them.

    python tests/benchmarks/bench_structures.py [--seeds 3] [--files]

Sections: slices of 10 mm at 5 mm spacing and 2 mm noise, R = 3 m, the whole ring and 60 % of it with 5 % clutter.
Axis: bends of 50 m and 60 m, 6 cm spacing, 2 mm noise, with clutter, floor and end walls. Lean: the sample wall (in
truth upright) and its later epoch through the whole comparison with `--files`, and drawn walls of 5 m by 3 m.
"""

from __future__ import annotations

import argparse
import runpy
from pathlib import Path

import numpy as np

import scanstrain
from scanstrain.io import read_scan
from scanstrain.structures import cut_sections, fit_axis, fit_wall, section_rows
from scanstrain.synthetic import Still, Wall, first_epoch, sample_epoch, sample_truth, truth
from scanstrain.synthetic.demo import WALL

HERE = Path(__file__).parent
UNIT = HERE.parent / "unit"
SECTIONS = runpy.run_path(str(UNIT / "test_structures_sections.py"))
CENTRES = runpy.run_path(str(UNIT / "test_structures_centreline.py"))
MEASURES = runpy.run_path(str(HERE.parent / "scenes" / "scene_measures.py"))
MACHINE = runpy.run_path(str(HERE / "bench_machine.py"))
SAMPLES = HERE.parents[1] / "sample_clouds"
DIAMETERS = ("horizontal_diameter_ref", "vertical_diameter_ref", "mean_diameter_ref", "horizontal_diameter_change",
             "mean_diameter_change")  # fmt: skip
BENDS = {
    "bend 50 m, 60 % of the ring, clutter": (20.0, {"share": 0.6, "clutter": 0.05}, {"bend": 50.0}),
    "the same, floor and end walls": (
        20.0, {"share": 0.6, "clutter": 0.05, "floor": 0.93, "ends": True}, {"bend": 50.0},
    ),
    "bend 60 m on a ramp of 0.15 rad": (20.0, {"share": 0.6, "clutter": 0.05}, {"bend": 60.0, "slope": 0.15}),
    "hairpin, bend 50 m": (110.0, {"share": 0.75, "clutter": 0.05}, {"bend": 50.0}),
}  # fmt: skip


def section_table(seeds):
    """Repeatability and bias of diameters over sections that do not share points."""
    for name, scene in (("whole ring", {}), ("60 % of the arc, 5 % clutter", {"share": 0.6, "clutter": 0.05})):
        rows = []
        for seed in range(seeds):
            first, second = (SECTIONS["slices"](10 * seed + k, **scene, **more) for k, more in (
                (1, {}), (2, {"radial": SECTIONS["sag"]})))  # fmt: skip
            rows += section_rows(
                cut_sections(SECTIONS["AXIS"], first, second, spacing=SECTIONS["SPACING"], thickness=SECTIONS["THIN"])
            )
        truth = SECTIONS["TRUTH"] | SECTIONS["WHOLE_RING"]
        print(f"\nsections, {name}: {len(rows)} sections of 10 mm; demands: repeatability 0.3 mm, bias 0.2 mm")
        lines = []
        for quantity in DIAMETERS:
            off = 1e3 * (SECTIONS["column"](rows, quantity) - truth[quantity])
            sd = 1e3 * SECTIONS["column"](rows, f"{quantity}_sd")
            seen = np.isfinite(off)
            if not seen.any():
                lines.append((quantity, 0, "not given", "", "", ""))
                continue
            off, sd = off[seen], sd[seen]
            cover = 100 * MEASURES["coverage"](off, sd)
            lines.append(
                (quantity, len(off), f"{off.std():.3f}", f"{off.mean():+.3f}", f"{sd.mean():.3f}", f"{cover:.1f}")
            )
        MACHINE["table"](("quantity", "n", "repeatability mm", "bias mm", "mean sd mm", "cover %"), lines)


def axis_table(seeds):
    """Largest distance of the found axis from the true one."""
    lines = []
    for name, (length, scene, line) in BENDS.items():
        worst, radius = [], []
        for seed in range(seeds):
            axis = fit_axis(CENTRES["tunnel"](np.random.default_rng(seed), length, **scene, **line))
            offset = axis.project(CENTRES["centre_line"](np.linspace(0, length, 200), **line)[0])[1]
            worst.append(1e3 * np.linalg.norm(offset, axis=1).max())
            radius.append(1e3 * (axis.radius - 3.0))
        lines.append((name, seeds, f"{np.mean(worst):.2f}", f"{np.max(worst):.2f}", f"{np.abs(radius).max():.2f}"))
    print("\naxis of a bent tunnel; demand: within 2 mm everywhere")
    MACHINE["table"](("tunnel", "n", "mean worst mm", "worst mm", "radius off mm"), lines)


def lean_table(seeds):
    """Lean of the face of a wall in one scan."""
    wall = fit_wall(read_scan(SAMPLES / "wall_2031-03-05.laz").points)
    normal = WALL.frames(np.zeros((1, 2)))[0][:, 2]
    turned = 1e3 * np.arccos(min(1.0, float(wall.normal @ normal)))
    lines = [("sample wall", 1, f"{1e3 * wall.lean:+.4f}", f"{1e3 * abs(wall.lean):.4f}", f"{1e3 * wall.lean_sd:.4f}",
              f"{turned:.4f}")]  # fmt: skip
    leans, sds = [], []
    for seed in range(5 * seeds):
        scene = MEASURES["textured"](Wall(5.0, 3.0, bearing=0.4), Still(), seed=seed + 1)
        found = fit_wall(sample_epoch(scene, deformed=False, spacing=0.015, noise=1e-3, seed=seed).points)
        leans.append(1e3 * found.lean)
        sds.append(1e3 * found.lean_sd)
    lines.append(("drawn walls", len(leans), f"{np.mean(leans):+.4f}", f"{np.abs(leans).max():.4f}",
                  f"{np.mean(sds):.4f}", ""))  # fmt: skip
    print("\nlean of an upright wall in one scan [mrad]; demand: within 0.02 mrad on the sample wall")
    MACHINE["table"](("wall", "n", "mean", "largest", "mean sd", "normal off"), lines)


def movement_table():
    """Change of lean and mean movement of the sample wall through its files."""
    name = "wall_2031-09-13"
    sample, first = sample_truth(name), first_epoch(name)
    files = [SAMPLES / f"{each}.laz" for each in (first.name, name)]
    result = scanstrain.compare(*files, gauge_length=0.6, structure="wall")
    whole, field = result.wall.whole, result.field
    exact = truth(sample.scene, field.position + result.reference.origin - np.asarray(sample.scene.origin))
    on = exact["on_structure"] & (field.status == 0)
    q = exact["material"][on]
    columns = np.column_stack([np.ones(len(q)), q - q.mean(axis=0)])
    plane = np.linalg.lstsq(columns, exact["disp_n"][on], rcond=None)[0]
    lines = [
        (quantity, unit, f"{factor * true:+.4f}", f"{factor * whole.values[quantity]:+.4f}",
         f"{factor * whole.errors[quantity]:.4f}")
        for quantity, true, factor, unit in (
            ("displacement", plane[0], 1e3, "mm"), ("lean_change", plane[2], 1e3, "mrad")
        )
    ]  # fmt: skip
    print("\nmovement of the sample wall through its files, against least squares through the truth at its gauges")
    MACHINE["table"](("quantity", "unit", "true", "found", "sd"), lines)


def main():
    """Run everything and print it."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=3, help="draws of every scene")
    parser.add_argument("--files", action="store_true", help="compare the sample walls as well")
    given = parser.parse_args()
    print(MACHINE["machine"]())
    section_table(given.seeds)
    axis_table(given.seeds)
    lean_table(given.seeds)
    if given.files:
        movement_table()


if __name__ == "__main__":
    main()
