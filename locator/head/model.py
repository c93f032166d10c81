"""What the head stage hands on, and what can be set."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from locator.errors import HeadError
from locator.results import Finding, Frozen

FloatArray = NDArray[np.float64]

GREY, WHITE, CSF, BONE, SOFT, OTHER, BRAIN_STEM, CEREBELLUM = 1, 2, 3, 4, 5, 6, 10, 11
"""Labels of the tissue map."""

BRAIN = (GREY, WHITE, BRAIN_STEM, CEREBELLUM)
"""Labels that are brain, without its fluid."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Surface(Frozen):
    """A closed, outward-wound triangle mesh.

    Attributes
    ----------
    vertices_scanner_mm : (V, 3) ndarray
    faces : (F, 3) ndarray of int32
    sd_mm : (V,) ndarray
        How well each vertex is known along its normal, mm.
    """

    vertices_scanner_mm: FloatArray
    faces: NDArray[np.int32]
    sd_mm: FloatArray


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Head(Frozen):
    """The three surfaces of the field model, and the tissues.

    Attributes
    ----------
    scalp, outer_skull, inner_skull : Surface
        Nested, never touching; vertex i of each of ours lies on the same ray (not of those in
        `given`, which have vertices of their own).
    tissues : (I, J, K) ndarray of int32
        On the T1's own grid, BIDS common tissue labels: 0 background, 1 grey matter, 2 white
        matter, 3 CSF, 4 bone, 5 soft tissue, 6 other, 10 brain stem, 11 cerebellum.
    scanner_from_voxel : (4, 4) ndarray
        Affine of the T1 grid.
    center_scanner_mm : (3,) ndarray
        Where the rays start.
    padded_mm : (V,) ndarray
        How far the outer skull and the scalp together were moved out at each vertex to keep the
        least separation; 0 where the image was followed. On the rays of our surfaces; all 0 when
        outer skull and scalp were both given.
    brain_volume_ml : float
        Grey and white matter with cerebellum and brain stem, without CSF.
    findings : tuple of Finding
    given : tuple of str
        Which surfaces the user gave in place of ours, from the inside out.
    """

    scalp: Surface
    outer_skull: Surface
    inner_skull: Surface
    tissues: NDArray[np.int32]
    scanner_from_voxel: FloatArray
    center_scanner_mm: FloatArray
    padded_mm: FloatArray
    brain_volume_ml: float
    findings: tuple[Finding, ...] = ()
    given: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True, slots=True)
class HeadOptions:
    """Settings of the head stage.

    Attributes
    ----------
    subdivisions : int
        Vertices of each surface are ``10 * 4**subdivisions + 2``: 3 gives 642 (default), 4 gives
        2562. Range 2 to 5.
    separation_mm : float
        Least distance between neighbouring surfaces, vertex to face; 2.5 to 5 mm. The default
        follows the thinnest temporal bone that is usual in adults (squama 2-3 mm; value from
        memory) and keeps a boundary-element solver stable.
    csf_mm, csf_sd_mm : float
        Expected gap between the hull of the brain and the inner table, and its spread; 2-4 mm on
        the convexity is usual (common practice, no source).
    skull_mm, skull_sd_mm : float
        Expected thickness of the vault, and its spread: 6.0 +- 1.9 mm at the 10-20 places of one
        head (Strangman et al. 2014, NeuroImage 85:136), 5.4-8.2 mm by region in 3,000 adults
        (Li et al. 2007, Int J Vehicle Safety).
    brain_threshold : float
        The growing brain surface stops where the intensity falls to this share of the middle
        between CSF and grey matter, 0.5 to 1.2; 0.8 to 0.9 was the best of those tried.
    below_vertex_mm : float
        The head model ends this far below its highest point, 150 to 260 mm.
    """

    subdivisions: int = 3
    separation_mm: float = 2.5
    csf_mm: float = 2.5
    csf_sd_mm: float = 1.5
    skull_mm: float = 6.5
    skull_sd_mm: float = 2.0
    brain_threshold: float = 0.88
    below_vertex_mm: float = 200.0

    def __post_init__(self) -> None:
        """Refuse settings outside their range."""
        ranges = {
            "subdivisions": (2, 5),
            "separation_mm": (2.5, 5.0),
            "csf_mm": (0.5, 10.0),
            "csf_sd_mm": (0.1, 10.0),
            "skull_mm": (3.0, 15.0),
            "skull_sd_mm": (0.1, 10.0),
            "brain_threshold": (0.5, 1.2),
            "below_vertex_mm": (150.0, 260.0),
        }
        for name, (low, high) in ranges.items():
            value = getattr(self, name)
            if not low <= value <= high:
                msg = (
                    f"{name} = {value:g} is outside {low:g} to {high:g} (options of stage head)."
                    " Choose a value in that range."
                )
                raise HeadError(msg)
