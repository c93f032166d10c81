"""The lead field for the whole scalp by a symmetric boundary-element method."""

from __future__ import annotations

import logging
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from locator.errors import ForwardError
from locator.forward.model import integrate, source_rows, transfer
from locator.forward.readout import electrode_weights
from locator.forward.surfaces import (
    THIN_GAP_MM,
    check_closed,
    check_nested,
    nearest_on,
    prepare_layers,
)
from locator.head import Surface
from locator.results import Finding, Frozen, Progress

FloatArray = NDArray[np.float64]

logger = logging.getLogger(__name__)

__all__ = ["ForwardOptions", "LeadField", "compute_lead_field", "electrode_rows"]

# 1 nAm in a medium of 1 S/m at 1 mm: 1e-9 / (1e-3)^2 V = 1e-3 V = 1000 microvolt.
_UV_PER_NAM_PER_MM2 = 1000.0
_SOURCES_AT_ONCE = 500
_SUBDIVIDE_UP_TO = 1000
_MOST_VERTICES = 3000


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class LeadField(Frozen):
    """Potentials on the scalp for every source.

    Attributes
    ----------
    scalp_vertices_scanner_mm : (V, 3) ndarray
        Read-out mesh.
    scalp_faces : (F, 3) ndarray of int32
    potentials_uv_per_nam : (V, S, 3) ndarray of float32
        Microvolt for 1 nAm along scanner x, y, z at each source, against the mean of the vertices.
    sources_scanner_mm : (S, 3) ndarray
    conductivity_s_per_m : (3,) ndarray
        Scalp, skull, brain.
    route : str
        `subdivided` or `plain`, as computed.
    findings : tuple of Finding
    """

    scalp_vertices_scanner_mm: FloatArray
    scalp_faces: NDArray[np.int32]
    potentials_uv_per_nam: NDArray[np.float32]
    sources_scanner_mm: FloatArray
    conductivity_s_per_m: FloatArray
    route: str = "subdivided"
    findings: tuple[Finding, ...] = ()


@dataclass(frozen=True, kw_only=True, slots=True)
class ForwardOptions:
    """Settings of the lead field.

    Attributes
    ----------
    conductivity_s_per_m : (3,) tuple of float
        Scalp, skull, brain, S/m; each in (0, 10]. Default 0.33, 0.0132, 0.33: brain-to-skull
        ratio 25 (24.8 +/- 6.6, Lai et al. 2005, Clin Neurophysiol 116:456-465; the values for
        scalp and brain follow Geddes & Baker 1967). Published ratios run from 15 to 80.
    route : {"auto", "subdivided", "plain"}
        `subdivided` integrates over surfaces refined once (four times the triangles) and reads
        the scalp out there; `plain` over the surfaces as they are, which is faster and less
        exact. `auto` subdivides up to 1,000 vertices a surface.
    least_depth_mm : float
        Sources nearer to the inner skull are refused; in [0.5, 20] mm. Default 1.5; the error
        grows towards the surface, and below 2.5 mm it is told as a note.
    """

    conductivity_s_per_m: tuple[float, float, float] = (0.33, 0.0132, 0.33)
    route: Literal["auto", "subdivided", "plain"] = "auto"
    least_depth_mm: float = 1.5

    def __post_init__(self) -> None:
        """Check the ranges."""
        values = tuple(float(value) for value in self.conductivity_s_per_m)
        if len(values) != 3 or not all(0 < value <= 10 for value in values):
            msg = (
                f"conductivity_s_per_m is {self.conductivity_s_per_m}; three values in (0, 10] S/m"
                " are needed: scalp, skull, brain (stage forward)."
            )
            raise ForwardError(msg)
        if self.route not in ("auto", "subdivided", "plain"):
            msg = f"route is {self.route!r}; choose auto, subdivided or plain (stage forward)."
            raise ForwardError(msg)
        if not 0.5 <= self.least_depth_mm <= 20:
            msg = f"least_depth_mm is {self.least_depth_mm}; allowed 0.5 to 20 mm (stage forward)."
            raise ForwardError(msg)


def compute_lead_field(
    scalp: Surface,
    outer_skull: Surface,
    inner_skull: Surface,
    sources_scanner_mm: ArrayLike,
    *,
    options: ForwardOptions | None = None,
    progress: Progress | None = None,
) -> LeadField:
    """Potentials on the whole scalp for unit dipoles at each source.

    Symmetric Galerkin boundary elements: linear potentials and normal currents on all three
    surfaces, exact inner integrals, exact source terms at any depth, and one factorisation for
    the whole head. Refined surfaces are curved by interpolating subdivision and their flat faces
    moved out by the height of the arc they cut off.

    Parameters
    ----------
    scalp, outer_skull, inner_skull : Surface
        Closed, outward, nested, 42 to 3,000 vertices each, scanner mm. About 642 is meant.
    sources_scanner_mm : (S, 3) array_like
        Inside the inner skull.
    options : ForwardOptions, optional
    progress : Progress, optional

    Returns
    -------
    LeadField
        Use :func:`electrode_rows` to read it at electrodes.

    Raises
    ------
    ForwardError
        If a surface is open, inward, in pieces, has too many vertices, or crosses another; if a
        source lies outside the inner skull or nearer to it than allowed.

    Notes
    -----
    Error against the exact series and times: ``tests/benchmarks/forward.py``.

    References
    ----------
    .. [1] Kybic J, Clerc M, Abboud T, Faugeras O, Keriven R, Papadopoulo T (2005). A common
       formalism for the integral formulations of the forward EEG problem. IEEE Trans Med Imaging
       24:12-28.
    """
    chosen = options or ForwardOptions()
    tell = progress or _silent
    tell(0.0, "checking the surfaces")
    meshes = []
    for name, surface in (
        ("inner skull", inner_skull),
        ("outer skull", outer_skull),
        ("scalp", scalp),
    ):
        vertices = np.asarray(surface.vertices_scanner_mm, dtype=np.float64)
        faces = np.asarray(surface.faces, dtype=np.int64)
        check_closed(vertices, faces, name)
        if not 42 <= len(vertices) <= _MOST_VERTICES:
            msg = (
                f"The {name} has {len(vertices)} vertices, 42 to {_MOST_VERTICES} are possible"
                " (stage forward). Resample it; about 642 is meant."
            )
            raise ForwardError(msg)
        meshes.append((vertices, faces))
    gaps = check_nested(meshes)
    most = max(len(vertices) for vertices, _ in meshes)
    route = chosen.route
    if route == "auto":
        route = "subdivided" if most <= _SUBDIVIDE_UP_TO else "plain"
    if route == "subdivided" and most > _SUBDIVIDE_UP_TO:
        msg = (
            f"A surface has {most} vertices; refined it would be too large, at most"
            f" {_SUBDIVIDE_UP_TO} are possible with route subdivided (stage forward). Use auto."
        )
        raise ForwardError(msg)
    places = _check_sources(sources_scanner_mm)
    layers, skin, findings = prepare_layers(meshes, subdivided=route == "subdivided")
    findings += _check_depth(places, layers[0].vertices, layers[0].faces, chosen.least_depth_mm)
    if min(gaps) < THIN_GAP_MM:
        findings.append(
            Finding(
                level="note",
                stage="forward",
                problem=(
                    f"The surfaces come as near as {gaps[0]:.1f} mm (skull) and {gaps[1]:.1f} mm"
                    " (scalp) to each other."
                ),
                suggestion="Look at the surfaces; where bone is that thin, less is certain.",
                subject="surfaces",
                doubt=0.3,
            )
        )
    blocks = integrate(layers, lambda done: tell(0.05 + 0.45 * done, "surface integrals"))
    tell(0.5, "solving")
    scalp_s, skull_s, brain_s = (float(value) for value in chosen.conductivity_s_per_m)
    scalp_from_source = transfer(blocks, (brain_s, skull_s, scalp_s))
    scalp_from_source -= scalp_from_source.mean(axis=0)
    scalp_from_source *= _UV_PER_NAM_PER_MM2
    potentials = np.empty((len(scalp_from_source), 3 * len(places)), dtype=np.float32)
    for first in range(0, len(places), _SOURCES_AT_ONCE):
        tell(0.6 + 0.4 * first / len(places), "sources")
        part = source_rows(layers[0], places[first : first + _SOURCES_AT_ONCE])
        potentials[:, 3 * first : 3 * first + len(part)] = scalp_from_source @ part.T
    tell(1.0, "done")
    logger.info(
        "lead field: %d read-out vertices, %d sources, route %s", len(skin[0]), len(places), route
    )
    return LeadField(
        scalp_vertices_scanner_mm=skin[0],
        scalp_faces=skin[1].astype(np.int32),
        potentials_uv_per_nam=potentials.reshape(len(skin[0]), len(places), 3),
        sources_scanner_mm=places,
        conductivity_s_per_m=np.array([scalp_s, skull_s, brain_s]),
        route=route,
        findings=tuple(findings),
    )


def electrode_rows(lead_field: LeadField, positions_scanner_mm: ArrayLike) -> FloatArray:
    """Lead field at electrodes anywhere on or near the skin, without reference.

    Parameters
    ----------
    lead_field : LeadField
    positions_scanner_mm : (E, 3) array_like
        Contact points; each goes to its nearest place on the scalp.

    Returns
    -------
    (E, S, 3) ndarray
        Microvolt for 1 nAm along scanner x, y, z; defined up to one constant per column, so apply
        a reference before use.

    Raises
    ------
    ForwardError
        If a position is not finite or farther than 30 mm from the skin.
    """
    weights = electrode_weights(
        lead_field.scalp_vertices_scanner_mm, lead_field.scalp_faces, positions_scanner_mm
    )
    potentials = lead_field.potentials_uv_per_nam
    rows: FloatArray = weights @ potentials.reshape(len(potentials), -1)
    return rows.reshape(len(rows), *potentials.shape[1:])


def _silent(_fraction: float, _words: str) -> None:
    """Progress that nobody asked for."""


def _check_sources(sources: ArrayLike) -> FloatArray:
    places = np.ascontiguousarray(sources, dtype=np.float64)
    if places.ndim != 2 or places.shape[1] != 3 or len(places) == 0:
        msg = (
            f"Sources have shape {places.shape}; (S, 3) with at least one is needed"
            " (stage forward). Check the source space."
        )
        raise ForwardError(msg)
    if not np.isfinite(places).all():
        bad = int((~np.isfinite(places).all(axis=1)).sum())
        msg = f"{bad} of {len(places)} source positions are not finite (stage forward)."
        raise ForwardError(msg)
    return places


def _check_depth(
    places: FloatArray, vertices: FloatArray, faces: NDArray[np.int64], least_mm: float
) -> list[Finding]:
    near = nearest_on(places, vertices, faces)
    outside = ~near.inside
    shallow = near.inside & (near.distance_mm < least_mm)
    if outside.any() or shallow.any():
        worst = int(np.where(outside, -near.distance_mm, near.distance_mm).argmin())
        at = ", ".join(f"{value:.0f}" for value in places[worst])
        msg = (
            f"{int(outside.sum())} of {len(places)} sources lie outside the inner skull and"
            f" {int(shallow.sum())} less than {least_mm:g} mm inside it, the first at ({at})"
            " scanner mm (stage forward). Make the source space from the same head, or leave"
            " these sources out."
        )
        raise ForwardError(msg)
    close = int((near.distance_mm < 2.5).sum())
    if not close:
        return []
    return [
        Finding(
            level="note",
            stage="forward",
            problem=f"{close} of {len(places)} sources lie within 2.5 mm of the inner skull.",
            suggestion="Their fields are the least exact of all.",
            subject="sources",
            doubt=0.1,
        )
    ]
