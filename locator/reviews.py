"""Decisions of people on electrodes: the newest one per electrode holds."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from locator.labels import Electrodes, contact_points
from locator.markers import Markers
from locator.results import Finding, Frozen
from locator.skin import Skin

FloatArray = NDArray[np.float64]

SAME_MM = 3.0
"""A capsule that a person points at is the candidate blob nearest to it within this distance:
three quarters of the smallest capsule (4 mm); common practice, no source."""

DIFFER_MM = 1.0
"""Two people differ when their places are further apart than this; common practice, no source."""

HAND_SD_MM = 1.5
"""How well a person points at a visible capsule on a 1 mm scan; value from memory (1 to 2 mm)."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Review(Frozen):
    """One decision.

    Attributes
    ----------
    who : str
    when : str
        ISO 8601 with its offset from UTC.
    electrode : str
    kind : {"capsule", "contact", "absent", "withdrawn"}
        Its capsule is here; its contact point is here; it has no capsule; the person takes
        back what they decided before.
    place_scanner_mm : (3,) ndarray or None
        For `capsule` and `contact`.
    """

    who: str
    when: str
    electrode: str
    kind: Literal["capsule", "contact", "absent", "withdrawn"]
    place_scanner_mm: FloatArray | None = None


def decisions_in_force(
    reviews: Sequence[Review],
) -> tuple[dict[str, Review], tuple[Finding, ...]]:
    """Pick the newest decision per electrode, and find where two people differ.

    Parameters
    ----------
    reviews : sequence of Review
        In the order they were written; of two with the same time the later one is newer.

    Returns
    -------
    dict of str to Review
        By electrode, without those that were withdrawn.
    tuple of Finding
        One per electrode on which the last words of two people differ.
    """
    newest: dict[str, dict[str, Review]] = {}
    for review in sorted(reviews, key=lambda r: _moment(r.when)):
        people = newest.setdefault(review.electrode, {})
        people.pop(review.who, None)
        people[review.who] = review
    in_force, findings = {}, []
    for electrode, people in newest.items():
        standing = [review for review in people.values() if review.kind != "withdrawn"]
        if not standing:
            continue
        last = standing[-1]
        in_force[electrode] = last
        others = [review.who for review in standing[:-1] if _differ(review, last)]
        if others:
            findings.append(
                Finding(
                    level="look",
                    stage="reviews",
                    problem=f"{last.who} and {', '.join(others)} decided differently on {electrode};"
                    f" the newest decision holds ({last.who}, {last.when}).",
                    suggestion="Let them agree, and record the decision once more.",
                    subject=electrode,
                    doubt=0.9,
                )
            )
    return in_force, tuple(findings)


def _moment(when: str) -> float:
    """Seconds since 1970 of an ISO 8601 time; a time without an offset counts as UTC."""
    stamp = np.datetime64("1970-01-01T00:00:00")
    text, offset = when.strip(), 0.0
    if text.endswith(("Z", "z")):
        text = text[:-1]
    elif len(text) > 6 and text[-6] in "+-" and text[-3] == ":":
        sign = 1.0 if text[-6] == "+" else -1.0
        offset = sign * (60.0 * int(text[-5:-3]) + int(text[-2:])) * 60.0
        text = text[:-6]
    return float((np.datetime64(text) - stamp) / np.timedelta64(1, "us")) / 1e6 - offset


def _differ(first: Review, second: Review) -> bool:
    if first.kind != second.kind:
        return True
    if first.place_scanner_mm is None or second.place_scanner_mm is None:
        return False
    gap = np.linalg.norm(first.place_scanner_mm - second.place_scanner_mm)
    return bool(gap > DIFFER_MM)


def apply_reviews(
    electrodes: Electrodes, markers: Markers | None, skin: Skin, reviews: Sequence[Review]
) -> Electrodes:
    """Let the decisions of people replace what image and layout gave.

    Parameters
    ----------
    electrodes : Electrodes
        As labelled.
    markers : Markers or None
        Candidate blobs; None when positions were given.
    skin : Skin
    reviews : sequence of Review

    Returns
    -------
    Electrodes
        Decided rows have the status `corrected`. A row that loses its capsule to a decision
        on another electrode becomes `inferred`, with a finding.
    """
    in_force, findings = decisions_in_force(reviews)
    if not in_force and not findings:
        return electrodes
    rows = {name: index for index, name in enumerate(electrodes.names)}
    notes = list(findings)
    for electrode in sorted(set(in_force) - set(rows)):
        notes.append(
            Finding(
                level="note",
                stage="reviews",
                problem=f"A decision on {electrode} was not used: it is not among the names asked for.",
                suggestion="Ask for that name, or leave the decision as it is.",
                subject=electrode,
            )
        )
    position = np.array(electrodes.positions_scanner_mm)
    covariance = np.array(electrodes.covariance_mm2)
    capsule = np.array(electrodes.capsule_scanner_mm)
    marker = np.array(electrodes.marker)
    confidence = np.array(electrodes.confidence)
    status = list(electrodes.status)
    why_not = list(electrodes.why_not)
    decided = {rows[name]: review for name, review in in_force.items() if name in rows}
    for row in decided:
        if marker[row] >= 0:
            why_not[marker[row]] = f"a person decided on {electrodes.names[row]}"
        marker[row] = -1
        capsule[row] = np.nan
    for row, review in decided.items():
        name = electrodes.names[row]
        status[row], confidence[row] = "corrected", np.nan
        if review.place_scanner_mm is None:
            position[row] = electrodes.fitted_scanner_mm[row]
        elif review.kind == "contact":
            position[row] = review.place_scanner_mm
            covariance[row] = np.eye(3) * HAND_SD_MM**2
        else:
            blob = _nearest(markers, review.place_scanner_mm)
            covariance[row] = np.eye(3) * HAND_SD_MM**2
            capsule[row] = review.place_scanner_mm
            if blob >= 0 and markers is not None:
                capsule[row] = markers.centers_scanner_mm[blob]
                covariance[row] = markers.covariance_mm2[blob]
                marker[row] = blob
                why_not[blob] = ""
            position[row] = contact_points(capsule[row][None], skin)[0][0]
        if not np.isfinite(position[row]).all():
            position[row] = electrodes.positions_scanner_mm[row]
        for other in np.flatnonzero((marker == marker[row]) & (marker >= 0)):
            if other == row or other in decided:
                continue
            marker[other] = -1
            capsule[other] = np.nan
            position[other] = electrodes.fitted_scanner_mm[other]
            status[other], confidence[other] = "inferred", 0.0
            notes.append(
                Finding(
                    level="look",
                    stage="reviews",
                    problem=f"{electrodes.names[other]} lost its capsule to {name} by a decision of"
                    f" {review.who} and now stands where the layout puts it.",
                    suggestion=f"Decide on {electrodes.names[other]} too.",
                    subject=electrodes.names[other],
                    doubt=0.9,
                )
            )
    notes += _doubled(electrodes.names, marker, decided)
    residual = np.linalg.norm(position - electrodes.fitted_scanner_mm, axis=1)
    kept = tuple(
        f for f in electrodes.findings if f.subject not in in_force or f.subject not in rows
    )
    return replace(
        electrodes,
        positions_scanner_mm=position,
        covariance_mm2=covariance,
        capsule_scanner_mm=capsule,
        marker=marker,
        confidence=confidence,
        status=tuple(status),
        why_not=tuple(why_not),
        residual_mm=residual,
        sd_mm=np.sqrt(np.trace(covariance, axis1=1, axis2=2) / 3),
        findings=(*kept, *notes),
    )


def _doubled(
    names: Sequence[str], marker: NDArray[np.int32], decided: dict[int, Review]
) -> list[Finding]:
    """Find one capsule that people gave to two electrodes."""
    found = []
    for blob in np.unique(marker[marker >= 0]).tolist():
        same = [row for row in np.flatnonzero(marker == blob).tolist() if row in decided]
        if len(same) > 1:
            both = " and ".join(names[row] for row in same)
            found.append(
                Finding(
                    level="look",
                    stage="reviews",
                    problem=f"Decisions give one and the same capsule to {both}.",
                    suggestion="Decide anew on one of them.",
                    subject=names[same[0]],
                    doubt=1.0,
                )
            )
    return found


def _nearest(markers: Markers | None, place: FloatArray) -> int:
    """Row of the candidate blob at a place, -1 when there is none."""
    if markers is None or not len(markers.centers_scanner_mm):
        return -1
    gaps = np.linalg.norm(markers.centers_scanner_mm - place, axis=1)
    nearest = int(gaps.argmin())
    return nearest if gaps[nearest] <= SAME_MM else -1
