"""Where the invented currents are, and what they do on the scalp."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import ndimage

from synthetic_heads.finite_volumes import TISSUE_S_PER_M, finite_volume_lead_field
from synthetic_heads.heads import BRAINSTEM, CEREBELLUM, CSF, GREY, WHITE, SyntheticHead
from synthetic_heads.series import sphere_lead_field

FloatArray = NDArray[np.float64]
Orientation = Literal["radial", "tangential", "cortex"]

SPHERE_S_PER_M = (0.33, 0.0132, 0.33)
"""Brain, skull, scalp: ratio 25 (Lai et al. 2005 Clin Neurophysiol 116:456, in vivo)."""

_INSIDE_SKULL = (CSF, GREY, WHITE, BRAINSTEM, CEREBELLUM)


@dataclass(frozen=True, eq=False, kw_only=True)
class Dipole:
    """One current dipole that follows an event.

    The moment rises and falls as a Gaussian in time.

    Attributes
    ----------
    position_mm : (3,) ndarray
        Scanner mm.
    moment_nam : (3,) ndarray
        Moment at the peak, nAm along the scanner axes.
    event : str
        Name of the event that it follows.
    latency_s : float
        From the event to the peak.
    width_s : float
        Full width at half of the peak.
    latency_jitter_s, amplitude_jitter : float
        Standard deviation from trial to trial: of the latency, and of the amplitude as a part of
        the moment.
    """

    position_mm: FloatArray
    moment_nam: FloatArray
    event: str = "S  1"
    latency_s: float = 0.15
    width_s: float = 0.06
    latency_jitter_s: float = 0.0
    amplitude_jitter: float = 0.0

    def __post_init__(self) -> None:
        """Copy, check and lock the vectors."""
        for name in ("position_mm", "moment_nam"):
            value = np.array(getattr(self, name), float)
            if value.shape != (3,) or not np.isfinite(value).all():
                msg = f"{name} of a dipole is {value.tolist()}: three finite numbers are needed."
                raise ValueError(msg)
            value.flags.writeable = False
            object.__setattr__(self, name, value)
        if self.width_s <= 0:
            msg = f"width_s of a dipole is {self.width_s:g} s: it must be positive."
            raise ValueError(msg)


def _scanner_mm(head: SyntheticHead, voxels: NDArray[np.int64]) -> FloatArray:
    return voxels @ head.scanner_from_voxel[:3, :3].T + head.scanner_from_voxel[:3, 3]


def _lowest_z_mm(head: SyntheticHead) -> float:
    """Return the height below which the cap sees little: 15 mm over the ears."""
    if head.kind == "sphere":
        return float(head.center_mm[2])
    ears = (head.landmarks_mm["LPA"][2] + head.landmarks_mm["RPA"][2]) / 2
    return float(ears) + 15.0


def _directions(
    outward: FloatArray, orientation: Orientation, normal: FloatArray, rng: np.random.Generator
) -> FloatArray:
    if orientation == "radial":
        return outward
    if orientation == "cortex":
        return normal
    if orientation != "tangential":
        msg = f"Unknown orientation {orientation!r}: choose 'radial', 'tangential' or 'cortex'."
        raise ValueError(msg)
    across = np.cross(outward, rng.normal(size=3))
    return across / np.linalg.norm(across)


def choose_dipole(
    head: SyntheticHead,
    seed: int,
    *,
    amplitude_nam: float = 40.0,
    orientation: Orientation = "tangential",
    eccentricity: float = 0.8,
    depth_mm: tuple[float, float] = (12.0, 30.0),
    event: str = "S  1",
    latency_s: float = 0.15,
    width_s: float = 0.06,
) -> Dipole:
    """Choose a place in the grey matter under the cap, and a dipole there.

    Parameters
    ----------
    head : SyntheticHead
    seed : int
        The same seed gives the same dipole.
    amplitude_nam : float
        Length of the moment, nAm.
    orientation : {"tangential", "radial", "cortex"}
        Along or across the inner skull, or along the normal of the folded cortex.
    eccentricity : float
        Sphere only: distance from the centre as a part of the inner radius.
    depth_mm : (2,) tuple of float
        Shaped heads only: least and greatest distance to the inner skull.
    event, latency_s, width_s
        See `Dipole`.

    Returns
    -------
    Dipole

    Raises
    ------
    ValueError
        If there is no grey matter at that depth, or the orientation is unknown.
    """
    rng = np.random.default_rng([seed, 101])
    z_min = _lowest_z_mm(head)
    if head.kind == "sphere":
        wanted = eccentricity * head.radii_mm["inner_skull"]
        voxels = np.argwhere(head.labels == GREY)
        away = _scanner_mm(head, voxels) - head.center_mm
        radius = np.linalg.norm(away, axis=1)
        # Within half a voxel of the sphere, and over the lowest row of the cap.
        fits = (np.abs(radius - wanted) <= 0.5) & (away[:, 2] > 0.15 * radius)
        if not fits.any():
            msg = f"No grey matter {wanted:.1f} mm from the centre: choose another eccentricity."
            raise ValueError(msg)
        outward = away[fits][int(rng.integers(fits.sum()))]
        outward /= np.linalg.norm(outward)
        place = head.center_mm + wanted * outward
        normal = outward
    else:
        depth = _depth_mm(head)
        voxels = np.argwhere(
            (head.labels == GREY) & (depth >= depth_mm[0]) & (depth <= depth_mm[1])
        )
        places = _scanner_mm(head, voxels)
        under_cap = places[:, 2] >= z_min
        voxels, places = voxels[under_cap], places[under_cap]
        if len(voxels) == 0:
            msg = (
                f"No grey matter {depth_mm[0]:g} to {depth_mm[1]:g} mm under the inner skull"
                f" above z = {z_min:.0f} mm: choose another depth_mm."
            )
            raise ValueError(msg)
        chosen = int(rng.integers(len(voxels)))
        place = places[chosen]
        outward = -_slope(depth, voxels[chosen], head.scanner_from_voxel)
        normal = _cortex_normal(head, voxels[chosen], outward)
    direction = _directions(outward, orientation, normal, rng)
    return Dipole(
        position_mm=place,
        moment_nam=amplitude_nam * direction,
        event=event,
        latency_s=latency_s,
        width_s=width_s,
    )


def choose_patch(
    head: SyntheticHead,
    seed: int,
    *,
    radius_mm: float = 8.0,
    amplitude_nam: float = 40.0,
    n_dipoles: int = 40,
    depth_mm: tuple[float, float] = (12.0, 30.0),
    event: str = "S  1",
    latency_s: float = 0.15,
    width_s: float = 0.06,
) -> list[Dipole]:
    """Choose a patch of folded cortex that is active as a whole.

    Parameters
    ----------
    head : SyntheticHead
        A shaped head.
    seed : int
    radius_mm : float
        Grey matter within this distance of the patch's middle belongs to it.
    amplitude_nam : float
        Sum of the lengths of all moments; they cancel in part across the folds.
    n_dipoles : int
        At most so many, each along the cortex normal at its place.
    depth_mm, event, latency_s, width_s
        As in `choose_dipole`.

    Returns
    -------
    list of Dipole

    Raises
    ------
    ValueError
        If the head is a sphere, or there is no grey matter at that depth.
    """
    if head.kind == "sphere":
        msg = "A layered sphere has no folded cortex: use choose_dipole, or a shaped head."
        raise ValueError(msg)
    middle = choose_dipole(head, seed, depth_mm=depth_mm, orientation="radial")
    depth = _depth_mm(head)
    voxels = np.argwhere(head.labels == GREY)
    places = _scanner_mm(head, voxels)
    near = np.flatnonzero(np.linalg.norm(places - middle.position_mm, axis=1) <= radius_mm)
    rng = np.random.default_rng([seed, 102])
    near = np.sort(rng.permutation(near)[:n_dipoles])
    patch = []
    for i in near:
        outward = -_slope(depth, voxels[i], head.scanner_from_voxel)
        moment = _cortex_normal(head, voxels[i], outward) * amplitude_nam / len(near)
        patch.append(
            Dipole(
                position_mm=places[i],
                moment_nam=moment,
                event=event,
                latency_s=latency_s,
                width_s=width_s,
            )
        )
    return patch


def _depth_mm(head: SyntheticHead) -> FloatArray:
    size = np.linalg.norm(head.scanner_from_voxel[:3, :3], axis=0)
    return ndimage.distance_transform_edt(np.isin(head.labels, _INSIDE_SKULL), sampling=size)


def _slope(values: ArrayLike, voxel: NDArray[np.int64], affine: FloatArray) -> FloatArray:
    """Return the unit gradient, scanner axes, of a volume around a voxel."""
    block = np.asarray(values)[tuple(slice(max(i - 3, 0), i + 4) for i in voxel)]
    offset = np.stack(np.meshgrid(*[np.arange(n) for n in block.shape], indexing="ij"), -1)
    offset = (offset - np.minimum(voxel, 3)).reshape(-1, 3) @ affine[:3, :3].T
    weight = np.exp(-(offset**2).sum(1) / 8.0)
    design = np.column_stack([np.ones(len(offset)), offset]) * weight[:, None]
    fit = np.linalg.lstsq(design, block.ravel() * weight, rcond=None)[0][1:]
    length = np.linalg.norm(fit)
    return fit / length if length > 1e-9 else np.array([0.0, 0.0, 1.0])


def _cortex_normal(
    head: SyntheticHead, voxel: NDArray[np.int64], outward: FloatArray
) -> FloatArray:
    """Return the direction from white matter to the pial surface at a voxel of grey matter."""
    # White matter counts -1, fluid +1, grey 0: the gradient crosses the cortex.
    score = np.where(head.labels == WHITE, -1.0, np.where(head.labels == CSF, 1.0, 0.0))
    block = score[tuple(slice(max(i - 3, 0), i + 4) for i in voxel)]
    if np.ptp(block) == 0:
        return outward
    return _slope(score, voxel, head.scanner_from_voxel)


def background_places(
    head: SyntheticHead, n_dipoles: int, rng: np.random.Generator, *, posterior: bool = False
) -> tuple[FloatArray, FloatArray]:
    """Draw places in the grey matter and directions for background currents.

    Parameters
    ----------
    head : SyntheticHead
    n_dipoles : int
    rng : numpy.random.Generator
    posterior : bool
        Only behind the middle of the brain and above the cerebellum, where alpha comes from.

    Returns
    -------
    places_mm, directions : (n_dipoles, 3) ndarray
        Scanner mm; unit vectors.
    """
    voxels = np.argwhere(head.labels == GREY)
    places = _scanner_mm(head, voxels)
    if head.kind == "sphere":
        radius = np.linalg.norm(places - head.center_mm, axis=1)
        places = places[radius < 0.95 * head.radii_mm["inner_skull"]]
    if posterior:
        low, high = places.min(0), places.max(0)
        behind = places[:, 1] < low[1] + 0.35 * (high[1] - low[1])
        above = places[:, 2] > low[2] + 0.4 * (high[2] - low[2])
        places = places[behind & above]
    chosen = places[np.sort(rng.choice(len(places), size=n_dipoles, replace=True))]
    directions = rng.normal(size=(n_dipoles, 3))
    return chosen, directions / np.linalg.norm(directions, axis=1, keepdims=True)


def scalp_potentials(
    head: SyntheticHead,
    electrodes_mm: ArrayLike,
    places_mm: ArrayLike,
    moments: ArrayLike,
    *,
    voxel_mm: float = 2.0,
    conductivity_s_per_m: Sequence[float] | Mapping[int, float] | None = None,
) -> FloatArray:
    """Return what currents do at the electrodes, by a way that needs no surface mesh.

    On a layered sphere it is the exact series, on a shaped head finite volumes on the tissue.

    Parameters
    ----------
    head : SyntheticHead
    electrodes_mm : (E, 3) array_like
        Contact points on the skin, scanner mm.
    places_mm, moments : (S, 3) array_like
        Dipoles, scanner mm and nAm (or unit vectors).
    voxel_mm : float
        Edge of the finite volumes, a whole multiple of the label grid's.
    conductivity_s_per_m : sequence or mapping, optional
        Sphere: brain, skull, scalp; default `SPHERE_S_PER_M`. Shaped: by tissue code; default
        `synthetic_heads.finite_volumes.TISSUE_S_PER_M`.

    Returns
    -------
    (E, S) ndarray
        µV, average over the electrodes taken off.

    Raises
    ------
    ValueError
        If a dipole is outside the brain, or the conductivities do not fit the kind of head.
    """
    electrodes = np.asarray(electrodes_mm, float)
    places = np.asarray(places_mm, float).reshape(-1, 3)
    moments = np.asarray(moments, float).reshape(-1, 3)
    if head.kind == "sphere":
        sigma = SPHERE_S_PER_M if conductivity_s_per_m is None else conductivity_s_per_m
        if isinstance(sigma, Mapping):
            msg = "A layered sphere takes three conductivities (brain, skull, scalp), no mapping."
            raise ValueError(msg)
        lead = sphere_lead_field(
            electrodes,
            places,
            center_mm=head.center_mm,
            radii_mm=[head.radii_mm[name] for name in ("inner_skull", "outer_skull", "scalp")],
            conductivity_s_per_m=sigma,
        )
        potentials = np.einsum("esk,sk->es", lead, moments)
    else:
        tissue = TISSUE_S_PER_M if conductivity_s_per_m is None else conductivity_s_per_m
        if not isinstance(tissue, Mapping):
            msg = "A shaped head takes a mapping from tissue code to conductivity."
            raise ValueError(msg)
        potentials = finite_volume_lead_field(
            head.labels,
            head.scanner_from_voxel,
            electrodes,
            places,
            moments=moments,
            voxel_mm=voxel_mm,
            conductivity_s_per_m=tissue,
        )
    return potentials - potentials.mean(0)
