"""Sub-voxel fit of one capsule: a blurred ellipsoid over air and the edge of the skin."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.special import ndtr

from locator.geometry import apply_affine
from locator.skin import Skin
from locator.volume import Volume

FloatArray = NDArray[np.float64]

N_SHAPE = 9
"""Three numbers for the centre, six for the ellipsoid."""

LEFT_OUT_MM = 1.0
"""Voxels deeper under the skin than this do not take part in a fit."""

LEAST_VOXELS = 20
"""A fit with fewer voxels than this says nothing."""

MOST_VOXELS = 2000
"""A capsule of 12 mm on the skin fills about 1000 voxels of 1 mm and its window 2500."""

RIM_MM = 2.5
"""Beyond this distance from a blob's own surface other things begin: an ear, a neighbour, hair. The
plastic round the oil, 1 mm, and the blur of the voxels lie within it."""

RINGS_MM = np.array([-1.0, 0.0, 1.0])
"""Distances from a blob's surface at which its residuals are compared side by side."""

FIRST_VOXELS, FIRST_STEPS = 700, 6
"""Enough of a window, and of steps, to see whether there is a blob and of what size."""

GOLDEN = (5**0.5 - 1) / 2
"""Multiples of it fill the unit interval evenly (Weyl 1916)."""

HOPELESS = {0: 0.1, 4: 0.35}
"""Share of the variance that a blob must explain at the start and after four steps; a capsule
explains 0.8 and more."""


@dataclass(frozen=True, kw_only=True, slots=True)
class FitSettings:
    """What all fits of one scan share.

    Attributes
    ----------
    noise_sd : float
        Noise of one voxel, image units.
    skin_sd_mm : float
        Width of the skin's edge besides the voxel, mm.
    log_radius_sd : float
        How far the logarithm of each radius may lie from the expected one.
    log_shape_sd : float
        How far the shape may lie from a ball, in the logarithm of the radii.
    model_error : float
        Share of the blob's brightness by which the model may be wrong in a voxel.
    blur_mm : float
        Blur of the image besides the voxel, mm.
    """

    noise_sd: float
    skin_sd_mm: float = 0.3
    log_radius_sd: float = 0.5
    log_shape_sd: float = 0.3
    model_error: float = 0.04
    blur_mm: float = 0.3


@dataclass(frozen=True, eq=False, slots=True)
class BlobFit:
    """One fitted blob.

    Attributes
    ----------
    center_mm : (3,) ndarray
        Scanner mm.
    covariance_mm2 : (3, 3) ndarray
        Of the centre, from the residuals.
    amplitude : float
        Brightness over the surroundings, image units.
    radii_mm : (3,) ndarray
        Semi-axes, rising.
    explained : float
        Share of the variance that the blob explains where its surroundings alone cannot.
    residual : float
        Root mean square residual over the amplitude.
    inverse_shape : (3, 3) ndarray
        Takes offsets from the centre (mm) to where the surface is the unit sphere.
    """

    center_mm: FloatArray
    covariance_mm2: FloatArray
    amplitude: float
    radii_mm: FloatArray
    explained: float
    residual: float
    inverse_shape: FloatArray


@dataclass(frozen=True, eq=False, slots=True)
class _Window:
    """The voxels round a candidate."""

    points: FloatArray
    values: FloatArray
    weight: FloatArray
    surroundings: FloatArray
    unexplained: float


class Fitter:
    """Fits blobs in one volume."""

    def __init__(self, volume: Volume, skin: Skin, settings: FitSettings) -> None:
        self.volume = volume
        self.skin = skin
        self.settings = settings
        self._voxel_from_scanner = np.linalg.inv(volume.scanner_from_voxel)
        self._grid_from_voxel = np.linalg.inv(skin.scanner_from_grid) @ volume.scanner_from_voxel
        # A voxel is a box: its blur along each array axis is its size over sqrt(12).
        box = np.asarray(volume.scanner_from_voxel)[:3, :3] / np.sqrt(12)
        self._blur = box @ box.T + settings.blur_mm**2 * np.eye(3)

    def first_look(
        self, center_mm: FloatArray, diameter_mm: float, normal: FloatArray
    ) -> BlobFit | None:
        """Fit one blob coarsely: is there one, and of what size.

        Parameters
        ----------
        center_mm : (3,) ndarray
            Start, scanner mm.
        diameter_mm : float
            Expected diameter, mm.
        normal : (3,) ndarray
            Outward direction of the skin nearby.

        Returns
        -------
        BlobFit or None
            None when nothing like a blob is there, or the fit leaves its start.
        """
        shape = np.eye(3) * (2 / diameter_mm)
        window = self._window(center_mm, shape, normal, 0.225 * diameter_mm + 2.5, FIRST_VOXELS)
        if window is None:
            return None
        found = self._descend(window, np.zeros(3), shape, diameter_mm, FIRST_STEPS)
        return None if found is None else self._result(window, window, center_mm, *found)

    def fit(
        self,
        center_mm: FloatArray,
        diameter_mm: float,
        normal: FloatArray,
        *,
        inverse_shape: FloatArray | None = None,
    ) -> BlobFit | None:
        """Fit one blob, its rim alone around it.

        What is odd within the rim (an ear that touches it, a vessel) counts little in the end:
        Cauchy weights, whose half-width is three times the scatter of the residuals.

        Parameters
        ----------
        center_mm : (3,) ndarray
            Start, scanner mm.
        diameter_mm : float
            Expected diameter, mm.
        normal : (3,) ndarray
            Outward direction of the skin nearby.
        inverse_shape : (3, 3) ndarray, optional
            Start of the shape, from a first look; a ball if not given.

        Returns
        -------
        BlobFit or None
            None when nothing like a blob is there, or the fit leaves its start.
        """
        shape = np.eye(3) * (2 / diameter_mm) if inverse_shape is None else inverse_shape
        rim = max(RIM_MM, 1.5 * float(np.sqrt(12 * np.trace(self._blur) / 3)))
        window = self._window(center_mm, shape, normal, rim, MOST_VOXELS)
        if window is None:
            return None
        found = self._descend(window, np.zeros(3), shape, diameter_mm, 12)
        if found is None:
            return None
        center, begun, (_, shape, state) = found[0], shape, found
        strayed = np.linalg.svd(shape @ np.linalg.inv(begun), compute_uv=False)
        if np.abs(np.log(strayed)).max() > 0.1:
            # Another shape than was expected: its own rim is looked at.
            middle = center_mm + center
            wider = self._window(middle, shape, normal, rim, MOST_VOXELS)
            if wider is None:
                return None
            found = self._descend(wider, np.zeros(3), shape, diameter_mm, 8)
            if found is None:
                return None
            window, center_mm = wider, middle
            center, shape, state = found
        scatter = 1.4826 * float(np.median(np.abs(state.residual)))
        width = 3 * max(scatter, self._noise(window), self.settings.model_error * state.linear[0])
        calm = window.weight / (1 + (state.residual / width) ** 2)
        steady = _Window(
            window.points, window.values, calm, window.surroundings, window.unexplained
        )
        again = self._descend(steady, center, shape, diameter_mm, 5)
        if again is None:
            return None
        return self._result(steady, self._close(window, *again[:2]), center_mm, *again)

    def _close(self, window: _Window, center: FloatArray, inverse_shape: FloatArray) -> _Window:
        """The same window, with what lies beyond the plastic counting less and less."""
        beyond = _from_surface(window.points - center, inverse_shape)
        weight = window.weight * np.clip((RIM_MM - beyond) / (RIM_MM - 1), 0.02, 1)
        return _Window(
            window.points, window.values, weight, window.surroundings,
            _left_over(window.values, window.surroundings, weight),
        )  # fmt: skip

    def _window(
        self,
        center_mm: FloatArray,
        inverse_shape: FloatArray,
        normal: FloatArray,
        rim_mm: float,
        most: int,
    ) -> _Window | None:
        reach = 1 / float(np.linalg.svd(inverse_shape, compute_uv=False)[-1]) + rim_mm
        middle = apply_affine(self._voxel_from_scanner, center_mm)
        span = reach * np.sqrt((self._voxel_from_scanner[:3, :3] ** 2).sum(axis=1))
        shape = np.array(self.volume.intensity.shape)
        low = np.maximum(np.ceil(middle - span).astype(int), 0)
        high = np.minimum(np.floor(middle + span).astype(int) + 1, shape)
        if (high - low < 2).any():
            return None
        index = np.indices(high - low).reshape(3, -1).T + low
        points = apply_affine(self.volume.scanner_from_voxel, index) - center_mm
        near = _from_surface(points, inverse_shape) < rim_mm
        index, points = index[near], points[near]
        height = ndimage.map_coordinates(
            self.skin.height_map_mm,
            apply_affine(self._grid_from_voxel, index).T,
            order=1,
            mode="nearest",
            output=np.float64,
        )
        # Under the skin anything can be: it is left out.
        out = height > -LEFT_OUT_MM
        if out.sum() < LEAST_VOXELS:
            return None
        # More voxels than a fit needs are thinned out, evenly through the window.
        keep = np.flatnonzero(out)
        keep = keep[(np.arange(len(keep)) * GOLDEN % 1.0) * len(keep) < most]
        index, points, height = index[keep], points[keep], height[keep]
        values = self.volume.intensity[tuple(index.T)].astype(np.float64)
        weight = np.clip(0.1 + height + LEFT_OUT_MM, 0.1, 1)
        spread = np.sqrt(normal @ self._blur @ normal + self.settings.skin_sd_mm**2)
        columns = [np.ones(len(points))]
        inside = ndtr(-height / spread)
        if inside.max() > 0.05:
            edge = np.exp(-0.5 * (height / spread) ** 2)
            first, second = _tangents(normal)
            along, across = points @ first / reach, points @ second / reach
            columns += [inside, inside * along, inside * across, edge, edge * along, edge * across]
        surroundings = np.stack(columns, axis=1)
        left = _left_over(values, surroundings, weight)
        return _Window(points, values, weight, surroundings, left)

    def _noise(self, window: _Window) -> float:
        return max(self.settings.noise_sd, 1e-6 * float(np.abs(window.values).max()), 1e-12)

    def _descend(
        self,
        window: _Window,
        center: FloatArray,
        inverse_shape: FloatArray,
        diameter_mm: float,
        iterations: int,
    ) -> tuple[FloatArray, FloatArray, _State] | None:
        """Levenberg-Marquardt over centre and shape; the rest is linear at every step."""
        damping = 1e-2
        noise = self._noise(window)
        state = self._evaluate(window, center, inverse_shape, noise, diameter_mm)
        for iteration in range(iterations):
            if iteration in (0, 4) and self._explained(window, state) < HOPELESS[iteration]:
                return None
            normal, right = self._equations(window, state, noise)
            prior, pull = self._prior(state.log_radii, len(normal))
            normal += prior
            right += pull
            diagonal = np.diag(normal).copy()
            improved = False
            for _ in range(4):
                step = np.linalg.solve(
                    normal + np.diag(damping * diagonal + 1e-12 * diagonal.max()), right
                )
                turn = np.clip(step[3:N_SHAPE], -0.3, 0.3)
                length = float(np.sqrt(step[:3] @ step[:3]))
                length, move = min(length, 1.5), step[:3] * min(1.0, 1.5 / max(length, 1e-9))
                trial_center = center + move
                trial_shape = (np.eye(3) + _symmetric(turn)) @ inverse_shape
                trial = self._evaluate(window, trial_center, trial_shape, noise, diameter_mm)
                if trial.cost <= state.cost:
                    improved = True
                    break
                damping *= 6
            if not improved:
                break
            gain = state.cost - trial.cost
            center, inverse_shape, state = trial_center, trial_shape, trial
            damping = max(damping / 6, 1e-6)
            if center @ center > (0.75 * diameter_mm) ** 2:
                return None
            if length < 0.01 and gain < 1.0:
                break
        return center, inverse_shape, state

    def _equations(
        self, window: _Window, state: _State, noise: float
    ) -> tuple[FloatArray, FloatArray]:
        """Gauss-Newton equations, the linear part eliminated by being in them."""
        amplitude = state.linear[0]
        sd2 = noise**2 + (self.settings.model_error * amplitude) ** 2
        jacobian = np.concatenate([amplitude * state.slope, state.columns], axis=1)
        weighted = jacobian * (window.weight / sd2)[:, None]
        return weighted.T @ jacobian, weighted.T @ state.residual

    @staticmethod
    def _explained(window: _Window, state: _State) -> float:
        if state.linear[0] <= 0:
            return 0.0
        left = float(window.weight @ state.residual**2)
        return 1 - left / max(window.unexplained, 1e-30)

    def _prior(self, log_radii: FloatArray, size: int) -> tuple[FloatArray, FloatArray]:
        """Precision and pull of the expected size and shape, for a multiplicative step."""
        settings = self.settings
        prior = np.zeros((size, size))
        pull = np.zeros(size)
        mean = (log_radii[0, 0] + log_radii[1, 1] + log_radii[2, 2]) / 3
        # A step E multiplies the inverse shape: the log radii change by -E.
        prior[3:9, 3:9] = _COMMON / settings.log_radius_sd**2 + _CENTRED / settings.log_shape_sd**2
        pull[3:6] = mean / 3 / settings.log_radius_sd**2
        values = np.array([log_radii[i, j] for i, j in _PAIRS])
        pull[3:9] += _CENTRED @ values / settings.log_shape_sd**2
        return prior, pull

    def _evaluate(
        self,
        window: _Window,
        center: FloatArray,
        inverse_shape: FloatArray,
        noise: float,
        diameter_mm: float,
    ) -> _State:
        blob, slope = self._blob(window.points - center, inverse_shape)
        columns = np.concatenate([blob[:, None], window.surroundings], axis=1)
        weighted = columns * window.weight[:, None]
        right = weighted.T @ window.values
        linear: FloatArray = np.linalg.solve(_ridged(weighted.T @ columns), right).astype(
            np.float64
        )
        residual = window.values - columns @ linear
        settings = self.settings
        sd2 = noise**2 + (settings.model_error * linear[0]) ** 2
        log_radii = -_log_symmetric(inverse_shape) - np.log(diameter_mm / 2) * np.eye(3)
        mean = (log_radii[0, 0] + log_radii[1, 1] + log_radii[2, 2]) / 3
        cost = (
            float(window.weight @ residual**2) / sd2
            + len(residual) * np.log(sd2)
            + mean**2 / settings.log_radius_sd**2
            + (float((log_radii**2).sum()) - 3 * mean**2) / settings.log_shape_sd**2
        )
        return _State(columns, slope, linear, residual, log_radii, cost)

    def _blob(self, offset: FloatArray, inverse_shape: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Blurred ellipsoid of brightness 1 and its slopes in centre and shape."""
        y = offset @ inverse_shape.T
        rho = np.sqrt((y**2).sum(axis=1) + 1e-6)
        gradient = (y @ inverse_shape) / rho[:, None]
        steep = np.sqrt((gradient**2).sum(axis=1) + 1e-12)
        outward = gradient / steep[:, None]
        blur = np.sqrt(((outward @ self._blur) * outward).sum(axis=1))
        z = (1 - rho) / (steep * blur)
        blob = ndtr(z)
        bell = np.exp(-0.5 * z**2) / np.sqrt(2 * np.pi) / (steep * blur)
        slope = np.empty((len(offset), N_SHAPE))
        slope[:, :3] = bell[:, None] * gradient
        for column, (i, j) in enumerate(_PAIRS):
            twice = 1.0 if i == j else 2.0
            slope[:, 3 + column] = -bell * twice * y[:, i] * y[:, j] / rho
        return blob, slope

    def _result(
        self,
        window: _Window,
        evidence: _Window,
        start_mm: FloatArray,
        center: FloatArray,
        inverse_shape: FloatArray,
        state: _State,
    ) -> BlobFit | None:
        amplitude = float(state.linear[0])
        if amplitude <= 0:
            return None
        noise = self._noise(window)
        radii = 1 / np.linalg.svd(inverse_shape, compute_uv=False)
        # The noise of the air may be more than that of this place: it is only a floor.
        jacobian = np.concatenate([amplitude * state.slope, state.columns], axis=1)
        uneven = _uneven(window, center, inverse_shape, state.residual, jacobian)
        variance = max(uneven, (0.3 * noise) ** 2)
        normal = (jacobian * window.weight[:, None]).T @ jacobian / variance
        prior, _ = self._prior(state.log_radii, len(normal))
        normal += prior
        normal[np.diag_indices_from(normal)] += 1e-9 * np.trace(normal)
        covariance = np.linalg.inv(normal)[:3, :3]
        # What the looks are judged by: nothing is played down.
        total = float(evidence.weight @ state.residual**2)
        seen = total / max(evidence.weight.sum() - 12, 1.0)
        return BlobFit(
            center_mm=start_mm + center,
            covariance_mm2=(covariance + covariance.T) / 2,
            amplitude=amplitude,
            radii_mm=np.sort(radii),
            explained=self._explained(evidence, state),
            residual=float(np.sqrt(max(seen, noise**2))) / amplitude,
            inverse_shape=inverse_shape,
        )


@dataclass(frozen=True, eq=False, slots=True)
class _State:
    columns: FloatArray
    slope: FloatArray
    linear: FloatArray
    residual: FloatArray
    log_radii: FloatArray
    cost: float


_PAIRS = ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))

_COMMON = np.zeros((6, 6))
_COMMON[:3, :3] = 1 / 9
_CENTRED = np.diag([1.0, 1, 1, 2, 2, 2])
_CENTRED[:3, :3] -= 1 / 3


def _uneven(
    window: _Window,
    center: FloatArray,
    inverse_shape: FloatArray,
    residual: FloatArray,
    jacobian: FloatArray,
) -> float:
    """Variance of the residuals where they move the centre.

    A shell that is too sharp or a disc where an ellipsoid was expected leaves residuals that are
    the same on both sides of the centre and do not move it: these are taken out. The rest is
    averaged over the blob's edge, which places it: the noise of a magnitude image is larger there
    than in the air around. What a fit takes from each residual is given back by its leverage
    (MacKinnon & White 1985, J Econom 29:305).
    """
    y = (window.points - center) @ inverse_shape.T
    along = y / np.sqrt(np.einsum("ij,ij->i", y, y) + 1e-6)[:, None]
    i, j = np.triu_indices(3)
    sides = along[:, i] * along[:, j]
    beyond = _from_surface(window.points - center, inverse_shape)
    rings = np.clip(1 - np.abs(beyond[:, None] - RINGS_MM), 0, 1)
    even = (rings[:, :, None] * sides[:, None, :]).reshape(len(y), -1)
    # Slopes on the scale of the other columns, so that one ridge does for all.
    scale = np.maximum(np.abs(jacobian).max(axis=0), 1e-12)
    root = np.sqrt(window.weight)[:, None]
    columns, left = np.concatenate([jacobian / scale, even], axis=1) * root, residual * root[:, 0]
    equal = columns.T @ columns
    equal[np.diag_indices_from(equal)] += 1e-3
    half = np.linalg.solve(equal, columns.T)
    left = left - columns @ (half @ left)
    leverage = np.einsum("ij,ji->i", columns, half)
    edge = (jacobian[:, :3] ** 2).sum(axis=1)
    square = left**2 / np.clip(1 - leverage, 0.2, 1)
    return float(edge @ square) / max(float(edge @ window.weight), 1e-30)


def _from_surface(offset: FloatArray, inverse_shape: FloatArray) -> FloatArray:
    """Distance of points (N, 3) from the surface of an ellipsoid, along its gradient, mm."""
    y = offset @ inverse_shape.T
    rho = np.sqrt(np.einsum("ij,ij->i", y, y)) + 1e-6
    slope = y @ inverse_shape
    steep = np.sqrt(np.einsum("ij,ij->i", slope, slope)) / rho
    distance: FloatArray = (rho - 1) / np.maximum(steep, 1e-6)
    return distance


def _left_over(values: FloatArray, surroundings: FloatArray, weight: FloatArray) -> float:
    """Weighted sum of squares that the surroundings alone leave unexplained."""
    weighted = surroundings * weight[:, None]
    alone = _ridged(weighted.T @ surroundings)
    plain = values - surroundings @ np.linalg.solve(alone, weighted.T @ values)
    return float(weight @ plain**2)


def _ridged(normal: FloatArray) -> FloatArray:
    """The same equations, solvable when columns vanish in this window."""
    normal[np.diag_indices_from(normal)] += 1e-3 + 1e-6 * np.trace(normal)
    return normal


def _symmetric(values: FloatArray) -> FloatArray:
    matrix = np.zeros((3, 3))
    for value, (i, j) in zip(values, _PAIRS, strict=True):
        matrix[i, j] = matrix[j, i] = value
    return matrix


def _log_symmetric(matrix: FloatArray) -> FloatArray:
    """Logarithm of the stretch in a matrix (its polar factor on the left)."""
    values, vectors = np.linalg.eigh(matrix @ matrix.T)
    logarithm: FloatArray = (vectors * (0.5 * np.log(np.maximum(values, 1e-12)))) @ vectors.T
    return logarithm


def _tangents(normal: FloatArray) -> tuple[FloatArray, FloatArray]:
    axis = np.eye(3)[int(np.argmin(np.abs(normal)))]
    first = np.cross(normal, axis)
    first /= np.linalg.norm(first)
    return first, np.cross(normal, first)
