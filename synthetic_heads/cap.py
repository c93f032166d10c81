"""An invented electrode cap on a skin: contacts, capsules, the ones that came off, extra blobs."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.spatial.transform import Rotation

from synthetic_heads.meshes import Skin, unit
from synthetic_heads.tape import all_places, needs_lower

Array = NDArray[np.float64]

EXTRA_CLEARANCE_MM = 12.0
"""Extra blobs stay at least this far from every named place."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Capsules:
    """Oil capsules: centres, the axis they sit along, sizes and brightness.

    Attributes
    ----------
    centers_mm : (N, 3) ndarray
        Centres, scanner mm.
    axes : (N, 3) ndarray
        Unit outward normal of the skin below; the capsule's axis of revolution.
    diameters_mm, heights_mm : (N,) ndarray
        Size across and along the axis, mm.
    gaps_mm : (N,) ndarray
        Skin to underside of the capsule, mm.
    brightness : (N,) ndarray
        Relative to the cap's common brightness.
    """

    centers_mm: Array
    axes: Array
    diameters_mm: Array
    heights_mm: Array
    gaps_mm: Array
    brightness: Array

    def __len__(self) -> int:
        return len(self.centers_mm)

    def take(self, index: ArrayLike) -> Capsules:
        """The chosen capsules, by indices or a mask."""
        chosen = np.asarray(index)
        return Capsules(
            centers_mm=self.centers_mm[chosen],
            axes=self.axes[chosen],
            diameters_mm=self.diameters_mm[chosen],
            heights_mm=self.heights_mm[chosen],
            gaps_mm=self.gaps_mm[chosen],
            brightness=self.brightness[chosen],
        )


@dataclass(frozen=True, eq=False, kw_only=True)
class Cap:
    """A cap as it sits on a head, with the truth about it.

    Attributes
    ----------
    names : tuple of str
        Electrodes, the recorded ones first, then ``also`` (reference, ground).
    also : tuple of str
        Those of ``names`` that wear a capsule and have no channel.
    contacts_mm : (E, 3) ndarray
        True contact points on the skin, scanner mm.
    normals : (E, 3) ndarray
        Outward skin normals there.
    present : (E,) ndarray of bool
        Whether the electrode's capsule is on.
    capsules : Capsules
        One for each electrode (E), whether on or off.
    extras : Capsules
        Blobs that belong to no electrode.
    side_marker : str or None
        ``right`` or ``left``: an extra capsule was worn on that side.
    side_capsule : Capsules
        That capsule (one or none).
    shape : str
        ``ellipsoid`` or ``disc``.
    settings : dict
        Everything ``make_cap`` was told.
    """

    names: tuple[str, ...]
    also: tuple[str, ...]
    contacts_mm: Array
    normals: Array
    present: NDArray[np.bool_]
    capsules: Capsules
    extras: Capsules
    side_marker: str | None
    side_capsule: Capsules
    shape: str
    settings: dict[str, Any] = field(default_factory=dict)

    @property
    def worn(self) -> Capsules:
        """All capsules in the image: present electrodes, extras, side marker, in this order."""
        parts = [self.capsules.take(self.present), self.extras, self.side_capsule]
        return Capsules(
            centers_mm=np.concatenate([p.centers_mm for p in parts]),
            axes=np.concatenate([p.axes for p in parts]),
            diameters_mm=np.concatenate([p.diameters_mm for p in parts]),
            heights_mm=np.concatenate([p.heights_mm for p in parts]),
            gaps_mm=np.concatenate([p.gaps_mm for p in parts]),
            brightness=np.concatenate([p.brightness for p in parts]),
        )

    def truth(self) -> dict[str, Any]:
        """The answers as plain lists and numbers, for JSON."""
        electrodes = []
        for index, name in enumerate(self.names):
            on = bool(self.present[index])
            electrodes.append(
                {
                    "name": name,
                    "channel": name not in self.also,
                    "contact_mm": _rounded(self.contacts_mm[index]),
                    "normal": _rounded(self.normals[index]),
                    "capsule_mm": _rounded(self.capsules.centers_mm[index]) if on else None,
                    "diameter_mm": round(float(self.capsules.diameters_mm[index]), 4),
                    "height_mm": round(float(self.capsules.heights_mm[index]), 4),
                    "gap_mm": round(float(self.capsules.gaps_mm[index]), 4),
                }
            )
        return {
            "electrodes": electrodes,
            "extras_mm": [_rounded(p) for p in self.extras.centers_mm],
            "side_marker": self.side_marker,
            "side_marker_mm": [_rounded(p) for p in self.side_capsule.centers_mm],
            "capsule_shape": self.shape,
            "cap_settings": self.settings,
        }


def _rounded(point: Array) -> list[float]:
    return [round(float(value), 4) for value in point]


def _turned(
    places: Array, center: Array, up: Array, front: Array, drawn: Mapping[str, Any]
) -> Array:
    """Slide, turn and stretch places as one cap about the centre of the head."""
    right = np.cross(front, up)
    axes = np.stack([right, front, up])
    moved = Rotation.from_rotvec(np.radians(drawn["turn_deg"]) @ axes).apply(places - center)
    # stretch: every place keeps its bearing from the top, its angle from the top grows
    radius = np.linalg.norm(moved, axis=1, keepdims=True)
    bearing = unit(moved - (moved @ up)[:, None] * up)
    angle = np.arccos(np.clip((moved @ up)[:, None] / radius, -1, 1))
    lengthwise = (bearing @ front)[:, None] ** 2
    factor = 1 + drawn["stretch"][0] * lengthwise + drawn["stretch"][1] * (1 - lengthwise)
    angle = angle * factor
    moved = radius * (np.cos(angle) * up + np.sin(angle) * bearing)
    slid: Array = center + moved + drawn["slide_mm"][0] * right + drawn["slide_mm"][1] * front
    return slid


def make_cap(
    vertices_mm: ArrayLike,
    faces: ArrayLike,
    landmarks_mm: Mapping[str, ArrayLike],
    names: Sequence[str],
    seed: int,
    *,
    also: Sequence[str] = (),
    slide_mm: float = 0.0,
    turn_deg: float = 0.0,
    stretch: float = 0.0,
    exact: bool = False,
    jitter_mm: float = 0.0,
    n_off: int = 0,
    off: Sequence[str] = (),
    n_extra: int = 0,
    extra_where: str = "anywhere",
    side_marker: str | None = None,
    capsule_mm: tuple[float, float] = (8.0, 6.0),
    capsule_sd: float = 0.03,
    gap_mm: float = 2.0,
    gap_sd_mm: float = 0.3,
    brightness_sd: float = 0.05,
    shape: str = "ellipsoid",
) -> Cap:
    """Put a cap on a skin.

    The places of the 10-05 system by the tape-measure rules; then the whole cap slides, turns
    and stretches as one and is put back on the skin; then each electrode is jittered along it.

    Parameters
    ----------
    vertices_mm : (V, 3) array_like
        Closed skin mesh, scanner mm.
    faces : (F, 3) array_like of int
        Its triangles, outward.
    landmarks_mm : mapping
        ``NAS``, ``INI``, ``LPA``, ``RPA``, each (3,), scanner mm.
    names : sequence of str
        Electrodes with a channel, at most 128 in the trade.
    seed : int
        All draws come from it.
    also : sequence of str
        Further places with a capsule and no channel (reference, ground), e.g. FCz and AFz.
    slide_mm : float
        Slide of the whole cap: SD of each of the two directions (to the right, to the front), mm.
    turn_deg : float
        Turn of the whole cap: SD about each of the three head axes (right, front, up), degrees.
    stretch : float
        Stretch of the cap from the top: SD of the relative length, drawn once lengthwise and
        once across.
    exact : bool
        Take ``slide_mm``, ``turn_deg`` and ``stretch`` as exact sizes: the slide is that long in
        a drawn direction, the turn that large about each axis with a drawn sign, the stretch has
        that size with drawn signs.
    jitter_mm : float
        Jitter of each electrode along the skin: SD of each of the two tangential directions, mm
        (the mean distance is 1.25 times this).
    n_off : int
        Capsules that came off, drawn among all electrodes not in ``off``.
    off : sequence of str
        Names whose capsules are off for certain.
    n_extra : int
        Blobs that are no electrode, over the skin, at least 12 mm from every named place of this
        cap (and from each other).
    extra_where : str
        ``anywhere`` on the head above the ears and face, ``inside`` (within the cap) or
        ``outside`` (beyond the rim of the cap).
    side_marker : str, optional
        ``right`` or ``left``: a capsule on the cheekbone in front of that ear.
    capsule_mm : (float, float)
        Diameter (4 to 12) and height (3 to 12) of a capsule, mm.
    capsule_sd : float
        Relative SD of the sizes from capsule to capsule.
    gap_mm, gap_sd_mm : float
        Skin to underside of the capsule and its SD, mm.
    brightness_sd : float
        Relative SD of the brightness from capsule to capsule.
    shape : str
        ``ellipsoid`` or ``disc`` (a short cylinder).

    Returns
    -------
    Cap
        The cap and the truth about it.

    Raises
    ------
    ValueError
        If a size is out of its range, a name has no rule or is doubled, or the extra blobs do
        not fit.
    """
    settings: dict[str, Any] = {
        "seed": int(seed), "slide_mm": slide_mm, "turn_deg": turn_deg, "stretch": stretch,
        "exact": exact, "jitter_mm": jitter_mm, "n_off": n_off, "off": list(off),
        "n_extra": n_extra, "extra_where": extra_where, "side_marker": side_marker,
        "capsule_mm": list(capsule_mm), "capsule_sd": capsule_sd, "gap_mm": gap_mm,
        "gap_sd_mm": gap_sd_mm, "brightness_sd": brightness_sd, "shape": shape,
        "also": list(also),
    }  # fmt: skip
    worn = tuple(names) + tuple(also)
    _check(worn, settings)
    rng = np.random.default_rng([int(seed), 0xCA9])
    marks = {name: np.asarray(point, dtype=np.float64) for name, point in landmarks_mm.items()}
    lacking = [name for name in ("NAS", "INI", "LPA", "RPA") if name not in marks]
    if lacking:
        msg = f"A cap needs the landmark(s) {', '.join(lacking)}."
        raise ValueError(msg)
    ears = np.array([marks["LPA"], marks["RPA"]])
    skin = Skin(vertices_mm, faces).without_thin_parts(ears)
    places = all_places(vertices_mm, faces, marks, lower=needs_lower(worn), skin=skin)
    unknown = [name for name in worn if name not in places]
    if unknown:
        msg = f"No tape-measure rule for the name(s) {', '.join(unknown)}."
        raise ValueError(msg)
    ideal = np.array([places[name] for name in worn])

    right = unit(marks["RPA"] - marks["LPA"])
    forward = places["Fpz"] - places["Oz"]
    up = unit(np.cross(right, forward))
    front = unit(np.cross(up, right))
    center = (places["T7"] + places["T8"] + places["Fpz"] + places["Oz"]) / 4

    drawn = _draw_shift(rng, slide_mm, turn_deg, stretch, exact=exact)
    settings["drawn"] = {key: _rounded(value) for key, value in drawn.items()}
    contacts = skin.closest(_turned(ideal, center, up, front, drawn))
    if jitter_mm > 0:
        normals = skin.normal(contacts)
        first = unit(np.cross(normals, front + 0.1 * up))
        second = np.cross(normals, first)
        by = rng.normal(0, jitter_mm, (len(contacts), 2))
        contacts = skin.closest(contacts + by[:, :1] * first + by[:, 1:] * second)
    normals = skin.normal(contacts)

    present = ~np.isin(worn, list(off))
    candidates = np.flatnonzero(present)
    if n_off:
        if n_off > len(candidates):
            msg = f"{n_off} capsules off, but the cap has only {len(candidates)} on."
            raise ValueError(msg)
        present[rng.choice(candidates, n_off, replace=False)] = False

    def capsules(points: Array, outward: Array) -> Capsules:
        count = len(points)
        sizes = np.clip(1 + rng.normal(0, capsule_sd, count), 0.8, 1.2)
        diameters, heights = capsule_mm[0] * sizes, capsule_mm[1] * sizes
        gaps = np.clip(rng.normal(gap_mm, gap_sd_mm, count), 0.0, None)
        return Capsules(
            centers_mm=points + outward * (gaps + heights / 2)[:, None],
            axes=outward,
            diameters_mm=diameters,
            heights_mm=heights,
            gaps_mm=gaps,
            brightness=np.clip(1 + rng.normal(0, brightness_sd, count), 0.5, 1.5),
        )

    own = capsules(contacts, normals)
    extra_points = _draw_extras(
        rng, skin, contacts, n_extra, extra_where, (center, up, front, marks["NAS"])
    )
    extras = capsules(extra_points, skin.normal(extra_points) if n_extra else np.zeros((0, 3)))
    side_point = np.zeros((0, 3))
    if side_marker:
        ear, outward = (marks["RPA"], right) if side_marker == "right" else (marks["LPA"], -right)
        side_point = skin.closest((ear + 32 * front - 2 * up + 8 * outward)[None])
    side = capsules(side_point, skin.normal(side_point) if side_marker else np.zeros((0, 3)))
    return Cap(
        names=worn,
        also=tuple(also),
        contacts_mm=contacts,
        normals=normals,
        present=present,
        capsules=own,
        extras=extras,
        side_marker=side_marker,
        side_capsule=side,
        shape=shape,
        settings=settings,
    )


def _check(worn: tuple[str, ...], settings: Mapping[str, Any]) -> None:
    """Refuse settings that describe no cap."""
    doubled = sorted({name for name in worn if worn.count(name) > 1})
    if doubled:
        msg = f"A cap cannot have a name twice: {', '.join(doubled)}."
        raise ValueError(msg)
    across, high = settings["capsule_mm"]
    if not (4.0 <= across <= 12.0 and 3.0 <= high <= 12.0):
        msg = f"Capsules are 4 to 12 mm across and 3 to 12 mm high, not {settings['capsule_mm']}."
        raise ValueError(msg)
    if settings["shape"] not in ("ellipsoid", "disc"):
        msg = f"A capsule is an ellipsoid or a disc, not {settings['shape']!r}."
        raise ValueError(msg)
    if settings["extra_where"] not in ("anywhere", "inside", "outside"):
        msg = f"Extra blobs lie anywhere, inside or outside, not {settings['extra_where']!r}."
        raise ValueError(msg)
    if settings["side_marker"] not in (None, "left", "right"):
        msg = f"A side marker is on the left or on the right, not {settings['side_marker']!r}."
        raise ValueError(msg)


def _draw_shift(
    rng: np.random.Generator, slide_mm: float, turn_deg: float, stretch: float, *, exact: bool
) -> dict[str, Array]:
    """Draw how the whole cap sits: slide (2,), turn (3,), stretch (2,)."""
    if exact:
        angle = rng.uniform(0, 2 * np.pi)
        return {
            "slide_mm": slide_mm * np.array([np.cos(angle), np.sin(angle)]),
            "turn_deg": turn_deg * rng.choice([-1.0, 1.0], 3),
            "stretch": stretch * rng.choice([-1.0, 1.0], 2),
        }
    return {
        "slide_mm": slide_mm * rng.normal(size=2),
        "turn_deg": turn_deg * rng.normal(size=3),
        "stretch": stretch * rng.normal(size=2),
    }


def _draw_extras(
    rng: np.random.Generator,
    skin: Skin,
    contacts: Array,
    count: int,
    where: str,
    frame: tuple[Array, Array, Array, Array],
) -> Array:
    """Places of blobs that are no electrode."""
    if count == 0:
        return np.zeros((0, 3))
    center, up, front, nasion = frame
    vertices = skin.vertices
    height = (vertices - center) @ up
    depth = (vertices - center) @ front
    # the bare skin: above the ears, behind the eyes; and a smooth place (no ear, no nose)
    low = (contacts - center).dot(up).min()
    usable = height > min(low, 0.0) - (35.0 if where == "outside" else 15.0)
    brow = float((nasion - center) @ up)
    usable &= (depth < 0.55 * float((nasion - center) @ front)) | (height > brow + 15.0)
    # not on the cut through the neck
    usable &= (skin.normals @ up > -0.6) & (height > height.min() + 12.0)
    on_skin = np.zeros(len(vertices), dtype=bool)
    on_skin[skin.faces] = True  # not on an ear
    pool = np.flatnonzero(usable & on_skin)
    pool = pool[rng.permutation(len(pool))]
    nearest = np.concatenate(
        [np.linalg.norm(vertices[part][:, None] - contacts[None], axis=2).min(axis=1)
         for part in np.array_split(pool, max(1, len(pool) // 2000))]
    )  # fmt: skip
    if where == "inside":
        good = nearest < 25.0
    elif where == "outside":
        good = (nearest < 60.0) & (height[pool] < low + 5.0)
    else:
        good = nearest < 60.0
    pool = pool[good & (nearest >= EXTRA_CLEARANCE_MM + 0.5)]
    chosen: list[Array] = []
    smooth = skin.normal(vertices[pool[:4000]], 10.0)
    alike = np.einsum("ij,ij->i", smooth, skin.normals[pool[:4000]]) > 0.9
    for index in pool[:4000][alike]:
        place = vertices[index]
        if all(np.linalg.norm(place - other) >= EXTRA_CLEARANCE_MM for other in chosen):
            chosen.append(place)
            if len(chosen) == count:
                return np.array(chosen)
    msg = f"Only {len(chosen)} of {count} extra blobs fit {where} this cap; ask for fewer."
    raise ValueError(msg)
