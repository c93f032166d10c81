"""The tape-measure rules of the 10-20, 10-10 and 10-05 systems on any skin mesh.

Stated here for the phantoms alone, so that the tool's own layouts have a second witness.

The rules (Jasper H 1958, Electroencephalogr Clin Neurophysiol 10:371-375; Klem GH et al. 1999,
Electroencephalogr Clin Neurophysiol Suppl 52:3-6; Acharya JN et al. 2016, J Clin Neurophysiol
33:308; the 5 % places after Oostenveld R & Praamstra P 2001, Clin Neurophysiol 112:713-719):

1. Sagittal tape from nasion to inion through the vertex: Fpz 10 %, AFz 20, Fz 30, FCz 40, Cz 50,
   CPz 60, Pz 70, POz 80, Oz 90 %; halves of these steps are the 5 % places.
2. Coronal tape from the left to the right preauricular point through Cz: T7 10 %, C5 20, C3 30,
   C1 40, Cz 50 %. Cz halves both tapes: the two midpoints are iterated until they agree.
3. Horizontal tape on each side through Fpz, T7 (T8), Oz, each quarter divided in five: Fp1, AF7,
   F7, FT7, T7, TP7, P7, PO7, O1; halves of these steps are the ends of the 5 % rows.
4. Row tapes from each of these ends to the midline: eight equal steps (7h, 5, 5h, 3, 3h, 1, 1h).
5. The chain 9/10: straight down the skin from the ends of the rows by 10 % of the coronal tape
   (9h/10h: 5 %); so also I1, OI1 under O1, and Iz, OIz under Oz on the midline tape.

No tape and no electrode goes over an ear: thin plates near the preauricular points are left out.
A tape is taut: in the plane of the tape it follows the convex hull of the skin (it bridges the
notch above the nose), and each place is then put on the skin below it.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.spatial import ConvexHull

from synthetic_heads.meshes import Skin, plane_cut, unit

Array = NDArray[np.float64]

NAMES_8 = ("Fp1", "Fp2", "C3", "Cz", "C4", "Pz", "O1", "O2")
NAMES_19 = tuple("Fp1 Fp2 F7 F3 Fz F4 F8 T7 C3 Cz C4 T8 P7 P3 Pz P4 P8 O1 O2".split())
NAMES_31 = tuple(
    "Fp1 Fp2 F7 F3 Fz F4 F8 FT9 FC5 FC1 FC2 FC6 FT10 T7 C3 Cz C4 T8 TP9 CP5 CP1 CP2 CP6 TP10 "
    "P7 P3 Pz P4 P8 O1 O2".split()
)
NAMES_61 = tuple(
    "Fp1 Fpz Fp2 AF7 AF3 AFz AF4 AF8 F7 F5 F3 F1 Fz F2 F4 F6 F8 FT7 FC5 FC3 FC1 FCz FC2 FC4 FC6 "
    "FT8 T7 C5 C3 C1 Cz C2 C4 C6 T8 TP7 CP5 CP3 CP1 CPz CP2 CP4 CP6 TP8 P7 P5 P3 P1 Pz P2 P4 P6 "
    "P8 PO7 PO3 POz PO4 PO8 O1 Oz O2".split()
)
NAMES_128 = NAMES_61 + tuple(
    "F9 F10 FT9 FT10 TP9 TP10 P9 P10 PO9 PO10 Iz I1 I2 AFp1 AFp2 AFF5h AFF1h AFF2h AFF6h "
    "FFT7h FFC5h FFC3h FFC1h FFC2h FFC4h FFC6h FFT8h FTT7h FCC5h FCC3h FCC1h FCC2h FCC4h FCC6h "
    "FTT8h TTP7h CCP5h CCP3h CCP1h CCP2h CCP4h CCP6h TTP8h TPP7h CPP5h CPP3h CPP1h CPP2h CPP4h "
    "CPP6h TPP8h PPO5h PPO1h PPO2h PPO6h POO1 POO2 OI1h OI2h FTT9h FTT10h TTP9h TTP10h TPP9h TPP10h "
    "PPO9h PPO10h".split()
)
CAPS: dict[int, tuple[str, ...]] = {
    8: NAMES_8,
    19: NAMES_19,
    31: NAMES_31,
    61: NAMES_61,
    128: NAMES_128,
}
"""Invented caps by their number of electrodes (with 8 to 128 names)."""

# Row name by its share of the sagittal tape; the lateral part of a row bears another letter.
_ROWS = {
    15: ("AFp", "AFp"), 20: ("AF", "AF"), 25: ("AFF", "AFF"), 30: ("F", "F"),
    35: ("FFC", "FFT"), 40: ("FC", "FT"), 45: ("FCC", "FTT"), 50: ("C", "T"),
    55: ("CCP", "TTP"), 60: ("CP", "TP"), 65: ("CPP", "TPP"), 70: ("P", "P"),
    75: ("PPO", "PPO"), 80: ("PO", "PO"), 85: ("POO", "POO"),
}  # fmt: skip
_OLD_NAMES = {"T3": "T7", "T4": "T8", "T5": "P7", "T6": "P8"}


class Tape:
    """A taut tape on the skin from one point to another through the plane of a third.

    Parameters
    ----------
    skin : Skin
        The skin.
    start_mm, through_mm, end_mm : (3,) array_like
        Ends of the tape and a point that fixes its plane and its side, mm.
    """

    def __init__(
        self, skin: Skin, start_mm: ArrayLike, through_mm: ArrayLike, end_mm: ArrayLike
    ) -> None:
        start, through, end = (
            np.asarray(p, dtype=np.float64) for p in (start_mm, through_mm, end_mm)
        )
        along = unit(end - start)
        up = through - start
        up = unit(up - (up @ along) * along)
        normal = np.cross(along, up)
        cut = plane_cut(skin.vertices, skin.faces, start, normal)
        flat = np.stack([(cut - start) @ along, (cut - start) @ up], axis=1)
        chord = float(np.linalg.norm(end - start))
        # only the side of the tape, and only this part of the body (neck and nose lie beyond)
        keep = (flat[:, 1] > 0) & (flat[:, 0] > -0.6 * chord) & (flat[:, 0] < 1.6 * chord)
        flat = np.concatenate([[[0.0, 0.0], [chord, 0.0]], flat[keep]])
        hull = ConvexHull(flat).vertices
        if len(hull) and 0 in hull:
            hull = np.roll(hull, -int(np.flatnonzero(hull == 0)[0]))
        # counter-clockwise from the start: first the chord to the end, then back over the head
        place = int(np.flatnonzero(hull == 1)[0])
        over = flat[np.concatenate([hull[place:], hull[:1]])][::-1]
        self._points = start + over[:, :1] * along + over[:, 1:] * up
        step = np.linalg.norm(np.diff(self._points, axis=0), axis=1)
        self._run = np.concatenate([[0.0], np.cumsum(step)])
        self.length_mm = float(self._run[-1])

    def at(self, shares: ArrayLike) -> Array:
        """Points (N, 3) at shares (0 to 1) of the tape's length, mm (on the tape)."""
        run = np.atleast_1d(np.asarray(shares, dtype=np.float64)) * self.length_mm
        found: Array = np.stack(
            [np.interp(run, self._run, self._points[:, axis]) for axis in range(3)], axis=1
        )
        return found

    def share_of(self, point_mm: ArrayLike) -> float:
        """Share of the length at the tape point nearest to a point."""
        fine = np.linspace(0, 1, 2001)
        return float(fine[((self.at(fine) - np.asarray(point_mm)) ** 2).sum(axis=1).argmin()])


def _down_the_skin(skin: Skin, start: Array, down: Array, outward: Array, length: float) -> Array:
    """Point reached from ``start`` going down the skin by ``length`` mm in a vertical plane."""
    normal = unit(np.cross(down, outward))
    outward = unit(np.cross(normal, down))
    if outward @ (start - skin.vertices.mean(axis=0)) < 0:
        outward = -outward
    cut = plane_cut(skin.vertices, skin.faces, start, normal)
    flat = np.stack([(cut - start) @ down, (cut - start) @ outward], axis=1)
    height, reach, run = 0.0, 0.0, 0.0
    step = 2.0
    while run < length:
        height += step
        near = flat[np.abs(flat[:, 0] - height) < 2.5]
        # the skin under an ear: the place nearest to where the skin would go on smoothly
        near = near[np.abs(near[:, 1] - reach) < 10.0]
        target = near[np.abs(near[:, 1] - reach).argmin(), 1] if len(near) else reach
        change = float(np.clip(target - reach, -1.5 * step, 0.4 * step))
        run += float(np.hypot(step, change))
        reach += change
    return start + height * down + reach * outward


def all_places(
    vertices_mm: ArrayLike,
    faces: ArrayLike,
    landmarks_mm: Mapping[str, ArrayLike],
    *,
    lower: bool = True,
    skin: Skin | None = None,
) -> dict[str, Array]:
    """All 10-05 places on a skin by the tape-measure rules.

    Parameters
    ----------
    vertices_mm : (V, 3) array_like
        Closed skin mesh, mm, any right-handed frame.
    faces : (F, 3) array_like of int
        Its triangles, outward.
    landmarks_mm : mapping
        ``NAS``, ``INI``, ``LPA``, ``RPA``, each (3,), mm.
    lower : bool
        Also the places 5 and 10 % below the rows (9h, 9, I1, OI1 ...).
    skin : Skin, optional
        The same mesh without the ears, when it has been prepared already.

    Returns
    -------
    dict of str to (3,) ndarray
        Name to place on the skin, mm; 10-20, 10-10 and 10-05 names, ``Nz``, ``Iz``, ``A1``,
        ``A2`` (ear lobes), ``M1``, ``M2`` (mastoids), ``LPA``, ``RPA``.

    Raises
    ------
    ValueError
        If a landmark is missing.

    Examples
    --------
    >>> from synthetic_heads.meshes import icosphere
    >>> sphere, faces = icosphere(4)
    >>> marks = {"NAS": (0, 90, 0), "INI": (0, -90, 0), "LPA": (-90, 0, 0), "RPA": (90, 0, 0)}
    >>> places = all_places(90 * sphere, faces, marks)
    >>> bool(np.linalg.norm(places["Cz"] - [0, 0, 90]) < 0.2)
    True
    >>> angle = np.degrees(np.arctan2(places["C3"][2], -places["C3"][0]))
    >>> bool(abs(angle - 0.30 * 180) < 0.2)  # 30 % of the half circle
    True
    """
    lacking = [name for name in ("NAS", "INI", "LPA", "RPA") if name not in landmarks_mm]
    if lacking:
        msg = f"The tape-measure rules need the landmark(s) {', '.join(lacking)}."
        raise ValueError(msg)
    if skin is None:
        ears = [np.asarray(landmarks_mm[name], dtype=np.float64) for name in ("LPA", "RPA")]
        skin = Skin(vertices_mm, faces).without_thin_parts(np.array(ears))
    nas, ini, lpa, rpa = (
        np.asarray(landmarks_mm[name], dtype=np.float64) for name in ("NAS", "INI", "LPA", "RPA")
    )
    right = unit(rpa - lpa)
    up = np.cross(right, nas - ini)
    up = unit(up)
    middle = (lpa + rpa) / 2
    height = (skin.vertices - middle) @ up
    vertex = skin.vertices[
        np.where(np.abs((skin.vertices - middle) @ right) < 15, height, -np.inf).argmax()
    ]
    for _ in range(20):
        sagittal = Tape(skin, nas, vertex, ini)
        half = sagittal.at(0.5)[0]
        coronal = Tape(skin, lpa, half, rpa)
        moved = coronal.at(0.5)[0]
        if np.linalg.norm(moved - vertex) < 0.02:
            break
        vertex = moved
    tape: dict[str, Array] = {"Cz": coronal.at(0.5)[0]}
    midline = {0: "Nz", 10: "Fpz", 90: "Oz", 95: "OIz", 100: "Iz"}
    midline.update({share: f"{row}z" for share, (row, _) in _ROWS.items() if share != 50})
    for share, name in midline.items():
        tape[name] = sagittal.at(share / 100)[0]
    tape["T7"], tape["T8"] = coronal.at([0.1, 0.9])
    # the ends of the rows, on the horizontal tape
    for odd in (True, False):
        temple = tape["T7" if odd else "T8"]
        ring = Tape(skin, tape["Fpz"], temple, tape["Oz"])
        at_temple = ring.share_of(temple)
        for percent in (10, *_ROWS, 90):
            share = percent / 50 * at_temple if percent <= 50 else (
                at_temple + (percent - 50) / 50 * (1 - at_temple)
            )  # fmt: skip
            place = ring.at(share)[0]
            if percent == 10:
                tape["Fp1" if odd else "Fp2"] = place
            elif percent == 90:
                tape["O1" if odd else "O2"] = place
            elif percent != 50:
                tape[f"{_ROWS[percent][1]}{7 if odd else 8}"] = place
        tape["Fp1h" if odd else "Fp2h"] = ring.at(0.05 / 0.5 * at_temple)[0]
        tape["O1h" if odd else "O2h"] = ring.at(at_temple + 0.45 / 0.5 * (1 - at_temple))[0]
    for odd in (True, False):
        _fill_rows(skin, tape, odd=odd)
        if lower:
            tenth = 0.1 * coronal.length_mm
            tape.update(_lower_chain(skin, tape, sagittal, tenth, middle, odd=odd))
    names = list(tape)
    on_skin = skin.closest(np.array([tape[name] for name in names]))
    places = dict(zip(names, on_skin, strict=True))
    places.update(_ears(skin, lpa, rpa, nas - ini, up))
    places.update({old: places[new] for old, new in _OLD_NAMES.items()})
    places.update({"Nz": nas, "Iz": ini, "LPA": lpa, "RPA": rpa})
    return places


def _fill_rows(skin: Skin, tape: dict[str, Array], *, odd: bool) -> None:
    """Divide each row from its end to the midline in eight steps."""
    for inner, outer in _ROWS.values():
        end = tape[f"{outer}{7 if odd else 8}"]
        other = tape[f"{outer}{8 if odd else 7}"]
        center = tape[f"{inner}z"]
        row = Tape(skin, end, center, other)
        at_middle = row.share_of(center)
        digits = (7, 7, 5, 5, 3, 3, 1, 1)
        halves = ("", "h", "", "h", "", "h", "", "h")
        for step in range(1, 8):
            digit = digits[step] + (0 if odd else 1)
            prefix = outer if digits[step] == 7 else inner
            tape[f"{prefix}{digit}{halves[step]}"] = row.at(step / 8 * at_middle)[0]


def _lower_chain(
    skin: Skin, tape: dict[str, Array], sagittal: Tape, length: float, middle: Array, *, odd: bool
) -> dict[str, Array]:
    """Places 5 and 10 % below the ends of the rows."""
    to_right = unit(tape["T8"] - tape["T7"])
    down = -unit(np.cross(to_right, tape["Fpz"] - tape["Oz"]))
    found: dict[str, Array] = {}
    ends = {outer: f"{outer}{7 if odd else 8}" for _, outer in _ROWS.values()}
    for prefix, name in ends.items():
        start = tape[name]
        outward = unit(start - middle - ((start - middle) @ down) * down)
        for suffix, share in (("h", 0.5), ("", 1.0)):
            label = f"{prefix}{9 if odd else 10}{suffix}"
            found[label] = _down_the_skin(skin, start, down, outward, share * length)
    for end, lower, half in (("O1", "I1", "OI1"), ("O1h", "I1h", "OI1h")):
        if not odd:
            end, lower, half = (text.replace("1", "2") for text in (end, lower, half))
        start = tape[end]
        outward = unit(start - middle - ((start - middle) @ down) * down)
        back = 0.1 * sagittal.length_mm
        found[half] = _down_the_skin(skin, start, down, outward, 0.5 * back)
        found[lower] = _down_the_skin(skin, start, down, outward, back)
    return found


def _ears(skin: Skin, lpa: Array, rpa: Array, forward: Array, up: Array) -> dict[str, Array]:
    """Ear lobes and mastoids: usual distances from the preauricular points (no source)."""
    front = unit(forward - (forward @ up) * up)
    right = unit(rpa - lpa)
    found = {}
    for ear, outward, digit in ((lpa, -right, 1), (rpa, right, 2)):
        found[f"A{digit}"] = ear + 12 * outward - 10 * front - 28 * up
        found[f"M{digit}"] = ear - 2 * outward - 32 * front - 16 * up
    names = list(found)
    return dict(zip(names, skin.closest(np.array([found[n] for n in names])), strict=True))


def needs_lower(names: Iterable[str]) -> bool:
    """Whether any of the names lies below the rows (9, 10, 9h, 10h, I1, OI1 ...)."""
    return any(
        name.rstrip("h").endswith(("9", "10")) or name.startswith(("I", "OI")) for name in names
    )


def place_names(
    vertices_mm: ArrayLike,
    faces: ArrayLike,
    landmarks_mm: Mapping[str, ArrayLike],
    names: Iterable[str],
) -> Array:
    """Places of the named electrodes on a skin by the tape-measure rules.

    Parameters
    ----------
    vertices_mm : (V, 3) array_like
        Closed skin mesh, mm.
    faces : (F, 3) array_like of int
        Its triangles, outward.
    landmarks_mm : mapping
        ``NAS``, ``INI``, ``LPA``, ``RPA``, each (3,), mm.
    names : iterable of str
        10-05 names, old names (``T3`` ...), ``A1``, ``A2``, ``M1``, ``M2``.

    Returns
    -------
    (E, 3) ndarray
        Places on the skin, mm, in the order of ``names``.

    Raises
    ------
    ValueError
        If a landmark is missing or a name is not known.
    """
    asked = list(names)
    places = all_places(vertices_mm, faces, landmarks_mm, lower=needs_lower(asked))
    unknown = [name for name in asked if name not in places]
    if unknown:
        msg = f"No tape-measure rule for the name(s) {', '.join(unknown)}."
        raise ValueError(msg)
    found: Array = np.array([places[name] for name in asked])
    return found
