"""The drawn figures of the report: head views, surfaces over slices, maps, time courses."""

from __future__ import annotations

import base64
import io
from typing import Any

import matplotlib
import matplotlib.axes
import matplotlib.lines
import matplotlib.patheffects
import numpy as np
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure
from numpy.typing import ArrayLike, NDArray

from locator.head import Head, Surface
from locator.inverse import Inverse, statistic
from locator.labels import Electrodes
from locator.recording import Epochs
from locator.skin import Skin
from locator.sources import Sources
from locator.statistics import Peaks, SourceTest
from locator.views import (
    BLUE,
    GREEN,
    ORANGE,
    PLANES,
    PURPLE,
    SKY,
    VERMILION,
    VIEWS,
    grey_window,
    head_view,
    sample_plane,
)
from locator.volume import Volume

FloatArray = NDArray[np.float64]

SURFACE_STYLE = {"scalp": SKY, "outer skull": ORANGE, "inner skull": GREEN}

STATUS_STYLE = {
    "seen": ("o", BLUE),
    "inferred": ("s", "white"),
    "corrected": ("D", GREEN),
    "given": ("^", PURPLE),
}
"""Marker shape and fill for each status: the shape says it too, not only the colour."""


def figure_uri(figure: Figure, *, dpi: int = 110) -> str:
    """Render a figure to a PNG data address; no display and no time stamp is involved."""
    buffer = io.BytesIO()
    figure.savefig(buffer, format="png", dpi=dpi, metadata={"Software": None})
    return "data:image/png;base64," + base64.b64encode(buffer.getvalue()).decode("ascii")


def _sides(axis: matplotlib.axes.Axes, letters: tuple[str, str, str, str]) -> None:
    style: dict[str, Any] = {
        "color": "white",
        "fontsize": 9,
        "fontweight": "bold",
        "transform": axis.transAxes,
    }
    outline = [matplotlib.patheffects.withStroke(linewidth=2, foreground="black")]
    places = (
        (0.02, 0.5, "left"),
        (0.98, 0.5, "right"),
        (0.5, 0.03, "center"),
        (0.5, 0.93, "center"),
    )
    for letter, (x, y, align) in zip(letters, places, strict=True):
        axis.text(x, y, letter, ha=align, path_effects=outline, **style)


def electrodes_on_head(
    skin: Skin, electrodes: Electrodes, *, doubt_below: float = 0.9
) -> dict[str, str]:
    """Five views of the head with every electrode on it.

    Parameters
    ----------
    skin : Skin
        The head that is shown.
    electrodes : Electrodes
        Positions, names and status.
    doubt_below : float
        Electrodes less sure than this get a ring.

    Returns
    -------
    dict of str to str
        View name to PNG data address.
    """
    pictures = {}
    for view, (_, _, _caption) in VIEWS.items():
        seen = head_view(skin, view)
        left, right, bottom, top = seen.extent_mm
        figure = Figure(figsize=(4.6, 4.6 * (top - bottom) / (right - left)), facecolor="white")
        axis = figure.add_axes((0, 0, 1, 1))
        axis.imshow(
            np.where(np.isnan(seen.depth_mm), 1.0, 0.25 + 0.65 * seen.shade),
            extent=seen.extent_mm,
            cmap="gray",
            vmin=0,
            vmax=1,
            interpolation="bilinear",
        )
        flat, facing = seen.place(electrodes.positions_scanner_mm)
        for row in np.flatnonzero(facing & np.isfinite(flat).all(axis=1)):
            shape, fill = STATUS_STYLE[electrodes.status[row]]
            axis.plot(*flat[row], shape, ms=5.5, mfc=fill, mec="black", mew=0.8)
            sure = electrodes.confidence[row]
            if electrodes.status[row] == "inferred" or (np.isfinite(sure) and sure < doubt_below):
                axis.plot(*flat[row], "o", ms=13, mfc="none", mec=VERMILION, mew=1.6)
            axis.text(
                flat[row, 0],
                flat[row, 1] + 3.2,
                electrodes.names[row],
                fontsize=6.5,
                ha="center",
                path_effects=[matplotlib.patheffects.withStroke(linewidth=1.6, foreground="white")],
            )
        letters = {
            "from the front": ("R", "L"),
            "from behind": ("L", "R"),
            "from above": ("L", "R"),
            "from the left": ("front", "back"),
            "from the right": ("back", "front"),
        }[view]
        for x, letter, align in ((0.02, letters[0], "left"), (0.98, letters[1], "right")):
            axis.text(
                x, 0.02, letter, transform=axis.transAxes, ha=align, fontsize=10, weight="bold"
            )
        axis.set_xlim(left, right)
        axis.set_ylim(bottom, top)
        axis.axis("off")
        pictures[view] = figure_uri(figure, dpi=100)
    return pictures


def plane_segments(surface: Surface, plane: str, center_scanner_mm: ArrayLike) -> FloatArray:
    """Where a plane cuts a surface.

    Parameters
    ----------
    surface : Surface
        A triangle mesh, scanner mm.
    plane : str
        A key of `PLANES`.
    center_scanner_mm : (3,) array_like
        A point of the plane.

    Returns
    -------
    (K, 2, 2) ndarray
        Segments in the picture's own two directions, scanner mm.
    """
    across, upward, _ = PLANES[plane]
    normal = np.cross(across, upward)
    points = np.asarray(surface.vertices_scanner_mm)
    side = (points - np.asarray(center_scanner_mm, float)) @ normal
    side = np.where(side == 0, 1e-9, side)
    triangles = surface.faces[np.ptp(np.sign(side)[surface.faces], axis=1) > 0]
    ends = []
    for a, b in ((0, 1), (1, 2), (2, 0)):
        first, second = triangles[:, a], triangles[:, b]
        crosses = (side[first] > 0) != (side[second] > 0)
        step = np.where(crosses, side[first] - side[second], 1.0)
        crossing = points[first] + (side[first] / step)[:, None] * (points[second] - points[first])
        crossing[~crosses] = np.nan
        ends.append(crossing)
    stacked = np.stack(ends, axis=1)
    valid = np.isfinite(stacked[..., 0])
    pairs = stacked[valid].reshape(-1, 2, 3)
    return np.stack([pairs @ across, pairs @ upward], axis=-1)


def _show_cut(
    axis: matplotlib.axes.Axes,
    volume: Volume,
    plane: str,
    center: FloatArray,
    half: tuple[float, float],
    window: tuple[float, float],
    pixels_per_mm: float = 1.5,
) -> tuple[float, float, float, float]:
    across, upward, letters = PLANES[plane]
    cut = sample_plane(volume, center, plane, half_mm=half, pixels_per_mm=pixels_per_mm)
    u, v = float(center @ across), float(center @ upward)
    extent = (u - half[0], u + half[0], v - half[1], v + half[1])
    axis.imshow(cut, extent=extent, cmap="gray", vmin=window[0], vmax=window[1])
    _sides(axis, letters)
    axis.set_xlim(extent[:2])
    axis.set_ylim(extent[2:])
    axis.axis("off")
    return extent


def surfaces_on_slices(volume: Volume, head: Head) -> str:
    """Nine slices of the T1 with the three surfaces on them, as a PNG data address."""
    window = grey_window(volume)
    scalp = np.asarray(head.scalp.vertices_scanner_mm)
    inner = np.asarray(head.inner_skull.vertices_scanner_mm)
    middle = (inner.max(axis=0) + inner.min(axis=0)) / 2
    size = (inner.max(axis=0) - inner.min(axis=0)) / 2
    figure = Figure(figsize=(9, 9.3), facecolor="black")
    half = (105.0, 105.0)
    for row, (plane, axis_index) in enumerate((("axial", 2), ("coronal", 1), ("sagittal", 0))):
        for column, share in enumerate((-0.45, 0.05, 0.55)):
            center = np.array(middle)
            center[axis_index] += share * size[axis_index]
            if plane != "axial":
                center[2] = (
                    scalp[:, 2].max() + max(scalp[:, 2].min(), scalp[:, 2].max() - 200)
                ) / 2
            axis = figure.add_axes((column / 3, (2 - row) / 3 * 0.97, 1 / 3, 0.97 / 3))
            _show_cut(axis, volume, plane, center, half, window)
            for name, surface in (
                ("scalp", head.scalp),
                ("outer skull", head.outer_skull),
                ("inner skull", head.inner_skull),
            ):
                colour = SURFACE_STYLE[name]
                axis.add_collection(
                    LineCollection(
                        list(plane_segments(surface, plane, center)),
                        colors=colour,
                        linewidths=1.1,
                        linestyles="-",
                    )
                )
    handles = [
        matplotlib.lines.Line2D([], [], color=colour, label=name)
        for name, colour in SURFACE_STYLE.items()
    ]
    figure.legend(
        handles=handles,
        loc="upper center",
        ncol=3,
        frameon=False,
        labelcolor="white",
        fontsize=9,
        title=None,
    )
    return figure_uri(figure, dpi=100)


def map_on_slices(
    volume: Volume, sources: Sources, test: SourceTest, peaks: Peaks, *, peak: int = 0
) -> str:
    """Three slices through one surviving peak, with what survives correction in colour.

    Parameters
    ----------
    volume : Volume
        The T1.
    sources : Sources
        Tells the nearest source of each voxel.
    test : SourceTest
        Statistic and corrected p.
    peaks : Peaks
        With at least ``peak + 1`` rows.
    peak : int
        Which row the slices go through.

    Returns
    -------
    str
        PNG data address.
    """
    window = grey_window(volume)
    center = np.asarray(peaks.positions_scanner_mm[peak], float)
    index = np.maximum(sources.nearest_source, 0)
    inside = sources.nearest_source >= 0
    survives = (test.corrected_p < 0.05)[index] & inside
    shown = np.where(survives, test.statistic[index], 0).astype(np.float32)
    figure = Figure(figsize=(10.4, 3.7), facecolor="black")
    half = (92.0, 92.0)
    brain = sources.positions_scanner_mm
    middle = (brain.max(axis=0) + brain.min(axis=0)) / 2
    top = float(test.statistic.max())
    image = None
    for column, plane in enumerate(PLANES):
        across, upward, _ = PLANES[plane]
        normal = np.cross(across, upward)
        view = middle + ((center - middle) @ normal) * normal
        axis = figure.add_axes((column * 0.3, 0.0, 0.3, 0.92))
        extent = _show_cut(axis, volume, plane, view, half, window)
        cut = sample_plane(
            volume, view, plane, half_mm=half, pixels_per_mm=1.5, values=shown, order=0
        )
        image = axis.imshow(
            np.ma.masked_where(cut <= 0, cut),
            extent=extent,
            cmap="inferno",
            vmin=test.threshold * 0.8,
            vmax=top,
            alpha=0.85,
            interpolation="nearest",
        )
        x, y = float(center @ across), float(center @ upward)
        for low, high in ((4, 14), (-14, -4)):
            axis.plot([x + low, x + high], [y, y], color=SKY, lw=1.4)
            axis.plot([x, x], [y + low, y + high], color=SKY, lw=1.4)
        if peak == 0 and np.isfinite(peaks.region_mm[0]):
            turn = np.linspace(0, 2 * np.pi, 120)
            radius = float(peaks.region_mm[0])
            axis.plot(x + radius * np.cos(turn), y + radius * np.sin(turn), "--", color=SKY, lw=1.1)
        axis.set_xlim(extent[:2])
        axis.set_ylim(extent[2:])
    if image is not None:
        bar = figure.colorbar(image, cax=figure.add_axes((0.925, 0.12, 0.018, 0.7)))
        bar.ax.tick_params(colors="white", labelsize=8)
        bar.set_label("statistic, only where corrected p < 0.05", color="white", fontsize=8)
    figure.text(
        0.01,
        0.95,
        f"peak {peak + 1}:  x {center[0]:.0f}  y {center[1]:.0f}  z {center[2]:.0f} mm"
        + ("    dashed: ball that holds 95 % of the peak's region" if peak == 0 else ""),
        color="white",
        fontsize=9,
    )
    return figure_uri(figure)


def time_course(epochs: Epochs, inverse: Inverse, test: SourceTest, source: int) -> str:
    """The statistic at one source over the epoch, with threshold and tested window.

    Parameters
    ----------
    epochs : Epochs
        Their average is projected.
    inverse : Inverse
        The operator.
    test : SourceTest
        Threshold and window.
    source : int
        Row of the source space.

    Returns
    -------
    str
        PNG data address.
    """
    course = np.asarray(statistic(inverse, epochs.data_uv.mean(axis=0)))[source]
    figure = Figure(figsize=(7.2, 2.6), layout="constrained")
    axis = figure.add_subplot()
    milliseconds = 1000 * np.asarray(epochs.times_s)
    axis.axvspan(*(1000 * np.asarray(test.window_s)), color="0.92", label="tested window")
    axis.plot(milliseconds, course, color=BLUE, lw=1.5, label="statistic at the peak")
    if np.isfinite(test.threshold):
        axis.axhline(test.threshold, color=VERMILION, ls="--", lw=1.2, label="corrected p = 0.05")
    axis.axvline(0, color="0.4", lw=0.8)
    axis.set_xlabel("ms after the event")
    axis.set_ylabel("statistic")
    axis.set_xlim(milliseconds[0], milliseconds[-1])
    axis.set_ylim(0, None)
    axis.legend(fontsize=8, frameon=False, loc="upper left")
    axis.spines[["top", "right"]].set_visible(False)
    return figure_uri(figure)


def average_response(epochs: Epochs) -> str:
    """The average at every electrode and its global field power, as a PNG data address."""
    average = epochs.data_uv.mean(axis=0)
    figure = Figure(figsize=(7.2, 2.6), layout="constrained")
    axis = figure.add_subplot()
    milliseconds = 1000 * np.asarray(epochs.times_s)
    axis.plot(milliseconds, average.T, color="0.6", lw=0.5)
    axis.plot(milliseconds, average.std(axis=0), color=BLUE, lw=2, label="global field power")
    axis.axvline(0, color="0.4", lw=0.8)
    axis.set_xlabel("ms after the event")
    axis.set_ylabel("µV, average reference")
    axis.set_xlim(milliseconds[0], milliseconds[-1])
    axis.legend(fontsize=8, frameon=False, loc="upper left")
    axis.spines[["top", "right"]].set_visible(False)
    return figure_uri(figure)
