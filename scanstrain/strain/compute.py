# SPDX-License-Identifier: MIT
"""The strain stage: local affine maps in, strain, rotation, bending and their errors out."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.attributes import ATTRIBUTES, BY_NAME
from scanstrain.errors import OptionError, explain
from scanstrain.linalg import components_2d, sandwich, tensor_2d
from scanstrain.neighbourhood.result import AffineField, Observed
from scanstrain.registration.result import Registration
from scanstrain.registry import unknown_name
from scanstrain.strain.axes import STRUCTURES, structure_axes
from scanstrain.strain.bending import FORMS, bending_map, bending_strain
from scanstrain.strain.blur import bias_sizes, widened
from scanstrain.strain.clusters import find_clusters
from scanstrain.strain.details import details
from scanstrain.strain.errors import certainties
from scanstrain.strain.gauges import Gauges, fitted_gauges
from scanstrain.strain.kinematics import Kinematics, choose_measure, kinematics
from scanstrain.strain.measures import MEASURES
from scanstrain.strain.result import StrainField
from scanstrain.strain.rigidity import effective_freedom, rigid_p
from scanstrain.strain.rotation import rotation_in_space
from scanstrain.strain.significance import (
    NORMAL_80,
    NORMAL_95,
    VECTOR_80,
    VECTOR_95,
    benjamini_hochberg,
    wald,
)
from scanstrain.strain.surface import principal, tensor_in_space
from scanstrain.strain.uncertainty import magnitude_sd, principal_sd, worst_direction_sd

FloatArray = NDArray[np.float64]
Values = dict[str, FloatArray]

_UN, _H11, _H12, _H22 = 2, 9, 10, 11
_POINTS_CAP = 65535


def compute_strain(
    field: AffineField,
    *,
    registration: Registration | None = None,
    measure: str = "auto",
    structure: str = "free",
    thickness: float | None = None,
    bending_form: str = "thin",
    axis: ArrayLike | None = None,
    false_discovery_rate: float = 0.05,
    known: Mapping[str, NDArray[np.generic]] | None = None,
) -> StrainField:
    """Turn local affine maps into strain, rotation and change of curvature with standard errors.

    Parameters
    ----------
    field : AffineField
        From the neighbourhood stage.
    registration : Registration, optional
        Its covariance is added to displacement, tilt and spin; never to strain and curvature, which do not
        depend on the datum. Without it the registration counts as exact.
    measure : {"auto", "small", "green_lagrange", "almansi", "hencky", "biot"}
        Strain measure; all are formed after the local rotation is removed. "auto" takes small strain unless a
        significant strain passes 1 % or a significant rotation 0.01 rad, then Hencky strain.
    structure : {"tunnel", "wall", "free"}
        Meaning of the axes u and v: hoop and axial, or horizontal and upward.
    thickness : float, optional
        Thickness of the wall or lining [m]; gives `bend_1` and `bend_2`.
    bending_form : {"thin", "thick"}
        Bending of a thin shell, or of a thick ring whose inside has a shorter arc than its middle.
    axis : array_like of shape (3,) or (g, 3), optional
        Direction of a tunnel's axis, one for all or one a gauge; found from the normals where not given.
    false_discovery_rate : float
        Accepted share of false ones among the discoveries.
    known : mapping of str to ndarray of shape (g,), optional
        Attributes that come from elsewhere: `stable`, `chainage`, `clock`.

    Returns
    -------
    StrainField

    Raises
    ------
    OptionError
        An option is unknown, out of range or contradicts another.
    """
    _check(measure, structure, thickness, false_discovery_rate)
    if bending_form not in FORMS:
        raise OptionError(unknown_name("form of bending", bending_form, list(FORMS)))
    if axis is not None:
        _check_axis(np.asarray(axis, dtype=np.float64), structure, len(field))
    gauges = fitted_gauges(field, registration)
    along = None if axis is None else np.asarray(axis, dtype=np.float64)
    if along is not None and along.ndim == 2:
        along = along[gauges.fine]
    axes, notes = structure_axes(gauges.frame, structure=structure, axis=along)
    reason = "Set by the caller."
    if measure == "auto":
        measure, reason = choose_measure(gauges, rate=false_discovery_rate)
    tested = kinematics(gauges, measure)
    gauges, bare = widened(gauges), gauges
    moved = kinematics(gauges, measure)
    bending = None if thickness is None else bending_map(gauges.shape, thickness, bending_form)
    values = {
        **_displacement(gauges),
        **_strain(gauges, moved, axes),
        **_rotation(gauges, moved),
        **_bending(gauges, moved, bending),
        "significance": wald(bare.parameters, bare.datum_covariance, bare.observable),
    }
    factor = None if field.correlation is None else field.correlation.factor
    rigid = rigid_p(bare, tested, effective_freedom(field.points[gauges.fine], factor))
    clusters = find_clusters(
        gauges.position, values["significance"],
        spacing=field.gauge_spacing, gauge_length=field.gauge_length, rate=false_discovery_rate,
    )  # fmt: skip
    cluster_p, cluster_found = clusters.at_gauges()
    return StrainField(
        position=field.position,
        normal=np.asarray(field.frame[:, :, 2]),
        axes=np.asarray(gauges.scatter(axes, np.nan), dtype=np.float64),
        values=_table(field, gauges, values, gauges.observed_bits(axes), false_discovery_rate, known or {}),
        status=np.asarray(field.status, dtype=np.uint8),
        measure=measure,
        measure_reason=reason,
        detection_limit=_over_the_field(gauges, _limits(gauges, moved, NORMAL_95, VECTOR_95)),
        gauge_length=field.gauge_length,
        gauge_spacing=field.gauge_spacing,
        bowing=np.asarray(gauges.scatter(_bowing(gauges, axes), 0.0), dtype=np.float64),
        warnings=notes + _what_is_missing(gauges),
        certainty=certainties(gauges, moved, axes, bending, values),
        detectable_80=_over_the_field(gauges, _limits(gauges, moved, NORMAL_80, VECTOR_80)),
        bias=_over_the_field(gauges, bias_sizes(gauges)),
        rigid_p=np.asarray(gauges.scatter(rigid, np.nan), dtype=np.float64),
        cluster_p=np.asarray(gauges.scatter(cluster_p, np.nan), dtype=np.float64),
        cluster_found=np.asarray(gauges.scatter(cluster_found, 0.0), dtype=np.bool_),
        gauge_lengths=field.gauge_lengths,
        details=details(gauges, moved, axes, bending),
    )


def _check(measure: str, structure: str, thickness: float | None, false_discovery_rate: float) -> None:
    if measure != "auto" and measure not in MEASURES:
        raise OptionError(unknown_name("measure", measure, ["auto", *MEASURES]))
    if structure not in STRUCTURES:
        raise OptionError(unknown_name("structure", structure, list(STRUCTURES)))
    if thickness is not None and not (np.isfinite(thickness) and thickness > 0):
        raise OptionError(
            explain("thickness", "a length in metres above 0", f"{thickness}", "give for example 0.25, or leave it out")
        )
    if not 0 < false_discovery_rate < 1:
        raise OptionError(
            explain(
                "false_discovery_rate", "a share between 0 and 1", f"{false_discovery_rate}", "give for example 0.05"
            )
        )


def _check_axis(axis: FloatArray, structure: str, gauges: int) -> None:
    if structure != "tunnel":
        raise OptionError(
            explain(
                "axis", 'structure "tunnel"', f'structure "{structure}"', "leave the axis out or change the structure"
            )
        )
    if axis.shape not in ((3,), (gauges, 3)) or not np.isfinite(axis).all() or not axis.any(axis=-1).all():
        raise OptionError(
            explain(
                "axis", "three numbers that are not all zero, or so for each gauge", f"{axis.tolist()}"[:80],
                "give for example [0, 1, 0]",
            )
        )  # fmt: skip


def _only(where: NDArray[np.bool_], **values: FloatArray) -> Values:
    """Blank what is not observable."""
    return {name: np.where(where, value, np.nan) for name, value in values.items()}


def _displacement(gauges: Gauges) -> Values:
    vector = np.einsum("gij,gj->gi", gauges.frame, gauges.displacement)
    variance = gauges.datum_covariance[:, _UN, _UN]
    return _only(gauges.has_displacement, disp_x=vector[:, 0], disp_y=vector[:, 1], disp_z=vector[:, 2]) | _only(
        gauges.has(Observed.NORMAL), disp_n=gauges.displacement[:, _UN], disp_n_sd=np.sqrt(variance)
    )


def _strain(gauges: Gauges, moved: Kinematics, axes: FloatArray) -> Values:
    E = tensor_2d(moved.strain)
    tangents = gauges.frame[:, :, :2]
    space = tensor_in_space(E, tangents)
    own = components_2d(sandwich(np.einsum("gia,gib->gab", axes, tangents), E))
    larger, smaller = principal(E)
    larger_sd, smaller_sd = principal_sd(moved.strain, moved.strain_covariance)
    return _only(
        gauges.has(Observed.STRAIN),
        strain_xx=space[:, 0, 0],
        strain_yy=space[:, 1, 1],
        strain_zz=space[:, 2, 2],
        strain_xy=space[:, 0, 1],
        strain_xz=space[:, 0, 2],
        strain_yz=space[:, 1, 2],
        strain_1=larger,
        strain_2=smaller,
        strain_1_sd=larger_sd,
        strain_2_sd=smaller_sd,
        shear_max=larger - smaller,
        dilation=moved.mapped.area - 1.0,
        strain_u=own[:, 0],
        strain_v=own[:, 1],
        shear_uv=own[:, 2],
    )


def _rotation(gauges: Gauges, moved: Kinematics) -> Values:
    w = rotation_in_space(moved.mapped, gauges.frame)
    tilted, spun = gauges.has(Observed.TILT), gauges.has(Observed.SPIN)
    return {
        **_only(tilted & spun, rot_x=w[:, 0], rot_y=w[:, 1], rot_z=w[:, 2]),
        **_only(
            tilted,
            tilt=np.hypot(moved.tilt[:, 0], moved.tilt[:, 1]),
            tilt_sd=magnitude_sd(moved.tilt, moved.tilt_covariance),
        ),
        **_only(spun, spin=moved.spin, spin_sd=np.sqrt(moved.spin_variance)),
    }


def _bending(gauges: Gauges, moved: Kinematics, bending: FloatArray | None) -> Values:
    larger, smaller = principal(tensor_2d(moved.curvature))
    errors = principal_sd(moved.curvature, moved.curvature_covariance)
    seen = gauges.has(Observed.CURVATURE)
    values = _only(seen, curv_1=larger, curv_2=smaller, curv_sd=np.maximum(*errors))
    if bending is None:
        return values | _only(np.zeros_like(seen), bend_1=larger, bend_2=smaller)
    longer, shorter = principal(tensor_2d(bending_strain(moved.curvature, bending)))
    return values | _only(seen, bend_1=longer, bend_2=shorter)


def _bowing(gauges: Gauges, axes: FloatArray) -> FloatArray:
    """Second derivatives of the normal displacement along the structure's axes: (uu, vv, uv)."""
    turn = np.einsum("gia,gib->gab", axes, gauges.frame[:, :, :2])
    return components_2d(sandwich(turn, tensor_2d(gauges.parameters[:, [_H11, _H22, _H12]])))


def _limits(gauges: Gauges, moved: Kinematics, normal: float, vector: float) -> Values:
    """Smallest values that one test at a time can show, by the point of its distribution in standard errors.

    `normal` belongs to one component and `vector` to the length of two. Strain and curvature: along the least well
    determined direction. Tilt is a length: at 95 %, 2.45 standard errors of the worse component instead of 1.96.
    """
    roots = principal(moved.tilt_covariance)[0]
    return {
        **_only(gauges.has(Observed.NORMAL), disp_n=normal * np.sqrt(gauges.datum_covariance[:, _UN, _UN])),
        **_only(gauges.has(Observed.TILT), tilt=vector * np.sqrt(roots)),
        **_only(gauges.has(Observed.SPIN), spin=normal * np.sqrt(moved.spin_variance)),
        **_only(gauges.has(Observed.STRAIN), strain=normal * worst_direction_sd(moved.strain_covariance)),
        **_only(gauges.has(Observed.CURVATURE), curvature=normal * worst_direction_sd(moved.curvature_covariance)),
    }


def _over_the_field(gauges: Gauges, values: Values) -> Values:
    """Put values of the fitted gauges among all, NaN elsewhere."""
    return {name: np.asarray(gauges.scatter(each, np.nan), dtype=np.float64) for name, each in values.items()}


def _table(
    field: AffineField,
    gauges: Gauges,
    values: Values,
    bits: NDArray[np.uint8],
    rate: float,
    known: Mapping[str, NDArray[np.generic]],
) -> Mapping[str, NDArray[np.generic]]:
    """Every attribute over all gauges: NaN, or the reason code, where there is no fit."""
    codes: dict[str, NDArray[np.generic]] = {
        "discovery": gauges.scatter(benjamini_hochberg(values["significance"], rate).astype(np.uint8), 0),
        "observed": gauges.scatter(bits, 0),
        "status": np.asarray(field.status, dtype=np.uint8),
        "stable": np.zeros(len(field), dtype=np.uint8),
        "gauge_points": np.clip(field.points, 0, _POINTS_CAP).astype(np.uint16),
    }
    codes |= {"chainage": np.full(len(field), np.nan), "clock": np.full(len(field), np.nan)}
    codes |= {name: column.astype(BY_NAME[name].numpy_dtype) for name, column in known.items()}
    return {a.name: codes[a.name] if a.name in codes else gauges.scatter(values[a.name], np.nan) for a in ATTRIBUTES}


def _what_is_missing(gauges: Gauges) -> tuple[str, ...]:
    if len(gauges) and not gauges.has(Observed.STRAIN).any():
        return (
            "In-plane strain and spin are not observable at any gauge: the surface shows no relief or texture that "
            "fixes tangential motion. Normal displacement, tilt and change of curvature are not affected.",
        )
    return ()
