"""Noise covariance and the minimum-norm family of source estimates."""

from __future__ import annotations

import logging
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from locator.errors import InverseError
from locator.recording import Epochs
from locator.results import Finding, Frozen, Progress

FloatArray = NDArray[np.float64]

logger = logging.getLogger(__name__)

METHODS = ("eloreta", "sloreta", "dspm", "mne")
# The same stopping rule as the usual implementation, so that its result can be compared.
_ELORETA_CHANGE, _ELORETA_STEPS = 1e-6, 50
_SNR_RANGE = (1.0, 10.0)


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Inverse(Frozen):
    """A linear source estimate and its standardisation.

    Attributes
    ----------
    kernel_nam_per_uv : (S, 3, E) ndarray
        Current estimate (nAm) from average-referenced potentials (microvolt).
    standardise : (S, 3, 3) ndarray
        Per source a matrix W such that the statistic is the squared length of W @ (kernel @ data).
    electrode_names : tuple of str
    noise_covariance_uv2 : (E, E) ndarray
        Of one trial, average reference.
    noise_rank : int
    method : str
    lambda2 : float
    snr : float
        Amplitude signal-to-noise of the average that gave `lambda2`.
    n_average : int
        Trials in the average that the operator was made for.
    findings : tuple of Finding
    noise_norm_per_nam : (S,) ndarray
        One factor a source that makes the estimate dimensionless as dSPM and sLORETA are usually
        printed (one common factor for the three components); ones for `mne` and `eloreta`.
    depth_prior : (S,) ndarray
        Prior variance of each source before the common scale; ones for `eloreta`.
    orientation : str
        `free`, `loose` or `fixed`.
    loose : float
        Prior variance across the normal relative to along it; 1 when free, 0 when fixed.
    normals : (S, 3) ndarray
        NaN when free.
    shrinkage : float
        Share of the noise covariance taken from the scaled identity.
    snr_from_data : bool
        Whether `snr` was measured or set.
    """

    kernel_nam_per_uv: FloatArray
    standardise: FloatArray
    electrode_names: tuple[str, ...]
    noise_covariance_uv2: FloatArray
    noise_rank: int
    method: str
    lambda2: float
    snr: float
    n_average: int
    noise_norm_per_nam: FloatArray = field(default_factory=lambda: np.ones(0))
    depth_prior: FloatArray = field(default_factory=lambda: np.ones(0))
    normals: FloatArray = field(default_factory=lambda: np.full((0, 3), np.nan))
    orientation: str = "free"
    loose: float = 1.0
    shrinkage: float = 0.0
    snr_from_data: bool = True
    findings: tuple[Finding, ...] = ()


@dataclass(frozen=True, kw_only=True, slots=True)
class InverseOptions:
    """Settings of the source estimate.

    Attributes
    ----------
    method : {"eloreta", "sloreta", "dspm", "mne"}
        Default eLORETA (Pascual-Marqui 2007): no peak error for a single source without noise.
        sLORETA has the same property and about the same peak error on spheres with a wrong skull
        and displaced electrodes (``tests/benchmarks/forward.py``); on a shaped head whose data
        came from a model of five tissues eLORETA was nearer (median 9 and 21 mm for shallow and
        deep sources against 14 and 45 mm, measured with prototypes before this code was written).
    orientation : {"free", "loose", "fixed"}
        `loose` and `fixed` need normals.
    loose : float
        Prior variance across the normal relative to along it, in (0, 1]; default 0.2 (common
        practice, no source).
    depth : float
        Exponent of the depth weighting of `mne`, `dspm` and `sloreta`, in [0, 1.5]; default 0.8
        (0.6 to 0.8 was best in Lin et al. 2006, NeuroImage 31:160-171). eLORETA has its own.
    depth_limit : float
        Largest ratio of weights in amplitude, at least 1; default 10 (common practice).
    snr : float or None
        Amplitude signal-to-noise of the average, above 0; the regularisation is
        ``lambda2 = 1 / snr**2``. None measures it: whitened power of the average over that of
        noise, in the tenth of the samples after the event where it is largest, held in [1, 10].
    baseline_s : (2,) tuple of float or None
        Where the noise is measured; None takes everything before the event.
    """

    method: Literal["eloreta", "sloreta", "dspm", "mne"] = "eloreta"
    orientation: Literal["free", "loose", "fixed"] = "free"
    loose: float = 0.2
    depth: float = 0.8
    depth_limit: float = 10.0
    snr: float | None = None
    baseline_s: tuple[float, float] | None = None

    def __post_init__(self) -> None:
        """Check the ranges."""
        stage = "(stage inverse)."
        if self.method not in METHODS:
            msg = f"method is {self.method!r}; choose one of {', '.join(METHODS)} {stage}"
            raise InverseError(msg)
        if self.orientation not in ("free", "loose", "fixed"):
            msg = f"orientation is {self.orientation!r}; choose free, loose or fixed {stage}"
            raise InverseError(msg)
        if not 0 < self.loose <= 1:
            msg = f"loose is {self.loose}; allowed above 0 up to 1 {stage}"
            raise InverseError(msg)
        if not 0 <= self.depth <= 1.5:
            msg = f"depth is {self.depth}; allowed 0 to 1.5 {stage}"
            raise InverseError(msg)
        if not self.depth_limit >= 1:
            msg = f"depth_limit is {self.depth_limit}; allowed from 1 on {stage}"
            raise InverseError(msg)
        if self.snr is not None and not 0 < self.snr < 1e6:
            msg = f"snr is {self.snr}; allowed above 0, or none to measure it {stage}"
            raise InverseError(msg)


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Noise(Frozen):
    """Noise of one trial between the electrodes.

    Attributes
    ----------
    covariance_uv2 : (E, E) ndarray
        Average reference.
    whitener : (rank, E) ndarray
        Turns one trial's noise into unit variance, per microvolt.
    rank : int
    shrinkage : float
    n_samples : int
    """

    covariance_uv2: FloatArray
    whitener: FloatArray
    rank: int
    shrinkage: float
    n_samples: int


def noise_covariance(epochs: Epochs, *, baseline_s: tuple[float, float] | None = None) -> Noise:
    """Noise covariance of one trial from the baseline, shrunk towards a scaled identity.

    The weight of the identity is that of Ledoit and Wolf, with whole trials as the independent
    units, since the samples of one trial depend on each other. Directions in which the data have
    no variance (the average reference takes one) are left out.

    Parameters
    ----------
    epochs : Epochs
    baseline_s : (2,) tuple of float, optional
        Default: all samples up to the event, or all there are when none lies before it.

    Returns
    -------
    Noise

    Raises
    ------
    InverseError
        If the baseline holds fewer than two samples or the data do not vary.

    References
    ----------
    .. [1] Ledoit O, Wolf M (2004). A well-conditioned estimator for large-dimensional covariance
       matrices. J Multivariate Anal 88:365-411.
    """
    data = np.asarray(epochs.data_uv, dtype=np.float64)
    times = np.asarray(epochs.times_s)
    if baseline_s is None:
        chosen = times <= 0
        if chosen.sum() < 2:
            chosen = np.ones(len(times), dtype=bool)
    else:
        chosen = (times >= baseline_s[0] - 1e-9) & (times <= baseline_s[1] + 1e-9)
    n_trials, n_electrodes = data.shape[:2]
    n_samples = int(chosen.sum())
    if n_samples < 2 or n_electrodes < 3:
        msg = (
            f"The baseline holds {n_samples} samples of {n_electrodes} electrodes; at least 2 of 3"
            f" are needed (stage inverse, epochs from {times[0]:g} to {times[-1]:g} s). Choose an"
            " epoch that begins earlier."
        )
        raise InverseError(msg)
    referenced = data - data.mean(axis=1, keepdims=True)
    everything = np.einsum("net,nft->ef", referenced, referenced, optimize=True)
    variance, directions = np.linalg.eigh(everything)
    if not variance[-1] > 0 or not np.isfinite(variance).all():
        msg = (
            f"The {n_trials} epochs of {n_electrodes} electrodes do not vary, or are not finite"
            " (stage inverse). Check the recording."
        )
        raise InverseError(msg)
    kept = directions[:, variance > 1e-9 * variance[-1]]
    rank = kept.shape[1]
    quiet = np.einsum("er,net->nrt", kept, referenced[:, :, chosen], optimize=True)
    each = np.einsum("nrt,nst->nrs", quiet, quiet, optimize=True) / n_samples
    sample = each.mean(axis=0)
    scale = float(np.trace(sample)) / rank
    if not scale > 0:
        msg = (
            f"The baseline of {n_samples} samples does not vary (stage inverse). Choose another"
            " baseline."
        )
        raise InverseError(msg)
    if n_trials >= 8:
        units = each
    else:
        units = np.einsum("nrt,nst->ntrs", quiet, quiet).reshape(-1, rank, rank)
    error = float(((units - sample) ** 2).sum()) / len(units) ** 2
    spread = float(((sample - scale * np.eye(rank)) ** 2).sum())
    shrinkage = min(1.0, error / spread) if spread > 0 else 1.0
    shrunk = shrinkage * scale * np.eye(rank) + (1 - shrinkage) * sample
    values, vectors = np.linalg.eigh(shrunk)
    values = np.maximum(values, 1e-10 * values[-1])
    basis = kept @ vectors
    # A sign of each direction that does not depend on the library's choice.
    basis *= np.sign(basis[np.abs(basis).argmax(axis=0), np.arange(rank)])
    return Noise(
        covariance_uv2=(basis * values) @ basis.T,
        whitener=(basis / np.sqrt(values)).T,
        rank=rank,
        shrinkage=shrinkage,
        n_samples=n_samples * n_trials,
    )


def make_inverse(
    rows: ArrayLike,
    epochs: Epochs,
    *,
    options: InverseOptions | None = None,
    normals: ArrayLike | None = None,
    noise: Noise | None = None,
    progress: Progress | None = None,
) -> Inverse:
    """Source estimate of the average of the epochs, and its standardisation.

    Parameters
    ----------
    rows : (E, S, 3) array_like
        Lead field at the good electrodes, microvolt per nAm along x, y, z; any reference.
    epochs : Epochs
        Of the same electrodes.
    options : InverseOptions, optional
    normals : (S, 3) array_like, optional
        Unit normals, for `loose` and `fixed`.
    noise : Noise, optional
        From another recording; default: from the baseline of `epochs`.
    progress : Progress, optional

    Returns
    -------
    Inverse

    Raises
    ------
    InverseError
        If the shapes do not fit, values are not finite, or normals are needed and absent.

    Notes
    -----
    With G the whitened lead field, R the source prior scaled to ``trace(G R G') = rank`` and
    ``N = (G R G' + lambda2 I)^-1``, the currents are ``j = R G' N`` times the whitened data. The
    statistic is the squared length of the standardised current of each source: for sLORETA and
    eLORETA ``j' (R G' N G R)^-1 j``, which has its maximum at the source for every single
    noise-free source, whatever lambda2; for dSPM ``j'j`` over its expectation under noise; for
    MNE ``j'j`` over the mean of that expectation over the sources (no standardisation by place).

    References
    ----------
    .. [1] Hämäläinen MS, Ilmoniemi RJ (1994). Interpreting magnetic fields of the brain: minimum
       norm estimates. Med Biol Eng Comput 32:35-42.
    .. [2] Dale AM et al. (2000). Dynamic statistical parametric mapping. Neuron 26:55-67.
    .. [3] Pascual-Marqui RD (2002). Standardized low-resolution brain electromagnetic tomography
       (sLORETA): technical details. Methods Find Exp Clin Pharmacol 24D:5-12.
    .. [4] Pascual-Marqui RD (2007). Discrete, 3D distributed, linear imaging methods of electric
       neuronal activity. Part 1: exact, zero error localization. arXiv:0710.3341.
    """
    chosen = options or InverseOptions()
    tell = progress or _silent
    tell(0.0, "noise")
    gain_uv = _check_rows(rows, epochs)
    findings: list[Finding] = []
    quiet = noise or noise_covariance(epochs, baseline_s=chosen.baseline_s)
    if quiet.covariance_uv2.shape[0] != gain_uv.shape[0]:
        msg = (
            f"The noise covariance is of {quiet.covariance_uv2.shape[0]} electrodes, the lead field"
            f" of {gain_uv.shape[0]} (stage inverse). Measure the noise at the same electrodes."
        )
        raise InverseError(msg)
    if quiet.shrinkage > 0.5:
        findings.append(
            Finding(
                level="note",
                stage="inverse",
                problem=(
                    f"{quiet.n_samples} baseline samples say little about the noise:"
                    f" {100 * quiet.shrinkage:.0f} % of its covariance is a plain diagonal."
                ),
                suggestion="A longer baseline or more trials would help.",
                subject="noise covariance",
                doubt=0.3,
            )
        )
    n_average = epochs.data_uv.shape[0] if epochs.testable else max(1, epochs.n_trials_read)
    if not epochs.testable and noise is None:
        # The baseline of an average holds the noise of the average.
        quiet = Noise(
            covariance_uv2=quiet.covariance_uv2 * n_average,
            whitener=quiet.whitener / np.sqrt(n_average),
            rank=quiet.rank,
            shrinkage=quiet.shrinkage,
            n_samples=quiet.n_samples,
        )
    measured = _measure_snr(epochs, quiet, n_average)
    snr = float(np.clip(measured, *_SNR_RANGE)) if chosen.snr is None else float(chosen.snr)
    lambda2 = 1.0 / snr**2
    if chosen.snr is None and measured < 1.5:
        findings.append(
            Finding(
                level="note",
                stage="inverse",
                problem=f"The average hardly stands out of the noise: signal-to-noise {measured:.1f}.",
                suggestion="Expect a smooth map; more trials would help.",
                subject="average",
                doubt=0.5,
            )
        )
    whitener = quiet.whitener * np.sqrt(n_average)
    n_electrodes, n_sources = gain_uv.shape[:2]
    units = _check_normals(normals, n_sources, chosen.orientation)
    loose = {"free": 1.0, "loose": chosen.loose, "fixed": 0.0}[chosen.orientation]
    frames, relative = local_frames(chosen.orientation, loose, units)
    local = gain_uv - gain_uv.mean(axis=0)
    if chosen.orientation != "free":
        local = np.einsum("esx,sxd->esd", local, frames)
    gain = np.ascontiguousarray(
        (whitener @ local.reshape(n_electrodes, -1)).reshape(quiet.rank, n_sources, -1)
    )
    tell(0.3, f"{chosen.method} over {n_sources} sources")
    if chosen.method == "eloreta":
        depth_prior = np.ones(n_sources)
        prior, settled = _eloreta_prior(gain, relative, lambda2)
        if not settled:
            findings.append(
                Finding(
                    level="note",
                    stage="inverse",
                    problem=f"The eLORETA weights still moved after {_ELORETA_STEPS} steps.",
                    suggestion="Compare with sloreta.",
                    subject="eloreta",
                    doubt=0.3,
                )
            )
    else:
        depth_prior = _depth_prior(local, chosen.depth, chosen.depth_limit)
        prior = depth_prior[:, None, None] * np.diag(relative)
        prior = _scaled(gain, prior)[0]
    tell(0.8, "kernel")
    inner = _inner(gain, prior, lambda2)
    # (S, d, rank): prior times gain transposed times the inner inverse.
    leads = np.einsum("sdf,rsf->sdr", prior, gain, optimize=True) @ inner
    kernel = leads @ whitener
    standard, norm = _standardise(chosen.method, gain, prior, leads, lambda2)
    if chosen.orientation != "free":
        kernel = frames @ kernel
        standard = frames @ standard @ frames.transpose(0, 2, 1)
    tell(1.0, "done")
    logger.info(
        "inverse: %s, %d sources, %d electrodes, signal-to-noise %.2f, shrinkage %.3f",
        chosen.method,
        n_sources,
        n_electrodes,
        snr,
        quiet.shrinkage,
    )
    return Inverse(
        kernel_nam_per_uv=np.ascontiguousarray(kernel),
        standardise=np.ascontiguousarray(standard),
        electrode_names=tuple(epochs.electrode_names),
        noise_covariance_uv2=quiet.covariance_uv2,
        noise_rank=quiet.rank,
        method=chosen.method,
        lambda2=lambda2,
        snr=snr,
        n_average=n_average,
        noise_norm_per_nam=norm,
        depth_prior=depth_prior,
        normals=units,
        orientation=chosen.orientation,
        loose=loose,
        shrinkage=quiet.shrinkage,
        snr_from_data=chosen.snr is None,
        findings=tuple(findings),
    )


def estimate(inverse: Inverse, data_uv: ArrayLike) -> FloatArray:
    """Currents of every source.

    Parameters
    ----------
    inverse : Inverse
    data_uv : (E, T) array_like
        Microvolt, any reference: the operator takes the average reference.

    Returns
    -------
    (S, 3, T) ndarray
        nAm along scanner x, y, z.
    """
    data = np.asarray(data_uv, dtype=np.float64)
    kernel = inverse.kernel_nam_per_uv
    if data.ndim != 2 or data.shape[0] != kernel.shape[2]:
        msg = (
            f"Data have shape {data.shape}, the operator is for {kernel.shape[2]} electrodes"
            " (stage inverse). Pass (electrodes, samples)."
        )
        raise InverseError(msg)
    currents: FloatArray = kernel.reshape(-1, kernel.shape[2]) @ data
    return currents.reshape(kernel.shape[0], 3, -1)


def statistic(inverse: Inverse, data_uv: ArrayLike) -> FloatArray:
    """Standardised power of every source, (S, T); see :func:`make_inverse`."""
    standardised = inverse.standardise @ estimate(inverse, data_uv)
    power: FloatArray = (standardised**2).sum(axis=1)
    return power


def _silent(_fraction: float, _words: str) -> None:
    """Progress that nobody asked for."""


def _check_rows(rows: ArrayLike, epochs: Epochs) -> FloatArray:
    gain = np.asarray(rows, dtype=np.float64)
    n_electrodes = len(epochs.electrode_names)
    if gain.ndim != 3 or gain.shape[2] != 3 or gain.shape[1] == 0:
        msg = f"The lead field has shape {gain.shape}; (E, S, 3) is needed (stage inverse)."
        raise InverseError(msg)
    if gain.shape[0] != n_electrodes or epochs.data_uv.shape[1] != n_electrodes:
        msg = (
            f"The lead field has {gain.shape[0]} electrodes, the epochs {n_electrodes} names and"
            f" {epochs.data_uv.shape[1]} rows (stage inverse). Pass the good electrodes' rows in"
            " the order of the epochs."
        )
        raise InverseError(msg)
    if not np.isfinite(gain).all():
        msg = f"{int((~np.isfinite(gain)).sum())} lead-field values are not finite (stage inverse)."
        raise InverseError(msg)
    return gain


def _check_normals(normals: ArrayLike | None, n_sources: int, orientation: str) -> FloatArray:
    if orientation == "free":
        return np.full((n_sources, 3), np.nan)
    where = f"(stage inverse, orientation {orientation}). Use free orientation."
    if normals is None:
        msg = f"There are no normals {where}"
        raise InverseError(msg)
    units = np.asarray(normals, dtype=np.float64)
    if units.shape != (n_sources, 3):
        msg = f"The normals have shape {units.shape}, the sources are {n_sources} {where}"
        raise InverseError(msg)
    length = np.linalg.norm(units, axis=1)
    if not np.allclose(length, 1.0, atol=1e-3):
        bad = int((~(np.abs(length - 1) < 1e-3)).sum())
        msg = f"{bad} of {n_sources} normals are absent or not of unit length {where}"
        raise InverseError(msg)
    unit: FloatArray = units / length[:, None]
    return unit


def local_frames(
    orientation: str, loose: float, normals: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Local axes of each source as columns, (S, 3, d), and the prior variance along each, (d,).

    The scanner's axes when free, two tangents and the normal when loose, the normal when fixed.
    """
    if orientation == "free":
        return np.tile(np.eye(3), (len(normals), 1, 1)), np.ones(3)
    if orientation == "fixed":
        return normals[:, :, None].copy(), np.ones(1)
    least = np.eye(3)[np.abs(normals).argmin(axis=1)]
    first = np.cross(normals, least)
    first /= np.linalg.norm(first, axis=1, keepdims=True)
    frames = np.stack([first, np.cross(normals, first), normals], axis=2)
    return frames, np.array([loose, loose, 1.0])


def _measure_snr(epochs: Epochs, noise: Noise, n_average: int) -> float:
    average = epochs.data_uv.mean(axis=0)
    after = epochs.times_s > 0
    if after.sum() < 2:
        after = np.ones(len(epochs.times_s), dtype=bool)
    white = np.sqrt(n_average) * noise.whitener @ average[:, after]
    power = np.sort((white**2).sum(axis=0) / noise.rank)
    strongest = power[-max(1, len(power) // 10) :].mean()
    return float(np.sqrt(max(strongest - 1.0, 0.0)))


def _depth_prior(gain: FloatArray, exponent: float, limit: float) -> FloatArray:
    """Variance of each source, falling with the strength of its field, at most 1."""
    square = np.einsum("esd,esf->sdf", gain, gain, optimize=True)
    strength = np.linalg.norm(square, ord=2, axis=(1, 2))
    strength = np.maximum(strength, 1e-12 * strength.max())
    weight = 1.0 / strength
    ordered = np.sort(weight)
    over = ordered > limit**2 * ordered[0]
    ceiling = ordered[over][0] if over.any() else ordered[-1]
    prior: FloatArray = np.minimum(weight / ceiling, 1.0) ** exponent
    return prior


def _spread(gain: FloatArray, prior: FloatArray) -> FloatArray:
    """G R G', (rank, rank)."""
    weighted = np.einsum("sdf,rsf->rsd", prior, gain, optimize=True)
    rank = len(gain)
    product: FloatArray = gain.reshape(rank, -1) @ weighted.reshape(rank, -1).T
    return (product + product.T) / 2


def _scaled(gain: FloatArray, prior: FloatArray) -> tuple[FloatArray, FloatArray]:
    """The prior scaled to trace(G R G') = rank, and that G R G'."""
    spread = _spread(gain, prior)
    factor = len(gain) / float(np.trace(spread))
    return prior * factor, spread * factor


def _inner(gain: FloatArray, prior: FloatArray, lambda2: float) -> FloatArray:
    values, vectors = np.linalg.eigh(_spread(gain, prior))
    inverse: FloatArray = (vectors / (np.maximum(values, 0.0) + lambda2)) @ vectors.T
    return inverse


def _inverse_root(matrices: FloatArray) -> FloatArray:
    """Inverse square roots of symmetric positive (S, d, d); directions without power stay out."""
    values, vectors = np.linalg.eigh(matrices)
    floor = 1e-12 * values[:, -1:]
    root = np.where(values > floor, 1 / np.sqrt(np.maximum(values, np.maximum(floor, 1e-300))), 0.0)
    product: FloatArray = (vectors * root[:, None, :]) @ vectors.transpose(0, 2, 1)
    return product


def _eloreta_prior(
    gain: FloatArray, relative: FloatArray, lambda2: float
) -> tuple[FloatArray, bool]:
    """Prior of each source, (S, d, d), such that the current has no peak error by itself."""
    n_rank, n_sources, n_axes = gain.shape
    # An orientation prior is applied to the gain and again to every update of the weights, which
    # would otherwise undo it (as in mne; with loose orientation no peak error is not promised).
    amplitude = np.sqrt(relative)
    orientation = np.outer(amplitude, amplitude)
    biased = gain * amplitude
    prior = np.broadcast_to(np.eye(n_axes), (n_sources, n_axes, n_axes)) * orientation
    prior, spread = _scaled(biased, prior)
    flat = biased.reshape(n_rank, -1)
    settled = False
    for _ in range(_ELORETA_STEPS):
        values, vectors = np.linalg.eigh(spread)
        inner = (vectors / (np.abs(values) + lambda2)) @ vectors.T
        seen = (inner @ flat).reshape(gain.shape)
        before = prior
        power = np.einsum("rsd,rsf->sdf", biased, seen, optimize=True)
        prior, spread = _scaled(biased, _inverse_root(power) * orientation)
        settled = bool(np.linalg.norm(prior - before) < _ELORETA_CHANGE * np.linalg.norm(before))
        if settled:
            break
    return _scaled(gain, prior)[0], settled


def _standardise(
    method: str, gain: FloatArray, prior: FloatArray, leads: FloatArray, lambda2: float
) -> tuple[FloatArray, FloatArray]:
    """Matrices (S, d, d) for the statistic, and one usual factor a source (S,)."""
    n_sources, n_axes = prior.shape[:2]
    unit = np.broadcast_to(np.eye(n_axes), prior.shape)
    noise_power = (leads**2).sum(axis=(1, 2))
    if method in ("sloreta", "eloreta"):
        # R G' N G R: the covariance of the estimate when the model holds.
        covariance = np.einsum("sdr,rsf,sfg->sdg", leads, gain, prior, optimize=True)
        covariance = (covariance + covariance.transpose(0, 2, 1)) / 2
        norm = np.sqrt(lambda2 / np.trace(covariance, axis1=1, axis2=2))
        return _inverse_root(covariance), norm if method == "sloreta" else np.ones(n_sources)
    if method == "dspm":
        norm = 1 / np.sqrt(noise_power)
        return norm[:, None, None] * unit, norm
    return unit / np.sqrt(noise_power.mean()), np.ones(n_sources)
