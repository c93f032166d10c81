"""The T1 volume: intensity with the transform that places it, checked before any computing."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import linear_sum_assignment

from locator.errors import VolumeError
from locator.geometry import voxel_sizes_mm
from locator.results import Finding, Frozen

MAX_VOXEL_MM = 3.0
"""Coarser voxels cannot show a capsule; common practice, no source."""

TEMPLATE_CODES = {3: "Talairach", 4: "MNI 152", 5: "another template"}
"""NIfTI-1 xform codes that are not scanner space (nifti1.h)."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Volume(Frozen):
    """A checked 3-D volume.

    Attributes
    ----------
    intensity : (I, J, K) ndarray of float32
        Arbitrary units, finite.
    scanner_from_voxel : (4, 4) ndarray
        Affine, voxel indices to scanner RAS+, mm.
    space : str
        ``"scanner"``, or what the header says instead (such as ``"MNI 152"``).
    orientation_basis : str
        What left and right of this volume rest on, in words.
    findings : tuple of Finding
        What the checks found.
    read_axis : int or None
        Array axis of the frequency encoding, where a sidecar tells.
    pixel_bandwidth_hz, field_tesla : float or None
        From the sidecar.
    """

    intensity: NDArray[np.float32]
    scanner_from_voxel: NDArray[np.float64]
    space: str = "scanner"
    orientation_basis: str = ""
    findings: tuple[Finding, ...] = ()
    read_axis: int | None = None
    pixel_bandwidth_hz: float | None = None
    field_tesla: float | None = None

    @property
    def voxel_mm(self) -> NDArray[np.float64]:
        """Voxel sizes along the array axes, mm, shape (3,)."""
        return voxel_sizes_mm(self.scanner_from_voxel)


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Placement(Frozen):
    """Which of a header's transforms is used, and why."""

    scanner_from_voxel: NDArray[np.float64]
    space: str
    orientation_basis: str
    findings: tuple[Finding, ...]


def _axes(affine: NDArray[np.float64]) -> NDArray[np.int64]:
    """World axis and sign that each array axis mostly follows, (3, 2)."""
    directions = affine[:3, :3] / voxel_sizes_mm(affine)
    rows, columns = linear_sum_assignment(-(np.abs(directions) ** 2))
    world = rows[np.argsort(columns)]
    return np.stack([world, np.sign(directions[world, range(3)]).astype(int)], axis=1)


def choose_placement(
    sform: ArrayLike, sform_code: int, qform: ArrayLike, qform_code: int, *, where: str = "volume"
) -> Placement:
    """Decide which transform of a NIfTI header places the volume, and on what sides rest.

    Parameters
    ----------
    sform, qform : (4, 4) array_like
        The two transforms of the header, mm; one with code 0 is not looked at.
    sform_code, qform_code : int
        Their NIfTI-1 codes.
    where : str
        Name of the input, for the messages.

    Returns
    -------
    Placement
        sform when its code is 1 or 2, else the qform, else a template sform (reported).

    Raises
    ------
    VolumeError
        If both codes are 0, the transform is singular or not finite, or the two transforms
        are of opposite handedness or have their axes swapped.
    """
    forms = {}
    for name, code, matrix in (("sform", sform_code, sform), ("qform", qform_code, qform)):
        if code <= 0:
            continue
        affine = np.array(matrix, dtype=np.float64)
        if not np.isfinite(affine).all() or abs(np.linalg.det(affine[:3, :3])) < 1e-6:
            msg = (
                f"The {name} of {where} is singular or not finite, so nothing says where the voxels"
                " are. Convert the scan again from the scanner's own files."
            )
            raise VolumeError(msg)
        forms[name] = affine
    if not forms:
        msg = (
            f"{where} says nothing about its orientation (sform and qform codes are both 0), so left"
            " and right cannot be told. Convert the scan again from the scanner's own files."
        )
        raise VolumeError(msg)
    findings = []
    if len(forms) == 2:
        first, second = forms["sform"], forms["qform"]
        if np.linalg.det(first[:3, :3]) * np.linalg.det(second[:3, :3]) < 0:
            msg = (
                f"sform and qform of {where} are of opposite handedness: one of them shows left as"
                " right. Convert the scan again from the scanner's own files; do not guess."
            )
            raise VolumeError(msg)
        if (_axes(first) != _axes(second)).any():
            msg = (
                f"sform and qform of {where} disagree on which axis is which (swapped or flipped"
                " axes). Convert the scan again from the scanner's own files."
            )
            raise VolumeError(msg)
        shift = float(np.linalg.norm(first[:3, 3] - second[:3, 3]))
        cosines = np.diag(
            (first[:3, :3] / voxel_sizes_mm(first)).T @ (second[:3, :3] / voxel_sizes_mm(second))
        )
        turn = float(np.degrees(np.arccos(np.clip(cosines.min(), -1, 1))))
        if shift > 0.1 or turn > 0.1:
            findings.append(
                Finding(
                    level="note",
                    stage="volume",
                    problem=(
                        f"sform and qform of {where} differ by {shift:.1f} mm and {turn:.1f} degrees"
                        " (same axes, same sides)."
                    ),
                    suggestion="Viewers that prefer the other one will show a shift.",
                )
            )
    if "sform" in forms and sform_code in (1, 2):
        chosen, code = "sform", sform_code
    elif "qform" in forms:
        chosen, code = "qform", qform_code
    else:
        chosen, code = "sform", sform_code
    space = TEMPLATE_CODES.get(code, "scanner")
    if space != "scanner" or ("sform" in forms and sform_code in TEMPLATE_CODES):
        told = TEMPLATE_CODES.get(sform_code, space)
        findings.append(
            Finding(
                level="note",
                stage="volume",
                problem=f"The header of {where} carries a template transform ({told}), which is not"
                f" scanner space; positions are in the space of its {chosen}.",
                suggestion="Use the scan as the scanner delivered it where you can.",
            )
        )
    basis = f"the {chosen} of the header (code {code})" + (
        ", with which the other transform agrees on sides" if len(forms) == 2 else ""
    )
    return Placement(
        scanner_from_voxel=forms[chosen],
        space=space,
        orientation_basis=basis,
        findings=tuple(findings),
    )


def check_volume(
    intensity: ArrayLike,
    scanner_from_voxel: ArrayLike,
    *,
    where: str = "volume",
    placement: Placement | None = None,
    read_axis: int | None = None,
    pixel_bandwidth_hz: float | None = None,
    field_tesla: float | None = None,
) -> Volume:
    """Check a volume and bind it to its transform.

    Parameters
    ----------
    intensity : (I, J, K) array_like of float
        T1-weighted volume; a trailing axis of length 1 is dropped.
    scanner_from_voxel : (4, 4) array_like
        Affine, voxel indices to scanner RAS+, mm.
    where : str
        Name of the input, for the messages.
    placement : Placement, optional
        From `choose_placement`; gives space, basis and findings.
    read_axis, pixel_bandwidth_hz, field_tesla : optional
        As in `Volume`.

    Returns
    -------
    Volume
        With ``float32`` intensities.

    Raises
    ------
    VolumeError
        If the volume is not 3-D, not finite, empty, constant, too coarse, too small for a
        head, or its affine is singular.
    """
    values = np.asarray(intensity)
    affine = np.asarray(scanner_from_voxel, dtype=np.float64)
    while values.ndim > 3 and values.shape[-1] == 1:
        values = values[..., 0]
    if values.ndim != 3 or min(values.shape) < 2:
        msg = (
            f"{where} has shape {values.shape}; one three-dimensional T1 volume is needed."
            " Choose the single T1 image, not a series or a slice."
        )
        raise VolumeError(msg)
    if np.iscomplexobj(values) or not np.issubdtype(values.dtype, np.number):
        msg = f"{where} holds values of type {values.dtype}, not plain intensities."
        raise VolumeError(msg + " Choose the magnitude image.")
    if affine.shape != (4, 4) or not np.isfinite(affine).all():
        msg = f"The affine of {where} is not a finite 4 x 4 matrix. Convert the scan again."
        raise VolumeError(msg)
    if abs(np.linalg.det(affine[:3, :3])) < 1e-6:
        msg = f"The affine of {where} is singular: voxels would have no volume."
        raise VolumeError(msg + " Convert the scan again from the scanner's own files.")
    values = values.astype(np.float32)
    bad = int(values.size - np.isfinite(values).sum())
    if bad:
        msg = (
            f"{where} has {bad} voxels that are not finite (NaN or infinite) of {values.size}."
            " Replace them with 0 or export the scan again."
        )
        raise VolumeError(msg)
    low, high = float(values.min()), float(values.max())
    if low == high:
        kind = "all zero" if high == 0 else f"constant ({high:g})"
        msg = f"{where} is {kind}: there is no image in it. Check the file."
        raise VolumeError(msg)
    sizes = voxel_sizes_mm(affine)
    if sizes.max() > MAX_VOXEL_MM:
        msg = (
            f"{where} has voxels of {' x '.join(f'{s:.2f}' for s in sizes)} mm; over {MAX_VOXEL_MM:g} mm"
            " neither capsules nor skull can be seen. Use the T1 at 0.6 to 2 mm."
        )
        raise VolumeError(msg)
    extent = sizes * values.shape
    if extent.min() < 80:
        msg = (
            f"{where} covers {' x '.join(f'{e:.0f}' for e in extent)} mm, less than a head."
            " Use a whole-head T1."
        )
        raise VolumeError(msg)
    return Volume(
        intensity=values,
        scanner_from_voxel=affine,
        space="scanner" if placement is None else placement.space,
        orientation_basis="the affine" if placement is None else placement.orientation_basis,
        findings=() if placement is None else placement.findings,
        read_axis=read_axis,
        pixel_bandwidth_hz=pixel_bandwidth_hz,
        field_tesla=field_tesla,
    )


def canonical(volume: Volume) -> Volume:
    """Turn and flip the array axes so that they run nearest to right, anterior, superior.

    No voxel is interpolated; the affine follows, so scanner positions do not change.

    Parameters
    ----------
    volume : Volume
        Any axis order.

    Returns
    -------
    Volume
        The same image with array axes nearest to R, A, S.
    """
    axes = _axes(np.asarray(volume.scanner_from_voxel))
    order = [int(np.flatnonzero(axes[:, 0] == world)[0]) for world in range(3)]
    values = np.transpose(volume.intensity, order)
    affine = np.array(volume.scanner_from_voxel)
    affine = affine[:, [*order, 3]]
    for axis in range(3):
        if axes[order[axis], 1] < 0:
            values = np.flip(values, axis)
            affine[:3, 3] += affine[:3, axis] * (values.shape[axis] - 1)
            affine[:3, axis] *= -1
    return Volume(
        intensity=np.ascontiguousarray(values),
        scanner_from_voxel=affine,
        space=volume.space,
        orientation_basis=volume.orientation_basis,
        findings=volume.findings,
        read_axis=None if volume.read_axis is None else order.index(volume.read_axis),
        pixel_bandwidth_hz=volume.pixel_bandwidth_hz,
        field_tesla=volume.field_tesla,
    )
