"""Surfaces that the user already has in place of ours, held to the same guarantees."""

from __future__ import annotations

import logging
from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import NoReturn

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import sparse

from locator.errors import HeadError
from locator.geometry import apply_affine, mesh_volume_mm3
from locator.head.checks import LEAST_VAULT_MM, MOST_VAULT_MM, place_words
from locator.head.model import (
    BONE,
    BRAIN,
    CSF,
    OTHER,
    SOFT,
    Head,
    HeadOptions,
    Surface,
)
from locator.head.shape import crossings, distance_to_mesh, fill_mesh, winding
from locator.results import Finding, Progress

logger = logging.getLogger(__name__)

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int32]

ROLES = ("inner_skull", "outer_skull", "scalp")
"""From the inside out."""

MOST_VERTICES = 2562
"""Above this the boundary-element matrices of three surfaces outgrow a usual computer."""

LEAST_VERTICES = 162
"""Below this the edges are over 2 cm long and a surface cannot follow a head."""

VOLUME_L: Mapping[str, tuple[float, float]] = {
    "inner_skull": (0.6, 2.5),
    "outer_skull": (0.8, 3.2),
    "scalp": (1.2, 9.0),
}
"""What a surface may hold, litres: children to large adults, the scalp with or without the neck
(values from memory, wide on purpose)."""

ROUNDING_MM = 0.01
"""Files hold single precision: a gap may be this much below the least separation."""

FAR_MM = 3.0
"""A mean distance to our surface on the vault above this needs a person's eye."""

ELSEWHERE_MM = 5.0
"""A surface this far from ours on average that a plain shift would bring at least twice as near is
not one of this T1: a shift of 1 cm moves the faces of a head by 5 mm on average."""

UPPER_MM = 100.0
"""Height of the part, from the top, by which a surface's place is judged."""

UNKNOWN_CAUSE = (
    "Likely it is in another space (a template, another scan, voxel indices) or another unit"
    " (m, cm). Export it in scanner mm of this T1."
)

SEEN_MM = 40.0
"""Distances between surfaces are measured up to this."""

INSIDE = (*BRAIN, CSF)


def replace_surfaces(
    head: Head,
    given: Mapping[str, tuple[ArrayLike, ArrayLike]],
    *,
    options: HeadOptions | None = None,
    progress: Progress | None = None,
) -> Head:
    """Put surfaces that were made elsewhere in place of ours.

    Each must be a closed triangle mesh of genus 0 in one piece that does not cross itself, in
    scanner mm of this T1, nested with its neighbours (given or ours) and never closer to them than
    ``options.separation_mm``, vertex to face. Nothing is repaired; only faces that all point inward
    are turned, which a finding tells.

    Parameters
    ----------
    head : Head
        Of the same T1.
    given : mapping of {"inner_skull", "outer_skull", "scalp"} to (vertices, faces)
        (V, 3) scanner mm and (F, 3) indices; 162 to 2562 vertices.
    options : HeadOptions, optional
        Those of `head`; only the least separation is used.
    progress : Progress, optional

    Returns
    -------
    Head
        With these surfaces (their ``sd_mm`` is NaN: nobody said how well they are known), the
        tissue map repainted to follow them, and findings on how far they lie from ours. `given`
        names them; their vertices lie on no common rays.

    Raises
    ------
    HeadError
        If a surface breaks one of the guarantees.
    """
    options = HeadOptions() if options is None else options
    tell: Progress = (lambda _fraction, _words: None) if progress is None else progress
    unknown = sorted(set(given) - set(ROLES))
    if unknown:
        msg = (
            f"There is no surface {', '.join(repr(name) for name in unknown)} in a head"
            f" (stage head, given surfaces). Possible are {', '.join(ROLES)}."
        )
        raise HeadError(msg)
    if not given:
        return head
    findings: list[Finding] = []
    surfaces = {role: getattr(head, role) for role in ROLES}
    roles = tuple(role for role in ROLES if role in given)
    for step, role in enumerate(roles):
        tell(0.1 * step, f"checking the given {_words(role)}")
        vertices, faces, turned = check_mesh(*given[role], role=role)
        if turned:
            findings.append(
                _finding(
                    "note",
                    f"The faces of the given {_words(role)} pointed inward; they were turned.",
                    "Nothing needs to be done.",
                    role,
                    0.05,
                )
            )
        _check_place(vertices, faces, role, head)
        surfaces[role] = Surface(
            vertices_scanner_mm=vertices, faces=faces, sd_mm=np.full(len(vertices), np.nan)
        )
    tell(0.4, "checking the distances")
    for inner, outer in (("inner_skull", "outer_skull"), ("outer_skull", "scalp")):
        if inner in roles or outer in roles:
            _check_apart(surfaces, inner, outer, roles, head, options.separation_mm)
    for role in roles:
        findings.append(_compare(surfaces[role], getattr(head, role), role, head))
    if {"inner_skull", "outer_skull"} & set(roles):
        findings += _thickness(surfaces, roles, head)
    tell(0.7, "painting the tissue map")
    tissues = _paint(head, surfaces, roles)
    before = int(np.isin(head.tissues, BRAIN).sum())
    after = int(np.isin(tissues, BRAIN).sum())
    share = after / max(before, 1)
    if after < before:
        lost_ml = (1 - share) * head.brain_volume_ml
        findings.append(
            _finding(
                "look" if share < 0.98 else "note",
                f"{lost_ml:.1f} mL that look like brain in the T1 ({100 * (1 - share):.1f} %) lie"
                " outside the given surfaces and are no longer counted as brain.",
                "Look at the given inner skull over the T1.",
                "inner_skull",
                0.7 if share < 0.98 else 0.1,
            )
        )
    # What was said of surfaces that are no longer there holds no longer. The outline of the brain
    # also made the tissue map: what was said of it stays.
    stale = {role for role in roles if role != "inner_skull"}
    if "inner_skull" in roles:
        stale.add("outer_skull")
    kept = tuple(finding for finding in head.findings if finding.subject not in stale)
    padded = np.asarray(head.padded_mm)
    if {"outer_skull", "scalp"} <= set(roles):
        padded = np.zeros(len(surfaces["outer_skull"].vertices_scanner_mm))
    tell(1.0, "given surfaces done")
    logger.info("given surfaces: %s", ", ".join(roles))
    return replace(
        head,
        inner_skull=surfaces["inner_skull"],
        outer_skull=surfaces["outer_skull"],
        scalp=surfaces["scalp"],
        tissues=tissues,
        padded_mm=padded,
        brain_volume_ml=head.brain_volume_ml * share,
        findings=(*kept, *findings),
        given=roles,
    )


def skull_thickness_mm(head: Head) -> FloatArray:
    """Distance of each vertex of the inner skull to the outer one.

    Along the common rays where both surfaces are ours, else the shortest way, (V,), mm.

    Parameters
    ----------
    head : Head
    """
    inner, outer = head.inner_skull, head.outer_skull
    if not {"inner_skull", "outer_skull"} & set(head.given):
        across = outer.vertices_scanner_mm - inner.vertices_scanner_mm
        thickness: FloatArray = np.linalg.norm(across, axis=1)
        return thickness
    return distance_to_mesh(
        inner.vertices_scanner_mm, outer.vertices_scanner_mm, outer.faces, SEEN_MM
    )


# ── one surface ──────────────────────────────────────────────────────────────────────────


def check_mesh(
    vertices: ArrayLike, faces: ArrayLike, *, role: str
) -> tuple[FloatArray, IntArray, bool]:
    """Refuse what is not one closed sphere-like mesh of plausible size.

    Parameters
    ----------
    vertices, faces : (V, 3) and (F, 3) array_like
    role : str
        One of `ROLES`.

    Returns
    -------
    vertices : (V, 3) ndarray
    faces : (F, 3) ndarray of int32
        Outward.
    turned : bool
        Whether all faces pointed inward before.

    Raises
    ------
    HeadError
        With the number and place of what is wrong.
    """

    def refuse(problem: str, advice: str) -> NoReturn:
        msg = f"The given {_words(role)} {problem} (stage head, given surfaces). {advice}"
        raise HeadError(msg)

    points = np.array(vertices, dtype=np.float64, copy=True)
    raw = np.asarray(faces)
    if points.ndim != 2 or points.shape[1] != 3 or raw.ndim != 2 or raw.shape[1] != 3:
        refuse(
            f"has vertices of shape {points.shape} and faces of shape {raw.shape}; both need 3"
            " columns",
            "Export it as a triangle mesh.",
        )
    if not np.issubdtype(raw.dtype, np.integer):
        refuse(f"has faces of type {raw.dtype}", "Faces are whole numbers counted from 0.")
    n = len(points)
    bad = ~np.isfinite(points).all(axis=1)
    if bad.any():
        refuse(
            f"has {int(bad.sum())} of {n} vertices that are not finite, first vertex"
            f" {int(bad.argmax())}",
            "Export it again.",
        )
    if n > MOST_VERTICES or n < LEAST_VERTICES:
        refuse(
            f"has {n} vertices; {LEAST_VERTICES} to {MOST_VERTICES} are possible for the"
            " boundary-element solver",
            "Decimate it evenly (642 to 1000 vertices are accurate and fast)."
            if n > MOST_VERTICES
            else "Export it with more vertices.",
        )
    if not len(raw) or raw.min() < 0 or raw.max() >= n:
        refuse(
            f"has faces that point at vertices outside 0 to {n - 1}",
            "Export it again, with faces counted from 0.",
        )
    triangles = raw.astype(np.int32)
    _check_topology(points, triangles, refuse)
    corners = points[triangles]
    area = 0.5 * np.linalg.norm(
        np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=1
    )
    flat = ~(area > 1e-6 * np.median(area))
    if flat.any():
        at = _place(corners[flat][0].mean(axis=0))
        refuse(f"has {int(flat.sum())} triangles without area, the first at {at}", "Remesh it.")
    volume_l = mesh_volume_mm3(points, triangles) / 1e6
    turned = volume_l < 0
    if turned:
        triangles = np.ascontiguousarray(triangles[:, ::-1])
        volume_l = -volume_l
    low, high = VOLUME_L[role]
    if not low <= volume_l <= high:
        extent = np.ptp(points, axis=0)
        sizes = " x ".join(f"{size:.3g}" for size in extent)
        refuse(
            f"holds {volume_l:.3g} L and measures {sizes} mm; {low:g} to {high:g} L are plausible",
            _unit_advice(float(extent.max())),
        )
    count, where = crossings(points, triangles, points, triangles, same=True)
    if count:
        refuse(
            f"crosses itself: {count} edges pass through a face, the first at {_place(where)}",
            "Smooth or remesh it there.",
        )
    return points, triangles, turned


def _check_topology(
    points: FloatArray, triangles: IntArray, refuse: Callable[[str, str], NoReturn]
) -> None:
    """Closed, wound alike, one piece, genus 0, one fan of faces round each vertex."""
    n, n_faces = len(points), len(triangles)
    directed = np.concatenate([triangles[:, [0, 1]], triangles[:, [1, 2]], triangles[:, [2, 0]]])
    directed = directed.astype(np.int64)
    forth = directed[:, 0] * n + directed[:, 1]
    back = directed[:, 1] * n + directed[:, 0]
    _, first, counts = np.unique(forth, return_index=True, return_counts=True)
    lonely = ~np.isin(forth, back)
    low_high = np.sort(directed, axis=1)
    _, share = np.unique(low_high[:, 0] * n + low_high[:, 1], return_inverse=True)
    uses = np.bincount(share)[share]
    if (uses == 1).any():
        at = _place(points[directed[uses == 1][0]].mean(axis=0))
        refuse(
            f"is open: {int((uses == 1).sum())} edges belong to one face only, the first at {at}",
            "Close its holes; if each triangle has vertices of its own, merge equal ones.",
        )
    if (uses > 2).any():
        at = _place(points[directed[uses > 2][0]].mean(axis=0))
        refuse(
            f"has {len(np.unique(share[uses > 2]))} edges with more than two faces, the first at"
            f" {at}",
            "Remesh it as one closed surface.",
        )
    if lonely.any() or (counts > 1).any():
        which = directed[lonely][0] if lonely.any() else directed[first[counts > 1][0]]
        refuse(
            f"has {int(lonely.sum()) + int((counts > 1).sum())} edges where neighbouring faces are"
            f" wound against each other, the first at {_place(points[which].mean(axis=0))}",
            "Wind all faces alike.",
        )
    used = np.unique(triangles)
    if len(used) < n:
        refuse(f"has {n - len(used)} vertices that belong to no face", "Remove them.")
    joined = sparse.csr_array(
        (np.ones(len(directed), np.int8), (directed[:, 0], directed[:, 1])), shape=(n, n)
    )
    pieces, piece = sparse.csgraph.connected_components(joined, directed=False)
    if pieces > 1:
        sizes = np.sort(np.bincount(piece))[::-1]
        listed = ", ".join(str(size) for size in sizes[:4])
        refuse(
            f"consists of {pieces} pieces ({listed} ... vertices)"
            if pieces > 4
            else f"consists of {pieces} pieces ({listed} vertices)",
            "Keep the largest piece.",
        )
    # Corners round a vertex are joined over the edges there: one fan each, or the mesh is pinched.
    order = np.argsort(share, kind="stable").reshape(-1, 2)
    face_of = np.tile(np.arange(n_faces), 3)[order]
    ends = low_high[order[:, 0]]
    nodes = [
        3 * face_of[:, side] + (triangles[face_of[:, side]] == ends[:, [end]]).argmax(axis=1)
        for end in range(2)
        for side in range(2)
    ]
    pairs = np.concatenate([np.stack(nodes[:2], axis=1), np.stack(nodes[2:], axis=1)])
    fans = sparse.csgraph.connected_components(
        sparse.csr_array(
            (np.ones(len(pairs), np.int8), (pairs[:, 0], pairs[:, 1])),
            shape=(3 * n_faces, 3 * n_faces),
        ),
        directed=False,
    )
    if fans[0] != n:
        fan_of = np.zeros((n, 2), np.int64)
        fan_of[:, 0] = 3 * n_faces
        np.minimum.at(fan_of[:, 0], triangles.ravel(), fans[1])
        np.maximum.at(fan_of[:, 1], triangles.ravel(), fans[1])
        pinched = fan_of[:, 0] < fan_of[:, 1]
        refuse(
            f"is pinched at {int(pinched.sum())} vertices, where parts meet in one point, the"
            f" first at {_place(points[pinched][0])}",
            "Remesh it as one closed surface.",
        )
    euler = n - len(directed) // 2 + n_faces
    if euler != 2:
        refuse(
            f"has {(2 - euler) // 2} handles (Euler number {euler}, a sphere has 2)",
            "Close its handles.",
        )


def _unit_advice(largest: float) -> str:
    """What is likely wrong with the size of a surface, from its largest side."""
    for unit, low, high in (
        ("metres; multiply its coordinates by 1000", 0.08, 0.45),
        ("centimetres; multiply its coordinates by 10", 8.0, 45.0),
        ("micrometres; divide its coordinates by 1000", 8e4, 4.5e5),
    ):
        if low <= largest <= high:
            return f"It seems to be in {unit}."
    return "Check its unit (mm is needed) and that it is the surface that its name says."


def _check_place(vertices: FloatArray, faces: IntArray, role: str, head: Head) -> None:
    """Refuse a surface that does not lie where this T1's head lies."""
    middle = _centroid(vertices, faces)
    ours = getattr(head, role)
    own_middle = _centroid(
        np.asarray(ours.vertices_scanner_mm, dtype=np.float64), np.asarray(ours.faces)
    )
    scalp = head.scalp
    within = winding(middle[None], scalp.vertices_scanner_mm, scalp.faces)[0]
    holds = winding(np.asarray(head.center_scanner_mm)[None], vertices, faces)[0]
    cause, misfit = _likely_cause(vertices, ours)
    if within and holds and (cause is None or misfit < ELSEWHERE_MM):
        return
    apart = float(np.linalg.norm(middle - own_middle))
    msg = (
        f"The given {_words(role)} lies elsewhere: its centre at {_place(middle)} is {apart:.0f} mm"
        f" from ours at {_place(own_middle)} (stage head, given surfaces). {cause or UNKNOWN_CAUSE}"
    )
    raise HeadError(msg)


def _likely_cause(vertices: FloatArray, ours: Surface) -> tuple[str | None, float]:
    """What would explain a misfit, None when neither a shift nor turned axes do; the misfit, mm.

    Compared are the upper 10 cm: where a scalp ends below differs from program to program.
    """
    points = np.asarray(ours.vertices_scanner_mm, dtype=np.float64)

    def upper(of: FloatArray) -> FloatArray:
        return of[of[:, 2] > of[:, 2].max() - UPPER_MM]

    def misfit(of: FloatArray) -> float:
        return float(distance_to_mesh(of, points, ours.faces, SEEN_MM).mean())

    def corner(of: FloatArray) -> FloatArray:
        middle = 0.5 * (of.min(axis=0) + of.max(axis=0))
        return np.array([middle[0], middle[1], of[:, 2].max()])

    part = upper(vertices)
    now = misfit(part)
    if now < FAR_MM:
        return None, now
    mirrored = misfit(part * [-1.0, -1.0, 1.0])
    shift = corner(upper(points)) - corner(part)
    moved = misfit(part + shift)
    if mirrored < min(0.5 * now, moved + 2.0):
        return (
            "With x and y reversed in sign it would fit: it seems to be written with x to the left"
            " and y to the back. Export it in scanner mm with x to the right, y to the front."
        ), now
    if moved < 0.5 * now:
        return (
            f"Moved by about {_place(shift)} it would fit: it seems to be in coordinates with another"
            " origin (often the middle of the volume), or to come from another scan. Export it in"
            " scanner mm of this T1."
        ), now
    return None, now


# ── surfaces and their neighbours ────────────────────────────────────────────────────────


def _check_apart(
    surfaces: Mapping[str, Surface],
    inner: str,
    outer: str,
    roles: tuple[str, ...],
    head: Head,
    separation_mm: float,
) -> None:
    """Refuse two neighbours that cross, are not nested, or come too near."""
    meshes = [
        (
            np.asarray(surfaces[role].vertices_scanner_mm, dtype=np.float64),
            np.asarray(surfaces[role].faces),
        )
        for role in (inner, outer)
    ]
    names = [f"{'the given' if role in roles else 'our'} {_words(role)}" for role in (inner, outer)]
    gaps, places, outside = [], [], 0
    for own, other, should in ((0, 1, True), (1, 0, False)):
        points = meshes[own][0]
        distance = distance_to_mesh(points, *meshes[other], separation_mm + 2.0)
        wrong = winding(points, *meshes[other]) != should
        if wrong.any():
            distance[wrong] = -distance_to_mesh(points[wrong], *meshes[other], SEEN_MM)
        outside += int(wrong.sum())
        gaps.append(distance)
        places.append(points)
    gap, where = np.concatenate(gaps), np.concatenate(places)
    near = gap < separation_mm - ROUNDING_MM
    if not near.any():
        count = 0
        for own, other in ((0, 1), (1, 0)):
            here, place = crossings(*meshes[own], *meshes[other], same=False)
            if here:
                count, at = count + here, place
        if not count:
            return
        problem = f"cross: {count} edges pass through a face of the other, one at {_place(at)}"
    else:
        worst = int(gap.argmin())
        problem = (
            f"must be nested and {separation_mm:g} mm apart everywhere, but {int(near.sum())} of"
            f" {len(gap)} vertices are nearer"
            + (f" and {outside} of them on the wrong side" if outside else "")
            + f"; the worst is {gap[worst]:.1f} mm at {_place(where[worst])},"
            f" {_side(where[worst], head)}"
        )
    advice = []
    mean_apart = {}
    for role in (inner, outer):
        if role in roles:
            ours = getattr(head, role)
            mean_apart[role] = _mean_apart(surfaces[role], ours)
    if outside and max(mean_apart.values()) > FAR_MM:
        role = max(mean_apart, key=lambda name: mean_apart[name])
        advice.append(
            f"The given {_words(role)} lies {mean_apart[role]:.1f} mm from ours on average."
        )
        vertices = np.asarray(surfaces[role].vertices_scanner_mm, dtype=np.float64)
        advice.append(_likely_cause(vertices, getattr(head, role))[0] or UNKNOWN_CAUSE)
    elif len(mean_apart) == 2:
        advice.append(
            "Push them apart there (thin bone must be padded for the field model), or leave one of"
            " them out so that ours is used."
        )
    else:
        missing = outer if inner in roles else inner
        advice.append(
            f"Move the given surface away there, or give the {_words(missing)} that belongs to it."
        )
    msg = f"{names[0].capitalize()} and {names[1]} {problem} (stage head, given surfaces)."
    raise HeadError(" ".join([msg, *advice]))


def _mean_apart(surface: Surface, ours: Surface) -> float:
    distance = distance_to_mesh(
        surface.vertices_scanner_mm, ours.vertices_scanner_mm, ours.faces, SEEN_MM
    )
    return float(distance.mean())


def _on_vault(points: FloatArray, head: Head) -> NDArray[np.bool_]:
    """Vertices more than 12 degrees above the middle of the brain, where ours is best."""
    away = points - np.asarray(head.center_scanner_mm)
    above: NDArray[np.bool_] = away[:, 2] > 0.2 * np.linalg.norm(away, axis=1)
    return above


def _compare(surface: Surface, ours: Surface, role: str, head: Head) -> Finding:
    """Say how far a given surface lies from ours on the vault."""
    points = np.asarray(surface.vertices_scanner_mm, dtype=np.float64)
    points = points[_on_vault(points, head)]
    if not len(points):
        msg = (
            f"The given {_words(role)} has no vertex above the middle of the brain at"
            f" {_place(np.asarray(head.center_scanner_mm))} (stage head, given surfaces)."
            " Give a surface of the whole head."
        )
        raise HeadError(msg)
    distance = distance_to_mesh(points, ours.vertices_scanner_mm, ours.faces, SEEN_MM)
    inside = winding(points, ours.vertices_scanner_mm, ours.faces)
    mean, most = float(distance.mean()), int(distance.argmax())
    signed = float(np.where(inside, -distance, distance).mean())
    far = mean > FAR_MM
    return _finding(
        "look" if far else "note",
        f"The given {_words(role)} is used instead of ours; on the vault it lies {mean:.1f} mm from"
        f" ours on average ({abs(signed):.1f} mm {'inside' if signed < 0 else 'outside'} of it with"
        f" sign), at most {distance[most]:.1f} mm at {_place(points[most])}.",
        (
            _likely_cause(np.asarray(surface.vertices_scanner_mm, dtype=np.float64), ours)[0]
            or "Look at both over the T1; one of the two is wrong, or they are of different spaces."
        )
        if far
        else "Nothing needs to be done; what it says of thin places is not ours.",
        role,
        min(0.4 + 0.1 * (mean - FAR_MM), 0.9) if far else 0.05,
    )


def _thickness(
    surfaces: Mapping[str, Surface], roles: tuple[str, ...], head: Head
) -> list[Finding]:
    """The vault's mean thickness, when it is none that skulls have (as for our own surfaces)."""
    inner, outer = surfaces["inner_skull"], surfaces["outer_skull"]
    points = np.asarray(inner.vertices_scanner_mm, dtype=np.float64)
    points = points[_on_vault(points, head)]
    if not len(points):
        return []
    mean = float(distance_to_mesh(points, outer.vertices_scanner_mm, outer.faces, SEEN_MM).mean())
    if LEAST_VAULT_MM <= mean <= MOST_VAULT_MM:
        return []
    which = " and ".join(_words(role) for role in roles if role != "scalp")
    return [
        _finding(
            "look",
            f"With the given {which} the vault is {mean:.1f} mm thick on average; 5 to 9 mm is"
            " usual.",
            "Look at both tables of the skull over the T1.",
            "outer_skull",
            0.6,
        )
    ]


# ── the tissue map ───────────────────────────────────────────────────────────────────────


def _paint(head: Head, surfaces: Mapping[str, Surface], roles: tuple[str, ...]) -> IntArray:
    """Tissue map that follows the given surfaces; elsewhere it stays as it was."""
    tissues = np.array(head.tissues)
    affine = np.asarray(head.scanner_from_voxel)

    def filled(role: str) -> NDArray[np.bool_]:
        points = np.asarray(surfaces[role].vertices_scanner_mm, dtype=np.float64)
        faces = np.asarray(surfaces[role].faces)
        if np.linalg.det(affine[:3, :3]) < 0:  # voxel axes are left-handed: outward turns inward
            faces = faces[:, ::-1]
        at = apply_affine(np.linalg.inv(affine), points)
        return fill_mesh(at, np.ascontiguousarray(faces), tissues.shape)

    inside = np.isin(tissues, INSIDE)
    if "inner_skull" in roles or "outer_skull" in roles:
        in_outer = filled("outer_skull")
        if "inner_skull" in roles:
            in_inner = filled("inner_skull")
            lost = inside & ~in_inner
            tissues[in_inner & ~inside] = CSF
            inside = in_inner
        else:
            lost = inside & ~in_outer
            inside = inside & in_outer
        tissues[lost] = np.where(in_outer[lost], BONE, SOFT)
        if "outer_skull" in roles:
            tissues[in_outer & ~inside] = BONE
            tissues[(tissues == BONE) & ~in_outer] = SOFT
    if "scalp" in roles:
        in_scalp = filled("scalp")
        lowest = float(np.asarray(surfaces["scalp"].vertices_scanner_mm)[:, 2].min())
        # The neck below the given surface stays as it is.
        height = (
            affine[2, 3]
            + affine[2, 0] * np.arange(tissues.shape[0])[:, None, None]
            + affine[2, 1] * np.arange(tissues.shape[1])[None, :, None]
            + affine[2, 2] * np.arange(tissues.shape[2])[None, None, :]
        )
        tissues[~in_scalp & np.isin(tissues, (SOFT, OTHER)) & (height >= lowest)] = 0
        tissues[in_scalp & (tissues == 0)] = SOFT
    return tissues


def _centroid(vertices: FloatArray, faces: IntArray) -> FloatArray:
    """Centre of what a closed mesh holds."""
    origin = vertices.mean(axis=0)
    corners = vertices[faces] - origin
    parts = np.einsum("fi,fi->f", corners[:, 0], np.cross(corners[:, 1], corners[:, 2]))
    middle: FloatArray = origin + (parts[:, None] * corners.sum(axis=1)).sum(axis=0) / (
        4 * parts.sum()
    )
    return middle


# ── words ────────────────────────────────────────────────────────────────────────────────


def _words(role: str) -> str:
    return role.replace("_", " ")


def _place(point: ArrayLike) -> str:
    x, y, z = (float(value) for value in np.asarray(point, dtype=float))
    return f"({x:.0f}, {y:.0f}, {z:.0f}) mm"


def _side(point: FloatArray, head: Head) -> str:
    """Where a place lies as seen from the middle of the brain."""
    away = point - np.asarray(head.center_scanner_mm)
    return place_words(away / max(float(np.linalg.norm(away)), 1e-9), 0.4)


def _finding(level: str, problem: str, suggestion: str, subject: str, doubt: float) -> Finding:
    return Finding(
        level="look" if level == "look" else "note",
        stage="head",
        problem=problem,
        suggestion=suggestion,
        subject=subject,
        doubt=doubt,
    )
