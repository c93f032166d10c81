"""Where a cap's electrodes may be on one head: a smooth model with a Gaussian prior.

All parameters are scaled to unit prior variance. The cap starts at the places that the
tape-measure rules (or the given layout) ask for; then the landmarks may be wrong, the cap is
stretched and deformed smoothly, slid and turned as a whole, and pulled down on the skin.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from locator.layout.tape import StarSurface

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True, slots=True)
class CapPrior:
    """How far caps depart from their nominal place (standard deviations).

    Attributes
    ----------
    turn_deg : float
        Turn about each axis. Caps are expected up to 15 degrees off: 2.5 deviations.
    slide_mm : float
        Slide along each axis. Up to 20 mm off together with the turn.
    stretch : float
        Relative stretch front to back and side to side; up to 10 % is 2.5 deviations.
    bend_mm, bend_reach_mm : float
        Smooth deformation, per tangential axis, and the distance over which it is alike.
    """

    turn_deg: float = 6.0
    slide_mm: float = 6.0
    stretch: float = 0.04
    bend_mm: float = 2.5
    bend_reach_mm: float = 60.0


class CapModel:
    """Places of the names on one head as a function of the parameters of the cap."""

    def __init__(
        self,
        surface: StarSurface,
        base_mm: FloatArray,
        landmark_fields: FloatArray,
        prior: CapPrior,
        turn: FloatArray | None = None,
    ) -> None:
        """Take the nominal places (E, 3) and their change per deviation of landmarks (L, E, 3)."""
        self.surface = surface
        self.base = base_mm
        self.center = surface.center_mm
        self.prior = prior
        self.turn = np.eye(3) if turn is None else turn
        n_names = len(base_mm)
        fields = [landmark_fields.reshape(-1, n_names, 3)]
        fields.append(self._stretch_fields())
        bends = self._bend_fields()
        fields.append(bends)
        self.landmark_fields = landmark_fields
        self.n_bends = len(bends)
        self.fields = np.concatenate(fields, axis=0)  # (K, E, 3), per unit deviation
        self.n_parameters = 6 + len(self.fields)

    def stiffened(self, bend_mm: float = 0.8) -> CapModel:
        """The same cap, less willing to bend; its parameters mean the same."""
        prior = replace(self.prior, bend_mm=min(bend_mm, self.prior.bend_mm))
        return CapModel(self.surface, self.base, self.landmark_fields, prior, self.turn)

    def mirrored(self) -> CapModel:
        """The same cap with left and right exchanged, as a mirrored image would show it."""
        axes = self.surface.axes
        flip = axes.T @ np.diag([-1.0, 1.0, 1.0]) @ axes
        base = self.surface.project(self.center + (self.base - self.center) @ flip)
        return CapModel(self.surface, base, self.landmark_fields @ flip, self.prior, self.turn)

    def _stretch_fields(self) -> FloatArray:
        """Displacements for one deviation of stretch, front to back and side to side."""
        local = (self.base - self.center) @ self.surface.axes.T
        angle = np.arccos(np.clip(local[:, 2] / np.linalg.norm(local, axis=1), -1, 1))
        azimuth = np.arctan2(local[:, 1], local[:, 0])
        length = np.linalg.norm(local, axis=1)
        reach = length * angle * self.prior.stretch
        down = np.stack(
            [
                np.cos(angle) * np.cos(azimuth),
                np.cos(angle) * np.sin(azimuth),
                -np.sin(angle),
            ],
            axis=1,
        )
        lengthwise = (reach * np.sin(azimuth) ** 2)[:, None] * down
        sidewise = (reach * np.cos(azimuth) ** 2)[:, None] * down
        return np.stack([lengthwise, sidewise]) @ self.surface.axes

    def _bend_fields(self) -> FloatArray:
        """Leading modes of a smooth random deformation (Gaussian kernel)."""
        gap2 = ((self.base[:, None] - self.base[None]) ** 2).sum(axis=2)
        kernel = self.prior.bend_mm**2 * np.exp(-0.5 * gap2 / self.prior.bend_reach_mm**2)
        values, vectors = np.linalg.eigh(kernel)
        keep = np.argsort(values)[::-1][: min(14, len(values))]
        keep = keep[values[keep] > 1e-3 * values.max()]
        modes = vectors[:, keep] * np.sqrt(values[keep])  # (E, K)
        out: FloatArray = np.einsum("ek,ab->kaeb", modes, np.eye(3)).reshape(-1, len(self.base), 3)
        return out

    def _rigid(self, parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
        turn = Rotation.from_rotvec(np.radians(parameters[:3] * self.prior.turn_deg)).as_matrix()
        return turn @ self.turn, parameters[3:6] * self.prior.slide_mm

    def _shape(self, parameters: FloatArray) -> FloatArray:
        """Places before slide and turn, from the centre of the head."""
        bent: FloatArray = self.base + np.tensordot(parameters[6:], self.fields, axes=1)
        return bent - self.center

    def _carry(self, shape: FloatArray, parameters: FloatArray) -> FloatArray:
        """Places slid and turned, not yet on the skin."""
        turn, slide = self._rigid(parameters)
        axes = self.surface.axes
        carried: FloatArray = self.center + shape @ (axes.T @ turn @ axes).T + slide @ axes
        return carried

    def places(self, parameters: FloatArray) -> FloatArray:
        """Places (E, 3) on the skin, mm."""
        return self.surface.project(self._carry(self._shape(parameters), parameters))

    def linear(self, parameters: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Places (E, 3), tangential slopes (E, 3, P) and outward directions (E, 3)."""
        places = self.places(parameters)
        normals = self.surface.normals(places)
        slopes = np.zeros((len(places), 3, self.n_parameters))
        step = 0.1
        shape = self._shape(parameters)
        moved = np.empty((6, *places.shape))
        for index in range(6):
            changed = parameters[:6].copy()
            changed[index] += step
            moved[index] = self._carry(shape, changed)
        slopes[:, :, :6] = ((self.surface.project(moved) - places) / step).transpose(1, 2, 0)
        turn, _ = self._rigid(parameters)
        turn = self.surface.axes.T @ turn @ self.surface.axes
        slopes[:, :, 6:] = (self.fields @ turn.T).transpose(1, 2, 0)
        slopes -= normals[:, :, None] * (normals[:, None, :] @ slopes)
        return places, slopes, normals
