"""Tables and sidecars in the form of the Brain Imaging Data Structure (BIDS)."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from locator.errors import FileError
from locator.io.files import read_json, read_text, write_json, write_text
from locator.labels import Electrodes
from locator.markers import Markers
from locator.statistics import Peaks

FloatArray = NDArray[np.float64]

UNIT_MM = {"m": 1000.0, "cm": 10.0, "mm": 1.0}

LANDMARKS = ("NAS", "LPA", "RPA")

TISSUES = (
    (0, "Background", "BG", "#000000"),
    (1, "Gray Matter", "GM", "#d8b365"),
    (2, "White Matter", "WM", "#f5f5f5"),
    (3, "Cerebrospinal Fluid", "CSF", "#4575b4"),
    (4, "Bone", "B", "#fee090"),
    (5, "Soft Tissue", "ST", "#c994c7"),
    (6, "Non-brain", "NB", "#969696"),
    (10, "Brainstem", "BS", "#1b7837"),
    (11, "Cerebellum", "CBM", "#762a83"),
)
"""BIDS common tissue labels (index, name, abbreviation) and a colour of our own."""

ELECTRODE_COLUMNS: Mapping[str, Mapping[str, str]] = {
    "x": {"Description": "Contact point on the skin, to the right", "Units": "mm"},
    "y": {"Description": "Contact point on the skin, to the front", "Units": "mm"},
    "z": {"Description": "Contact point on the skin, upward", "Units": "mm"},
    "confidence": {
        "Description": "For status seen: probability that the label is right. For inferred:"
        " probability that there is no capsule to be found. Else n/a."
    },
    "residual_mm": {"Description": "Distance to the fitted layout", "Units": "mm"},
    "sd_mm": {
        "Description": "Uncertainty of the contact point: root of the mean of the variances"
        " along the three axes",
        "Units": "mm",
    },
    "capsule_x": {"Description": "Centre of the capsule, to the right", "Units": "mm"},
    "capsule_y": {"Description": "Centre of the capsule, to the front", "Units": "mm"},
    "capsule_z": {"Description": "Centre of the capsule, upward", "Units": "mm"},
}

STATUS_LEVELS = {
    "seen": "its own capsule was found",
    "inferred": "no capsule was found; placed from the layout",
    "corrected": "a person decided",
    "given": "the position was given",
}


# ── tables ───────────────────────────────────────────────────────────────────────────────


def _cell(value: object, digits: int) -> str:
    if value is None:
        return "n/a"
    if isinstance(value, str):
        return " ".join(value.split()) or "n/a"
    number = float(value)  # type: ignore[arg-type]
    if not math.isfinite(number):
        return "n/a"
    text = f"{number:.{digits}f}"
    return text.lstrip("-") if float(text) == 0 else text


def table_text(header: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    """Return a tab-separated table with its header line."""
    return "".join("\t".join(row) + "\n" for row in [header, *rows])


def read_table(path: Path, role: str, required: Sequence[str]) -> list[dict[str, str]]:
    """Read a tab-separated table.

    Parameters
    ----------
    path : Path
    role : str
        What it is wanted as, for messages.
    required : sequence of str
        Columns that must be there.

    Raises
    ------
    FileError
        If the file is absent, has no such columns, or a row has too few or too many cells.
    """
    lines = list(csv.reader(io.StringIO(read_text(path, role)), delimiter="\t"))
    header = [cell.strip() for cell in lines[0]] if lines else []
    absent = [name for name in required if name not in header]
    if absent:
        msg = (
            f"{path} (wanted as {role}) has no column {', '.join(absent)}; it has"
            f" {', '.join(header) or 'none'}. Columns are separated by tabs."
        )
        raise FileError(msg)
    rows = []
    for number, cells in enumerate(lines[1:], start=2):
        if not any(cell.strip() for cell in cells):
            continue
        if len(cells) != len(header):
            msg = f"Line {number} of {path} has {len(cells)} cells, the header {len(header)}."
            raise FileError(msg + " Mend that line.")
        rows.append(dict(zip(header, (cell.strip() for cell in cells), strict=True)))
    return rows


# ── electrodes ───────────────────────────────────────────────────────────────────────────


def electrodes_table(electrodes: Electrodes) -> str:
    """Return the text of ``electrodes.tsv``, one row per name in the order asked."""
    header = ["name", "x", "y", "z", "status", "confidence", "residual_mm", "sd_mm"]
    header += ["capsule_x", "capsule_y", "capsule_z"]
    rows = [
        [
            name,
            *(_cell(v, 3) for v in electrodes.positions_scanner_mm[i]),
            electrodes.status[i],
            _cell(electrodes.confidence[i], 4),
            _cell(electrodes.residual_mm[i], 3),
            _cell(electrodes.sd_mm[i], 3),
            *(_cell(v, 3) for v in electrodes.capsule_scanner_mm[i]),
        ]
        for i, name in enumerate(electrodes.names)
    ]
    return table_text(header, rows)


def write_electrodes(
    folder: Path,
    electrodes: Electrodes,
    *,
    t1_name: str,
    t1_uri: str | None = None,
    space: str = "scanner",
) -> None:
    """Write ``electrodes.tsv``, ``electrodes.json`` and ``coordsystem.json``.

    Parameters
    ----------
    folder : Path
    electrodes : Electrodes
    t1_name : str
        File name of the T1, for the description of the space.
    t1_uri : str, optional
        BIDS URI of the T1 when it stands in a BIDS dataset.
    space : str
        `Volume.space`.

    Raises
    ------
    FileError
        If a file cannot be written.
    """
    sidecar: dict[str, Any] = {name: dict(entry) for name, entry in ELECTRODE_COLUMNS.items()}
    sidecar["status"] = {
        "Description": "Where the position comes from",
        "Levels": dict(STATUS_LEVELS),
    }
    write_json(folder / "electrodes.json", sidecar)
    write_json(
        folder / "coordsystem.json",
        coordinate_system(electrodes, t1_name=t1_name, t1_uri=t1_uri, space=space),
    )
    write_text(folder / "electrodes.tsv", electrodes_table(electrodes))


def coordinate_system(
    electrodes: Electrodes, *, t1_name: str, t1_uri: str | None, space: str
) -> dict[str, Any]:
    """Return what ``coordsystem.json`` says."""
    which = "scanner space" if space == "scanner" else f"space of its header ({space})"
    description = (
        f"Millimetres in the {which} of the T1 image {t1_name}: x to the right, y to the front,"
        " z upward, as its NIfTI header places the voxels (sform when its code is 1 or 2, else"
        " qform)"
    )
    value: dict[str, Any] = {
        "EEGCoordinateSystem": "Other",
        "EEGCoordinateUnits": "mm",
        "EEGCoordinateSystemDescription": description,
    }
    if t1_uri:
        value["IntendedFor"] = t1_uri
    places = {
        name: [round(float(v), 3) for v in place]
        for name, place in zip(LANDMARKS, electrodes.landmarks_scanner_mm, strict=False)
        if np.isfinite(place).all()
    }
    if places:
        how = "given" if electrodes.landmarks_given else "estimated from the image"
        value["AnatomicalLandmarkCoordinates"] = places
        value["AnatomicalLandmarkCoordinateSystem"] = "Other"
        value["AnatomicalLandmarkCoordinateUnits"] = "mm"
        value["AnatomicalLandmarkCoordinateSystemDescription"] = f"{description}; {how}"
    return value


def bids_uri(path: Path) -> str | None:
    """Return the BIDS URI of a file inside a BIDS dataset, else None."""
    whole = path.resolve()
    for folder in whole.parents:
        if (folder / "dataset_description.json").is_file():
            return f"bids::{whole.relative_to(folder).as_posix()}"
    return None


def read_positions(path: Path, role: str) -> tuple[tuple[str, ...], FloatArray, FloatArray]:
    """Read names and places from a BIDS electrodes table.

    A ``coordsystem.json`` (or the file of the same BIDS name) beside it gives the unit; else
    the places are taken as millimetres.

    Parameters
    ----------
    path : Path
    role : str
        ``"electrodes"`` or ``"layout"``, for messages.

    Returns
    -------
    names : tuple of str
        Of the rows that have a place.
    positions_mm : (E, 3) ndarray
    sd_mm : (E,) ndarray
        From a column ``sd_mm``, else NaN.

    Raises
    ------
    FileError
        If the table cannot be used, naming line and value.
    """
    names, places, spread = [], [], []
    for number, row in enumerate(read_table(path, role, ("name", "x", "y", "z")), start=2):
        if any(row[axis] == "n/a" for axis in "xyz"):
            continue
        name = row["name"]
        try:
            place = [float(row[axis]) for axis in "xyz"]
        except ValueError as error:
            msg = f"Row {number - 1} of {path} ({name}): {error}. Places are three numbers or n/a."
            raise FileError(msg) from error
        if not all(math.isfinite(v) for v in place):
            msg = f"Row {number - 1} of {path} ({name}) has a place that is not finite: {place}."
            raise FileError(msg + " Write n/a where there is no place.")
        if name in names:
            msg_0 = f"{path} has two rows for {name}. Remove one of them."
            raise FileError(msg_0)
        names.append(name)
        places.append(place)
        spread.append(_number(row.get("sd_mm")))
    if not names:
        msg_0 = f"{path} (wanted as {role}) has no row with a place. Check the file."
        raise FileError(msg_0)
    positions = np.array(places) * _unit_beside(path)
    size = float(np.ptp(positions, axis=0).max())
    if len(names) > 3 and not 20 < size < 500:
        msg = (
            f"The places in {path} spread over {size:.3g} mm, which is no head."
            " Write them in millimetres, or say the unit in coordsystem.json beside the table."
        )
        raise FileError(msg)
    return tuple(names), positions, np.array(spread)


def _number(text: str | None) -> float:
    try:
        return float(text) if text is not None else math.nan
    except ValueError:
        return math.nan


def _unit_beside(path: Path) -> float:
    candidates = [path.with_name("coordsystem.json")]
    if path.name.endswith("_electrodes.tsv"):
        stem = path.name.removesuffix("_electrodes.tsv")
        candidates.insert(0, path.with_name(f"{stem}_coordsystem.json"))
    for candidate in candidates:
        if candidate.is_file():
            unit = read_json(candidate, "coordinate system").get("EEGCoordinateUnits")
            if unit not in UNIT_MM:
                msg = f"{candidate} gives EEGCoordinateUnits {unit!r}; m, cm or mm is needed."
                raise FileError(msg)
            return UNIT_MM[unit]
    return 1.0


def read_landmarks(path: Path) -> FloatArray:
    """Read NAS, LPA, RPA (scanner mm) from JSON.

    The three may stand on the top level or under ``AnatomicalLandmarkCoordinates``.

    Returns
    -------
    (3, 3) ndarray
        Rows NAS, LPA, RPA.

    Raises
    ------
    FileError
        If one is absent or is not three finite numbers.
    """
    value = read_json(path, "landmarks")
    inside = value.get("AnatomicalLandmarkCoordinates", value)
    places = []
    for name in LANDMARKS:
        place = inside.get(name) if isinstance(inside, dict) else None
        good = (
            isinstance(place, list)
            and len(place) == 3
            and all(isinstance(v, int | float) and not isinstance(v, bool) for v in place)
            and all(math.isfinite(v) for v in place)
        )
        if not good:
            msg = (
                f"{path} gives {name} as {place!r}; three numbers (scanner mm) are needed for each"
                f" of {', '.join(LANDMARKS)}."
            )
            raise FileError(msg)
        places.append(place)
    return np.array(places, dtype=np.float64)


# ── markers, peaks, tissues ──────────────────────────────────────────────────────────────


def write_markers(path: Path, markers: Markers, electrodes: Electrodes | None) -> None:
    """Write ``markers.tsv``: every candidate blob with its evidence.

    Parameters
    ----------
    path : Path
    markers : Markers
    electrodes : Electrodes or None
        Says which blob belongs to which electrode, and why the others to none.
    """
    header = ["x", "y", "z", "xx", "xy", "xz", "yy", "yz", "zz", "diameter_mm", "contrast"]
    header += ["roundness", "skin_mm", "score", "electrode", "why_not"]
    owner = {}
    reasons: Sequence[str] = ()
    if electrodes is not None:
        owner = {
            int(m): n for m, n in zip(electrodes.marker, electrodes.names, strict=True) if m >= 0
        }
        reasons = electrodes.why_not
    rows = []
    upper = np.triu_indices(3)
    for i, center in enumerate(markers.centers_scanner_mm):
        reason = reasons[i] if i < len(reasons) else ""
        rows.append(
            [
                *(_cell(v, 3) for v in center),
                *(_cell(v, 4) for v in markers.covariance_mm2[i][upper]),
                _cell(markers.diameter_mm[i], 2),
                _cell(markers.contrast[i], 3),
                _cell(markers.roundness[i], 3),
                _cell(markers.skin_mm[i], 2),
                _cell(markers.score[i], 4),
                owner.get(i, "n/a"),
                "n/a" if i in owner else _cell(reason, 0),
            ]
        )
    write_text(path, table_text(header, rows))


def write_peaks(path: Path, peaks: Peaks) -> None:
    """Write ``peaks.tsv``, strongest first; the header alone when nothing survives."""
    header = ["x", "y", "z", "statistic", "corrected_p", "time_s", "region_mm"]
    rows = [
        [
            *(_cell(v, 2) for v in place),
            _cell(peaks.statistic[i], 4),
            _cell(peaks.corrected_p[i], 6),
            _cell(peaks.time_s[i], 4),
            _cell(peaks.region_mm[i], 2),
        ]
        for i, place in enumerate(peaks.positions_scanner_mm)
    ]
    write_text(path, table_text(header, rows))


def tissues_table() -> str:
    """Return the text of ``tissues.tsv``."""
    rows = [[str(index), name, short, colour] for index, name, short, colour in TISSUES]
    return table_text(["index", "name", "abbreviation", "color"], rows)
