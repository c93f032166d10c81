"""The commands on one folder: read, run the stages, write what is ready, report."""

from __future__ import annotations

import logging
import platform
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, fields, is_dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from locator import __version__, pipeline
from locator.forward import ForwardOptions
from locator.head import HeadOptions
from locator.inverse import InverseOptions
from locator.io.cache import StageCache, library_versions
from locator.io.files import HIDDEN, clean_parts, folder_lock
from locator.labels import LabelOptions
from locator.markers import MarkerOptions
from locator.pipeline import RunResults, Step
from locator.recording import (
    EpochOptions,
    check_times,
    make_epochs,
    refuse_scanner_artefact,
)
from locator.session import outputs, records
from locator.session.inputs import Inputs, read_inputs
from locator.session.options import SessionOptions
from locator.session.stages import NotKeptError, Stages, Told, silent
from locator.skin import SkinOptions
from locator.statistics import NullControl, Peaks, RegionOptions

logger = logging.getLogger(__name__)


@dataclass(frozen=True, kw_only=True)
class Outcome:
    """What a command hands back: where it wrote, and the results."""

    out: Path
    results: RunResults


def out_folder(options: SessionOptions) -> Path:
    """Return the output folder: the one asked for, or ``locator-out`` beside the T1."""
    if options.out is not None:
        return options.out
    return (options.t1.parent if options.t1 is not None else Path()) / "locator-out"


@contextmanager
def _at_work(out: Path, told: Told) -> Iterator[Stages]:
    """Hold the folder, clean what stopped runs left, and carry out stages in it."""
    with folder_lock(out):
        (out / "locator-error.log").unlink(missing_ok=True)
        left = clean_parts(out)
        if left:
            logger.info("removed %s half-written files of a stopped run", left)
        cache = StageCache(out / HIDDEN / "stages")
        yield Stages(cache, told)
        cache.prune(records.files_in_use(out))


def _plain(value: Any) -> Any:
    """Return a setting as a JSON value."""
    if is_dataclass(value) and not isinstance(value, type):
        return {f.name: _plain(getattr(value, f.name)) for f in fields(value)}
    if isinstance(value, np.ndarray):
        return value.tolist()
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, Path):
        return str(value)
    return value.item() if isinstance(value, np.generic) else value


def versions() -> dict[str, str]:
    """Versions of the tool, Python, the libraries and the system."""
    return {"locator": __version__, **library_versions(), "system": platform.platform()}


def _base(command: str, options: SessionOptions, inputs: Inputs) -> dict[str, Any]:
    return {
        "command": command,
        "subject": options.subject,
        "volume": inputs.volume,
        "layout": inputs.layout,
        "session_settings": options.as_settings(),
        "inputs": tuple(inputs.files),
        "seeds": {"session": options.seed},
        "versions": versions(),
        "own_findings": tuple(inputs.findings),
    }


def _find_settings(options: SessionOptions, inputs: Inputs) -> dict[str, Any]:
    return {
        "skin_options": SkinOptions(),
        "marker_options": MarkerOptions(capsule_mm=options.capsule_mm),
        "label_options": LabelOptions(
            landmarks_scanner_mm=inputs.landmarks,
            holder_mm=options.holder_mm,
            side_marker=options.side_marker,  # type: ignore[arg-type]
            seed=options.seed,
        ),
    }


def run_find(options: SessionOptions, *, told: Told = silent) -> Outcome:
    """Find the capsules and label the electrodes.

    Parameters
    ----------
    options : SessionOptions
    told : callable
        Hears of the progress.

    Returns
    -------
    Outcome

    Raises
    ------
    LocatorError
        If an input cannot be used or the folder is busy.
    """
    out = out_folder(options)
    inputs = read_inputs(options, names=True, recording=False, out=out)
    settings = _find_settings(options, inputs)
    assert inputs.layout is not None
    with _at_work(out, told) as stages:
        found = pipeline.find(
            inputs.volume, inputs.layout, reviews=inputs.reviews, step=stages.step, **settings
        )
        results = RunResults(
            **_base("find", options, inputs),
            skin=found.skin,
            markers=found.markers,
            electrodes=found.electrodes,
            settings=_plain(_by_stage(settings)),
            timings=tuple(stages.timings),
        )
        outputs.write_found(out, inputs, found.electrodes, found.markers)
        records.save_record(out, results, stages.cache)
    return Outcome(out=out, results=results)


def run_head(options: SessionOptions, *, told: Told = silent) -> Outcome:
    """Build tissues and surfaces, with or without capsules on the head.

    Parameters
    ----------
    options : SessionOptions
    told : callable

    Returns
    -------
    Outcome

    Raises
    ------
    LocatorError
        If an input cannot be used or the folder is busy.
    """
    out = out_folder(options)
    inputs = read_inputs(options, names=False, recording=False, out=out)
    settings: dict[str, Any] = {
        "skin_options": SkinOptions(),
        "marker_options": MarkerOptions(capsule_mm=options.capsule_mm),
        "head_options": HeadOptions(),
    }
    with _at_work(out, told) as stages:
        skin, markers, head = pipeline.head_alone(
            inputs.volume, own_surfaces=inputs.surfaces, step=stages.step, **settings
        )
        results = RunResults(
            **_base("head", options, inputs),
            skin=skin,
            markers=markers,
            head=head,
            settings=_plain(_by_stage(settings)),
            timings=tuple(stages.timings),
        )
        outputs.write_head(out, inputs, head)
        records.save_record(out, results, stages.cache)
    return Outcome(out=out, results=results)


def _by_stage(settings: Mapping[str, Any]) -> dict[str, Any]:
    """Stage names for settings that are called ``skin_options`` and so on."""
    return {name.removesuffix("_options").replace("_", " "): v for name, v in settings.items()}


# ── the whole job ────────────────────────────────────────────────────────────────────────


def run_all(options: SessionOptions, *, told: Told = silent) -> Outcome:
    """Do the whole job.

    Parameters
    ----------
    options : SessionOptions
    told : callable
        Hears of the progress.

    Returns
    -------
    Outcome

    Raises
    ------
    LocatorError
        If an input cannot be used or the folder is busy.
    """
    out = out_folder(options)
    inputs = read_inputs(options, names=True, recording=True, out=out)
    settings = _run_settings(options, inputs)
    with _at_work(out, told) as stages:
        results = _compute_and_write(out, options, inputs, settings, stages)
        records.save_record(out, results, stages.cache)
    return Outcome(out=out, results=results)


def _run_settings(options: SessionOptions, inputs: Inputs) -> dict[str, Any]:
    epoch_options = EpochOptions(event=options.event, epoch_s=options.epoch)
    method: dict[str, Any] = {} if options.method is None else {"method": options.method}
    return {
        **_find_settings(options, inputs),
        "head_options": HeadOptions(),
        "epoch_options": epoch_options,
        "forward_options": ForwardOptions(conductivity_s_per_m=options.conductivity),
        "inverse_options": InverseOptions(**method),
        "region_options": RegionOptions(),
    }


def _compute_and_write(
    out: Path,
    options: SessionOptions,
    inputs: Inputs,
    settings: Mapping[str, Any],
    stages: Stages,
) -> RunResults:
    """Run the stages in order and write each file as soon as it is known."""
    recording = inputs.recording
    assert recording is not None
    window = check_times(options.epoch, options.window)
    common: dict[str, Any] = {
        **_base("run", options, inputs),
        "settings": _plain(
            {
                **_by_stage(settings),
                "sources": {"kind": options.source_space},
                "test": {"window_s": window, "n_permutations": options.permutations},
            }
        ),
    }
    # The recording comes first: most of what can be wrong with a session is wrong with it.
    refuse_scanner_artefact(recording, where=str(options.eeg))
    epochs = stages.step(
        "epochs",
        make_epochs,
        recording,
        names=inputs.channel_names,
        options=settings["epoch_options"],
        where=str(options.eeg),
    )
    found = _electrodes(options, inputs, settings, stages)
    outputs.write_found(out, inputs, found.electrodes, found.markers)
    head = pipeline.build(
        inputs.volume,
        found.skin,
        found.markers,
        found.electrodes,
        head_options=settings["head_options"],
        own_surfaces=inputs.surfaces,
        step=stages.step,
    )
    outputs.write_head(out, inputs, head)
    projection = pipeline.project(
        head,
        found.electrodes,
        epochs,
        source_space=options.source_space,
        forward_options=settings["forward_options"],
        inverse_options=settings["inverse_options"],
        window_s=window,
        n_permutations=options.permutations,
        seed=options.seed,
        step=stages.step,
    )
    results = RunResults(
        **common,
        skin=found.skin,
        markers=found.markers,
        electrodes=found.electrodes,
        head=head,
        sources=projection.sources,
        lead_field=pipeline.summary_of(projection.lead_field),
        epochs=epochs,
        inverse=projection.inverse,
        test=projection.test,
        complete=False,
        timings=tuple(stages.timings),
    )
    began = time.perf_counter()
    first = pipeline.peaks_of(projection, epochs, step=stages.step)

    def doubts(step: Step) -> tuple[Peaks, NullControl | None]:
        """Regions of the peaks, and the control on stretches without events."""
        peaks = pipeline.regions_of(
            first,
            head,
            projection,
            epochs,
            forward_options=settings["forward_options"],
            inverse_options=settings["inverse_options"],
            region_options=settings["region_options"],
            seed=options.seed,
            step=step,
        )
        if not epochs.testable:
            return peaks, None
        null = pipeline.check_on_nothing(
            recording,
            epochs,
            projection.inverse,
            epoch_options=settings["epoch_options"],
            window_s=window,
            seed=options.seed,
            step=step,
        )
        return peaks, null

    outputs.write_maps(out, inputs.grid, projection.sources, projection.test)
    outputs.write_operator(out, projection)
    try:
        doubts(stages.kept)
    except NotKeptError:
        # They take a while: the maps are there meanwhile, with a page that says what is not.
        outputs.take_away_stale(out)
        outputs.write_report(out, replace(results, peaks=first, timings=tuple(stages.timings)))
    stages.note("first files", began)
    peaks, null = doubts(stages.step)
    region = pipeline.region_on_grid(peaks, projection.sources)
    outputs.write_place(out, inputs.grid, peaks, region)
    began = time.perf_counter()
    results = replace(
        results, peaks=peaks, null_control=null, complete=True, timings=tuple(stages.timings)
    )
    outputs.write_report(out, results)
    stages.note("report", began)
    results = replace(results, timings=tuple(stages.timings))
    outputs.write_provenance(out, results, inputs.sizes)
    return results


def _electrodes(
    options: SessionOptions, inputs: Inputs, settings: Mapping[str, Any], stages: Stages
) -> pipeline.Found:
    """Find the electrodes in the image, or take them as given."""
    find_settings = {
        name: settings[name] for name in ("skin_options", "marker_options", "label_options")
    }
    if inputs.given is None:
        assert inputs.layout is not None
        return pipeline.find(
            inputs.volume, inputs.layout, reviews=inputs.reviews, step=stages.step, **find_settings
        )
    names, places, spread = inputs.given
    return pipeline.find_given(
        inputs.volume,
        names,
        places,
        spread,
        landmarks_scanner_mm=inputs.landmarks,
        reviews=inputs.reviews,
        where=str(options.electrodes),
        skin_options=settings["skin_options"],
        marker_options=settings["marker_options"],
        step=stages.step,
    )


def headline(results: RunResults) -> str:
    """Return the outcome of a run in one or two sentences."""
    electrodes, test, peaks = results.electrodes, results.test, results.peaks
    assert electrodes is not None
    assert test is not None
    counts = [(s, electrodes.status.count(s)) for s in ("seen", "inferred", "corrected", "given")]
    said = ", ".join(f"{count} {status}" for status, count in counts if count)
    first = f"{len(electrodes.names)} electrodes: {said}."
    if results.epochs is not None and not results.epochs.testable:
        return f"{first} The recording is an average without trials: nothing could be tested."
    if peaks is None or not len(peaks.statistic):
        least = float(np.nanmin(test.corrected_p))
        return f"{first} Nothing survives correction (least p {least:.3g})."
    x, y, z = peaks.positions_scanner_mm[0]
    return (
        f"{first} A response survives correction (p {peaks.corrected_p[0]:.2g},"
        f" {1000 * peaks.time_s[0]:.0f} ms); its peak is at {x:.0f} {y:.0f} {z:.0f} mm,"
        f" known to {peaks.region_mm[0]:.0f} mm (95 %)."
    )
