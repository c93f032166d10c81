"""From capsules and a layout to labelled electrodes on one head."""

from __future__ import annotations

import logging

import numpy as np
from numpy.typing import NDArray

from locator.errors import LabelError, MarkerError, SideError
from locator.geometry import rigid_fit, tangents
from locator.labels.anatomy import Anatomy, find_anatomy
from locator.labels.cap import CapModel, CapPrior
from locator.labels.doubts import (
    LEAST_SCORE,
    alternatives_of,
    check_sides,
    label_findings,
    mirrored_probability,
    reasons_against,
    stated_confidence,
)
from locator.labels.matching import Evidence
from locator.labels.options import LabelOptions
from locator.labels.result import Electrodes
from locator.labels.search import Search, search_cap
from locator.layout import Layout
from locator.layout.tape import tape_places
from locator.markers import Markers
from locator.results import Progress
from locator.skin import Skin, height_mm, project_to_skin, skin_normals

FloatArray = NDArray[np.float64]

logger = logging.getLogger(__name__)


def label_markers(
    markers: Markers,
    skin: Skin,
    layout: Layout,
    *,
    options: LabelOptions | None = None,
    progress: Progress | None = None,
) -> Electrodes:
    """Find which capsule is which electrode, and how sure that is.

    Parameters
    ----------
    markers : Markers
        Capsule candidates.
    skin : Skin
        Skin of the same head.
    layout : Layout
        The names to find, those without a channel (reference, ground) too.
    options : LabelOptions, optional
    progress : callable, optional

    Returns
    -------
    Electrodes
        One row per name, in the order of the layout.

    Raises
    ------
    MarkerError
        If there are far too few capsules for the names.
    LabelError
        If no arrangement of the cap explains the capsules, or given landmarks contradict the head.
    SideError
        If the side marker is on the other side of the image.

    Notes
    -----
    The layout rules are applied to this head's own skin, from estimated landmarks. A cap is these
    places after a slide, a turn, a stretch and a smooth deformation, each with a Gaussian prior;
    each electrode is then displaced by a jitter of unknown size. The sum over all assignments of
    names to capsules (with absent capsules and stray blobs) is computed by belief propagation;
    fits from many starts, also a row or column away, with a stiff and a soft cap, are weighed by
    their evidence. Each label is judged by where the other electrodes put it, not by a fit that
    its own capsule has pulled at. The confidence of a label is its share of that whole sum,
    stated a little lower (`locator.labels.doubts.stated_confidence`), times the probability that
    left and right are not exchanged where the layout can tell.
    """
    chosen = LabelOptions() if options is None else options
    tell: Progress = progress if progress is not None else (lambda _fraction, _words: None)
    n_names = len(layout.names)
    centers = np.asarray(markers.centers_scanner_mm, dtype=np.float64).reshape(-1, 3)
    usable = np.flatnonzero(markers.score >= LEAST_SCORE)
    likely = int((markers.score >= 0.3).sum())
    need = max(min(4, n_names), int(np.ceil(chosen.least_share * n_names)))
    if likely < need:
        msg = (
            f"Only {likely} of the {len(centers)} candidate blobs look like capsules, but"
            f" {n_names} electrodes are asked for (at least {need} must be seen; stage labels)."
            " Check that the capsules are in this scan and the names are those of the cap, or"
            " give the capsule diameter."
        )
        raise MarkerError(msg)

    tell(0.0, "head shape and landmarks")
    given = chosen.landmarks_scanner_mm
    marks = None if given is None else np.asarray(given, dtype=np.float64)
    if marks is not None:
        _check_landmarks(marks, skin)
    anatomy = find_anatomy(skin, marks)
    prior = CapPrior(turn_deg=chosen.turn_deg, slide_mm=chosen.slide_mm, stretch=chosen.stretch)
    contacts, heights, normals = contact_points(centers, skin)

    tell(0.2, "layout on this head")
    base, fields = nominal_places(layout, anatomy)
    model = CapModel(anatomy.surface, base, fields, prior)
    flat = anatomy.surface.project(contacts)

    tell(0.3, "cap against capsules")
    looks = _looks(markers, heights, None)
    evidence = Evidence(
        points=flat[usable],
        log_ratio=looks[usable],
        stray_per_mm2=6.0 / 60000.0,
        absent=0.06,
    )
    turned = CapModel(anatomy.surface, base, fields, prior, turn=_HALF_TURN)

    def look_again(share: FloatArray) -> FloatArray:
        weight = np.zeros(len(centers))
        weight[usable] = share
        return _looks(markers, heights, weight)[usable]

    search = search_cap(
        model,
        evidence,
        other_models=(("worn back to front", turned, _BACK_TO_FRONT_LOG_ODDS),),
        look_again=look_again,
    )
    looks = np.full(len(centers), -5.0)
    looks[usable] = search.evidence.log_ratio
    tell(0.9, "electrodes")
    return _electrodes(
        markers, skin, layout, chosen, anatomy, search, usable, contacts, heights, normals, looks
    )


_HALF_TURN = np.diag([-1.0, -1.0, 1.0])
# A cap worn back to front: about one in ten thousand (no source; common sense).
_BACK_TO_FRONT_LOG_ODDS = -9.0


def _check_landmarks(marks: FloatArray, skin: Skin) -> None:
    """Refuse landmarks that cannot be those of this head."""
    away = np.abs(height_mm(skin, marks))
    names = ("NAS", "LPA", "RPA")
    far = [f"{name} ({gap:.0f} mm)" for name, gap in zip(names, away, strict=True) if gap > 20.0]
    if far:
        msg = (
            f"Landmarks far from the skin of this scan: {', '.join(far)} (stage labels)."
            " Give NAS, LPA and RPA in scanner mm of this T1."
        )
        raise LabelError(msg)
    if marks[1, 0] > marks[2, 0]:
        msg = (
            f"LPA (x = {marks[1, 0]:.0f} mm) lies to the right of RPA (x = {marks[2, 0]:.0f} mm) in"
            " scanner space (stage labels). Exchange them, or check the sides of the image."
        )
        raise SideError(msg)


def contact_points(
    centers: FloatArray, skin: Skin, *, patch_mm: float = 5.0
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Foot of each capsule on the skin along the normal of the patch of skin under it.

    Returns
    -------
    contacts : (M, 3) ndarray
    heights : (M,) ndarray
        Distance of the centres from the contacts, mm; negative when inside.
    normals : (M, 3) ndarray
    """
    if len(centers) == 0:
        return np.zeros((0, 3)), np.zeros(0), np.zeros((0, 3))
    foot = project_to_skin(skin, centers)
    normal = skin_normals(skin, foot)
    first, second = tangents(normal)
    total = normal.copy()
    for angle in np.arange(8) * (np.pi / 4):
        moved = foot + patch_mm * (np.cos(angle) * first + np.sin(angle) * second)
        total += skin_normals(skin, moved)
    normal = total / np.linalg.norm(total, axis=1, keepdims=True)
    height = height_mm(skin, centers)
    for _ in range(3):
        height = height + height_mm(skin, centers - height[:, None] * normal)
    return centers - height[:, None] * normal, height, normal


def nominal_places(layout: Layout, anatomy: Anatomy) -> tuple[FloatArray, FloatArray]:
    """Where the layout puts its names on this head, and the change per deviation of landmarks.

    Returns
    -------
    base : (E, 3) ndarray
        Scanner mm.
    fields : (L, E, 3) ndarray
    """
    surface, marks, sd = anatomy.surface, anatomy.landmarks_mm, anatomy.landmarks_sd_mm
    right, ahead, above = anatomy.axes
    if layout.by_rule:

        def lay_out(points: FloatArray) -> FloatArray:
            return tape_places(surface, points, layout.names)
    else:
        template = _TemplateOnHead(layout, anatomy)

        def lay_out(points: FloatArray) -> FloatArray:
            return template(points)

    base = lay_out(marks)
    moves: list[list[tuple[int, FloatArray]]] = [
        [(0, above * sd[0, 2])],
        [(0, right * sd[0, 0])],
        [(3, above * sd[3, 2])],
        [(3, right * sd[3, 0])],
        [(1, ahead * sd[1, 1]), (2, ahead * sd[2, 1])],
        [(1, above * sd[1, 2]), (2, above * sd[2, 2])],
        [(1, ahead * sd[1, 1] * 0.4), (2, ahead * sd[2, 1] * -0.4)],
        [(1, above * sd[1, 2] * 0.4), (2, above * sd[2, 2] * -0.4)],
    ]
    fields = []
    for move in moves:
        moved = marks.copy()
        for index, by in move:
            moved[index] = moved[index] + by
        fields.append(lay_out(moved) - base)
    return base, np.array(fields)


class _TemplateOnHead:
    """Template places of a custom layout carried onto a head by landmarks, or by size alone."""

    def __init__(self, layout: Layout, anatomy: Anatomy) -> None:
        self.anatomy = anatomy
        self.places = layout.positions_mm
        marks = layout.landmarks_mm
        self.known = np.flatnonzero(np.isfinite(marks).all(axis=1))
        self.marks = marks
        if len(self.known) < 3:
            # No landmarks: the layout's axes are the head's; the sphere through its places is the
            # head's sphere.
            center, radius = _sphere(self.places)
            self.center, self.radius = center, radius

    def __call__(self, head_marks: FloatArray) -> FloatArray:
        surface = self.anatomy.surface
        if len(self.known) >= 3:
            affine = rigid_fit(head_marks[self.known], self.marks[self.known], scale=True)
            moved = self.places @ affine[:3, :3].T + affine[:3, 3]
            return surface.project(moved)
        shift = head_marks.mean(axis=0) - self.anatomy.landmarks_mm.mean(axis=0)
        away = (self.places - self.center) @ self.anatomy.axes
        return surface.project(surface.center_mm + away * (95.0 / self.radius) + shift)


def _sphere(points: FloatArray) -> tuple[FloatArray, float]:
    """Least-squares sphere through points; a plain mean and 95 mm where that is ill-posed."""
    design = np.c_[2 * points, np.ones(len(points))]
    solution, *_ = np.linalg.lstsq(design, (points**2).sum(axis=1), rcond=None)
    radius2 = float(solution[3] + solution[:3] @ solution[:3])
    if len(points) < 5 or not 40.0**2 < radius2 < 200.0**2:
        return points.mean(axis=0) - np.array([0.0, 0.0, 50.0]), 95.0
    return solution[:3], float(np.sqrt(radius2))


def _looks(markers: Markers, heights: FloatArray, weight: FloatArray | None) -> FloatArray:
    """Log likelihood ratio of each candidate being a capsule of this cap, from its looks.

    At first the candidates' own scores; then, with the shares of a first fit as weights, also
    height, diameter and contrast against the capsules that the cap has.
    """
    score = np.clip(markers.score, 0.01, 0.99)
    ratio = np.log(score / (1 - score))
    if weight is None or weight.sum() < 4:
        return np.minimum(ratio - 2.0, 0.0)
    # Floor of each deviation: how well it is measured; range over which stray blobs scatter.
    for values, floor, span in (
        (heights, 0.5, 12.0),
        (np.asarray(markers.diameter_mm), 0.6, 8.0),
    ):
        middle, spread = _weighted_middle(values, weight)
        sd = max(spread, floor)
        own = np.exp(-0.5 * ((values - middle) / sd) ** 2) / (np.sqrt(2 * np.pi) * sd)
        stray = 0.5 * own + 0.5 / span
        ratio = ratio + np.maximum(np.log((own + 1e-12) / stray), -4.0)
    # A typical capsule of this cap has ratio 0; the density of strays counts what looks like one.
    typical, _ = _weighted_middle(ratio, weight)
    return np.minimum(ratio - typical, 0.0)


def _weighted_middle(values: FloatArray, weight: FloatArray) -> tuple[float, float]:
    """Weighted median and normal-consistent weighted median deviation."""

    def median(numbers: FloatArray) -> float:
        order = np.argsort(numbers)
        total = np.cumsum(weight[order])
        return float(numbers[order][np.searchsorted(total, 0.5 * total[-1])])

    middle = median(values)
    return middle, 1.4826 * median(np.abs(values - middle))


def _electrodes(
    markers: Markers,
    skin: Skin,
    layout: Layout,
    options: LabelOptions,
    anatomy: Anatomy,
    search: Search,
    usable: NDArray[np.intp],
    contacts: FloatArray,
    heights: FloatArray,
    normals: FloatArray,
    looks: FloatArray,
) -> Electrodes:
    """Put the result together, with its doubts in words."""
    names = layout.names
    n_names = len(names)
    best = search.fits[0]
    chosen = search.chosen
    marker = np.where(chosen >= 0, usable[np.maximum(chosen, 0)], -1).astype(np.int32)
    seen = marker >= 0
    need = max(min(4, n_names), int(np.ceil(options.least_share * n_names)))
    if int(seen.sum()) < need:
        msg = (
            f"Only {int(seen.sum())} of {n_names} electrodes could be given a capsule; at least"
            f" {need} are needed (stage labels, {len(markers.score)} candidate blobs). Check that"
            " the names are those of the cap, and the layout if it is not a 10-20 cap."
        )
        raise LabelError(msg)
    confidence = stated_confidence(
        np.where(seen, search.share[np.arange(n_names), np.maximum(chosen, 0)], search.absent),
        best.jitter_mm,
    )

    confidence = confidence * (1.0 - mirrored_probability(search))

    # Where the fitted layout expects the contact points, on the detailed skin.
    fitted = project_to_skin(skin, best.places)
    centers = np.asarray(markers.centers_scanner_mm)
    positions = fitted.copy()
    positions[seen] = contacts[marker[seen]]
    residual = np.linalg.norm(positions - fitted, axis=1)
    residual[~seen] = np.nan

    worn = marker[seen]
    half = np.asarray(markers.half_height_mm)
    half = half if len(half) else np.full(len(heights), 0.5 * float(markers.capsule_mm))
    measured = float(np.median(heights[worn] - half[worn]))
    holder = float(options.holder_mm) if options.holder_mm is not None else max(measured, 0.0)
    height_sd = max(
        float(1.4826 * np.median(np.abs(heights[worn] - np.median(heights[worn])))), 0.2
    )

    covariance = np.zeros((n_names, 3, 3))
    eye = np.eye(3)
    for index in range(n_names):
        if seen[index]:
            row = marker[index]
            normal = normals[row]
            flat = eye - np.outer(normal, normal)
            # The capsule may sit askew on its holder: the foot moves by the height times the tilt.
            tilt = (max(heights[row], 0.0) * _TILT_RAD) ** 2
            covariance[index] = (
                flat @ markers.covariance_mm2[row] @ flat
                + tilt * flat
                + skin.sd_mm**2 * np.outer(normal, normal)
            )
        else:
            normal = skin_normals(skin, fitted[index][None])[0]
            flat = eye - np.outer(normal, normal)
            covariance[index] = (
                flat @ best.spread[index] @ flat
                + best.jitter_mm**2 * flat
                + skin.sd_mm**2 * np.outer(normal, normal)
            )
    covariance = 0.5 * (covariance + covariance.transpose(0, 2, 1))
    sd = np.sqrt(np.einsum("eii->e", covariance) / 3)

    alternatives = tuple(
        alternatives_of(index, names, search, marker, usable) for index in range(n_names)
    )
    why_not = reasons_against(markers, names, search, marker, usable, fitted, heights, looks)
    side_basis, side_findings = check_sides(markers, options, anatomy, marker, looks, search)
    findings = label_findings(
        options,
        layout,
        anatomy,
        search,
        seen,
        confidence,
        alternatives,
        residual,
        height_sd,
        measured,
    )
    logger.info(
        "labels: %d of %d names have a capsule, %d below confidence %.2f, jitter %.1f mm",
        int(seen.sum()),
        n_names,
        int((confidence < options.doubt_below).sum()),
        options.doubt_below,
        best.jitter_mm,
    )
    return Electrodes(
        names=names,
        positions_scanner_mm=positions,
        covariance_mm2=covariance,
        status=tuple("seen" if one else "inferred" for one in seen),
        confidence=np.clip(confidence, 0.0, 1.0),
        residual_mm=residual,
        sd_mm=sd,
        capsule_scanner_mm=np.where(seen[:, None], centers[np.maximum(marker, 0)], np.nan),
        marker=marker,
        alternatives=alternatives,
        fitted_scanner_mm=fitted,
        landmarks_scanner_mm=anatomy.landmarks_mm,
        landmarks_sd_mm=np.sqrt((anatomy.landmarks_sd_mm**2).mean(axis=1)),
        landmarks_given=options.landmarks_scanner_mm is not None,
        holder_mm=holder,
        side_basis=side_basis,
        why_not=why_not,
        findings=tuple(sorted((*side_findings, *findings), key=lambda one: -one.doubt)),
    )


# How far a capsule may lean on the skin under it (3 degrees; value from memory, no source).
_TILT_RAD = 0.05
