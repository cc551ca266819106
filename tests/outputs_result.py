# SPDX-License-Identifier: MIT
"""A small result made by hand for the tests of the outputs: a wall of 4 x 3 gauges, half of it without texture.

Load it with `runpy.run_path(path)["make_result"]`; numbers that tests compare with stand in this file.
"""

from dataclasses import replace
from pathlib import Path

import numpy as np

from scanstrain.attributes import ATTRIBUTES
from scanstrain.epoch import Provenance, make_epoch
from scanstrain.neighbourhood.result import AffineField, Status
from scanstrain.registration.result import Registration, WeakDirection
from scanstrain.result import Result
from scanstrain.strain.calibration import GROUPS, KINDS, Calibration
from scanstrain.strain.details import DETAILS
from scanstrain.strain.result import StrainField

CALIBRATION = Calibration({kind: dict.fromkeys(GROUPS, 1.0) for kind in KINDS}, "none", 0, np.zeros(12, bool))
ORIGIN = np.array([482310.0, 5391270.0, 100.0])
IN_PLANE = [name for name in (a.name for a in ATTRIBUTES) if name.startswith(("strain", "shear", "dilation", "spin"))]
# gauges 0..11 along the wall; gauge 11 failed, gauges 6..11 see no texture, gauges 0..2 moved
DISP_N = np.array([6.2e-3, 5.1e-3, -4.0e-3, 2e-4, -1e-4, 0, 1e-4, -2e-4, 0, 1e-4, -1e-4, np.nan])
STRAIN_1 = np.array([300e-6, 200e-6, 100e-6, 20e-6, 10e-6, 0, *[np.nan] * 6])


class Config:
    def model_dump(self, mode):
        return {"mode": mode, "gauge_length": 0.6, "structure": "wall"}


def _values(g):
    values = {a.name: np.full(g, np.nan) for a in ATTRIBUTES}
    fitted = np.arange(g) < 11
    values["disp_n"] = DISP_N.copy()
    values["disp_n_sd"] = np.where(fitted, 1.5e-4, np.nan)
    values["tilt"] = np.where(fitted, np.linspace(1e-4, 1.1e-3, g), np.nan)
    values["tilt_sd"] = np.where(fitted, 1e-4, np.nan)
    values["strain_1"], values["strain_2"] = STRAIN_1.copy(), -STRAIN_1
    values["strain_1_sd"] = values["strain_2_sd"] = np.where(np.isfinite(STRAIN_1), 50e-6, np.nan)
    values["shear_max"] = values["strain_1"] - values["strain_2"]
    values["significance"] = np.where(fitted, np.where(np.arange(g) < 3, 1e-9, 0.5), np.nan)
    values["discovery"] = (np.arange(g) < 3).astype(np.uint8)
    values["observed"] = np.array([127] * 6 + [7] * 5 + [0], np.uint8)
    values["status"] = np.array([0] * 11 + [Status.EDGE], np.uint8)
    values["stable"] = (np.arange(g) > 5).astype(np.uint8)
    values["gauge_points"] = np.full(g, 400, np.uint16)
    return values


def make_result(path="north_wall_0.laz", current="north_wall_1.laz"):
    columns, rows = np.meshgrid(np.arange(20) * 0.1, np.arange(15) * 0.1, indexing="ij")
    xyz = np.column_stack([columns.ravel(), np.zeros(300), rows.ravel()]) + ORIGIN
    reference = make_epoch(
        xyz, origin=ORIGIN, label="epoch 0",
        provenance=Provenance(path=str(path), sha256="ab" * 32, crs="EPSG:25832", date="2031-03-01", file_points=300),
    )  # fmt: skip
    moved = replace(reference, label="epoch 1", provenance=Provenance(path=str(current), sha256="cd" * 32))
    gauge_x, gauge_z = np.meshgrid(np.arange(4) * 0.5 + 0.25, np.arange(3) * 0.5 + 0.25, indexing="ij")
    position = np.column_stack([gauge_x.ravel(), np.zeros(12), gauge_z.ravel()])
    g = len(position)
    values = _values(g)
    nearest = np.argmin(np.linalg.norm(reference.points[:, None] - position[None], axis=2), axis=1)
    points = {a.name: np.asarray(values[a.name])[nearest].astype(a.numpy_dtype) for a in ATTRIBUTES}
    T = np.eye(4)
    T[:2, :2] = [[0.0, -1.0], [1.0, 0.0]]  # a quarter turn about z
    T[:3, 3] = [1.0, 2.0, 3.0]
    covariance = np.diag([1e-10] * 3 + [1e-8] * 3)
    covariance[5, 5] = np.inf
    registration = Registration(
        T_ref_cur=T, origin=ORIGIN, pivot=np.array([0.5, 0.0, 0.5]), covariance=covariance, rms=4e-4,
        stable=np.arange(300) < 186, overlap=0.97, scale_ppm=30.0, scale_ppm_sd=5.0,
        weak_directions=(WeakDirection("slide up the wall", np.array([0, 0, 0, 0, 0, 1.0]), np.inf),),
        converged=True, iterations=7, start="identity", warnings=("Twice said.",),
    )  # fmt: skip
    frame = np.tile(np.array([[1.0, 0, 0], [0, 0, -1], [0, 1, 0]]), (g, 1, 1))
    nan = np.full
    field = AffineField(
        position=position, frame=frame, displacement=nan((g, 3), np.nan), gradient=nan((g, 3, 2), np.nan),
        hessian=nan((g, 3), np.nan), covariance=nan((g, 12, 12), np.nan), shape=np.zeros((g, 3)),
        observable=np.zeros((g, 12), bool), status=values["status"], points=np.full(g, 400),
        residual_normal=np.ones(g), residual_intensity=np.ones(g), gauge_length=0.6, gauge_spacing=0.5,
    )  # fmt: skip
    fitted = np.arange(g) < 11
    axes = frame[:, :, :2].copy()
    axes[11] = np.nan
    strain = StrainField(
        position=position, normal=frame[:, :, 2], axes=axes, values=values, status=values["status"],
        measure="small", measure_reason="No significant strain passes 1 %.",
        detection_limit={
            "disp_n": np.where(fitted, 2.9e-4, np.nan),
            "tilt": np.where(fitted, 2.4e-4, np.nan),
            "strain": np.where(np.isfinite(STRAIN_1), 98e-6, np.nan),
            "curvature": np.full(g, np.nan),
        },
        gauge_length=0.6, gauge_spacing=0.5, details={name: np.full(g, np.nan) for name in DETAILS},
    )  # fmt: skip
    return Result(
        reference=reference, current=moved, registration=registration, field=field,
        calibration=CALIBRATION, strain=strain, points=points | {"stable": registration.stable.astype(np.uint8)},
        config=Config(), timing={"read": 0.5, "registration": 1.0, "neighbourhood": 1.5}, warnings=("Twice said.",),
    )  # fmt: skip


def fake_page(result, options):
    """Stand in for the report, whose figures take seconds."""
    return f"<!doctype html>{options.colour_by}"


def fake_write(source, target, values, *, colour=None, no_data=None):
    """Stand in for the cloud writer: leaves a file that tells what it was given."""
    lines = [str(source), ",".join(values), "plain" if colour is None else str(len(colour)), str(no_data)]
    Path(target).write_text("\n".join(lines), encoding="utf-8")
    return Path(target)
