"""GIFTI surfaces in scanner millimetres."""

from __future__ import annotations

from pathlib import Path

import nibabel as nib
import numpy as np

from locator.errors import FileError
from locator.head import Surface
from locator.io.files import existing_file, write_bytes

SCANNER = "NIFTI_XFORM_SCANNER_ANAT"


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
    """Read a surface of points and triangles.

    The file does not hold how well each vertex is known: ``sd_mm`` comes back as NaN.

    Raises
    ------
    FileError
        If the file is absent, no GIFTI, or holds no surface.
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
    vertices = np.asarray(points[0].data, dtype=np.float64)
    return Surface(
        vertices_scanner_mm=vertices,
        faces=np.asarray(triangles[0].data, dtype=np.int32),
        sd_mm=np.full(len(vertices), np.nan),
    )
