# SPDX-License-Identifier: MIT
"""The ovalising lining from scan files to result files, over several draws: bending, hoop strain, chords, coverage.

    python tests/benchmarks/bench_ring.py [--seeds 4] [--spacing 0.012] [--noise 5e-4] [--gauge 1.0]

The scene of `tests/scenes/test_scene_ring.py` (R = 3 m, u0 = 15 mm, thickness 0.25 m) with smaller spacing and more
noise; expected values are those of the closed form. Coverage counts the truth at the point of the gauge.
"""

from __future__ import annotations

import argparse
import runpy
import tempfile
from pathlib import Path

import numpy as np

HERE = Path(__file__).parent
RING = runpy.run_path(str(HERE.parent / "scenes" / "test_scene_ring.py"))
MACHINE = runpy.run_path(str(HERE / "bench_machine.py"))
CHORDS = {
    "horizontal": "horizontal_diameter_change",
    "vertical": "vertical_diameter_change",
    "springline_to_crown": "chord_3_12_change_inextensible",
    "shoulder_to_shoulder": "chord_10.5_1.5_change_inextensible",
}


def one(textured, seed, spacing, noise, gauge):
    """Compare one draw through its files."""
    plain = RING["MEASURES"]["textured"](RING["LINING"], RING["MOTION"], seed=seed)
    skin = {"relief": plain.relief, "texture": plain.texture} if textured else {}
    scene = RING["Scene"](RING["LINING"], RING["MOTION"], origin=RING["ORIGIN"], **skin)
    draw = {"spacing": spacing, "noise": noise, "intensity_noise": 30.0}
    options = RING["OPTIONS"] | {"gauge_length": gauge, "gauge_spacing": gauge / 4}
    with tempfile.TemporaryDirectory() as folder:
        return RING["FILES"]["compare_drawn"](scene, folder, seed=100 * seed, draw=draw, **options)


def bending_rows(runs):
    """Change of curvature and strain of the intrados at springline and crown."""
    values, at = RING["RING"], RING["at"]
    for place, number, sign in (("springline", 2, -1.0), ("crown", 1, -1.0)):
        for name, expected, factor, unit in (
            (f"curv_{number}", sign * values["ring_curvature_change"][place], 1e3, "1/km"),
            (f"bend_{number}", values["intrados_ue"][place] * 1e-6, 1e6, "ue"),
        ):
            found = [float(np.mean(at(files.gauges, place, name))) for files in runs]
            worst = max(found, key=lambda each: abs(each - expected))
            yield (place, name, unit, f"{factor * expected:+.3f}", f"{factor * np.mean(found):+.3f}",
                   f"{100 * (worst / expected - 1):+.2f} %")  # fmt: skip


def chord_rows(runs):
    """Chords of all sections."""
    for name, column in CHORDS.items():
        expected = RING["OVAL"]["chords"][name]
        found = np.concatenate([1e3 * files.sections[column] for files in runs])
        yield name, len(found), f"{expected:+.3f}", f"{found.mean():+.3f}", f"{np.abs(found - expected).max():.3f}"


def hoop_row(runs):
    """Hoop strain against its truth at the point, (rotation of the wall)^2 / 2."""
    errors, sds, largest = [], [], 0.0
    for files in runs:
        strain = files.result.strain
        hoop, sd = strain.values["strain_u"], strain.certainty["strain_u"].sd
        turn = 1.5 * RING["RING"]["u0"] / RING["RING"]["radius"] * np.sin(2 * RING["angles"](files.gauges))
        seen = np.isfinite(hoop)
        errors.append((hoop - turn**2 / 2)[seen])
        sds.append(sd[seen])
        largest = max(largest, float(np.abs(hoop[seen]).max(initial=0.0)))
    error, sd = np.concatenate(errors), np.concatenate(sds)
    if not len(error):
        return 0, "", "", "", ""
    cover = RING["MEASURES"]["coverage"](error, sd)
    return (len(error), f"{1e6 * error.mean():+.1f}", f"{1e6 * np.sqrt(np.mean(error**2)):.0f}",
            f"{1e6 * largest:.0f}", f"{100 * cover:.1f}")  # fmt: skip


def main():
    """Run both linings and print their tables."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=4, help="draws of each lining")
    parser.add_argument("--spacing", type=float, default=0.012, help="point spacing [m]")
    parser.add_argument("--noise", type=float, default=5e-4, help="noise along the normal [m]")
    parser.add_argument("--gauge", type=float, default=1.0, help="gauge length [m]")
    given = parser.parse_args()
    print(MACHINE["machine"]())
    for name, textured in (("bare", False), ("textured", True)):
        runs = [one(textured, seed, given.spacing, given.noise, given.gauge) for seed in range(1, given.seeds + 1)]
        gauges = sum(len(files.result.strain) for files in runs)
        print(f"\n{name} lining, {given.seeds} draws, {gauges} gauges, gauge length {given.gauge} m")
        MACHINE["table"](("place", "quantity", "unit", "expected", "mean", "worst draw"), list(bending_rows(runs)))
        MACHINE["table"](("chord change", "n", "expected mm", "mean mm", "worst off mm"), list(chord_rows(runs)))
        columns = ("hoop strains given", "mean error ue", "RMS error ue", "largest ue", "cover %")
        MACHINE["table"](columns, [hoop_row(runs)])


if __name__ == "__main__":
    main()
