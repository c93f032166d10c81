"""The scene of `locator inspect`: head, capsules, labels, fitted layout, slices of one capsule."""

from __future__ import annotations

import ctypes.util
import io
import os
import sys
from typing import Any

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw, ImageFont

from locator.errors import LocatorError
from locator.pipeline import RunResults
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
    to_grey,
)

SIZE = (1600, 1000)
"""Width and height of the picture in pixels."""

SLICE_HALF_MM = 30.0
SKIN_COLOUR = (222, 214, 206)
PAPER = (250, 250, 248)
INK = (29, 35, 39)

STATUS_COLOUR = {"seen": BLUE, "inferred": SKY, "corrected": GREEN, "given": PURPLE}
STATUS_SHAPE = {"seen": "ball", "inferred": "cube", "corrected": "octahedron", "given": "cone"}
"""The shape says the status as well as the colour does."""


def can_render_3d() -> bool:
    """Whether a graphics library is there that draws without a display (or a display is)."""
    if not sys.platform.startswith("linux") or os.environ.get("DISPLAY"):
        return True
    return any(ctypes.util.find_library(name) for name in ("EGL", "OSMesa"))


def most_doubtful(run: RunResults) -> int:
    """Row of the electrode that should be looked at first."""
    electrodes = run.electrodes
    if electrodes is None:
        msg = (
            "These results hold no electrodes, so there is nothing to inspect (window)."
            " Run `locator find` or `locator run` into the folder first."
        )
        raise LocatorError(msg)
    sure = np.where(np.isfinite(electrodes.confidence), electrodes.confidence, 1.0)
    return int(np.argmin(sure))


def _words(run: RunResults, row: int) -> list[str]:
    electrodes = run.electrodes
    assert electrodes is not None
    x, y, z = electrodes.positions_scanner_mm[row]
    lines = [
        f"{electrodes.names[row]}  ({electrodes.status[row]})",
        f"x {x:.1f}  y {y:.1f}  z {z:.1f} mm, sd {electrodes.sd_mm[row]:.1f} mm",
    ]
    sure = float(electrodes.confidence[row])
    if np.isfinite(sure):
        what = "no capsule to be found" if electrodes.status[row] == "inferred" else "label right"
        lines.append(f"{100 * sure:.1f} % sure: {what}")
    if electrodes.alternatives[row]:
        lines.append(electrodes.alternatives[row])
    return lines


def _selected_point(run: RunResults, row: int) -> NDArray[np.float64]:
    electrodes = run.electrodes
    assert electrodes is not None
    capsule = np.asarray(electrodes.capsule_scanner_mm[row])
    chosen = capsule if np.isfinite(capsule).all() else electrodes.positions_scanner_mm[row]
    return np.asarray(chosen, dtype=np.float64)


def _drawn_point(run: RunResults, row: int) -> NDArray[np.float64]:
    """Where the scanner drew the capsule, before the chemical shift is taken off."""
    point = _selected_point(run, row)
    electrodes, markers = run.electrodes, run.markers
    assert electrodes is not None
    if markers is None or not np.isfinite(electrodes.capsule_scanner_mm[row]).all():
        return point
    return point + np.asarray(markers.shift_mm)


def slice_panel(run: RunResults, row: int, plane: str, side_px: int) -> Image.Image:
    """One orthogonal slice through the selected electrode, crosshair on its centre."""
    center = _drawn_point(run, row)
    across, upward, letters = PLANES[plane]
    scale = side_px / (2 * SLICE_HALF_MM)
    cut = sample_plane(run.volume, center, plane, half_mm=SLICE_HALF_MM, pixels_per_mm=scale)
    grey = to_grey(cut, grey_window(run.volume))[:side_px, :side_px]
    image = Image.fromarray(np.stack([grey] * 3, axis=-1))
    draw = ImageDraw.Draw(image)
    middle = side_px / 2
    for step in (-1, 1):
        near, far = middle + step * side_px * 0.12, middle + step * side_px * 0.3
        draw.line([(near, middle), (far, middle)], fill=ORANGE, width=2)
        draw.line([(middle, near), (middle, far)], fill=ORANGE, width=2)
    electrodes = run.electrodes
    assert electrodes is not None
    offset = np.asarray(electrodes.positions_scanner_mm[row]) - center
    if np.isfinite(offset).all() and np.abs(offset).max() < SLICE_HALF_MM:
        x = float(middle + offset @ across * scale)
        y = float(middle - offset @ upward * scale)
        draw.rectangle([(x - 4, y - 4), (x + 4, y + 4)], outline=GREEN, width=2)
    font = ImageFont.load_default(size=18)
    places = (
        (6, middle - 10),
        (side_px - 20, middle - 10),
        (middle - 6, side_px - 26),
        (middle, 4),
    )
    for letter, place in zip(letters, places, strict=True):
        draw.text(place, letter, fill="white", font=font, stroke_width=2, stroke_fill="black")
    draw.text((6, 4), plane, fill="white", font=font, stroke_width=2, stroke_fill="black")
    return image


def _glyph(
    pyvista: Any, shape: str, center: NDArray[np.float64], outward: NDArray[np.float64]
) -> Any:
    if shape == "cube":
        return pyvista.Cube(center=center, x_length=6, y_length=6, z_length=6)
    if shape == "octahedron":
        return pyvista.Sphere(radius=4.5, center=center, theta_resolution=4, phi_resolution=3)
    if shape == "cone":
        return pyvista.Cone(center=center, direction=-outward, height=9, radius=3.5)
    return pyvista.Sphere(radius=3.6, center=center, theta_resolution=20, phi_resolution=16)


def draw_head(plotter: Any, run: RunResults, selected: int) -> None:
    """Put head, capsules, labels and fitted layout into a plotter.

    Parameters
    ----------
    plotter : pyvista.Plotter
        Where to draw.
    run : RunResults
        With skin and electrodes.
    selected : int
        Row of the electrode that is marked.
    """
    import pyvista

    electrodes = run.electrodes
    assert electrodes is not None
    faces = np.c_[np.full(len(run.skin.faces), 3), run.skin.faces].ravel()
    mesh = pyvista.PolyData(np.asarray(run.skin.vertices_scanner_mm, np.float32), faces)
    plotter.add_mesh(mesh, color=SKIN_COLOUR, smooth_shading=True, specular=0.15, name="skin")
    middle = run.skin.vertices_scanner_mm.mean(axis=0)
    names, places = [], []
    for row, name in enumerate(electrodes.names):
        point = _selected_point(run, row)
        if not np.isfinite(point).all():
            continue
        outward = point - middle
        outward = outward / max(float(np.linalg.norm(outward)), 1e-9)
        status = electrodes.status[row]
        plotter.add_mesh(
            _glyph(pyvista, STATUS_SHAPE[status], point, outward),
            color=VERMILION if row == selected else STATUS_COLOUR[status],
            name=f"electrode {row}",
        )
        if row == selected:
            ring = pyvista.Disc(
                center=point + 2 * outward, inner=7, outer=9, normal=outward, c_res=48
            )
            plotter.add_mesh(ring, color=VERMILION, lighting=False, name="selected")
        names.append(name)
        places.append(point + 7 * outward)
    fitted = np.asarray(electrodes.fitted_scanner_mm)
    fitted = fitted[np.isfinite(fitted).all(axis=1)]
    if len(fitted):
        plotter.add_points(
            fitted.astype(np.float32),
            color="black",
            point_size=5,
            name="fitted layout",
            render_points_as_spheres=True,
        )
    plotter.add_point_labels(
        np.array(places),
        names,
        font_size=15,
        text_color="black",
        shape_color="white",
        shape_opacity=0.75,
        margin=2,
        show_points=False,
        always_visible=False,
        name="names",
    )
    plotter.set_background(tuple(value / 255 for value in PAPER))


def aim(plotter: Any, run: RunResults, selected: int) -> None:
    """Turn the camera so that the selected electrode faces the viewer."""
    point = _selected_point(run, selected)
    middle = run.skin.vertices_scanner_mm.mean(axis=0)
    direction = point - middle
    direction = direction / max(float(np.linalg.norm(direction)), 1e-9)
    direction = direction + np.array([0.0, 0.0, 0.35])
    up = (0.0, 1.0, 0.0) if abs(direction[2]) > 0.9 * np.linalg.norm(direction) else (0.0, 0.0, 1.0)
    plotter.camera.focal_point = tuple(middle)
    plotter.camera.position = tuple(middle + 560 * direction / np.linalg.norm(direction))
    plotter.camera.up = up
    plotter.reset_camera_clipping_range()


def _solid_picture(run: RunResults, selected: int, size: tuple[int, int]) -> Image.Image:
    if sys.platform.startswith("linux") and not os.environ.get("DISPLAY"):
        library = (
            "vtkEGLRenderWindow" if ctypes.util.find_library("EGL") else "vtkOSOpenGLRenderWindow"
        )
        os.environ.setdefault("VTK_DEFAULT_OPENGL_WINDOW", library)
    import pyvista

    plotter = pyvista.Plotter(off_screen=True, window_size=list(size))
    try:
        draw_head(plotter, run, selected)
        aim(plotter, run, selected)
        pixels = plotter.screenshot(None, return_img=True)
    finally:
        plotter.close()
    return Image.fromarray(np.asarray(pixels)[..., :3])


def _flat_picture(run: RunResults, selected: int, size: tuple[int, int]) -> Image.Image:
    """The same head without a graphics library: the nearest of five views, shaded by ourselves."""
    electrodes = run.electrodes
    assert electrodes is not None
    point = _selected_point(run, selected) - run.skin.vertices_scanner_mm.mean(axis=0)
    view = max(VIEWS, key=lambda v: float(np.cross(VIEWS[v][0], VIEWS[v][1]) @ point))
    seen = head_view(run.skin, view)
    left, right, bottom, top = seen.extent_mm
    scale = 0.94 * min(size[0] / (right - left), size[1] / (top - bottom))
    width, height = int((right - left) * scale), int((top - bottom) * scale)
    bright = np.where(np.isnan(seen.depth_mm), 1.0, 0.3 + 0.7 * seen.shade)[..., None]
    colour = np.where(np.isnan(seen.depth_mm)[..., None], PAPER, bright * SKIN_COLOUR)
    head = Image.fromarray(colour.astype(np.uint8)).resize(
        (width, height), Image.Resampling.BICUBIC
    )
    image = Image.new("RGB", size, PAPER)
    corner = ((size[0] - width) // 2, (size[1] - height) // 2)
    image.paste(head, corner)
    draw = ImageDraw.Draw(image)
    font = ImageFont.load_default(size=15)
    points = np.array([_selected_point(run, row) for row in range(len(electrodes.names))])
    flat, facing = seen.place(np.nan_to_num(points))
    facing &= np.isfinite(points).all(axis=1)
    for row in np.flatnonzero(facing):
        x = corner[0] + (flat[row, 0] - left) * scale
        y = corner[1] + (top - flat[row, 1]) * scale
        fill = VERMILION if row == selected else STATUS_COLOUR[electrodes.status[row]]
        box = [(x - 7, y - 7), (x + 7, y + 7)]
        (draw.rectangle if electrodes.status[row] == "inferred" else draw.ellipse)(
            box, fill=fill, outline="black"
        )
        if row == selected:
            draw.ellipse([(x - 14, y - 14), (x + 14, y + 14)], outline=VERMILION, width=3)
        draw.text(
            (x + 9, y - 16),
            electrodes.names[row],
            fill="black",
            font=font,
            stroke_width=2,
            stroke_fill="white",
        )
    draw.text((16, size[1] - 30), f"{view}: {VIEWS[view][2]}", fill=INK, font=font)
    return image


def picture(
    run: RunResults,
    *,
    selected: int | None = None,
    size: tuple[int, int] = SIZE,
    flat: bool = False,
) -> bytes:
    """Render the scene to a PNG without a display.

    Parameters
    ----------
    run : RunResults
        Of `find` or `run`.
    selected : int, optional
        Row of the electrode in the slices; default the most doubtful one.
    size : (int, int)
        Width and height in pixels.
    flat : bool
        Do without a graphics library even where there is one.

    Returns
    -------
    bytes
        A PNG file.

    Raises
    ------
    LocatorError
        If the results hold no electrodes.
    """
    row = most_doubtful(run) if selected is None else selected
    side = size[1] // 3
    head_size = (size[0] - side - 8, size[1] - 96)
    solid = can_render_3d() and not flat
    head = (_solid_picture if solid else _flat_picture)(run, row, head_size)
    image = Image.new("RGB", size, PAPER)
    image.paste(head, (0, 96))
    for index, plane in enumerate(PLANES):
        image.paste(slice_panel(run, row, plane, side - 6), (size[0] - side, index * (side + 2)))
    draw = ImageDraw.Draw(image)
    large, small = ImageFont.load_default(size=24), ImageFont.load_default(size=17)
    lines = _words(run, row)
    draw.text((18, 8), "Look at first: " + lines[0], fill=INK, font=large)
    draw.text((18, 42), "   ".join(lines[1:])[:150], fill=INK, font=small)
    draw.text(
        (18, 68),
        "ball: seen   cube: inferred   octahedron: corrected   cone: given   black dots: fitted layout"
        "   red ring: selected",
        fill=INK,
        font=small,
    )
    buffer = io.BytesIO()
    image.save(buffer, format="PNG")
    return buffer.getvalue()
