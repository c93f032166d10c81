"""From capsules and a layout to labelled electrodes on one head."""

from __future__ import annotations

import logging
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from locator.errors import LabelError, MarkerError, SettingError, SideError
from locator.geometry import rigid_fit
from locator.labels.anatomy import Anatomy, find_anatomy
from locator.labels.cap import CapModel, CapPrior
from locator.labels.matching import Evidence
from locator.labels.result import Electrodes
from locator.labels.search import Search, name_spacing_mm, search_cap
from locator.layout import Layout
from locator.layout.tape import tape_places
from locator.markers import Markers
from locator.results import Finding, Progress
from locator.skin import Skin, height_mm, project_to_skin, skin_normals

FloatArray = NDArray[np.float64]

logger = logging.getLogger(__name__)


@dataclass(frozen=True, kw_only=True, slots=True)
class LabelOptions:
    """Settings of the labelling.

    Attributes
    ----------
    landmarks_scanner_mm : (3, 3) array_like, optional
        NAS, LPA, RPA that a person has marked, scanner mm; default: estimated from the head.
    holder_mm : float, optional
        Skin to underside of the capsules, mm (0 to 30); default: measured from the image.
    side_marker : {"right", "left"}, optional
        An extra capsule was worn on that side.
    turn_deg, slide_mm, stretch : float
        How far caps depart from their nominal place (one standard deviation): turn about each
        axis (0.5 to 30 deg), slide along each (0.5 to 30 mm), relative stretch (0.002 to 0.2).
        Defaults 6, 6, 0.04: caps up to 15 deg, 20 mm and 10 % off stay within 2.5 to 3 deviations.
    doubt_below : float
        Labels with a lower confidence than this become findings (0.5 to 1); default 0.9.
    least_share : float
        Least share of the names that must have a capsule (0 to 1); default 0.4.
    seed : int
        Not used by the sums, which are exact in their order; kept in the record of settings.
    """

    landmarks_scanner_mm: ArrayLike | None = None
    holder_mm: float | None = None
    side_marker: str | None = None
    turn_deg: float = 6.0
    slide_mm: float = 6.0
    stretch: float = 0.04
    doubt_below: float = 0.9
    least_share: float = 0.4
    seed: int = 0

    def __post_init__(self) -> None:
        """Check the ranges."""
        ranges = {
            "turn_deg": (0.5, 30.0),
            "slide_mm": (0.5, 30.0),
            "stretch": (0.002, 0.2),
            "doubt_below": (0.5, 1.0),
            "least_share": (0.0, 1.0),
        }
        for name, (low, high) in ranges.items():
            value = getattr(self, name)
            if not low <= value <= high:
                msg = f"{name} is {value}, but must lie between {low} and {high}."
                raise SettingError(msg)
        if self.holder_mm is not None and not 0.0 <= self.holder_mm <= 30.0:
            msg = f"holder_mm is {self.holder_mm}, but must lie between 0 and 30 mm."
            raise SettingError(msg)
        if self.side_marker not in (None, "right", "left"):
            msg = f"side_marker is '{self.side_marker}', but must be 'right' or 'left'."
            raise SettingError(msg)
        if self.landmarks_scanner_mm is not None:
            marks = np.asarray(self.landmarks_scanner_mm, dtype=np.float64)
            if marks.shape != (3, 3) or not np.isfinite(marks).all():
                msg = (
                    f"landmarks_scanner_mm has shape {marks.shape}; expected three finite points"
                    " NAS, LPA, RPA (3, 3) in scanner mm."
                )
                raise SettingError(msg)


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
    fits from many starts, also a row or column away, are weighed by their evidence. The
    confidence of a label is its share of that whole sum.
    """
    chosen = LabelOptions() if options is None else options
    tell: Progress = progress if progress is not None else (lambda _fraction, _words: None)
    n_names = len(layout.names)
    centers = np.asarray(markers.centers_scanner_mm, dtype=np.float64).reshape(-1, 3)
    usable = np.flatnonzero(markers.score >= _LEAST_SCORE)
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


# Candidates less likely than this take no part; they keep their row and their reason.
_LEAST_SCORE = 0.02
_HALF_TURN = np.diag([-1.0, -1.0, 1.0])
# A cap worn back to front: about one in ten thousand (no source; common sense).
_BACK_TO_FRONT_LOG_ODDS = -9.0
# Where a side marker may be: near an ear, and worn by no name.
_SIDE_REACH_MM = 75.0


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
    first = np.cross(normal, np.array([0.0, 0.0, 1.0]))
    weak = np.linalg.norm(first, axis=1) < 0.2
    first[weak] = np.cross(normal[weak], np.array([1.0, 0.0, 0.0]))
    first /= np.linalg.norm(first, axis=1, keepdims=True)
    second = np.cross(normal, first)
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
    confidence = np.where(
        seen, search.share[np.arange(n_names), np.maximum(chosen, 0)], search.absent
    )

    # Where the fitted layout expects the contact points, on the detailed skin.
    fitted = project_to_skin(skin, best.places)
    centers = np.asarray(markers.centers_scanner_mm)
    positions = fitted.copy()
    positions[seen] = contacts[marker[seen]]
    residual = np.linalg.norm(positions - fitted, axis=1)
    residual[~seen] = np.nan

    worn = marker[seen]
    radius = 0.5 * float(markers.capsule_mm)
    measured = float(np.median(heights[worn])) - radius
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
        _alternatives(index, names, search, marker, usable) for index in range(n_names)
    )
    why_not = _why_not(markers, names, search, marker, usable, fitted, heights, looks)
    side_basis, side_findings = _sides(markers, options, anatomy, marker, looks)
    findings = _findings(
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


def _alternatives(
    index: int,
    names: tuple[str, ...],
    search: Search,
    marker: NDArray[np.int32],
    usable: NDArray[np.intp],
) -> str:
    """In words, what else this electrode could be; empty when there is nothing worth saying."""
    owner = {int(row): names[place] for place, row in enumerate(marker) if row >= 0}
    parts = []
    if marker[index] >= 0 and search.absent[index] >= 0.02:
        parts.append((float(search.absent[index]), "no capsule"))
    for column in np.argsort(search.share[index])[::-1][:3]:
        row = int(usable[column])
        chance = float(search.share[index, column])
        if chance < 0.02 or row == marker[index]:
            continue
        holder = owner.get(row)
        words = f"the capsule now at {holder}" if holder else f"blob {row + 1}"
        parts.append((chance, words))
    parts.sort(reverse=True)
    return "; ".join(f"{words} ({chance:.0%})" for chance, words in parts)


def _why_not(
    markers: Markers,
    names: tuple[str, ...],
    search: Search,
    marker: NDArray[np.int32],
    usable: NDArray[np.intp],
    fitted: FloatArray,
    heights: FloatArray,
    looks: FloatArray,
) -> tuple[str, ...]:
    """For each candidate why it is no electrode."""
    column_of = {int(row): column for column, row in enumerate(usable)}
    taken = {int(row): place for place, row in enumerate(marker) if row >= 0}
    worn = [row for row in taken]
    middle = float(np.median(heights[worn])) if worn else 0.0
    size = float(np.median(np.asarray(markers.diameter_mm)[worn])) if worn else 0.0
    reasons = []
    for row in range(len(markers.score)):
        if row in taken:
            reasons.append("")
            continue
        words = []
        if markers.score[row] < _LEAST_SCORE:
            words.append(f"does not look like a capsule (score {markers.score[row]:.2f})")
        elif looks[row] < -1.5:
            details = []
            if abs(heights[row] - middle) > 1.5:
                details.append(
                    f"stands {heights[row]:.1f} mm over the skin, the others {middle:.1f}"
                )
            if abs(markers.diameter_mm[row] - size) > 1.5:
                details.append(f"{markers.diameter_mm[row]:.1f} mm wide, the others {size:.1f}")
            if not details:
                details.append(f"score {markers.score[row]:.2f}")
            words.append(f"looks unlike the other capsules ({'; '.join(details)})")
        gap = np.linalg.norm(fitted - markers.centers_scanner_mm[row], axis=1)
        near = int(gap.argmin())
        if row in column_of and search.share[:, column_of[row]].max() >= 0.05:
            place = int(search.share[:, column_of[row]].argmax())
            chance = float(search.share[place, column_of[row]])
            words.append(f"could be {names[place]} ({chance:.0%})")
        elif marker[near] >= 0:
            words.append(f"nearest place {names[near]} ({gap[near]:.0f} mm) has its own capsule")
        else:
            words.append(f"{gap[near]:.0f} mm from the nearest place ({names[near]})")
        reasons.append("; ".join(words))
    return tuple(reasons)


def _sides(
    markers: Markers,
    options: LabelOptions,
    anatomy: Anatomy,
    marker: NDArray[np.int32],
    looks: FloatArray,
) -> tuple[str, list[Finding]]:
    """What left and right rest on; a side marker must agree with the image."""
    basis = "the image's affine (scanner axes)"
    if options.landmarks_scanner_mm is not None:
        basis += ", and the given LPA and RPA agree"
    if options.side_marker is None:
        return f"{basis}; no side marker", []
    free = np.setdiff1d(np.arange(len(markers.score)), marker[marker >= 0])
    centers = np.asarray(markers.centers_scanner_mm)
    right, _, above = anatomy.axes
    ears = anatomy.landmarks_mm[1:3]
    middle = ears.mean(axis=0)
    found: dict[str, list[int]] = {"right": [], "left": []}
    for row in free:
        away = centers[row] - middle
        side = "right" if away @ right > 0 else "left"
        ear = ears[1] if side == "right" else ears[0]
        lateral = abs(float(away @ right)) > 0.5 * abs(float((ear - middle) @ right))
        low = float(away @ above) < 35.0
        near = float(np.linalg.norm(centers[row] - ear)) < _SIDE_REACH_MM
        if lateral and low and near and looks[row] > -1.5 and markers.score[row] > 0.3:
            found[side].append(int(row))
    other = "left" if options.side_marker == "right" else "right"
    here, there = found[options.side_marker], found[other]
    if there and not here:
        row = there[0]
        place = ", ".join(f"{value:.0f}" for value in centers[row])
        msg = (
            f"A capsule was worn on the {options.side_marker} side, but the only extra one is on the"
            f" {other} of the image (blob {row + 1} at {place} mm; stage labels). Left and right of"
            " the image are exchanged, or the wrong side was named: check the conversion of the"
            " scan before anything else."
        )
        raise SideError(msg)
    if here and not there:
        return (
            f"{basis}, and the side marker on the {options.side_marker} (blob {here[0] + 1}) agrees",
            [],
        )
    if here:
        return (
            f"{basis}; extra capsules near both ears, so the side marker decides nothing",
            [
                Finding(
                    level="look",
                    stage="labels",
                    problem=(
                        f"Extra capsules are near both ears (right {len(found['right'])}, left"
                        f" {len(found['left'])}): the marker on the {options.side_marker} cannot"
                        " be told from them."
                    ),
                    suggestion="Look which of them is the side marker.",
                    doubt=0.8,
                )
            ],
        )
    return (
        f"{basis}; the side marker on the {options.side_marker} was not found",
        [
            Finding(
                level="look",
                stage="labels",
                problem=f"The marker worn on the {options.side_marker} side was not found.",
                suggestion="Look for it in the image, or leave the option out.",
                doubt=0.8,
            )
        ],
    )


def _findings(
    options: LabelOptions,
    layout: Layout,
    anatomy: Anatomy,
    search: Search,
    seen: NDArray[np.bool_],
    confidence: FloatArray,
    alternatives: tuple[str, ...],
    residual: FloatArray,
    height_sd: float,
    measured: float,
) -> list[Finding]:
    """What a person should know about the labels."""
    findings = []
    names = layout.names
    for index in np.argsort(confidence):
        if confidence[index] >= options.doubt_below:
            break
        name = names[index]
        what = "has this capsule" if seen[index] else "has no capsule"
        other = f" Else: {alternatives[index]}." if alternatives[index] else ""
        findings.append(
            Finding(
                level="look",
                stage="labels",
                subject=name,
                problem=f"That {name} {what} has probability {confidence[index]:.2f}.{other}",
                suggestion="Look at it and accept, move or exchange it.",
                doubt=float(1 - confidence[index]),
            )
        )
    best = search.fits[0]
    for fit, weight in zip(search.fits[1:], search.weights[1:], strict=True):
        moved = float(np.median(np.linalg.norm(fit.places - best.places, axis=1)))
        if weight >= 0.005 and moved > 0.4 * name_spacing_mm(best.places):
            words = fit.origin or "placed otherwise"
            findings.append(
                Finding(
                    level="look",
                    stage="labels",
                    problem=(
                        f"The whole cap {words} would explain the capsules too (probability"
                        f" {weight:.2f}, {moved:.0f} mm away)."
                    ),
                    suggestion="Check one electrode that you can tell by eye, such as Cz or Fpz.",
                    doubt=float(min(0.5 + weight, 0.99)),
                )
            )
            break
    absent = [name for name, one in zip(names, seen, strict=True) if not one]
    if absent:
        findings.append(
            Finding(
                level="note",
                stage="labels",
                problem=(
                    f"{len(absent)} of {len(names)} electrodes have no capsule and are placed from"
                    f" the layout: {', '.join(absent)}."
                ),
                suggestion="Their positions are less sure; see sd_mm.",
                doubt=0.3,
            )
        )
    if best.jitter_mm > 6.0:
        findings.append(
            Finding(
                level="look",
                stage="labels",
                problem=(
                    f"Electrodes lie {best.jitter_mm:.1f} mm (per axis) from a smooth cap; caps"
                    " usually stay below 5 mm."
                ),
                suggestion="Check the names and the layout.",
                doubt=0.6,
            )
        )
    if not anatomy.nasion_seen:
        findings.append(
            Finding(
                level="note",
                stage="labels",
                problem="The notch over the nose was not found; landmarks rest on proportions alone.",
                suggestion="Give the three landmarks if labels are in doubt.",
                doubt=0.4,
            )
        )
    if options.holder_mm is not None and abs(options.holder_mm - measured) > 2.0:
        findings.append(
            Finding(
                level="look",
                stage="labels",
                problem=(
                    f"The holder was given as {options.holder_mm:.1f} mm, but the capsules' undersides"
                    f" stand {measured:.1f} mm over the skin (scatter {height_sd:.1f} mm)."
                ),
                suggestion="Check the number, or leave it to be measured.",
                doubt=0.6,
            )
        )
    far = np.flatnonzero(seen & (np.nan_to_num(residual) > 12.0))
    for index in far:
        findings.append(
            Finding(
                level="note",
                stage="labels",
                subject=names[index],
                problem=f"{names[index]} lies {residual[index]:.0f} mm from the fitted layout.",
                suggestion="Check whether the electrode was displaced.",
                doubt=0.45,
            )
        )
    return findings
