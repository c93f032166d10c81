"""Invented heads with known tissue, surfaces and landmarks."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Mesh = tuple[Array, NDArray[np.int32]]

AIR = 0
SKIN = 1
FAT = 2
BONE = 3
MARROW = 4
CSF = 5
GREY = 6
WHITE = 7
BRAINSTEM = 8
CEREBELLUM = 9
MUSCLE = 10
EYE = 11

TISSUE_NAMES = {
    AIR: "air",
    SKIN: "skin",
    FAT: "fat",
    BONE: "compact bone",
    MARROW: "bone marrow",
    CSF: "cerebrospinal fluid",
    GREY: "grey matter",
    WHITE: "white matter",
    BRAINSTEM: "brain stem and cord",
    CEREBELLUM: "cerebellum",
    MUSCLE: "muscle",
    EYE: "eye",
}


@dataclass(frozen=True, eq=False, kw_only=True)
class Layer:
    """One painted layer: where ``level_mm`` is negative, the tissue replaces what was there.

    Attributes
    ----------
    tissue : int
        One of the tissue codes of this module.
    level_mm : (A, B, C) ndarray of float32
        About the signed distance to the layer's surface, mm, negative inside.
    first_voxel : (3,) tuple of int
        Voxel of the label grid where ``level_mm[0, 0, 0]`` stands.
    step_voxels : int
        Step of ``level_mm`` in voxels of the label grid (1 or 2).
    """

    tissue: int
    level_mm: NDArray[np.float32]
    first_voxel: tuple[int, int, int]
    step_voxels: int


@dataclass(frozen=True, eq=False, kw_only=True)
class SyntheticHead:
    """An invented head: tissue labels, exact surfaces, landmarks.

    Attributes
    ----------
    labels : (I, J, K) ndarray of int8
        Tissue code of each voxel centre (``AIR`` 0, ``SKIN`` 1, ... see this module).
    scanner_from_voxel : (4, 4) ndarray
        Affine of the label grid, voxel indices to scanner RAS+ mm; axis aligned, RAS order.
    surfaces : dict of str to (vertices_mm, faces)
        ``scalp``, ``outer_skull``, ``inner_skull``, ``pial``: closed, faces outward, scanner mm.
    landmarks_mm : dict of str to (3,) ndarray
        ``NAS``, ``LPA``, ``RPA``, ``INI`` on the skin, scanner mm.
    kind : str
        ``shaped`` or ``sphere``.
    radii_mm : dict of str to float
        Sphere only: radius of each surface; empty for shaped heads.
    center_mm : (3,) ndarray
        Centre of the sphere; for shaped heads a point in the middle of the brain.
    seed : int
        What the head was drawn from.
    layers : tuple of Layer
        The painted layers, outside first: tissue at any finer place.
    settings : dict of str to float
        The drawn sizes, mm.
    """

    labels: NDArray[np.int8]
    scanner_from_voxel: Array
    surfaces: dict[str, Mesh]
    landmarks_mm: dict[str, Array]
    kind: str
    radii_mm: dict[str, float]
    center_mm: Array
    seed: int
    layers: tuple[Layer, ...] = ()
    settings: dict[str, float] = field(default_factory=dict)
