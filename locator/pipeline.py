"""The stages in order: arrays in, results out."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Protocol, TypeVar

import numpy as np
from numpy.typing import ArrayLike, NDArray

from locator.errors import LabelError, MarkerError
from locator.forward import ForwardOptions, LeadField, compute_lead_field, electrode_rows
from locator.geometry import apply_affine
from locator.head import Head, HeadOptions, build_head, replace_surfaces
from locator.inverse import Inverse, InverseOptions, make_inverse
from locator.labels import Electrodes, LabelOptions, label_markers
from locator.layout import Layout
from locator.markers import MarkerOptions, Markers, find_markers
from locator.recording import EpochOptions, Epochs, Recording
from locator.results import Finding, Frozen
from locator.reviews import Review, apply_reviews
from locator.skin import Skin, SkinOptions, find_skin, height_mm
from locator.sources import Sources, make_sources
from locator.statistics import (
    NullControl,
    Peaks,
    RegionOptions,
    SourceTest,
    find_peaks,
    null_control,
    peak_region,
    sign_flip_test,
)
from locator.volume import Volume

T = TypeVar("T")

CAPSULE_SCORE = 0.5
"""From this score on, a blob without a name is taken out of the head too: it is more likely than
not a capsule by its looks."""

GIVEN_SD_MM = 3.0
"""Standard deviation of a given position whose table says none: between the 1.5 mm of optical and
the 6.8 mm of electromagnetic digitisers (Dalal et al. 2014, Front Neurosci 8:42)."""

TEST_STREAM, REGION_STREAM, NULL_STREAM = 1, 2, 3
"""Each stage that draws has its own stream of the session's seed."""

HELD = 0.95
"""Share of a region that its ball holds."""

SKULL_FACTORS = (0.5, 5 / 3)
"""Factors on the skull's conductivity that are tried for the region: beside the default ratio of
25 they give 50 (the mean of McCann et al. 2019, Brain Topogr 32:825) and 15 (Oostendorp et al.
2000, IEEE Trans Biomed Eng 47:1487)."""

SNR_FACTORS = (0.5, 2.0)
"""Factors on the amplitude signal-to-noise that sets the regularisation; common practice."""


class Step(Protocol):
    """Carries out one stage: calls it, or knows its result already."""

    def __call__(self, stage: str, function: Callable[..., T], /, *args: Any, **settings: Any) -> T:
        """Return ``function(*args, **settings)``."""


def plain_step(stage: str, function: Callable[..., T], /, *args: Any, **settings: Any) -> T:
    """Carry out a stage and nothing else; `stage` is its name."""
    del stage
    return function(*args, **settings)


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class InputFile(Frozen):
    """One file that went in.

    Attributes
    ----------
    role : str
        `t1`, `eeg`, `layout`, `landmarks`, `electrodes`, `review`, `session`.
    path : str
        As it was given.
    sha256 : str
        Of its bytes.
    """

    role: str
    path: str
    sha256: str


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Timing(Frozen):
    """What one stage took.

    Attributes
    ----------
    stage : str
    seconds : float
        Wall time; of reading it back when `kept`.
    kept : bool
        Taken from an earlier run because inputs, settings, code and libraries are unchanged.
    peak_mb : float
        Largest memory of the process so far, MB; NaN where the system does not tell.
    """

    stage: str
    seconds: float
    kept: bool
    peak_mb: float


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class LeadFieldSummary(Frozen):
    """What a page says of the lead field without carrying it.

    Attributes
    ----------
    n_sources, n_scalp_vertices : int
    conductivity_s_per_m : tuple of float
        Scalp, skull, brain.
    findings : tuple of Finding
    """

    n_sources: int
    n_scalp_vertices: int
    conductivity_s_per_m: tuple[float, float, float]
    findings: tuple[Finding, ...] = ()


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class RunResults(Frozen):
    """Everything that a page or a scene needs of one `find`, `head` or `run`.

    Attributes
    ----------
    command : str
        `find`, `head` or `run`.
    subject : str
        Name of the subject as given; empty when none was.
    volume : Volume
    skin : Skin
    markers : Markers or None
        None for `head`, and where positions came from elsewhere.
    layout : Layout or None
    electrodes : Electrodes or None
        None for `head`.
    head : Head or None
        None for `find`.
    sources, lead_field, epochs, inverse, test : optional
        None for `find` and `head`.
    peaks, null_control : optional
        None too while they are still being computed.
    complete : bool
        False while the null control and the regions are still to come: what stands of them is
        stale then, and a page must say so.
    settings : mapping of str to mapping
        Stage name to option name to value, every one that was in force.
    session_settings : mapping
        What the person asked for: session keys to values.
    inputs : tuple of InputFile
    timings : tuple of Timing
        In the order of the stages.
    seeds : mapping of str to int
    versions : mapping of str to str
        Of the tool, Python and the libraries.
    own_findings : tuple of Finding
        Of the session itself (reviews that differ and the like).
    """

    command: str
    subject: str = ""
    volume: Volume
    skin: Skin
    markers: Markers | None = None
    layout: Layout | None = None
    electrodes: Electrodes | None = None
    head: Head | None = None
    sources: Sources | None = None
    lead_field: LeadFieldSummary | None = None
    epochs: Epochs | None = None
    inverse: Inverse | None = None
    test: SourceTest | None = None
    peaks: Peaks | None = None
    null_control: NullControl | None = None
    complete: bool = True
    settings: Mapping[str, Mapping[str, Any]]
    session_settings: Mapping[str, Any]
    inputs: tuple[InputFile, ...] = ()
    timings: tuple[Timing, ...] = ()
    seeds: Mapping[str, int]
    versions: Mapping[str, str]
    own_findings: tuple[Finding, ...] = ()

    @property
    def findings(self) -> tuple[Finding, ...]:
        """All findings of all stages: what needs an eye first, the most doubtful first."""
        stages = (
            self.volume,
            self.skin,
            self.markers,
            self.electrodes,
            self.head,
            self.sources,
            self.lead_field,
            self.epochs,
            self.inverse,
            self.test,
            self.peaks,
            self.null_control,
        )
        found = [f for stage in stages if stage is not None for f in stage.findings]
        unique = dict.fromkeys([*self.own_findings, *found])
        return tuple(sorted(unique, key=lambda f: (f.level != "look", -f.doubt)))

    @property
    def side_basis(self) -> str:
        """What left and right rest on, in words."""
        if self.electrodes is not None and self.electrodes.side_basis:
            return self.electrodes.side_basis
        return self.volume.orientation_basis


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Found(Frozen):
    """Skin, capsules and electrodes of one head; see the stages."""

    skin: Skin
    markers: Markers | None
    electrodes: Electrodes


def find(
    volume: Volume,
    layout: Layout,
    *,
    skin_options: SkinOptions,
    marker_options: MarkerOptions,
    label_options: LabelOptions,
    reviews: Sequence[Review] = (),
    step: Step = plain_step,
) -> Found:
    """Find the capsules and label the electrodes.

    Parameters
    ----------
    volume : Volume
    layout : Layout
        Of the names asked for.
    skin_options, marker_options, label_options
        Settings of the three stages.
    reviews : sequence of Review
        Decisions of people; they hold over image and layout.
    step : Step
        How a stage is carried out.

    Returns
    -------
    Found

    Raises
    ------
    LocatorError
        Whatever a stage refuses.
    """
    skin = step("skin", find_skin, volume, options=skin_options)
    markers = step("markers", find_markers, volume, skin, options=marker_options)
    electrodes = step("labels", label_markers, markers, skin, layout, options=label_options)
    if reviews:
        electrodes = step("reviews", apply_reviews, electrodes, markers, skin, tuple(reviews))
    return Found(skin=skin, markers=markers, electrodes=electrodes)


def place_given(
    names: Sequence[str],
    positions_scanner_mm: ArrayLike,
    sd_mm: ArrayLike,
    skin: Skin,
    *,
    landmarks_scanner_mm: ArrayLike | None = None,
    side_basis: str = "",
    where: str = "the table",
) -> Electrodes:
    """Take electrode positions as they were given, and say where they do not fit the head.

    Parameters
    ----------
    names : sequence of str
    positions_scanner_mm : (E, 3) array_like
        Scanner mm.
    sd_mm : (E,) array_like
        Standard deviation along one axis, mm; NaN where it is not known.
    skin : Skin
    landmarks_scanner_mm : (3, 3) array_like, optional
        NAS, LPA, RPA.
    side_basis : str
        What left and right of the volume rest on.
    where : str
        Name of the input, for messages.

    Returns
    -------
    Electrodes
        With status `given`.

    Raises
    ------
    LabelError
        If half of the positions are more than 20 mm off the skin: then they are not in the
        scanner millimetres of this T1.
    """
    places = np.array(positions_scanner_mm, dtype=np.float64).reshape(-1, 3)
    spread = np.array(sd_mm, dtype=np.float64)
    spread = np.where(np.isfinite(spread) & (spread > 0), spread, GIVEN_SD_MM)
    off = height_mm(skin, places)
    if np.median(np.abs(off)) > 20:
        msg = (
            f"The positions of {where} are {np.median(np.abs(off)):.0f} mm off the skin of this T1"
            " in the middle of them (stage labels). They must be in the scanner millimetres of"
            " this very scan: bring them into its space first."
        )
        raise LabelError(msg)
    findings = tuple(
        Finding(
            level="look",
            stage="labels",
            problem=f"The given position of {name} is {abs(distance):.0f} mm"
            f" {'outside' if distance > 0 else 'under'} the skin.",
            suggestion="Check it; it is moved to the skin for the field model.",
            subject=name,
            doubt=min(1.0, abs(float(distance)) / 20),
        )
        for name, distance in zip(names, off, strict=True)
        if abs(distance) > 8
    )
    count = len(places)
    landmarks = np.full((4, 3), np.nan)
    if landmarks_scanner_mm is not None:
        landmarks[:3] = np.asarray(landmarks_scanner_mm, dtype=np.float64)
    return Electrodes(
        names=tuple(names),
        positions_scanner_mm=places,
        covariance_mm2=np.eye(3)[None] * (spread**2)[:, None, None],
        status=("given",) * count,
        confidence=np.full(count, np.nan),
        residual_mm=np.full(count, np.nan),
        sd_mm=spread,
        capsule_scanner_mm=np.full((count, 3), np.nan),
        marker=np.full(count, -1, dtype=np.int32),
        alternatives=("",) * count,
        fitted_scanner_mm=places,
        landmarks_scanner_mm=landmarks,
        landmarks_sd_mm=np.full(4, np.nan),
        landmarks_given=landmarks_scanner_mm is not None,
        holder_mm=float("nan"),
        side_basis=f"{side_basis}; the sides of the given positions were not checked by capsules",
        why_not=(),
        findings=findings,
    )


def find_given(
    volume: Volume,
    names: Sequence[str],
    positions_scanner_mm: ArrayLike,
    sd_mm: ArrayLike,
    *,
    landmarks_scanner_mm: ArrayLike | None,
    reviews: Sequence[Review],
    where: str,
    skin_options: SkinOptions,
    marker_options: MarkerOptions,
    step: Step = plain_step,
) -> Found:
    """Take positions as given; capsules are only looked for so that they do not dent the head.

    Parameters
    ----------
    volume : Volume
    names, positions_scanner_mm, sd_mm, landmarks_scanner_mm, where
        As in `place_given`.
    reviews : sequence of Review
    skin_options, marker_options
        Settings of the stages.
    step : Step

    Returns
    -------
    Found

    Raises
    ------
    LocatorError
        If there is no head in the volume, or the positions do not lie on it.
    """
    skin = step("skin", find_skin, volume, options=skin_options)
    markers = _markers_if_any(volume, skin, marker_options, step)
    electrodes = step(
        "given positions",
        place_given,
        tuple(names),
        positions_scanner_mm,
        sd_mm,
        skin,
        landmarks_scanner_mm=landmarks_scanner_mm,
        side_basis=volume.orientation_basis,
        where=where,
    )
    if reviews:
        electrodes = step("reviews", apply_reviews, electrodes, markers, skin, tuple(reviews))
    return Found(skin=skin, markers=markers, electrodes=electrodes)


def _markers_if_any(
    volume: Volume, skin: Skin, options: MarkerOptions, step: Step
) -> Markers | None:
    try:
        return step("markers", find_markers, volume, skin, options=options)
    except MarkerError:
        return None


def capsules_to_remove(
    markers: Markers | None, electrodes: Electrodes | None
) -> NDArray[np.float64]:
    """Return the centres of all capsules that must not dent the head, (N, 3), scanner mm.

    Those of electrodes, and every blob that looks like a capsule; in the order of the blobs,
    so that exchanging two labels does not change the head.
    """
    if markers is None:
        return np.zeros((0, 3))
    worn = np.asarray(markers.score >= CAPSULE_SCORE)
    if electrodes is not None:
        worn = worn.copy()
        worn[electrodes.marker[electrodes.marker >= 0]] = True
    # Where they are drawn, which is not where they are when fat is displaced.
    return np.asarray(markers.centers_scanner_mm[worn] + markers.shift_mm)


def build(
    volume: Volume,
    skin: Skin,
    markers: Markers | None,
    electrodes: Electrodes | None,
    *,
    head_options: HeadOptions,
    own_surfaces: Mapping[str, tuple[ArrayLike, ArrayLike]] | None = None,
    step: Step = plain_step,
) -> Head:
    """Build the three surfaces and the tissues, with the capsules taken out.

    Parameters
    ----------
    volume : Volume
    skin : Skin
    markers : Markers or None
        None when there is none to take out.
    electrodes : Electrodes or None
    head_options : HeadOptions
    own_surfaces : mapping of role to (vertices, faces), optional
        Surfaces of the user's in place of ours, scanner mm; see `locator.head.replace_surfaces`.
    step : Step

    Returns
    -------
    Head

    Raises
    ------
    HeadError
        If no surfaces fit for a field model can be made, or those of the user's are not.
    """
    capsules = capsules_to_remove(markers, electrodes)
    head = step(
        "head",
        build_head,
        volume,
        skin,
        capsule_centers_scanner_mm=capsules if len(capsules) else None,
        capsule_mm=None if markers is None else markers.capsule_mm,
        options=head_options,
    )
    if not own_surfaces:
        return head
    return step("given surfaces", replace_surfaces, head, dict(own_surfaces), options=head_options)


def head_alone(
    volume: Volume,
    *,
    skin_options: SkinOptions,
    marker_options: MarkerOptions,
    head_options: HeadOptions,
    own_surfaces: Mapping[str, tuple[ArrayLike, ArrayLike]] | None = None,
    step: Step = plain_step,
) -> tuple[Skin, Markers | None, Head]:
    """Build skin, capsules (None when there are none) and head without any names.

    Parameters
    ----------
    volume : Volume
    skin_options, marker_options, head_options
        Settings of the stages.
    own_surfaces : mapping of role to (vertices, faces), optional
        As in `build`.
    step : Step

    Returns
    -------
    skin : Skin
    markers : Markers or None
    head : Head

    Raises
    ------
    LocatorError
        If there is no head in the volume, or no surfaces can be made.
    """
    skin = step("skin", find_skin, volume, options=skin_options)
    markers = _markers_if_any(volume, skin, marker_options, step)
    head = build(
        volume,
        skin,
        markers,
        None,
        head_options=head_options,
        own_surfaces=own_surfaces,
        step=step,
    )
    return skin, markers, head


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Projection(Frozen):
    """The response at the sources, tested, and what it was computed with.

    Attributes
    ----------
    sources : Sources
    lead_field : LeadField
    rows_uv_per_nam : (E, S, 3) ndarray
        Lead field at the good electrodes.
    positions_scanner_mm, covariance_mm2 : (E, 3) and (E, 3, 3) ndarray
        Of the good electrodes, in the order of the epochs.
    inverse : Inverse
    test : SourceTest
    """

    sources: Sources
    lead_field: LeadField
    rows_uv_per_nam: NDArray[np.float64]
    positions_scanner_mm: NDArray[np.float64]
    covariance_mm2: NDArray[np.float64]
    inverse: Inverse
    test: SourceTest


def project(
    head: Head,
    electrodes: Electrodes,
    epochs: Epochs,
    *,
    source_space: str,
    forward_options: ForwardOptions,
    inverse_options: InverseOptions,
    window_s: Sequence[float] | None,
    n_permutations: int,
    seed: int,
    step: Step = plain_step,
) -> Projection:
    """Estimate and test the response at the sources.

    Parameters
    ----------
    head : Head
    electrodes : Electrodes
        Must hold every electrode of the epochs.
    epochs : Epochs
    source_space : {"grey", "brain", "cortex"}
    forward_options, inverse_options
        Settings of the two stages.
    window_s : (2,) sequence of float or None
        Part that is tested; None: the epoch after 0.
    n_permutations, seed : int
    step : Step

    Returns
    -------
    Projection

    Raises
    ------
    LocatorError
        Whatever a stage refuses.
    """
    sources = step("sources", make_sources, head, kind=source_space)
    lead_field = lead_field_of(head, sources, forward_options, step=step)
    index = [electrodes.names.index(name) for name in epochs.electrode_names]
    positions = electrodes.positions_scanner_mm[index]
    rows = electrode_rows(lead_field, positions)
    inverse = step("inverse", make_inverse, rows, epochs, options=inverse_options)
    test = step(
        "test",
        sign_flip_test,
        epochs,
        inverse,
        window_s=window_s,
        n_permutations=n_permutations,
        rng=np.random.default_rng([seed, TEST_STREAM]),
    )
    return Projection(
        sources=sources,
        lead_field=lead_field,
        rows_uv_per_nam=rows,
        positions_scanner_mm=positions,
        covariance_mm2=electrodes.covariance_mm2[index],
        inverse=inverse,
        test=test,
    )


def lead_field_of(
    head: Head,
    sources: Sources,
    options: ForwardOptions,
    *,
    stage: str = "lead field",
    step: Step = plain_step,
) -> LeadField:
    """Compute the lead field of one head for one set of conductivities."""
    return step(
        stage,
        compute_lead_field,
        head.scalp,
        head.outer_skull,
        head.inner_skull,
        sources.positions_scanner_mm,
        options=options,
    )


def summary_of(lead_field: LeadField) -> LeadFieldSummary:
    """Say of a lead field what a page needs."""
    scalp, skull, brain = (float(v) for v in lead_field.conductivity_s_per_m)
    return LeadFieldSummary(
        n_sources=len(lead_field.sources_scanner_mm),
        n_scalp_vertices=len(lead_field.scalp_vertices_scanner_mm),
        conductivity_s_per_m=(scalp, skull, brain),
        findings=lead_field.findings,
    )


def peaks_of(projection: Projection, epochs: Epochs, *, step: Step = plain_step) -> Peaks:
    """Find the surviving peaks; their regions are not known yet."""
    return step(
        "peaks",
        find_peaks,
        projection.test,
        epochs,
        projection.inverse,
        projection.rows_uv_per_nam,
        projection.sources.positions_scanner_mm,
    )


def regions_of(
    peaks: Peaks,
    head: Head,
    projection: Projection,
    epochs: Epochs,
    *,
    forward_options: ForwardOptions,
    inverse_options: InverseOptions,
    region_options: RegionOptions,
    seed: int,
    step: Step = plain_step,
) -> Peaks:
    """Give the peaks the regions that their places are known to.

    What is doubtful is tried: trials, electrode positions, the conductivity of the skull
    (`SKULL_FACTORS`) and the regularisation (`SNR_FACTORS`).

    Parameters
    ----------
    peaks : Peaks
    head : Head
    projection : Projection
    epochs : Epochs
    forward_options, inverse_options, region_options
        Settings of the stages.
    seed : int
    step : Step

    Returns
    -------
    Peaks
        Unchanged when there is none.
    """
    if not len(peaks.source):
        return peaks
    scalp, skull, brain = forward_options.conductivity_s_per_m
    other_fields = tuple(
        lead_field_of(
            head,
            projection.sources,
            # The quicker route: its own error moves a peak far less than the conductivity does.
            replace(
                forward_options,
                conductivity_s_per_m=(scalp, skull * factor, brain),
                route="plain",
            ),
            stage=f"lead field, skull x {factor:g}",
            step=step,
        )
        for factor in SKULL_FACTORS
    )
    other_inverses = tuple(
        step(
            f"inverse, snr x {factor:g}",
            make_inverse,
            projection.rows_uv_per_nam,
            epochs,
            options=replace(inverse_options, snr=projection.inverse.snr * factor),
        )
        for factor in SNR_FACTORS
    )
    refined = step(
        "regions",
        peak_region,
        peaks,
        epochs,
        projection.inverse,
        projection.lead_field,
        projection.positions_scanner_mm,
        covariance_mm2=projection.covariance_mm2,
        other_conductivities=other_fields,
        other_inverses=other_inverses,
        options=region_options,
        rng=np.random.default_rng([seed, REGION_STREAM]),
    )
    return step("regions on the grid", ball_on_grid, refined, projection.sources)


def check_on_nothing(
    recording: Recording,
    epochs: Epochs,
    inverse: Inverse,
    *,
    epoch_options: EpochOptions,
    window_s: Sequence[float] | None,
    seed: int,
    step: Step = plain_step,
) -> NullControl:
    """Ask how often anything survives where no event was."""
    return step(
        "null control",
        null_control,
        recording,
        inverse,
        event=epochs.event,
        options=epoch_options,
        window_s=window_s,
        n_trials=len(epochs.data_uv),
        rng=np.random.default_rng([seed, NULL_STREAM]),
    )


# ── from sources to voxels ───────────────────────────────────────────────────────────────


def on_grid(sources: Sources, values: ArrayLike, *, outside: float) -> NDArray[np.float32]:
    """Give every voxel of the T1 the value of its nearest source; nothing is interpolated.

    Parameters
    ----------
    sources : Sources
    values : (S,) array_like
    outside : float
        For voxels outside the source space.

    Returns
    -------
    (I, J, K) ndarray of float32
    """
    padded = np.append(np.asarray(values, dtype=np.float32), np.float32(outside))
    return np.asarray(padded[sources.nearest_source])


def region_on_grid(peaks: Peaks, sources: Sources) -> NDArray[np.float32]:
    """Spread each source's probability evenly over its voxels, so that the map sums to 1.

    Parameters
    ----------
    peaks : Peaks
    sources : Sources

    Returns
    -------
    (I, J, K) ndarray of float32
        Zero everywhere when there is no peak.
    """
    nearest = sources.nearest_source
    probability = np.array(peaks.region_probability)
    count = np.bincount(nearest[nearest >= 0], minlength=len(probability))
    probability[count == 0] = 0.0
    total = probability.sum()
    share = probability / np.maximum(count, 1) / (total if total > 0 else 1.0)
    return on_grid(sources, share, outside=0.0)


def ball_on_grid(peaks: Peaks, sources: Sources) -> Peaks:
    """Measure the first region on the voxels, so that table and map say the same.

    Parameters
    ----------
    peaks : Peaks
        With regions.
    sources : Sources

    Returns
    -------
    Peaks
        Its first ``region_mm`` is the radius of the ball round the peak that holds 95 % of
        `region_on_grid`.
    """
    density = region_on_grid(peaks, sources)
    voxels = np.argwhere(density > 0)
    if not len(voxels) or not len(peaks.region_mm):
        return peaks
    places = apply_affine(sources.scanner_from_voxel, voxels)
    distance = np.linalg.norm(places - peaks.positions_scanner_mm[0], axis=1)
    order = np.argsort(distance, kind="stable")
    held = np.cumsum(density[tuple(voxels[order].T)], dtype=np.float64)
    last = min(int(np.searchsorted(held, HELD * held[-1])), len(order) - 1)
    region = np.array(peaks.region_mm)
    region[0] = distance[order[last]]
    return replace(peaks, region_mm=region)
