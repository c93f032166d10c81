"""Chemical shift: how far, and which way, the oil is drawn from where it is."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from locator.geometry import voxel_sizes_mm
from locator.results import Finding
from locator.volume import Volume

FloatArray = NDArray[np.float64]

HZ_PER_TESLA = 42.577 * 3.4
"""Fat resonates 3.35 to 3.5 ppm below water, here 3.4; the proton turns at 42.577 MHz/T."""

LEAST_SHIFT_MM = 0.8
"""A trend of the heights smaller than this is left alone when nothing else speaks for a shift:
hair and the pull of a cap make such trends too."""

GAP_SD_MM = 0.4
"""Scatter of the capsules' heights in one cap; common experience, no source."""

LEAST_MARKERS = 8
"""With fewer capsules a trend over the head cannot be told from chance."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Shift:
    """The common offset of all capsules.

    Attributes
    ----------
    shift_mm : (3,) ndarray
        Scanner mm; zero where none is known.
    covariance_mm2 : (3, 3) ndarray
        Of that offset.
    findings : tuple of Finding
    """

    shift_mm: FloatArray
    covariance_mm2: FloatArray
    findings: tuple[Finding, ...]


def estimate_shift(
    volume: Volume, normals: FloatArray, heights_mm: FloatArray, score: FloatArray
) -> Shift:
    """Estimate the chemical shift of the capsules against the skin.

    Oil drawn along the read direction stands too high on one side of the head and too low on the
    other: its height over the (water) skin follows the component of the skin's normal along that
    direction, with the shift as its slope.

    Parameters
    ----------
    volume : Volume
        Its read axis, bandwidth and field strength are used where they are known.
    normals : (N, 3) ndarray
        Outward skin normals under the blobs, scanner axes.
    heights_mm : (N,) ndarray
        Heights of the blobs over the skin, mm.
    score : (N,) ndarray
        How surely each blob is a capsule.

    Returns
    -------
    Shift
        What to take off the centres.
    """
    voxel = voxel_sizes_mm(volume.scanner_from_voxel)
    axes = np.asarray(volume.scanner_from_voxel)[:3, :3] / voxel
    told = None
    if volume.read_axis is not None and volume.pixel_bandwidth_hz and volume.field_tesla:
        hertz = HZ_PER_TESLA * volume.field_tesla
        told = float(hertz / volume.pixel_bandwidth_hz * voxel[volume.read_axis])
    chosen = score > 0.5
    candidates = [volume.read_axis] if volume.read_axis is not None else [0, 1, 2]
    fits = {}
    if chosen.sum() >= LEAST_MARKERS:
        for axis in candidates:
            fits[axis] = _slope(normals[chosen] @ axes[:, axis], heights_mm[chosen])
    if told is not None and volume.read_axis is not None:
        return _told(told, axes[:, volume.read_axis], fits.get(volume.read_axis))
    if not fits:
        return Shift(
            shift_mm=np.zeros(3),
            covariance_mm2=np.zeros((3, 3)),
            findings=(
                _finding(
                    "note",
                    f"Chemical shift is not known: {int(chosen.sum())} capsules are too few to"
                    " estimate it.",
                    0.2,
                ),
            ),
        )
    return _estimated(axes, fits)


def _slope(along: FloatArray, heights: FloatArray) -> tuple[float, float, float]:
    """Robust slope of the heights, its standard error, and the cost of the fit.

    Where fat is drawn outward by more than the skin is thick, the edge that is found is that of
    the fat: from there on the capsules' heights rise no further. The thickness is tried out.
    """
    slopes = np.arange(-4.5, 4.5 + 1e-9, 0.05)
    thickness = np.array([2.0, 2.5, 3.0, np.inf])
    moved = slopes[:, None] * along
    model = np.minimum(moved[:, None, :], thickness[:, None])
    residual = heights - model
    residual -= np.median(residual, axis=2, keepdims=True)
    # Cauchy's likelihood, of the scatter of gaps in a good cap: strays do not count much.
    cost = np.log1p((residual / GAP_SD_MM) ** 2).sum(axis=2)
    # Another thickness than none must earn its keep: as by the Bayesian information criterion.
    cost[:, :-1] += 0.5 * np.log(len(along))
    best, kind = np.unravel_index(int(np.argmin(cost)), cost.shape)
    slope = float(slopes[best])
    if 0 < best < len(slopes) - 1:
        before, here, after = cost[best - 1 : best + 2, kind]
        curve = before - 2 * here + after
        if curve > 0:
            slope += 0.05 * float(np.clip((before - after) / (2 * curve), -0.5, 0.5))
    left = np.abs(residual[best, kind])
    scatter = max(1.4826 * float(np.median(left)), 0.05)
    rising = moved[best] < thickness[kind]
    spread = float(((along[rising] - along[rising].mean()) ** 2).sum()) if rising.any() else 0.0
    # A slope also carries the unevenness of the cap, 0.05 mm at least.
    error = float(np.hypot(scatter / np.sqrt(max(spread, 1e-3)), 0.05))
    return slope, error, float(cost[best, kind])


def _told(told: float, axis: FloatArray, fit: tuple[float, float, float] | None) -> Shift:
    """Size from the sidecar, sign from the data."""
    if fit is None:
        return Shift(
            shift_mm=np.zeros(3),
            covariance_mm2=told**2 * np.outer(axis, axis),
            findings=(
                _finding(
                    "look",
                    f"The sidecar tells a chemical shift of {told:.1f} mm along the read direction,"
                    " but too few capsules are seen to tell which way; it is not corrected.",
                    0.6,
                ),
            ),
        )
    slope, error, _ = fit
    spread = float(np.hypot(error, 0.3))
    if abs(slope) < 0.5 * told and told > 3 * spread:
        return Shift(
            shift_mm=np.zeros(3),
            covariance_mm2=error**2 * np.outer(axis, axis),
            findings=(
                _finding(
                    "note",
                    f"The sidecar tells a chemical shift of {told:.1f} mm, but the capsules stand"
                    f" only {abs(slope):.1f} mm off along the read direction: they hold water, or"
                    " the scanner has corrected it. Nothing was taken off.",
                    0.3,
                ),
            ),
        )
    # What the sidecar and the data say, each by its own uncertainty; 3 % for the bandwidth.
    precision, told_precision = spread**-2.0, (0.03 * told + 1e-6) ** -2.0
    size = (abs(slope) * precision + told * told_precision) / (precision + told_precision)
    shift = float(np.copysign(size, slope))
    findings = [
        _finding(
            "note",
            f"Chemical shift of {abs(shift):.2f} mm along the read direction was taken off all"
            f" capsules (sidecar: {told:.2f} mm; from the image: {slope:+.2f} +/- {error:.2f} mm).",
            0.1,
        )
    ]
    if abs(slope) < 2 * error or abs(abs(slope) - told) > 4 * spread:
        findings.append(
            _finding(
                "look",
                f"The chemical shift of {told:.1f} mm in the sidecar and {slope:+.2f} +/-"
                f" {error:.2f} mm in the image do not agree well; its direction may be wrong.",
                0.6,
            )
        )
    return Shift(
        shift_mm=shift * axis,
        covariance_mm2=min(error, 0.1) ** 2 * np.outer(axis, axis),
        findings=tuple(findings),
    )


def _estimated(axes: FloatArray, fits: dict[int, tuple[float, float, float]]) -> Shift:
    """One axis, if its trend is large, sure, and leaves the least scatter."""
    best = min(fits, key=lambda axis: fits[axis][2])
    slope, error, _ = fits[best]
    names = "the read direction" if len(fits) == 1 else f"array axis {best}"
    if abs(slope) < LEAST_SHIFT_MM or abs(slope) < 5 * error:
        return Shift(
            shift_mm=np.zeros(3),
            covariance_mm2=np.zeros((3, 3)),
            findings=(
                _finding(
                    "note",
                    "No chemical shift of the capsules against the skin was seen (largest trend"
                    f" {slope:+.2f} +/- {error:.2f} mm); bandwidth and read direction are not"
                    " known.",
                    0.1,
                ),
            ),
        )
    direction = axes[:, best]
    # The skin's own edge moves with the fat under it: a tenth of the shift, as seen on invented
    # heads with all fat shifted.
    error = float(np.hypot(error, 0.1 * slope))
    return Shift(
        shift_mm=slope * direction,
        covariance_mm2=error**2 * np.outer(direction, direction),
        findings=(
            _finding(
                "look",
                f"The capsules stand {abs(slope):.2f} +/- {error:.2f} mm off along {names}, all the"
                " same way, as chemical shift makes them; that was taken off their centres.",
                0.4,
                "Give the read direction and the bandwidth per pixel in the scan's sidecar.",
            ),
        ),
    )


def _finding(level: str, problem: str, doubt: float, suggestion: str = "") -> Finding:
    return Finding(
        level="look" if level == "look" else "note",
        stage="markers",
        problem=problem,
        suggestion=suggestion,
        doubt=doubt,
    )
