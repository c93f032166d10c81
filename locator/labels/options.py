"""Settings of the labelling."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from locator.errors import SettingError


@dataclass(frozen=True, kw_only=True, slots=True)
class LabelOptions:
    """Settings of the labelling.

    Attributes
    ----------
    landmarks_scanner_mm : (3, 3) array_like, optional
        NAS, LPA, RPA that a person has marked, scanner mm; default: estimated from the head.
    holder_mm : float, optional
        Skin to underside of the capsules, mm (0 to 30); default: measured from the image.
    side_marker : {"right", "left"}, optional
        An extra capsule was worn on that side.
    turn_deg, slide_mm, stretch : float
        How far caps depart from their nominal place (one standard deviation): turn about each
        axis (0.5 to 30 deg), slide along each (0.5 to 30 mm), relative stretch (0.002 to 0.2).
        Defaults 6, 6, 0.04: caps up to 15 deg, 20 mm and 10 % off stay within 2.5 to 3 deviations.
    doubt_below : float
        Labels with a lower confidence than this become findings (0.5 to 1); default 0.9.
    least_share : float
        Least share of the names that must have a capsule (0 to 1); default 0.4.
    seed : int
        Not used by the sums, which are exact in their order; kept in the record of settings.
    """

    landmarks_scanner_mm: ArrayLike | None = None
    holder_mm: float | None = None
    side_marker: str | None = None
    turn_deg: float = 6.0
    slide_mm: float = 6.0
    stretch: float = 0.04
    doubt_below: float = 0.9
    least_share: float = 0.4
    seed: int = 0

    def __post_init__(self) -> None:
        """Check the ranges."""
        ranges = {
            "turn_deg": (0.5, 30.0),
            "slide_mm": (0.5, 30.0),
            "stretch": (0.002, 0.2),
            "doubt_below": (0.5, 1.0),
            "least_share": (0.0, 1.0),
        }
        for name, (low, high) in ranges.items():
            value = getattr(self, name)
            if not low <= value <= high:
                msg = f"{name} is {value}, but must lie between {low} and {high}."
                raise SettingError(msg)
        if self.holder_mm is not None and not 0.0 <= self.holder_mm <= 30.0:
            msg = f"holder_mm is {self.holder_mm}, but must lie between 0 and 30 mm."
            raise SettingError(msg)
        if self.side_marker not in (None, "right", "left"):
            msg = f"side_marker is '{self.side_marker}', but must be 'right' or 'left'."
            raise SettingError(msg)
        if self.landmarks_scanner_mm is not None:
            marks = np.asarray(self.landmarks_scanner_mm, dtype=np.float64)
            if marks.shape != (3, 3) or not np.isfinite(marks).all():
                msg = (
                    f"landmarks_scanner_mm has shape {marks.shape}; expected three finite points"
                    " NAS, LPA, RPA (3, 3) in scanner mm."
                )
                raise SettingError(msg)
