"""Electrode names and their template places: 10-20, 10-10, 10-05, or a layout of one's own."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from locator.errors import LabelError
from locator.layout.names import (
    OLD_NAMES,
    PLACES,
    channel_kind,
    nearest_names,
    normalise_name,
)
from locator.layout.tape import StarSurface, star_surface, tape_places
from locator.results import Frozen

__all__ = [
    "OLD_NAMES",
    "PLACES",
    "Layout",
    "StarSurface",
    "channel_kind",
    "custom_layout",
    "nearest_names",
    "normalise_name",
    "standard_layout",
    "tape_places",
    "template_head",
]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Layout(Frozen):
    """Template places for a set of names.

    Attributes
    ----------
    names : tuple of str
        In the order asked.
    positions_mm : (E, 3) ndarray
        Template places on the skin in the layout's own frame (x right, y anterior, z superior), mm.
    landmarks_mm : (4, 3) ndarray
        NAS, LPA, RPA, inion in the same frame; NaN where the layout has none.
    source : str
        Where the places come from.
    by_rule : bool
        True when the places follow the tape-measure rules, so that they can be laid out afresh on
        any head.
    """

    names: tuple[str, ...]
    positions_mm: FloatArray
    landmarks_mm: FloatArray
    source: str
    by_rule: bool = False


# The template head. Half breadth and half length are the means of men and women of ANSUR II
# (2012; Gordon et al. 2014, NATICK/TR-15/007: breadth 154.3 and 147.8, length 199.5 and 189.8 mm);
# height of the vertex over the ear canal 131.1 and 126.5 mm. The egg shape of the outline (wider
# behind) and the exponent are our own, chosen so that arcs and circumference are the published
# ones (nasion-inion 34-38 cm, ear to ear 33-37 cm: values from memory).
_HALF_MM = (75.5, 97.3, 128.8)
_EXPONENT = 2.25
_EGG = 0.12
_LANDMARKS_MM = np.array(
    [[0.0, 95.0, 4.0], [-74.0, 4.0, 0.0], [74.0, 4.0, 0.0], [0.0, -97.0, 10.0]]
)


def template_head() -> tuple[StarSurface, FloatArray]:
    """The template head and its landmarks.

    Returns
    -------
    surface : StarSurface
        Smooth head, x right, y anterior, z superior, origin between the ears, mm.
    landmarks_mm : (4, 3) ndarray
        NAS, LPA, RPA, inion on it.
    """
    half = np.array(_HALF_MM)

    def radius_of(directions: FloatArray) -> FloatArray:
        radius = np.full(len(directions), 90.0)
        for _ in range(30):
            place = directions * radius[:, None] / half
            place[:, 0] /= 1 - _EGG * np.clip(place[:, 1], -1.2, 1.2)
            size = (np.abs(place) ** _EXPONENT).sum(axis=1) ** (1 / _EXPONENT)
            radius = radius * (0.5 + 0.5 / size)
        return radius

    surface = star_surface(radius_of, np.zeros(3))
    return surface, surface.project(_LANDMARKS_MM)


def _refuse_names(names: Sequence[str], known: tuple[str, ...] | None) -> tuple[str, ...]:
    """Canonical names, or a LabelError that names what is wrong with them."""
    if len(names) == 0:
        msg = (
            "No electrode names were given (stage layout). Name the electrodes that the cap"
            " carries, or take them from the recording."
        )
        raise LabelError(msg)
    canonical: list[str] = []
    seen: dict[str, str] = {}
    unknown: list[str] = []
    doubled: list[str] = []
    by_lower = {name.lower(): name for name in known} if known is not None else None
    for place, text in enumerate(names):
        if not str(text).strip():
            msg = (
                f"Electrode name {place + 1} of {len(names)} is empty (stage layout)."
                " Remove it or fill it in."
            )
            raise LabelError(msg)
        if by_lower is None:
            name = normalise_name(text)
        else:
            name = by_lower.get(str(text).strip().lower())
            if name is None:
                usual = normalise_name(text)
                name = by_lower.get(usual.lower()) if usual is not None else None
        if name is None:
            near = nearest_names(text, known)
            kind = channel_kind(text)
            hint = f" (nearest known: {', '.join(near)})" if near else ""
            if kind not in ("electrode", "other"):
                hint = f" (looks like a channel of kind {kind}, not an electrode)"
            unknown.append(f"'{text}'{hint}")
        elif name in seen:
            first = seen[name]
            doubled.append(
                f"'{text}'" if first == str(text) else f"'{text}' (the same place as '{first}')"
            )
        else:
            seen[name] = str(text)
            canonical.append(name)
    if unknown:
        msg = (
            f"Unknown electrode name{'s' if len(unknown) > 1 else ''}: {'; '.join(unknown)}"
            " (stage layout). Correct the name, leave it out, or give template places with a"
            " layout of your own."
        )
        raise LabelError(msg)
    if doubled:
        msg = (
            f"Electrode names stand twice in the list: {'; '.join(doubled)} (stage layout)."
            " Every name may be asked for once."
        )
        raise LabelError(msg)
    return tuple(canonical)


def standard_layout(names: Sequence[str]) -> Layout:
    """Template places of 10-20, 10-10 and 10-05 names on an average head.

    Parameters
    ----------
    names : sequence of str
        In any usual spelling (`normalise_name`).

    Returns
    -------
    Layout
        With canonical names, laid out by the tape-measure rules on `template_head`.

    Raises
    ------
    LabelError
        If there are no names, or one is empty, unknown or doubled (also under two spellings).

    Examples
    --------
    >>> layout = standard_layout(["FP1", "T3", "EEG Cz-REF"])
    >>> layout.names
    ('Fp1', 'T7', 'Cz')
    >>> bool(layout.positions_mm[1, 0] < -60)
    True
    """
    canonical = _refuse_names(names, None)
    surface, landmarks = template_head()
    return Layout(
        names=canonical,
        positions_mm=tape_places(surface, landmarks, canonical),
        landmarks_mm=landmarks,
        source="10-05 names by the tape-measure rules on an average head",
        by_rule=True,
    )


def custom_layout(
    names: Sequence[str],
    positions_mm: ArrayLike,
    landmarks_mm: ArrayLike | None,
    source: str,
    *,
    wanted: Sequence[str] | None = None,
) -> Layout:
    """A layout from template places of one's own.

    Parameters
    ----------
    names : sequence of str
        Name of each place, any spelling, no two alike.
    positions_mm : (E, 3) array_like
        Places, x right, y anterior, z superior, mm.
    landmarks_mm : (3, 3) or (4, 3) array_like, optional
        NAS, LPA, RPA (and inion) in the same frame, mm.
    source : str
        Where the places come from, in words.
    wanted : sequence of str, optional
        Take only these, in this order; default all.

    Returns
    -------
    Layout

    Raises
    ------
    LabelError
        If names are empty, doubled or unknown, places are missing, not finite, or not millimetres
        of a head, or landmarks have another shape.

    Examples
    --------
    >>> places = [[0, 0, 120.0], [70, 0, 40.0], [-70, 0, 40.0]]
    >>> custom_layout(["top", "right", "left"], places, None, "a cap of three").names
    ('top', 'right', 'left')
    """
    texts = tuple(" ".join(str(name).split()) for name in names)
    canonical = _refuse_names(texts, texts)
    places = np.asarray(positions_mm, dtype=np.float64)
    if places.shape != (len(canonical), 3):
        msg = (
            f"The layout has {len(canonical)} names but places of shape {places.shape}"
            f" ({source}). Give x, y, z in mm for every name."
        )
        raise LabelError(msg)
    bad = np.flatnonzero(~np.isfinite(places).all(axis=1))
    if len(bad):
        which = ", ".join(canonical[index] for index in bad)
        msg = f"The layout has no finite place for {which} ({source}). Give x, y, z in mm."
        raise LabelError(msg)
    if len(places) > 3:
        extent = float(np.ptp(places, axis=0).max())
        if not 30.0 <= extent <= 400.0:
            msg = (
                f"The places of the layout span {extent:.3g} mm ({source}); a cap spans 100 to"
                " 300 mm. Give millimetres, not metres or unit vectors."
            )
            raise LabelError(msg)
    gaps = np.linalg.norm(places[:, None] - places[None], axis=2) + 1e9 * np.eye(len(places))
    if len(places) > 1 and gaps.min() < 1.0:
        first, second = np.unravel_index(int(gaps.argmin()), gaps.shape)
        msg = (
            f"The layout puts {canonical[first]} and {canonical[second]} on one place ({source})."
            " Give each name its own."
        )
        raise LabelError(msg)
    marks = np.full((4, 3), np.nan)
    if landmarks_mm is not None:
        given = np.asarray(landmarks_mm, dtype=np.float64)
        if given.shape not in ((3, 3), (4, 3)):
            msg = (
                f"The landmarks of the layout have shape {given.shape} ({source});"
                " expected (3, 3): NAS, LPA, RPA in mm, or (4, 3) with the inion."
            )
            raise LabelError(msg)
        marks[: len(given)] = given
    if wanted is not None:
        order = _refuse_names(wanted, canonical)
        index = [canonical.index(name) for name in order]
        canonical, places = order, places[index]
    return Layout(
        names=canonical, positions_mm=places, landmarks_mm=marks, source=source, by_rule=False
    )
