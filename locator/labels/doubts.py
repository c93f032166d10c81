"""What a person should know about the labels, in words; and what left and right rest on."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from locator.errors import SideError
from locator.labels.anatomy import Anatomy
from locator.labels.options import LabelOptions
from locator.labels.search import Search, name_spacing_mm
from locator.layout import Layout
from locator.markers import Markers
from locator.results import Finding

FloatArray = NDArray[np.float64]

# Candidates less likely than this take no part; they keep their row and their reason.
LEAST_SCORE = 0.02
# Where a side marker may be: near an ear, and worn by no name.
_SIDE_REACH_MM = 75.0


# The operator looks at what is stated below 0.9. Labels whose share of the sum is 0.9 to 0.98 are
# right as often as that, which still is one wrong label in a cap; they are stated a little lower, so
# that they are looked at. Knots from 160 simulated hard caps, each on a head of its own (points,
# jitter 4 mm, 6 of 61 off, 8 extra): above a share of 0.98 two names in a thousand are wrong.
_SHARE_KNOTS = np.array([0.0, 0.8, 0.9, 0.98, 0.99, 0.999, 1.0])
_STATED_KNOTS = np.array([0.0, 0.8, 0.86, 0.9, 0.94, 0.996, 1.0])
# On a loose cap a fit has many nearly equal maxima, of which only the best are followed. Knots (share,
# right) from 44 simulated caps with a jitter of 8 mm, each on a head of its own (2,200 labels).
_LOOSE_FROM_MM, _LOOSE_TO_MM = 5.0, 7.0
_LOOSE_SHARE_KNOTS = np.array([0.0, 0.4, 0.6, 0.8, 0.88, 0.95, 1.0])
_LOOSE_STATED_KNOTS = np.array([0.0, 0.37, 0.5, 0.65, 0.78, 0.9, 1.0])


def stated_confidence(share: FloatArray, jitter_mm: float) -> FloatArray:
    """Confidence to state for labels with this share of the whole sum: never above it.

    Parameters
    ----------
    share : (E,) ndarray
    jitter_mm : float
        Displacement of the electrodes from a smooth cap (standard deviation per axis).

    Examples
    --------
    >>> stated_confidence(np.array([0.5, 0.95, 0.999]), 3.0)
    array([0.5  , 0.885, 0.996])
    >>> stated_confidence(np.array([0.3, 0.8]), 8.0)
    array([0.2775, 0.65  ])
    """
    span = (jitter_mm - _LOOSE_FROM_MM) / (_LOOSE_TO_MM - _LOOSE_FROM_MM)
    loose = float(np.clip(span, 0.0, 1.0))
    firm = np.interp(share, _SHARE_KNOTS, _STATED_KNOTS)
    lower = np.minimum(firm, np.interp(share, _LOOSE_SHARE_KNOTS, _LOOSE_STATED_KNOTS))
    stated: FloatArray = (1.0 - loose) * firm + loose * lower
    return stated


def alternatives_of(
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


def reasons_against(
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
        if markers.score[row] < LEAST_SCORE:
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


# Scans whose left and right are exchanged: one in a thousand (no source; common sense).
_MIRRORED_LOG_PRIOR = float(np.log(1e-3))
# Odds of a layout that is not its own mirror image above which a person should look: 1 to 20.
_MIRRORED_LOOK = float(np.log(0.05))


def mirrored_probability(search: Search) -> float:
    """Probability that left and right are exchanged, from the capsules alone; 0 if they are mute."""
    if search.mirror_log_odds is None:
        return 0.0
    return float(
        1.0 / (1.0 + np.exp(-np.clip(search.mirror_log_odds + _MIRRORED_LOG_PRIOR, -50, 50)))
    )


def _mirror_words(search: Search) -> tuple[str, list[Finding]]:
    """What the layout itself says of left and right."""
    odds = search.mirror_log_odds
    if odds is None:
        return "the layout is its own mirror image, so the capsules say nothing of sides", []
    if odds < _MIRRORED_LOOK:
        power = int(min(-odds / np.log(10.0), 9.0))
        return (
            f"the capsules fit this layout at least 10^{power} times better than with left and"
            " right exchanged",
            [],
        )
    better = odds > 0
    doubt = float(np.clip(0.6 + 0.39 * mirrored_probability(search), 0.6, 0.99))
    how = "better" if better else "almost as well"
    finding = Finding(
        level="look",
        stage="labels",
        problem=(
            f"The capsules fit this layout {how} with left and right exchanged (log of the odds"
            f" {odds:+.1f}). Either the image is mirrored, or the names are not those of this cap."
        ),
        suggestion=(
            "Check the conversion of the scan and one electrode whose side you know before using"
            " any side of this result."
        ),
        doubt=doubt,
    )
    return f"but the capsules fit this layout {how} with left and right exchanged", [finding]


def check_sides(
    markers: Markers,
    options: LabelOptions,
    anatomy: Anatomy,
    marker: NDArray[np.int32],
    looks: FloatArray,
    search: Search,
) -> tuple[str, list[Finding]]:
    """What left and right rest on; a side marker must agree with the image."""
    basis = "the image's affine (scanner axes)"
    if options.landmarks_scanner_mm is not None:
        basis += ", and the given LPA and RPA agree"
    words, doubts = _mirror_words(search)
    said, findings = _check_side_marker(basis, markers, options, anatomy, marker, looks)
    return f"{said}; {words}", [*findings, *doubts]


def _check_side_marker(
    basis: str,
    markers: Markers,
    options: LabelOptions,
    anatomy: Anatomy,
    marker: NDArray[np.int32],
    looks: FloatArray,
) -> tuple[str, list[Finding]]:
    """What a side marker adds to `basis`."""
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


def label_findings(
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
