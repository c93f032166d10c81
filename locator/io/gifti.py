"""GIFTI surfaces in scanner millimetres."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
from numpy.typing import NDArray

from locator.errors import FileError
from locator.geometry import apply_affine
from locator.head import Surface
from locator.io.files import existing_file, write_bytes

SCANNER = "NIFTI_XFORM_SCANNER_ANAT"

TEMPLATES = (3, 4, 5)
"""NIfTI codes of spaces that are no person's: Talairach, MNI 152, other template."""


def write_surface(path: Path, surface: Surface, *, name: str, description: str) -> None:
    """Write a closed surface as points and triangles.

    Parameters
    ----------
    path : Path
        Ending in ``.surf.gii``.
    surface : Surface
        Scanner mm, triangles wound outward.
    name : str
        Such as ``"scalp"``.
    description : str
        What it is and which T1 it comes from.

    Raises
    ------
    FileError
        If the file cannot be written.
    """
    both = nib.gifti.GiftiCoordSystem(dataspace=SCANNER, xformspace=SCANNER, xform=np.eye(4))
    meta = {
        "AnatomicalStructurePrimary": "Head",
        "AnatomicalStructureSecondary": name,
        "GeometricType": "Anatomical",
        "TopologicalType": "Closed",
        "Name": name,
        "Description": description,
    }
    points = nib.gifti.GiftiDataArray(
        np.asarray(surface.vertices_scanner_mm, dtype=np.float32),
        intent="NIFTI_INTENT_POINTSET",
        datatype="NIFTI_TYPE_FLOAT32",
        encoding="GIFTI_ENCODING_B64GZ",
        coordsys=both,
        meta=nib.gifti.GiftiMetaData(meta),
    )
    triangles = nib.gifti.GiftiDataArray(
        np.asarray(surface.faces, dtype=np.int32),
        intent="NIFTI_INTENT_TRIANGLE",
        datatype="NIFTI_TYPE_INT32",
        encoding="GIFTI_ENCODING_B64GZ",
    )
    image = nib.gifti.GiftiImage(
        darrays=[points, triangles],
        meta=nib.gifti.GiftiMetaData({"Name": name, "Description": description}),
    )
    write_bytes(path, image.to_bytes())


def read_surface(path: Path) -> Surface:
    """Read a surface of points and triangles, in scanner mm.

    The file says which space its points are in and may hold an affine to another: points in
    scanner space, in an aligned one or in one that is not told are taken as they are; others are
    moved when the affine leads to scanner space. The file does not hold how well each vertex is
    known: ``sd_mm`` comes back as NaN.

    Raises
    ------
    FileError
        If the file is absent, no GIFTI, holds no surface, or one in a template's space.
    """
    existing_file(path, "surface")
    try:
        image = nib.gifti.GiftiImage.from_filename(path)
        points = image.get_arrays_from_intent("NIFTI_INTENT_POINTSET")
        triangles = image.get_arrays_from_intent("NIFTI_INTENT_TRIANGLE")
    except Exception as error:  # the parser raises whatever its XML engine raises
        msg = f"{path} cannot be opened as a GIFTI surface ({error}). Write it again."
        raise FileError(msg) from error
    if len(points) != 1 or len(triangles) != 1:
        msg = (
            f"{path} holds {len(points)} point sets and {len(triangles)} triangle lists;"
            " a surface has one of each."
        )
        raise FileError(msg)
    vertices = _in_scanner(np.asarray(points[0].data, dtype=np.float64), points[0].coordsys, path)
    return Surface(
        vertices_scanner_mm=vertices,
        faces=np.asarray(triangles[0].data, dtype=np.int32),
        sd_mm=np.full(len(vertices), np.nan),
    )


def _in_scanner(vertices: NDArray[np.float64], system: Any, path: Path) -> NDArray[np.float64]:
    """Points of a file in scanner mm, by what it says of their space."""
    if system is None:
        return vertices
    space, other = (_code(value) for value in (system.dataspace, system.xformspace))
    if space == _code(SCANNER) or vertices.ndim != 2 or vertices.shape[1] != 3:
        return vertices
    affine = np.eye(4) if system.xform is None else np.asarray(system.xform, dtype=np.float64)
    if other == _code(SCANNER):
        sound = affine.shape == (4, 4) and np.isfinite(affine).all()
        if not sound or abs(np.linalg.det(affine[:3, :3])) < 1e-6:
            msg = f"{path} holds an affine to scanner space that cannot be used. Write it again."
            raise FileError(msg)
        return apply_affine(affine, vertices)
    if space in TEMPLATES:
        name = nib.nifti1.xform_codes.label[space]
        msg = (
            f"The points of {path} are in {name} space and the file holds no affine to scanner"
            " space. Export the surface in scanner mm of this T1."
        )
        raise FileError(msg)
    return vertices


def _code(space: Any) -> int:
    """Number of a space that a file names; 0 (not told) for one that is not known."""
    codes: Any = nib.nifti1.xform_codes.code
    return int(codes[space]) if space in codes else 0
