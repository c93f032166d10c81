"""One self-contained page: what needs an eye first, then the evidence."""

from __future__ import annotations

from importlib import resources
from typing import Any

import numpy as np
from jinja2 import Environment, StrictUndefined, select_autoescape
from markupsafe import Markup

from locator.geometry import mesh_volume_mm3
from locator.head import skull_thickness_mm
from locator.pipeline import RunResults
from locator.report import figures
from locator.report.raster import capsule_tile, png_uri
from locator.views import VIEWS, grey_window

TILE_HALF_MM = 20.0
DOUBT_BELOW = 0.9
"""Labels less sure than this are shown among what needs an eye."""

MEANING = (
    "What the test means: at the coloured places this filter sees a field that noise does not"
    " explain, corrected for all places and times tested. One active spot is seen by many filters,"
    " so the colour reaches further than the activity; the active tissue lies within the region of"
    " the peak, not everywhere that is coloured."
)

CAUTIONS = (
    "Research software, not a medical device. Decisions belong to licensed practice and local rules.",
    "Left and right rest on what the section above says. Check them against the scanner's own"
    " console before anything is done to a person.",
    "Distances from a peak to a lesion, a vessel or a planned cut are only as good as the region"
    " of the peak, and no better than the registration of the images.",
    "EEG hardware in a scanner can heat and burn. This tool does not judge the safety of any cap,"
    " capsule or sequence; follow the labels of the hardware and the rules of the site.",
    "A region says where the peak of this estimate would move to if trials, electrodes, skull and"
    " regularisation varied as stated. It does not cover faults that were not varied, such as"
    " several sources at once or a skull defect.",
)

TILE = """<div class="tile{{ ' doubt' if t.doubt }}"><img src="{{ t.uri }}" width="288" height="96" alt="{{ t.alt }}" loading="lazy"><p><b>{{ t.name }}</b> {{ t.words }}</p></div>"""


def _number(value: float, digits: int = 1) -> str:
    return "n/a" if not np.isfinite(value) else f"{value:.{digits}f}"


def _sure(confidence: float) -> str:
    """Percent, never rounded up to certainty."""
    if not np.isfinite(confidence):
        return "n/a"
    return "> 99.9" if confidence > 0.999 else f"{100 * confidence:.1f}"


def _p_words(p: float, n_permutations: int) -> str:
    if not np.isfinite(p):
        return "n/a"
    floor = 1.0 / max(n_permutations, 1)
    return f"≤ {floor:.2g}" if p <= floor * 1.0001 else f"{p:.2g}"


def _tile(run: RunResults, row: int, window: tuple[float, float]) -> dict[str, Any]:
    electrodes = run.electrodes
    assert electrodes is not None
    name, status = electrodes.names[row], electrodes.status[row]
    capsule = np.asarray(electrodes.capsule_scanner_mm[row])
    found = bool(np.isfinite(capsule).all())
    # The picture shows the oil where the scanner drew it, before the chemical shift is taken off.
    drawn = capsule + (0.0 if run.markers is None else np.asarray(run.markers.shift_mm))
    point = drawn if found else np.asarray(electrodes.positions_scanner_mm[row])
    confidence = float(electrodes.confidence[row])
    words = status
    if np.isfinite(confidence):
        words += f", {_sure(confidence)} % sure" + (
            " that none is there" if status == "inferred" else ""
        )
    residual = float(electrodes.residual_mm[row])
    if np.isfinite(residual):
        words += f", {residual:.1f} mm from the layout"
    if electrodes.alternatives[row]:
        words += f". {electrodes.alternatives[row]}"
    known = bool(np.isfinite(point).all())
    uri = png_uri(
        capsule_tile(
            run.volume,
            point if known else np.zeros(3),
            window,
            half_mm=TILE_HALF_MM,
            found=found,
            contact_scanner_mm=electrodes.positions_scanner_mm[row] if known else None,
        )
    )
    doubt = status == "inferred" or (np.isfinite(confidence) and confidence < DOUBT_BELOW)
    alt = f"Axial, coronal and sagittal cut through the {'capsule' if found else 'expected place'} of {name}"
    return {"name": name, "words": words, "uri": uri, "doubt": doubt, "alt": alt}


def _doubt_order(run: RunResults) -> list[int]:
    electrodes = run.electrodes
    assert electrodes is not None
    confidence = np.where(np.isfinite(electrodes.confidence), electrodes.confidence, 1.0)
    rows = [
        row
        for row in np.argsort(confidence, kind="stable")
        if confidence[row] < DOUBT_BELOW or electrodes.status[row] == "inferred"
    ]
    return [int(row) for row in rows]


def _electrodes(run: RunResults, tiles: list[dict[str, Any]]) -> dict[str, Any] | None:
    electrodes = run.electrodes
    if electrodes is None:
        return None
    counts = {s: electrodes.status.count(s) for s in ("seen", "inferred", "corrected", "given")}
    said = {
        "seen": "with their own capsule",
        "inferred": "without, placed from the layout",
        "corrected": "decided by a person",
        "given": "given in a file",
    }
    parts = [f"{n} {said[s]}" for s, n in counts.items() if n]
    seen = np.array([s == "seen" for s in electrodes.status])
    sure = seen & (electrodes.confidence >= DOUBT_BELOW)
    sentence = f"{len(electrodes.names)} names: {', '.join(parts)}."
    if seen.any():
        sentence += (
            f" {int(sure.sum())} of the {int(seen.sum())} labels are at least 90 % sure."
            f" Skin to underside of the capsules: {_number(electrodes.holder_mm)} mm."
        )
    pictures = figures.electrodes_on_head(run.skin, electrodes, doubt_below=DOUBT_BELOW)
    views = [
        {
            "uri": uri,
            "caption": f"{view.capitalize()}; {VIEWS[view][2]}.",
            "alt": f"Head {view} with the electrodes on it",
        }
        for view, uri in pictures.items()
    ]
    rows = []
    for row, name in enumerate(electrodes.names):
        numbers = [*electrodes.positions_scanner_mm[row]]
        cells: list[dict[str, Any]] = [{"text": _number(v)} for v in numbers]
        cells.append({"text": electrodes.status[row]})
        confidence = float(electrodes.confidence[row])
        cells.append(
            {
                "text": _sure(confidence),
                "key": confidence if np.isfinite(confidence) else 2,
            }
        )
        cells.append({"text": _number(electrodes.residual_mm[row])})
        cells.append({"text": _number(electrodes.sd_mm[row])})
        cells.append({"text": electrodes.alternatives[row]})
        rows.append({"name": name, "cells": cells, "doubt": tiles[row]["doubt"]})
    heads = ["name", "x", "y", "z", "status", "sure, %", "from layout, mm", "sd, mm", "what else"]
    return {
        "sentence": sentence,
        "views": views,
        "rows": rows,
        "heads": heads,
        "tiles": tiles,
        "span": int(2 * TILE_HALF_MM),
    }


def _head(run: RunResults) -> dict[str, Any] | None:
    head = run.head
    if head is None:
        return None
    litres = mesh_volume_mm3(head.inner_skull.vertices_scanner_mm, head.inner_skull.faces) / 1e6
    low, middle, high = np.percentile(skull_thickness_mm(head), [5, 50, 95])
    way = "the shortest way across" if set(head.given) - {"scalp"} else "along its rays"
    sentence = (
        f"The inner skull holds {litres:.2f} L; the skull is {middle:.1f} mm thick {way}"
        f" (5th to 95th percentile {low:.1f} to {high:.1f} mm)."
    )
    if head.given:
        listed = [role.replace("_", " ") for role in reversed(head.given)]
        words = " and ".join([", ".join(listed[:-1]), listed[-1]] if len(listed) > 1 else listed)
        sentence += f" The {words} {'was' if len(listed) == 1 else 'were'} given, not made here."
    known = [
        f"{_number(float(np.median(surface.sd_mm)))} mm ({name})"
        for name, role, surface in (
            ("outer", "outer_skull", head.outer_skull),
            ("inner", "inner_skull", head.inner_skull),
        )
        if role not in head.given
    ]
    if known:
        sentence += (
            " Skull from T1 leans on a prior where bone and fluid look alike; the"
            f" {'surfaces are' if len(known) == 2 else 'surface is'} known to about"
            f" {' and '.join(known)}."
        )
    if run.sources is not None and run.lead_field is not None:
        scalp, skull, brain = run.lead_field.conductivity_s_per_m
        sentence += (
            f" {len(run.sources.positions_scanner_mm)} sources ({run.sources.kind},"
            f" {run.sources.spacing_mm:g} mm); conductivities {scalp:g} scalp, {skull:g} skull,"
            f" {brain:g} brain S/m."
        )
    return {
        "sentence": sentence,
        "uri": figures.surfaces_on_slices(run.volume, head),
        "alt": "Nine slices of the T1 with scalp, outer skull and inner skull drawn on them",
        "caption": "Axial, coronal and sagittal slices; scalp outermost, then outer and inner skull.",
    }


def _recording_words(run: RunResults) -> str:
    epochs = run.epochs
    assert epochs is not None
    first, last = 1000 * epochs.times_s[0], 1000 * epochs.times_s[-1]
    words = (
        f"{len(epochs.electrode_names)} electrodes, average reference, {epochs.sampling_hz:g} Hz,"
        f" {first:.0f} to {last:.0f} ms around “{epochs.event}”."
    )
    if epochs.testable:
        words += f" {len(epochs.data_uv)} of {epochs.n_trials_read} trials used."
    if run.inverse is not None:
        words += (
            f" Estimate: {run.inverse.method}, λ² = {run.inverse.lambda2:.3g}"
            f" (amplitude signal-to-noise of the average {run.inverse.snr:.2g})."
        )
    return words


def _result(run: RunResults) -> dict[str, Any] | None:
    epochs, test = run.epochs, run.test
    if epochs is None or test is None or run.inverse is None or run.sources is None:
        return None
    peaks = run.peaks
    n_permutations = test.n_permutations
    survives = bool(np.nanmin(np.append(test.corrected_p, 1.0)) < 0.05)
    window = f"{1000 * test.window_s[0]:.0f} to {1000 * test.window_s[1]:.0f} ms"
    maps: list[dict[str, str]] = []
    courses: list[dict[str, str]] = []
    rows: list[dict[str, str]] = []
    causes: list[dict[str, str]] = []
    best = int(np.argmax(test.statistic))
    if not epochs.testable:
        sentence = (
            "The recording is an average without trials: nothing could be tested, and no map is"
            " shown. The unthresholded estimate is in sources/, described as not a test."
        )
    elif not survives:
        sentence = (
            f"Nothing survives correction between {window}: the largest statistic has p ="
            f" {np.nanmin(test.corrected_p):.2g} ({n_permutations} sign flips). This is not evidence"
            " that nothing happened. No map is shown."
        )
    elif peaks is None or not len(peaks.statistic):
        sentence = (
            f"A response between {window} survives correction (p"
            f" {_p_words(float(np.nanmin(test.corrected_p)), n_permutations)}); its place is still being worked out."
        )
    else:
        x, y, z = peaks.positions_scanner_mm[0]
        p = _p_words(float(peaks.corrected_p[0]), n_permutations)
        place = (
            f"its place is known to ± {peaks.region_mm[0]:.0f} mm (95 %)"
            if np.isfinite(peaks.region_mm[0])
            else "how well its place is known is still being worked out"
        )
        sentence = (
            f"The response at {1000 * peaks.time_s[0]:.0f} ms survives correction for multiple comparisons"
            f" (p {p if p.startswith('≤') else '= ' + p}, {n_permutations} sign flips) with its peak at x {x:.0f},"
            f" y {y:.0f}, z {z:.0f} mm; {place}."
        )
        for row in range(len(peaks.statistic)):
            px, py, pz = peaks.positions_scanner_mm[row]
            rows.append(
                {
                    "x": _number(px),
                    "y": _number(py),
                    "z": _number(pz),
                    "statistic": _number(peaks.statistic[row], 2),
                    "p": _p_words(float(peaks.corrected_p[row]), n_permutations),
                    "time": _number(1000 * peaks.time_s[row], 0),
                    "region": _number(peaks.region_mm[row]),
                }
            )
            if row < 3:
                maps.append(
                    {
                        "uri": figures.map_on_slices(
                            run.volume, run.sources, test, peaks, peak=row
                        ),
                        "alt": f"Slices through peak {row + 1} with the surviving statistic in colour",
                        "caption": f"Slices through peak {row + 1}. Colour only where corrected p < 0.05;"
                        " voxels take their nearest source, nothing is interpolated. The coloured"
                        " extent is not the extent of the activity.",
                    }
                )
        causes = [
            {"name": name, "mm": _number(value)}
            for name, value in sorted(peaks.region_causes_mm.items(), key=lambda item: -item[1])
        ]
        best = int(peaks.source[0])
    if epochs.testable and survives:
        courses.append(
            {
                "uri": figures.time_course(epochs, run.inverse, test, best),
                "alt": "The statistic at the first peak over time",
                "caption": "The statistic at the place of the first peak; dashed, what the largest of all"
                " places and samples in the window reaches by chance one time in twenty.",
            }
        )
    courses.append(
        {
            "uri": figures.average_response(epochs),
            "alt": "The average response at all electrodes",
            "caption": "The average at every electrode (grey) and its spread over the head (blue).",
        }
    )
    lists = [
        {"title": title, "rows": rows_}
        for title, rows_ in (
            ("Channels left out", epochs.bad_channels),
            ("Trials left out", epochs.dropped_trials),
            ("Channels that are not scalp electrodes", epochs.other_channels),
        )
        if rows_
    ]
    if not epochs.testable:
        null = "Nothing was tested, so there is nothing to check."
    elif run.null_control is None:
        null = "Still being computed." if not run.complete else "It was not computed."
    else:
        null = run.null_control.sentence
    return {
        "sentence": sentence,
        "meaning": MEANING,
        "maps": maps,
        "peaks": rows,
        "causes": causes,
        "courses": courses,
        "null": null,
        "recording": _recording_words(run),
        "lists": lists,
    }


def _headline(run: RunResults, result: dict[str, Any] | None, n_look: int) -> str:
    attention = (
        "nothing needs an eye"
        if not n_look
        else f"{n_look} thing{'s' if n_look > 1 else ''} to look at"
    )
    if result is not None and run.test is not None:
        survived = bool(
            run.epochs and run.epochs.testable and np.nanmin(run.test.corrected_p) < 0.05
        )
        words = "A response survives correction" if survived else "Nothing survives correction"
        if run.epochs is not None and not run.epochs.testable:
            words = "An average without trials: nothing could be tested"
        return f"{words}; {attention}"
    if run.electrodes is not None:
        seen = sum(status == "seen" for status in run.electrodes.status)
        return f"{seen} of {len(run.electrodes.names)} electrodes found; {attention}"
    return f"Head model; {attention}"


def make_report(run: RunResults) -> str:
    """Write the page of one `find`, `head` or `run`.

    Parameters
    ----------
    run : RunResults
        Whatever there is; parts without results are left out.

    Returns
    -------
    str
        A complete HTML document that needs no other file and no network.
    """
    environment = Environment(
        autoescape=select_autoescape(default=True, default_for_string=True),
        undefined=StrictUndefined,
        trim_blocks=True,
    )
    folder = resources.files("locator.report") / "templates"
    tile_template = environment.from_string(TILE)
    window = grey_window(run.volume)
    tiles: list[dict[str, Any]] = []
    doubtful: list[dict[str, Any]] = []
    if run.electrodes is not None:
        tiles = [_tile(run, row, window) for row in range(len(run.electrodes.names))]
        doubtful = [tiles[row] for row in _doubt_order(run)[:12]]
    findings = run.findings
    look = [f for f in findings if f.level == "look"]
    notes = [f for f in findings if f.level != "look"]
    result = _result(run)
    electrodes = _electrodes(run, tiles)
    head = _head(run)
    parts = [{"id": "eye", "title": "What needs an eye"}]
    parts += [
        {"id": id_, "title": title}
        for id_, title, there in (
            ("result", "The response", result),
            ("electrodes", "Electrodes", electrodes),
            ("head", "Head model", head),
            ("sides", "Left and right", True),
            ("settings", "Settings", True),
            ("cautions", "Cautions", True),
        )
        if there
    ]
    settings = [
        {"stage": stage, "name": name, "value": str(value)}
        for stage, values in run.settings.items()
        for name, value in values.items()
    ]
    timings = [
        {"stage": t.stage, "seconds": f"{t.seconds:.1f}", "kept": "yes" if t.kept else "no"}
        for t in run.timings
    ]
    headline = _headline(run, result, len(look))
    stale = ""
    if not run.complete:
        stale = "the maps are ready; null control and regions are still being computed, and what is said of them here is stale."
    return environment.from_string((folder / "page.html").read_text("utf-8")).render(
        title=f"{headline} – {run.subject}" if run.subject else headline,
        headline=headline,
        subject=run.subject,
        style=Markup((folder / "page.css").read_text("utf-8")),
        script=Markup((folder / "page.js").read_text("utf-8")),
        tile=lambda t: Markup(tile_template.render(t=t)),
        parts=parts,
        look=look,
        notes=notes,
        doubtful=doubtful,
        result=result,
        electrodes=electrodes,
        head=head,
        sides=run.side_basis,
        stale=stale,
        inputs=run.inputs,
        settings=settings,
        timings=timings,
        cautions=CAUTIONS,
        versions=[{"name": k, "value": v} for k, v in run.versions.items()],
        seeds=[{"name": k, "value": v} for k, v in run.seeds.items()],
    )
