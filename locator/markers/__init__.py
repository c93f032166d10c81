"""Capsule candidates in the shell around the skin, with sub-voxel centres and evidence."""

from __future__ import annotations

import logging
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.spatial import cKDTree

from locator.errors import MarkerError, SettingError
from locator.geometry import apply_affine, vertex_normals
from locator.markers.blobs import Grid, find_blobs
from locator.markers.fit import BlobFit, FitSettings, Fitter
from locator.markers.looks import capsule_probability
from locator.markers.shift import estimate_shift
from locator.results import Finding, Frozen, Progress
from locator.skin import Skin, height_mm, image_on_grid, skin_normals
from locator.volume import Volume

__all__ = ["MarkerOptions", "Markers", "find_markers"]

FloatArray = NDArray[np.float64]

logger = logging.getLogger(__name__)

SAMPLING_SHARE, MISFIT_SHARE, NEAR_SKIN_SHARE, HIDDEN_SHARE = 0.017, 0.03, 0.01, 0.1
"""Terms of the centres' doubt, see `_covariance`. From capsules painted on real and invented heads:
the first from 2 mm and 1 x 1 x 2.5 mm voxels, the others small beside the fit's own share."""

SUPPRESSED_BELOW, FAT_OVER_BRAIN = 1.3, 2.2
"""Fat over brain: under the first the fat is suppressed; the second is usual without that. Fat is
1.8 to 2.9 times white matter on T1 scans and 2.2 to 3.7 times the median of the brain (measured on
two real and three invented heads; 1.0 with four fifths of the fat's signal suppressed)."""


@dataclass(frozen=True, kw_only=True, slots=True)
class MarkerOptions:
    """Settings of `find_markers`.

    Attributes
    ----------
    capsule_mm : float or None
        Diameter of the capsules, mm (3 to 15); None: estimated from the image.
    least_contrast : float
        Least brightness over the surroundings, in units of scalp fat (0.05 to 1). Oil is at
        1.0 to 1.15 on T1 images (computed from T1 values of fat and oil: Hu HH, Nayak KS 2010,
        J Magn Reson Imaging); 0.2 leaves room for dim and small capsules.
    shell_mm : (float, float)
        Least and greatest height of a centre over the skin, mm: 8 mm of holder and half of a
        12 mm capsule above, 3 mm of squashed skin below.
    at_least : int
        With fewer blobs that look like capsules, the search is given up (1 to 100).
    """

    capsule_mm: float | None = None
    least_contrast: float = 0.2
    shell_mm: tuple[float, float] = (-3.0, 16.0)
    at_least: int = 5

    def __post_init__(self) -> None:
        """Check the ranges."""
        if self.capsule_mm is not None and not 3.0 <= self.capsule_mm <= 15.0:
            msg = (
                f"capsule_mm is {self.capsule_mm:g}; a capsule's diameter lies between 3 and 15 mm."
            )
            raise SettingError(msg)
        if not 0.05 <= self.least_contrast <= 1.0:
            msg = f"least_contrast is {self.least_contrast:g}; it must lie between 0.05 and 1."
            raise SettingError(msg)
        if not -10 <= self.shell_mm[0] < self.shell_mm[1] <= 25:
            msg = f"shell_mm is {self.shell_mm}; it must rise, between -10 and 25 mm."
            raise SettingError(msg)
        if not 1 <= self.at_least <= 100:
            msg = f"at_least is {self.at_least}; it must lie between 1 and 100."
            raise SettingError(msg)


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Markers(Frozen):
    """Every candidate blob, strongest first.

    Attributes
    ----------
    centers_scanner_mm : (M, 3) ndarray
        Centres, scanner mm, corrected by `shift_mm`.
    covariance_mm2 : (M, 3, 3) ndarray
        Covariance of each centre, mm^2.
    diameter_mm, contrast, roundness, skin_mm, score : (M,) ndarray
        Size; brightness over surroundings in units of fat; 1 for a ball, towards 0 for a sheet or
        rod; height of the centre over the skin (mm); probability in [0, 1] that the blob is a
        capsule by its looks alone. Sorted by falling score.
    capsule_mm : float
        Diameter that was given or estimated.
    shift_mm : (3,) ndarray
        Chemical shift that was removed from every centre, scanner mm; zeros when none is known.
    findings : tuple of Finding
    half_height_mm : (M,) ndarray
        How far each blob reaches from its centre towards the skin, mm.
    cut_off : (M,) ndarray of bool
        Whether the edge of the field of view cuts the blob.
    """

    centers_scanner_mm: FloatArray
    covariance_mm2: FloatArray
    diameter_mm: FloatArray
    contrast: FloatArray
    roundness: FloatArray
    skin_mm: FloatArray
    score: FloatArray
    capsule_mm: float
    shift_mm: FloatArray
    findings: tuple[Finding, ...] = ()
    half_height_mm: FloatArray = field(default_factory=lambda: np.zeros(0))
    cut_off: NDArray[np.bool_] = field(default_factory=lambda: np.zeros(0, dtype=bool))


def find_markers(
    volume: Volume,
    skin: Skin,
    *,
    options: MarkerOptions | None = None,
    progress: Progress | None = None,
) -> Markers:
    """Find the blobs over the skin that can be capsules.

    Parameters
    ----------
    volume : Volume
        Checked T1 volume.
    skin : Skin
        Its skin, from `find_skin`.
    options : MarkerOptions, optional
        Default ``MarkerOptions()``.
    progress : callable, optional
        Called with a fraction and a few words.

    Returns
    -------
    Markers
        Candidates by falling score; impostors are among them, with low scores.

    Raises
    ------
    MarkerError
        If fewer than ``options.at_least`` blobs look like capsules.
    """
    options = MarkerOptions() if options is None else options
    tell = progress if progress is not None else _silent
    tell(0.0, "looking for bright blobs")
    image = image_on_grid(volume, skin)
    fat = _local_fat(image, skin)
    floor = _air_level(image, skin)
    diameters = (3.5, 13.0)
    if options.capsule_mm is not None:
        diameters = (0.75 * options.capsule_mm, 1.35 * options.capsule_mm)
    blobs = find_blobs(
        image,
        skin,
        floor=floor,
        least=0.5 * options.least_contrast * fat.usual,
        diameters_mm=diameters,
        shell_mm=options.shell_mm,
        at_most=400,
    )
    tell(0.3, "fitting blobs")
    fitter = Fitter(volume, skin, FitSettings(noise_sd=skin.noise_sd))
    starts = apply_affine(skin.scanner_from_grid, blobs.places)
    normals = skin_normals(skin, starts)
    looks = [
        fitter.first_look(start, float(diameter), normal)
        for start, diameter, normal in zip(starts, blobs.diameter_mm, normals, strict=True)
    ]
    found = _distinct([fit for fit in looks if fit is not None])
    if not found:
        raise MarkerError(_nothing(0, fat, options))
    # Once more, all from the size that the capsules of this scan have in common: a first scale
    # that was too small sees only a part of a capsule.
    tell(0.6, "fitting blobs of the common size")
    seen = _Evidence.of(found, skin, fat)
    common = float(np.exp(seen.judge(options)[1][1]))
    centers = np.array([fit.center_mm for fit in found])
    missed = cKDTree(centers).query(starts)[0] > 0.4 * common
    found = _distinct(_fit_all(fitter, skin, found, starts[missed], common))
    if not found:
        raise MarkerError(_nothing(0, fat, options))
    tell(0.8, "comparing blobs")
    return _ranked(volume, skin, found, _Evidence.of(found, skin, fat), fat, options)


def _silent(_fraction: float, _words: str) -> None:
    return


def _air_level(image: Grid, skin: Skin) -> float:
    """Level of the air near the head."""
    near = (skin.height_map_mm[::3, ::3, ::3] > 5) & (skin.height_map_mm[::3, ::3, ::3] < 20)
    values = image[::3, ::3, ::3][near]
    return float(np.median(values)) if values.size else 0.0


class _Fat:
    """Scalp-fat level near a point: it follows the bias field of the scan."""

    def __init__(self, places: FloatArray, values: FloatArray, common: float, brain: float) -> None:
        self._tree = cKDTree(places)
        self._values = values
        self._common = common
        self._brain = brain
        self.over_brain = common / max(brain, 1e-30)

    @property
    def usual(self) -> float:
        """Level of fat that is not suppressed."""
        return FAT_OVER_BRAIN * self._brain if self.suppressed else self._common

    @property
    def suppressed(self) -> bool:
        """Whether the scalp is no brighter than the brain."""
        return self.over_brain < SUPPRESSED_BELOW

    def at(self, points: FloatArray) -> FloatArray:
        """Level at points (N, 3), image units."""
        if self.suppressed:
            # The brain has to do for a measure: what fat would be beside it.
            return np.full(len(points), FAT_OVER_BRAIN * self._brain)
        count = min(150, len(self._values))
        _, index = self._tree.query(points, k=count)
        level = np.percentile(self._values[index.reshape(len(points), -1)], 70, axis=1)
        local: FloatArray = np.clip(level, 0.4 * self._common, 2.5 * self._common)
        return local


def _local_fat(image: Grid, skin: Skin) -> _Fat:
    vertices = skin.vertices_scanner_mm
    normals = vertex_normals(vertices, skin.faces)
    chosen = slice(None, None, max(1, len(vertices) // 6000))
    depth = np.concatenate([np.arange(0.5, 8.1, 0.75), np.arange(18.0, 34.0, 4.0)])
    points = vertices[chosen][:, None] - depth[:, None] * normals[chosen][:, None]
    index = apply_affine(np.linalg.inv(skin.scanner_from_grid), points.reshape(-1, 3))
    profile = ndimage.map_coordinates(image, index.T, order=1, mode="nearest")
    profile = profile.reshape(-1, len(depth)).astype(np.float64)
    brain = float(np.median(profile[:, depth > 10]))
    return _Fat(vertices[chosen], profile[:, depth < 10].max(axis=1), skin.fat_intensity, brain)


def _fit_all(
    fitter: Fitter, skin: Skin, found: list[BlobFit], others_mm: FloatArray, common_mm: float
) -> list[BlobFit]:
    """Fit blobs that were seen, and other places, all with the common diameter expected."""
    places = np.concatenate([np.array([fit.center_mm for fit in found]), others_mm])
    normals = skin_normals(skin, places)
    fits = []
    for index, (place, normal) in enumerate(zip(places, normals, strict=True)):
        shape = None
        if index < len(found):
            diameter = 2 * float(np.prod(found[index].radii_mm)) ** (1 / 3)
            if abs(np.log(diameter / common_mm)) < 0.3:
                shape = found[index].inverse_shape
        fits.append(fitter.fit(place, common_mm, normal, inverse_shape=shape))
    return [fit for fit in fits if fit is not None]


def _distinct(fits: list[BlobFit]) -> list[BlobFit]:
    """One fit for each blob: the one that explains most."""
    fits = sorted(fits, key=lambda fit: (-fit.explained, *fit.center_mm))
    centers = np.array([fit.center_mm for fit in fits]).reshape(-1, 3)
    radii = np.array([max(float(np.prod(fit.radii_mm)) ** (1 / 3), 1.5) for fit in fits])
    kept: list[int] = []
    for index in range(len(fits)):
        away = np.sqrt(((centers[kept] - centers[index]) ** 2).sum(axis=1))
        if (away > 0.8 * np.maximum(radii[kept], radii[index])).all():
            kept.append(index)
    return [fits[index] for index in kept]


@dataclass(frozen=True, eq=False, slots=True)
class _Evidence:
    """What is known of each blob, (N,) each."""

    contrast: FloatArray
    diameter_mm: FloatArray
    roundness: FloatArray
    height_mm: FloatArray
    residual: FloatArray
    explained: FloatArray
    misfit: FloatArray
    """Residual over the amplitude, without the noise's share."""

    @classmethod
    def of(cls, fits: list[BlobFit], skin: Skin, fat: _Fat) -> _Evidence:
        centers = np.array([fit.center_mm for fit in fits])
        radii = np.array([fit.radii_mm for fit in fits])
        amplitude = np.array([fit.amplitude for fit in fits])
        residual = np.array([fit.residual for fit in fits])
        noise = skin.noise_sd / amplitude
        return cls(
            contrast=amplitude / fat.at(centers),
            diameter_mm=2 * np.prod(radii, axis=1) ** (1 / 3),
            roundness=radii[:, 0] / radii[:, 2],
            height_mm=height_mm(skin, centers),
            residual=residual,
            explained=np.array([fit.explained for fit in fits]),
            misfit=np.sqrt(np.maximum(residual**2 - noise**2, (0.2 * residual) ** 2)),
        )

    def judge(self, options: MarkerOptions) -> tuple[FloatArray, FloatArray]:
        """Probability of each blob, and the looks of this scan's capsules."""
        looks = np.stack(
            [
                np.log(self.contrast),
                np.log(self.diameter_mm),
                self.height_mm,
                np.log(self.residual),
                np.log(self.roundness),
            ],
            axis=1,
        )
        known = None if options.capsule_mm is None else float(np.log(options.capsule_mm))
        plausible = self.plausible(options)
        probability, mean = capsule_probability(looks, plausible, log_diameter=known)
        # Likeness alone is not enough: two ears are alike too.
        return probability * plausible, mean

    def plausible(self, options: MarkerOptions) -> FloatArray:
        """Plausibility of each blob by itself: soft limits of what a capsule can be."""
        plausible: FloatArray = (
            _above(np.log(self.contrast), np.log(options.least_contrast), 0.1)
            * _above(-np.log(self.contrast), -np.log(2.5), 0.1)
            * _above(self.diameter_mm, 3.0, 0.3)
            * _above(-self.diameter_mm, -15.0, 0.5)
            * _above(self.roundness, 0.33, 0.04)
            # The centre of whatever lies on the skin is over it, even when pressed or shifted.
            * _above(self.height_mm, max(options.shell_mm[0], 0.3), 0.4)
            * _above(-self.height_mm, -options.shell_mm[1], 0.5)
            * _above(self.explained, 0.6, 0.05)
            * _above(-self.misfit, -0.2, 0.02)
        )
        return plausible


def _covariance(
    volume: Volume,
    fits: list[BlobFit],
    seen: _Evidence,
    normals: FloatArray,
    hidden_mm: FloatArray,
) -> FloatArray:
    """Covariance of the centres, mm^2.

    The sum of

    * the fit's own: curvature of the sum of squares and the scatter of the residuals, noise and
      model misfit alike, but without what is the same on opposite sides (`Fitter`);
    * sampling: the blur of a voxel is taken for a Gaussian, which is wrong by a share that falls
      with the number of voxels across, so by ``SAMPLING_SHARE`` times the square of the voxel
      size over the diameter, along each axis of the grid;
    * misfit: what the residuals tell of a wrong model, ``MISFIT_SHARE`` of a voxel times the
      residual over the brightness, all ways;
    * the skin: its edge draws a blob that comes within 2 mm of it, along the normal;
    * the edge of the field: ``HIDDEN_SHARE`` of what it hides, along that axis.

    The doubt of the chemical shift comes on top where it is taken off.
    """
    voxel = np.asarray(volume.voxel_mm)
    axes = np.asarray(volume.scanner_from_voxel)[:3, :3] / voxel
    fitted = np.array([fit.covariance_mm2 for fit in fits])
    sampling = (SAMPLING_SHARE * voxel**2 / seen.diameter_mm[:, None]) ** 2
    grid = sampling + (HIDDEN_SHARE * hidden_mm) ** 2
    misfit = (float(voxel.mean()) * MISFIT_SHARE * seen.misfit) ** 2
    lowest = seen.height_mm - np.array([fit.radii_mm[0] for fit in fits])
    upright = (float(voxel.mean()) * NEAR_SKIN_SHARE * np.clip(1 - lowest / 2, 0, 1)) ** 2
    total: FloatArray = (
        fitted
        + np.einsum("ia,na,ja->nij", axes, grid, axes)
        + misfit[:, None, None] * np.eye(3)
        + upright[:, None, None] * normals[:, :, None] * normals[:, None, :]
    )
    return total


def _hidden(volume: Volume, fits: list[BlobFit], common_mm: float) -> FloatArray:
    """How far each blob reaches beyond the field of view along each axis of the grid, mm.

    What is cut looks smaller than it is: every blob is taken to reach as far as four fifths of
    the common radius at least.
    """
    inverse = np.linalg.inv(volume.scanner_from_voxel)
    index = apply_affine(inverse, np.array([fit.center_mm for fit in fits]))
    reach = np.array(
        [
            np.linalg.norm(np.linalg.solve(fit.inverse_shape.T, inverse[:3, :3].T), axis=0)
            for fit in fits
        ]
    )
    reach = np.maximum(reach, 0.4 * common_mm / np.asarray(volume.voxel_mm))
    # Half a voxel beyond its centre a voxel ends.
    below = reach - (index + 0.5)
    above = reach - (np.array(volume.intensity.shape) - 0.5 - index)
    hidden: FloatArray = np.maximum(np.maximum(below, above), 0) * np.asarray(volume.voxel_mm)
    return hidden


def _half_height(fits: list[BlobFit], normals: FloatArray) -> FloatArray:
    """How far each ellipsoid reaches along the normal of the skin, mm."""
    return np.array(
        [
            np.linalg.norm(np.linalg.solve(fit.inverse_shape.T, normal))
            for fit, normal in zip(fits, normals, strict=True)
        ]
    )


def _above(value: FloatArray, limit: float, width: float) -> FloatArray:
    step: FloatArray = 1 / (1 + np.exp(-np.clip((value - limit) / width, -50, 50)))
    return step


def _ranked(
    volume: Volume,
    skin: Skin,
    fits: list[BlobFit],
    seen: _Evidence,
    fat: _Fat,
    options: MarkerOptions,
) -> Markers:
    centers = np.array([fit.center_mm for fit in fits])
    score, mean = seen.judge(options)
    likely = int((score > 0.5).sum())
    if likely < options.at_least:
        raise MarkerError(_nothing(likely, fat, options))
    normals = skin_normals(skin, centers)
    shift = estimate_shift(volume, normals, seen.height_mm, score)
    hidden = _hidden(volume, fits, float(np.exp(mean[1])))
    covariance = _covariance(volume, fits, seen, normals, hidden) + shift.covariance_mm2
    cut_off = hidden.max(axis=1) > 0
    centers = centers - shift.shift_mm
    order = np.lexsort((*centers.T, -score))[: max(30, 3 * likely)]
    capsule = options.capsule_mm if options.capsule_mm is not None else float(np.exp(mean[1]))
    logger.info("Markers: %d blobs, %d look like capsules of %.1f mm", len(order), likely, capsule)
    return Markers(
        centers_scanner_mm=centers[order],
        covariance_mm2=covariance[order],
        diameter_mm=seen.diameter_mm[order],
        contrast=seen.contrast[order],
        roundness=seen.roundness[order],
        skin_mm=height_mm(skin, centers)[order],
        score=score[order],
        capsule_mm=capsule,
        shift_mm=shift.shift_mm,
        findings=(*shift.findings, *_remarks(cut_off & (score > 0.5), fat)),
        half_height_mm=_half_height(fits, normals)[order],
        cut_off=cut_off[order],
    )


def _remarks(cut_off: NDArray[np.bool_], fat: _Fat) -> list[Finding]:
    """What a person should know of this scan's capsules."""
    remarks = []
    if cut_off.any():
        remarks.append(
            Finding(
                level="look",
                stage="markers",
                problem=f"{int(cut_off.sum())} of the capsules are cut by the edge of the field of"
                " view; their centres are less sure.",
                suggestion="Look at them in the slices; leave more room round the cap next time.",
                doubt=0.5,
            )
        )
    if fat.suppressed:
        remarks.append(
            Finding(
                level="note",
                stage="markers",
                problem=f"The scalp's fat is at only {fat.over_brain:.2f} of the brain's"
                " brightness (fat suppression), yet the markers are bright: they hold water, or"
                " oil that escaped the suppression.",
                suggestion="",
                doubt=0.2,
            )
        )
    return remarks


def _nothing(likely: int, fat: _Fat, options: MarkerOptions) -> str:
    msg = (
        f"Found {likely} blobs that look like capsules over the skin, at least"
        f" {options.at_least} are needed (stage markers)."
    )
    if fat.suppressed:
        return msg + (
            f" The scalp's fat is at only {fat.over_brain:.2f} of the brain's brightness, on a T1"
            " it is at 2 and more: fat suppression, which takes oil capsules away too. Use a T1"
            " without fat suppression."
        )
    return msg + (
        f" The scalp's fat is at {fat.over_brain:.1f} of the brain's brightness, so the scan is"
        " not fat-suppressed: capsules of oil would be seen. Check that a cap with capsules was"
        " worn in this scan; if it was, give their size with --capsule-mm."
    )
