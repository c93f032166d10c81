"""``review.jsonl``: decisions of people, one JSON object a line, append-only."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from locator.errors import FileError
from locator.results import Finding
from locator.reviews import Review

NAME = "review.jsonl"


def read_reviews(path: Path) -> tuple[tuple[Review, ...], tuple[Finding, ...]]:
    """Read all decisions, oldest line first.

    Each line is ``{"who", "when", "electrode", "before", "after"}``. ``after`` is what holds
    from then on: ``{"capsule": [x, y, z]}`` (scanner mm of the capsule's centre),
    ``{"contact": [x, y, z]}`` (of the contact point), ``{"absent": true}`` (no capsule), or
    ``null`` (the person takes the decision back). ``before`` has the same form, for undoing;
    it is not looked at here.

    Parameters
    ----------
    path : Path
        Need not exist.

    Returns
    -------
    tuple of Review
    tuple of Finding
        A last line that was cut off while it was written is left out and told.

    Raises
    ------
    FileError
        If any other line is not a decision, naming the line.
    """
    if not path.is_file():
        return (), ()
    try:
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        msg = f"{path} cannot be read ({error}). Mend it or move it away."
        raise FileError(msg) from error
    lines = text.split("\n")
    reviews: list[Review] = []
    findings: list[Finding] = []
    for number, line in enumerate(lines, start=1):
        if not line.strip():
            continue
        try:
            reviews.append(_review(json.loads(line)))
        except (ValueError, KeyError, TypeError) as error:
            if number == len(lines):
                findings.append(
                    Finding(
                        level="look",
                        stage="reviews",
                        problem=f"The last line of {path.name} is cut off and was not used.",
                        suggestion="Decide once more on the electrode it was about.",
                        subject=path.name,
                        doubt=0.8,
                    )
                )
                continue
            msg = f"Line {number} of {path} is not a decision ({error}). Mend or remove that line."
            raise FileError(msg) from error
    return tuple(reviews), tuple(findings)


def _review(entry: Mapping[str, Any]) -> Review:
    after = entry["after"]
    who, when, electrode = (entry[key] for key in ("who", "when", "electrode"))
    if not all(isinstance(text, str) and text.strip() for text in (who, when, electrode)):
        raise ValueError("who, when and electrode must be text")
    np.datetime64(when.strip().removesuffix("Z")[:19])
    common = {"who": who, "when": when, "electrode": electrode}
    if after is None:
        return Review(kind="withdrawn", **common)
    if after.get("absent") is True:
        return Review(kind="absent", **common)
    for kind in ("capsule", "contact"):
        if kind in after:
            place = np.asarray(after[kind], dtype=np.float64)
            if place.shape != (3,) or not np.isfinite(place).all():
                msg = f"{kind} must be three numbers"
                raise ValueError(msg)
            return Review(kind=kind, place_scanner_mm=place, **common)  # type: ignore[arg-type]
    raise ValueError('after must hold "capsule", "contact" or "absent"')


def append_review(path: Path, review: Review, before: Mapping[str, Any] | None) -> None:
    """Add one decision at the end of the file.

    Parameters
    ----------
    path : Path
    review : Review
    before : mapping or None
        What held until now, in the form of ``after``.

    Raises
    ------
    FileError
        If the file cannot be written.
    """
    after: dict[str, Any] | None = {"absent": True}
    if review.kind == "withdrawn":
        after = None
    elif review.place_scanner_mm is not None:
        after = {review.kind: [round(float(v), 3) for v in review.place_scanner_mm]}
    entry = {
        "who": review.who,
        "when": review.when,
        "electrode": review.electrode,
        "before": None if before is None else dict(before),
        "after": after,
    }
    line = json.dumps(entry, ensure_ascii=False) + "\n"
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        with path.open("ab+") as handle:
            if handle.tell():
                handle.seek(-1, os.SEEK_END)
                if handle.read(1) != b"\n":
                    line = "\n" + line
            handle.write(line.encode("utf-8"))
            handle.flush()
            os.fsync(handle.fileno())
    except OSError as error:
        msg = f"{path} cannot be written: {error.strerror or error}."
        raise FileError(msg) from error
