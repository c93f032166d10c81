"""How well one source is found, how often nothing is, and whether its region holds it.

Layered-sphere sessions (61 electrodes of the 10-10 system, background 8 µV, 120 trials, one dipole
of 40 nAm at 0.8 of the inner radius; the recordings are made by ``synthetic_heads`` with the exact
series). Our side knows the spheres as surfaces, not as a T1, and the electrodes with an error; the
lead field is our boundary-element one. Two sets of skull conductivity for the data: the one that
the estimate assumes, and drawn anew for every session from the published range (ratio 15 to 50).

    python tests/benchmarks/projection.py --seeds 5
"""

from __future__ import annotations

import argparse
import resource
import time
from dataclasses import dataclass

import numpy as np

from locator.forward import ForwardOptions, LeadField, compute_lead_field, electrode_rows
from locator.geometry import icosphere
from locator.head import Surface
from locator.inverse import InverseOptions, make_inverse
from locator.recording import EpochOptions, Recording, make_epochs
from locator.statistics import (
    RegionOptions,
    find_peaks,
    null_control,
    peak_region,
    sign_flip_test,
)
from synthetic_heads.cap import make_cap
from synthetic_heads.currents import choose_dipole
from synthetic_heads.heads import GREY, make_head
from synthetic_heads.recording import make_recording
from synthetic_heads.tape import NAMES_61

SKULL = 0.0132
SKULL_FACTORS = (0.5, 5 / 3)
SNR_FACTORS = (0.5, 2.0)
SPACING_MM = 5.0


@dataclass
class World:
    """What all sessions share: the spheres, the sources, the lead fields."""

    head: object
    sources_mm: np.ndarray
    fields: list[LeadField]
    field_s: float


def make_world(seed: int = 0) -> World:
    """Spheres of one synthetic head as surfaces, and the lead fields of three conductivities."""
    head = make_head(seed, "sphere")
    vertices, faces = icosphere(3)

    def sphere(name: str) -> Surface:
        return Surface(
            vertices_scanner_mm=head.center_mm + vertices * head.radii_mm[name],
            faces=faces,
            sd_mm=np.full(len(vertices), 0.1),
        )

    inner = head.radii_mm["inner_skull"]
    line = np.arange(-inner, inner + 1, SPACING_MM)
    grid = np.stack(np.meshgrid(line, line, line, indexing="ij"), axis=-1).reshape(-1, 3)
    grid = grid[np.linalg.norm(grid, axis=1) < inner - 3] + head.center_mm
    back = np.linalg.inv(head.scanner_from_voxel)
    voxel = np.rint(grid @ back[:3, :3].T + back[:3, 3]).astype(int)
    within = ((voxel >= 0) & (voxel < head.labels.shape)).all(axis=1)
    grid, voxel = grid[within], voxel[within]
    sources = grid[head.labels[tuple(voxel.T)] == GREY]
    begin = time.perf_counter()
    surfaces = [sphere(name) for name in ("scalp", "outer_skull", "inner_skull")]
    fields = [compute_lead_field(*surfaces, sources)]
    field_s = time.perf_counter() - begin
    fields += [
        compute_lead_field(
            *surfaces,
            sources,
            options=ForwardOptions(conductivity_s_per_m=(0.33, SKULL * factor, 0.33)),
        )
        for factor in SKULL_FACTORS
    ]
    return World(head=head, sources_mm=sources, fields=fields, field_s=field_s)


def as_read(made: object) -> Recording:
    """The recording as it would be read from its file."""
    return Recording(
        data_uv=made.data_uv,
        channel_names=made.channel_names,
        channel_kinds=made.channel_kinds,
        sampling_hz=made.sampling_hz,
        event_names=tuple(made.event_names),
        event_samples=made.event_samples,
    )


def one_session(
    world: World,
    seed: int,
    *,
    with_dipole: bool,
    skull: float,
    electrode_sd_mm: float = 1.0,
    nam: float = 40.0,
    n_permutations: int = 5000,
    with_null: bool = False,
    head_model_mm: float = 5.0,
) -> dict[str, float]:
    """Make one recording and project it."""
    head = world.head
    rng = np.random.default_rng([seed, 7])
    cap = make_cap(
        *head.surfaces["scalp"], head.landmarks_mm, NAMES_61, seed,
        slide_mm=3.0, turn_deg=2.0, jitter_mm=2.5,
    )  # fmt: skip
    truth = choose_dipole(
        head, seed, amplitude_nam=nam, orientation="radial" if seed % 2 else "tangential"
    )
    made = make_recording(
        head, NAMES_61, cap.contacts_mm[:61], seed=seed, dipoles=[truth] if with_dipole else (),
        n_trials=120, background_uv=8.0, event_free_s=150.0 if with_null else 5.0,
        conductivity_s_per_m=(0.33, skull, 0.33),
    )  # fmt: skip
    recording = as_read(made)
    times: dict[str, float] = {}

    def timed(name: str, function, *args, **kwargs):
        begin = time.perf_counter()
        result = function(*args, **kwargs)
        times[name] = time.perf_counter() - begin
        return result

    options = EpochOptions()
    epochs = timed("epochs", make_epochs, recording, options=options)
    order = [NAMES_61.index(name) for name in epochs.electrode_names]
    positions = cap.contacts_mm[order] + electrode_sd_mm * rng.standard_normal((len(order), 3))
    covariance = np.tile(electrode_sd_mm**2 * np.eye(3), (len(order), 1, 1))
    rows = timed("rows", electrode_rows, world.fields[0], positions)
    inverse = timed("inverse", make_inverse, rows, epochs)
    test = timed(
        "test", sign_flip_test, epochs, inverse, n_permutations=n_permutations,
        rng=np.random.default_rng(seed),
    )  # fmt: skip
    peaks = timed("peaks", find_peaks, test, epochs, inverse, rows, world.sources_mm)
    out = {
        "n_peaks": len(peaks.source),
        "p": float(test.corrected_p.min()),
        "share": float((test.corrected_p < 0.05).mean()),
        "n_samples": int((epochs.times_s > 0).sum()),
        "snr": inverse.snr,
    }
    if with_dipole and len(peaks.source):
        other = [
            make_inverse(rows, epochs, options=InverseOptions(snr=inverse.snr * factor))
            for factor in SNR_FACTORS
        ]
        gap = np.linalg.norm(peaks.positions_scanner_mm[0] - truth.position_mm)
        out["error_mm"] = float(gap)
        region = timed(
            "region", peak_region, peaks, epochs, inverse, world.fields[0], positions,
            covariance_mm2=covariance, other_conductivities=world.fields[1:],
            other_inverses=other, options=RegionOptions(head_model_mm=head_model_mm),
            rng=np.random.default_rng(seed),
        )  # fmt: skip
        out["region_mm"] = float(region.region_mm[0])
        out["held"] = float(gap <= region.region_mm[0])
        out["probability_at_truth_rank"] = _rank(
            region.region_probability, world.sources_mm, truth.position_mm
        )
        out.update({f"{cause} mm": mm for cause, mm in region.region_causes_mm.items()})
    if with_null:
        control = timed(
            "null control", null_control, recording, inverse, event=epochs.event,
            options=options, n_trials=len(epochs.data_uv), rng=np.random.default_rng(seed),
        )  # fmt: skip
        out["null_rate"], out["null_checks"] = control.rate, control.n_checks
        out["null_finding"] = float(any(f.level == "look" for f in control.findings))
    return out | {f"{name} s": value for name, value in times.items()}


def _rank(probability: np.ndarray, sources_mm: np.ndarray, place_mm: np.ndarray) -> float:
    """Probability of all places more likely than the true one; uniform when calibrated."""
    nearest = int(np.argmin(np.linalg.norm(sources_mm - place_mm, axis=1)))
    return float(probability[probability > probability[nearest]].sum())


def _table(title: str, rows: list[dict[str, float]]) -> None:
    print(f"\n{title}: {len(rows)} sessions")
    keys = list(dict.fromkeys(key for row in rows for key in row))
    for key in keys:
        values = np.array([row[key] for row in rows if key in row], dtype=float)
        values = values[np.isfinite(values)]
        if len(values) == 0:
            continue
        print(
            f"  {key:28s} mean {values.mean():8.3f}  median {np.median(values):8.3f}"
            f"  90th {np.percentile(values, 90):8.3f}  max {values.max():8.3f}  n {len(values)}"
        )


def main() -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--seeds", type=int, default=5)
    parser.add_argument("--first", type=int, default=0)
    parser.add_argument("--permutations", type=int, default=5000)
    parser.add_argument("--nam", type=float, default=40.0)
    parser.add_argument("--head-model-mm", type=float, default=5.0)
    parser.add_argument(
        "--sets",
        nargs="*",
        choices=("assumed", "ratio", "none"),
        default=("assumed", "ratio", "none"),
    )
    arguments = parser.parse_args()
    world = make_world()
    print(
        f"{len(world.sources_mm)} sources every {SPACING_MM:g} mm,"
        f" lead field {world.field_s:.1f} s (first one, with compilation)"
    )
    seeds = range(arguments.first, arguments.first + arguments.seeds)
    common = {
        "n_permutations": arguments.permutations,
        "nam": arguments.nam,
        "head_model_mm": arguments.head_model_mm,
    }
    ratios = np.random.default_rng(99).uniform(15, 50, 10_000)
    sets = {
        "assumed": lambda seed: one_session(
            world, seed, with_dipole=True, skull=SKULL, with_null=seed < 3, **common
        ),
        "ratio": lambda seed: one_session(
            world, seed + 500, with_dipole=True, skull=0.33 / ratios[seed], **common
        ),
        "none": lambda seed: one_session(
            world, seed + 1000, with_dipole=False, skull=SKULL, with_null=seed < 3, **common
        ),
    }
    titles = {
        "assumed": "dipole, conductivity as assumed",
        "ratio": "dipole, ratio 15 to 50",
        "none": "no dipole",
    }
    for name in arguments.sets:
        make, rows = sets[name], []
        for seed in seeds:
            rows.append(make(seed))
            short = {k: round(v, 2) for k, v in rows[-1].items() if not k.endswith(" s")}
            print(f"  seed {seed}: {short}", flush=True)
        _table(titles[name], rows)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"\npeak memory {peak:.0f} MB")


if __name__ == "__main__":
    main()
