"""Small pictures made straight from arrays, encoded for the page."""

from __future__ import annotations

import base64
import io

import numpy as np
from numpy.typing import ArrayLike, NDArray
from PIL import Image, ImageDraw, ImageFont

from locator.views import GREEN, ORANGE, PLANES, SKY, sample_plane, to_grey
from locator.volume import Volume


def png_uri(pixels: NDArray[np.uint8]) -> str:
    """Encode grey (H, W) or colour (H, W, 3) pixels as a PNG data address."""
    buffer = io.BytesIO()
    Image.fromarray(pixels).save(buffer, format="PNG", optimize=True)
    return "data:image/png;base64," + base64.b64encode(buffer.getvalue()).decode("ascii")


def capsule_tile(
    volume: Volume,
    point_scanner_mm: ArrayLike,
    window: tuple[float, float],
    *,
    half_mm: float = 20.0,
    side_px: int = 96,
    found: bool = True,
    contact_scanner_mm: ArrayLike | None = None,
) -> NDArray[np.uint8]:
    """Axial, coronal and sagittal cut through one capsule, side by side.

    Parameters
    ----------
    volume : Volume
        The T1.
    point_scanner_mm : (3,) array_like
        Capsule centre, or the expected place when none was found.
    window : (float, float)
        From `grey_window`.
    half_mm : float
        Half the width of each cut.
    side_px : int
        Pixels along a side of each cut.
    found : bool
        Ticks of a found capsule are drawn whole, those of an expected place broken.
    contact_scanner_mm : (3,) array_like, optional
        Contact point, drawn as a small square where it lies within the cut.

    Returns
    -------
    (side_px, 3 * side_px, 3) ndarray of uint8
    """
    colour = ORANGE if found else SKY
    tiles = []
    font = ImageFont.load_default(size=11)
    for plane, (across, upward, letters) in PLANES.items():
        cut = sample_plane(
            volume, point_scanner_mm, plane, half_mm=half_mm, pixels_per_mm=side_px / (2 * half_mm)
        )
        grey = to_grey(cut, window)[:side_px, :side_px]
        image = Image.fromarray(np.stack([grey] * 3, axis=-1))
        draw = ImageDraw.Draw(image)
        middle = side_px / 2
        for step in (-1, 1):
            for reach in ((14, 24),) if found else ((13, 16), (19, 22), (25, 28)):
                near, far = middle + step * reach[0], middle + step * reach[1]
                draw.line([(near, middle), (far, middle)], fill=colour, width=2)
                draw.line([(middle, near), (middle, far)], fill=colour, width=2)
        if contact_scanner_mm is not None:
            offset = np.asarray(contact_scanner_mm, float) - np.asarray(point_scanner_mm, float)
            x = middle + offset @ across * side_px / (2 * half_mm)
            y = middle - offset @ upward * side_px / (2 * half_mm)
            draw.rectangle([(x - 2, y - 2), (x + 2, y + 2)], outline=GREEN, width=1)
        draw.text(
            (3, middle - 7),
            letters[0],
            fill="white",
            font=font,
            stroke_width=1,
            stroke_fill="black",
        )
        draw.text(
            (side_px - 11, middle - 7),
            letters[1],
            fill="white",
            font=font,
            stroke_width=1,
            stroke_fill="black",
        )
        tiles.append(np.asarray(image))
    joined: NDArray[np.uint8] = np.concatenate(tiles, axis=1)
    joined[:, side_px::side_px][:, :2] = 255
    return joined
