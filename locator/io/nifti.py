"""NIfTI volumes: the T1 in, maps on its grid out."""

from __future__ import annotations

import json
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
from nibabel.filebasedimages import ImageFileError
from nibabel.spatialimages import HeaderDataError
from numpy.typing import ArrayLike, NDArray

from locator.errors import FileError, VolumeError
from locator.io.files import existing_file, gzip_bytes, write_bytes
from locator.results import Finding, Frozen
from locator.volume import Volume, check_volume, choose_placement

UNIT_MM = {1: 1000.0, 2: 1.0, 3: 0.001}
"""NIfTI-1 codes of the unit of length (nifti1.h): metre, millimetre, micrometre."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Grid(Frozen):
    """Where a T1's voxels are, as its own header says: what a map on that grid must repeat.

    Attributes
    ----------
    shape : tuple of int
    voxel_mm : (3,) ndarray
    sform, qform : (4, 4) ndarray
        Scanner (or template) millimetres from voxel indices; identity where the code is 0.
    sform_code, qform_code : int
        NIfTI-1 codes.
    quaternion : (4,) ndarray
        ``qfac``, b, c, d as they stand in the header.
    """

    shape: tuple[int, int, int]
    voxel_mm: NDArray[np.float64]
    sform: NDArray[np.float64]
    qform: NDArray[np.float64]
    sform_code: int
    qform_code: int
    quaternion: NDArray[np.float64]


def read_volume(path: Path) -> Volume:
    """Read a T1 volume and check it.

    A JSON sidecar of the same name, and the header's frequency direction, are used where
    they are there.

    Parameters
    ----------
    path : Path
        ``.nii`` or ``.nii.gz``.

    Returns
    -------
    Volume

    Raises
    ------
    FileError
        If the file is absent, truncated, or no NIfTI image.
    VolumeError
        If the image cannot be used; see `locator.volume.check_volume`.
    """
    image = _open(path)
    grid = _grid(image, path)
    where = str(path)
    placement = choose_placement(
        grid.sform, grid.sform_code, grid.qform, grid.qform_code, where=where
    )
    _refuse_shape(image.shape, where)
    read_axis, sidecar, findings = _sidecar(image, path)
    volume = check_volume(
        _values(image, path),
        placement.scanner_from_voxel,
        where=where,
        placement=placement,
        read_axis=read_axis,
        pixel_bandwidth_hz=_positive(sidecar.get("PixelBandwidth")),
        field_tesla=_positive(sidecar.get("MagneticFieldStrength")),
    )
    return replace(volume, findings=(*volume.findings, *findings)) if findings else volume


def read_grid(path: Path) -> Grid:
    """Read where the voxels of a NIfTI image are, without its voxels.

    Raises
    ------
    FileError
        If the file is absent or no NIfTI image.
    """
    return _grid(_open(path), path)


def write_map(
    path: Path, values: ArrayLike, grid: Grid, *, description: str, intent: str = "none"
) -> None:
    """Write one value per voxel on the T1's own grid.

    Parameters
    ----------
    path : Path
        Ending in ``.nii.gz``.
    values : (I, J, K) array_like
        Whole numbers are written as they are, all else as float32; finite everywhere.
    grid : Grid
        Of the T1; both of its transforms and their codes are repeated.
    description : str
        At most 79 letters, for the header.
    intent : {"none", "label", "p value", "estimate", "z score"}
        What the numbers are, in NIfTI's terms.

    Raises
    ------
    ValueError
        If shape, values or description do not fit.
    FileError
        If the file cannot be written.
    """
    array = np.asarray(values)
    array = array if np.issubdtype(array.dtype, np.integer) else array.astype(np.float32)
    if array.dtype == np.int64:
        array = array.astype(np.int32)
    if array.shape != grid.shape:
        msg = f"a map of shape {array.shape} does not fit the T1's grid {grid.shape}"
        raise ValueError(msg)
    if not np.isfinite(array).all():
        msg = f"the map for {path.name} holds values that are not finite"
        raise ValueError(msg)
    if len(description.encode()) > 79:
        msg = f"the description of {path.name} is longer than a NIfTI header holds"
        raise ValueError(msg)
    header = nib.Nifti1Header()
    header.set_data_dtype(array.dtype)
    header.set_data_shape(array.shape)
    header.set_xyzt_units("mm", "sec")
    pixdim = header["pixdim"]
    pixdim[0] = grid.quaternion[0]
    pixdim[1:4] = grid.voxel_mm
    header["pixdim"] = pixdim
    header["qform_code"] = grid.qform_code
    for letter, value in zip("bcd", grid.quaternion[1:], strict=True):
        header[f"quatern_{letter}"] = value
    for letter, value in zip("xyz", grid.qform[:3, 3], strict=True):
        header[f"qoffset_{letter}"] = value
    header["sform_code"] = grid.sform_code
    for letter, row in zip("xyz", grid.sform[:3], strict=True):
        header[f"srow_{letter}"] = row
    header["descrip"] = description
    header.set_intent(
        intent,
        name={"estimate": "estimate"}.get(intent, ""),
        allow_unknown=False,
    ) if intent != "none" else None
    image = nib.Nifti1Image(array, None, header)
    write_bytes(path, gzip_bytes(image.to_bytes()))


def read_map(path: Path) -> tuple[NDArray[Any], NDArray[np.float64]]:
    """Read a map back: its values and its affine, scanner mm from voxel indices.

    Raises
    ------
    FileError
        If the file is absent, truncated, or no NIfTI image.
    """
    image = _open(path)
    return _values(image, path), np.asarray(image.affine, dtype=np.float64)


def _open(path: Path) -> nib.Nifti1Pair:
    existing_file(path, "T1")
    try:
        image = nib.load(path)
    except (ImageFileError, HeaderDataError, OSError, EOFError, ValueError) as error:
        reason = " ".join(str(error).split())[:200]
        msg = (
            f"{path} cannot be opened as a NIfTI image ({reason})."
            " Give a whole .nii or .nii.gz file; copy or convert it again if it should be one."
        )
        raise FileError(msg) from error
    if not isinstance(image, nib.Nifti1Pair):
        msg = (
            f"{path} is an image of kind {type(image).__name__}, which does not say left from right"
            " in the way this tool relies on. Convert it to NIfTI (.nii.gz)."
        )
        raise FileError(msg)
    return image


def _values(image: nib.Nifti1Pair, path: Path) -> NDArray[Any]:
    try:
        values = np.asanyarray(image.dataobj)
    except (OSError, EOFError, ValueError, MemoryError) as error:
        reason = " ".join(str(error).split())[:200]
        msg = f"{path} is truncated or damaged ({reason}). Copy or convert the file again."
        raise FileError(msg) from error
    except Exception as error:  # zlib.error has no common base with the others
        if type(error).__name__ != "error":
            raise
        msg = f"{path} is damaged inside its compression ({error}). Copy the file again."
        raise FileError(msg) from error
    return values


def _refuse_shape(shape: tuple[int, ...], where: str) -> None:
    """Refuse series and slices before their voxels are read."""
    if len(shape) < 3 or any(n != 1 for n in shape[3:]):
        msg = (
            f"{where} has shape {tuple(int(n) for n in shape)}; one three-dimensional T1 volume is"
            " needed. Choose the single T1 image, not a series or a slice."
        )
        raise VolumeError(msg)


def _grid(image: nib.Nifti1Pair, path: Path) -> Grid:
    header = image.header
    factor = UNIT_MM.get(int(header["xyzt_units"]) & 7, 1.0)
    scaled = np.diag([factor, factor, factor, 1.0])
    sform_code, qform_code = int(header["sform_code"]), int(header["qform_code"])
    qform = np.eye(4)
    if qform_code > 0:
        try:
            qform = np.asarray(header.get_qform(), dtype=np.float64)
        except (HeaderDataError, ValueError) as error:
            msg = (
                f"The qform of {path} cannot be used ({error}), so nothing says where the voxels"
                " are. Convert the scan again from the scanner's own files."
            )
            raise VolumeError(msg) from error
    sform = np.asarray(header.get_sform(), dtype=np.float64) if sform_code > 0 else np.eye(4)
    pixdim = np.asarray(header["pixdim"], dtype=np.float64)
    shape = tuple(int(n) for n in image.shape[:3])
    return Grid(
        shape=shape,  # type: ignore[arg-type]
        voxel_mm=pixdim[1:4] * factor,
        sform=scaled @ sform,
        qform=scaled @ qform,
        sform_code=sform_code,
        qform_code=qform_code,
        quaternion=np.array(
            [-1.0 if pixdim[0] < 0 else 1.0, *(float(header[f"quatern_{c}"]) for c in "bcd")]
        ),
    )


def sidecar_path(path: Path) -> Path:
    """Path of the JSON sidecar that would belong to an image."""
    return path.with_name(path.name.removesuffix(".gz").removesuffix(".nii") + ".json")


def _sidecar(
    image: nib.Nifti1Pair, path: Path
) -> tuple[int | None, dict[str, Any], tuple[Finding, ...]]:
    """Frequency-encoding axis, sidecar and what is wrong with it."""
    frequency, _, _ = image.header.get_dim_info()
    beside = sidecar_path(path)
    findings: tuple[Finding, ...] = ()
    sidecar: dict[str, Any] = {}
    if beside.is_file():
        try:
            read = json.loads(beside.read_text(encoding="utf-8-sig"))
            if not isinstance(read, dict):
                raise ValueError("no JSON object")
            sidecar = read
        except (OSError, ValueError) as error:
            findings = (
                Finding(
                    level="note",
                    stage="volume",
                    problem=f"The sidecar {beside.name} cannot be read ({error}) and was not used.",
                    suggestion="Mend it if field strength and bandwidth should be known.",
                    subject=beside.name,
                ),
            )
    if frequency is None:
        frequency = _frequency_axis(sidecar)
    return frequency, sidecar, findings


def _frequency_axis(sidecar: dict[str, Any]) -> int | None:
    """Frequency axis as a sidecar tells it, or from its phase and slice directions."""
    axes = {"i": 0, "j": 1, "k": 2}

    def axis(*keys: str) -> int | None:
        told = (axes.get(str(sidecar.get(key, "")).rstrip("+-")) for key in keys)
        return next((number for number in told if number is not None), None)

    frequency = axis("FrequencyEncodingAxis", "FrequencyEncodingDirection")
    if frequency is not None:
        return frequency
    phase = axis("PhaseEncodingDirection", "PhaseEncodingAxis")
    across = axis("SliceEncodingDirection")
    if phase is None or across is None or phase == across:
        return None
    return 3 - phase - across


def _positive(value: object) -> float | None:
    """Return a positive finite number, or None."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        return None
    return float(value) if np.isfinite(value) and value > 0 else None
