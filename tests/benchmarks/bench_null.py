# SPDX-License-Identifier: MIT
"""False alarms on pairs where nothing changed: share of p < 0.05, discoveries, pairs with any discovery.

    python tests/benchmarks/bench_null.py [--pairs 5] [--spacing 0.01] [--gauge 0.3]

Walls and linings, with and without texture, white and correlated noise (fit stage alone), and the demonstration scans
with the scanner set up again and a new datum (whole path).
"""

from __future__ import annotations

import argparse
import runpy
from dataclasses import replace
from pathlib import Path

import numpy as np

import scanstrain
from scanstrain.neighbourhood import fit_affine
from scanstrain.strain import compute_strain
from scanstrain.strain.regions import find_regions
from scanstrain.synthetic import Lining, Scene, Still, Wall, first_epoch, sample_epoch, sample_truth, undeformed

HERE = Path(__file__).parent
MEASURES = runpy.run_path(str(HERE.parent / "scenes" / "scene_measures.py"))
MACHINE = runpy.run_path(str(HERE / "bench_machine.py"))
SCENES = {
    "textured wall": MEASURES["textured"](Wall(3.0, 3.0), Still()),
    "bare wall": Scene(Wall(3.0, 3.0)),
    "textured lining": MEASURES["textured"](Lining(2.0, 1.5), Still()),
    "bare lining": Scene(Lining(2.0, 1.5)),
}
NOISES = {"white": {}} | {
    f"20 % over {mm} mm": {"correlated_share": 0.2, "correlation_length": mm / 1000} for mm in (30, 50, 100)
}
SAMPLES = {"wall_2031-09-13": "wall", "adit_2031-09-12": "tunnel"}


def drawn(scene, options, seed, spacing, gauge):
    """p-values and discoveries of the gauges with their whole patch on the object."""
    pair = [
        sample_epoch(scene, deformed=False, spacing=spacing, intensity_noise=30.0, seed=seed + k, **options)
        for k in (0, 1)
    ]
    field = fit_affine(*pair, gauge_length=gauge, gauge_spacing=gauge / 2, required_strain_sd=0.02)
    inside = MEASURES["errors_of"](scene, field).inside
    strain = compute_strain(field)
    values = strain.values
    return values["significance"][inside], values["discovery"][inside], said(field), regions(strain)


def regions(strain):
    """Regions of discoveries, and how many of them lie in a cluster that survives its own control."""
    none = np.zeros((len(strain), 1))
    found, _ = find_regions(
        strain.position, strain.values["discovery"] == 1, none, none + 1, spacing=strain.gauge_spacing
    )
    return len(found), sum(bool(strain.cluster_found[region.gauges].any()) for region in found)


def said(field):
    """What the field says of shared noise in height: share in per cent and length in millimetres."""
    shared = field.correlation.height
    return f"{100 * shared.share:.0f} over {1e3 * shared.length:.0f}"


def scanned(name, structure, seed):
    """The same for a demonstration scan of the object at rest, from other set-ups and with another datum."""
    sample = replace(undeformed(sample_truth(name)), seed=seed)
    reference, current = first_epoch(name).scan().epoch, sample.scan().epoch
    config = scanstrain.CompareConfig(
        neighbourhood={"gauge_length": 0.6, "gauge_spacing": 0.15}, strain={"structure": structure}
    )
    result = scanstrain.compare_epochs(reference, current, config)
    inside = MEASURES["errors_of"](sample.scene, result.field).inside
    values = result.strain.values
    return values["significance"][inside], values["discovery"][inside], said(result.field), regions(result.strain)


def row(name, noise, runs):
    """One line of the table."""
    p = np.concatenate([run[0] for run in runs])
    found = [run[1] for run in runs]
    p = p[np.isfinite(p)]
    return (
        name, noise, len(runs), len(p), f"{100 * np.mean(p < 0.05):.1f}", f"{100 * np.mean(p < 0.01):.2f}",
        int(sum(f.sum() for f in found)), f"{sum(f.any() for f in found)}",
        sum(run[3][0] for run in runs), sum(run[3][1] for run in runs), "; ".join(run[2] for run in runs),
    )  # fmt: skip


def main():
    """Run every kind of pair and print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--pairs", type=int, default=3, help="pairs of every kind")
    parser.add_argument("--spacing", type=float, default=0.01, help="point spacing [m]")
    parser.add_argument("--gauge", type=float, default=0.3, help="gauge length [m]")
    given = parser.parse_args()
    print(MACHINE["machine"]() + "\n")
    rows = []
    for name, scene in SCENES.items():
        for noise, options in NOISES.items():
            runs = [drawn(scene, options, 1000 + 10 * k, given.spacing, given.gauge) for k in range(given.pairs)]
            rows.append(row(name, noise, runs))
    for name, structure in SAMPLES.items():
        rows.append(row(name, "scanner", [scanned(name, structure, 500 + k) for k in range(max(1, given.pairs // 3))]))
    head = (
        "scene",
        "noise",
        "pairs",
        "gauges",
        "p<0.05 %",
        "p<0.01 %",
        "discoveries",
        "pairs with any",
        "regions",
        "confirmed",
        "shared %, mm",
    )
    MACHINE["table"](head, rows)


if __name__ == "__main__":
    main()
