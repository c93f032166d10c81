"""Results to files, as the contract of the output folder says."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import numpy as np

from locator.head import Head
from locator.io import bids
from locator.io.files import write_json, write_text
from locator.io.gifti import write_surface
from locator.io.inverse_fif import write_inverse
from locator.io.nifti import Grid, write_map
from locator.labels import Electrodes
from locator.markers import Markers
from locator.pipeline import Projection, RunResults, on_grid
from locator.report.page import make_report
from locator.session.inputs import Inputs
from locator.sources import Sources
from locator.statistics import Peaks, SourceTest

SCHEMA = 1
"""Of ``provenance.json``."""

ALPHA = 0.05

SURFACES = {
    "scalp": "skin without capsules",
    "outer_skull": "outer table of the skull",
    "inner_skull": "inner table of the skull",
}


def write_found(out: Path, inputs: Inputs, electrodes: Electrodes, markers: Markers | None) -> None:
    """Write electrodes, sidecars and candidate blobs.

    Parameters
    ----------
    out : Path
    inputs : Inputs
    electrodes : Electrodes
    markers : Markers or None
        None when positions were given: then no blobs are written.
    """
    bids.write_electrodes(
        out, electrodes, t1_name=inputs.t1_name, t1_uri=inputs.t1_uri, space=inputs.volume.space
    )
    if markers is not None:
        bids.write_markers(out / "markers.tsv", markers, electrodes)
    else:
        (out / "markers.tsv").unlink(missing_ok=True)


def write_head(out: Path, inputs: Inputs, head: Head) -> None:
    """Write the three surfaces and the tissues."""
    for name, words in SURFACES.items():
        if name in head.given:
            role = f"{name.replace('_', ' ')} surface"
            path = next(file.path for file in inputs.files if file.role == role)
            words = f"{words}, as given in {Path(path).name}"
        write_surface(
            out / "head" / f"{name}.surf.gii",
            getattr(head, name),
            name=name,
            description=f"{words}; scanner mm of {inputs.t1_name}",
        )
    write_map(
        out / "head" / "tissues.nii.gz",
        head.tissues.astype(np.int16),
        inputs.grid,
        description="tissue labels, see tissues.tsv",
        intent="label",
    )
    write_text(out / "head" / "tissues.tsv", bids.tissues_table())


def write_maps(out: Path, grid: Grid, sources: Sources, test: SourceTest) -> None:
    """Write the four maps.

    Parameters
    ----------
    out : Path
    grid : Grid
        Of the T1.
    sources : Sources
    test : SourceTest
        When nothing could be tested its p are NaN; the map of p is then 1 everywhere.
    """
    folder = out / "sources"
    p = np.where(np.isfinite(test.corrected_p), test.corrected_p, 1.0)
    survives = np.where(p < ALPHA, test.statistic, 0.0)
    maps = (
        ("statistic", test.statistic, 0.0, "standardised power of the average, max over window"),
        ("corrected_p", p, 1.0, "family-wise p: sign flips, maximum over sources and samples"),
        ("significant", survives, 0.0, "statistic where corrected p < 0.05, else 0"),
        ("amplitude", test.amplitude_nam, 0.0, "minimum-norm current amplitude, nAm; not a test"),
    )
    for name, values, outside, words in maps:
        write_map(
            folder / f"{name}.nii.gz",
            on_grid(sources, values, outside=outside),
            grid,
            description=words,
            intent="p value" if name == "corrected_p" else "estimate",
        )


def write_place(out: Path, grid: Grid, peaks: Peaks, region: np.ndarray) -> None:
    """Write the surviving peaks and where the first one may be.

    Parameters
    ----------
    out : Path
    grid : Grid
    peaks : Peaks
    region : (I, J, K) ndarray
        Probability per voxel, from `locator.pipeline.region_on_grid`.
    """
    write_map(
        out / "sources" / "peak_region.nii.gz",
        region,
        grid,
        description="probability per voxel for the place of the first peak; sums to 1",
        intent="estimate",
    )
    bids.write_peaks(out / "sources" / "peaks.tsv", peaks)


def take_away_stale(out: Path) -> None:
    """Remove what an earlier run said of the place of a peak: it rests on other maps."""
    for name in ("peaks.tsv", "peak_region.nii.gz"):
        (out / "sources" / name).unlink(missing_ok=True)


def write_operator(out: Path, projection: Projection) -> None:
    """Write the inverse operator in the form that mne reads."""
    write_inverse(
        out / "sources" / "inverse.fif",
        projection.inverse,
        projection.rows_uv_per_nam,
        projection.sources,
        projection.positions_scanner_mm,
    )


def write_report(out: Path, results: RunResults) -> None:
    """Write the page."""
    write_text(out / "report.html", make_report(results))


def write_provenance(out: Path, results: RunResults, sizes: Mapping[str, int]) -> None:
    """Write what the results rest on, enough to make them again.

    Parameters
    ----------
    out : Path
    results : RunResults
    sizes : mapping of str to int
        Bytes of each input when it was read, by path.
    """
    write_json(
        out / "provenance.json",
        {
            "schema_version": SCHEMA,
            "tool": "locator",
            "command": results.command,
            "inputs": [
                {
                    "role": file.role,
                    "path": file.path,
                    "sha256": file.sha256,
                    "bytes": sizes.get(file.path),
                }
                for file in results.inputs
            ],
            "versions": dict(results.versions),
            "session": dict(results.session_settings),
            "settings": {stage: dict(values) for stage, values in results.settings.items()},
            "seeds": dict(results.seeds),
            "timings": [
                {
                    "stage": timing.stage,
                    "seconds": round(timing.seconds, 3),
                    "kept": timing.kept,
                    "peak_mb": round(timing.peak_mb, 1) if np.isfinite(timing.peak_mb) else None,
                }
                for timing in results.timings
            ],
        },
    )
