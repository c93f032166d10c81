"""Lead field: error against the exact series, time and memory; peak error of the inverse methods.

Run with ``python tests/benchmarks/forward.py``: three concentric shells (80, 86, 92 mm), 64
electrodes that are not at vertices, average reference, 180 dipoles at each eccentricity. The last
table: one dipole, data from the series with a skull ratio of 50, maps made with the default ratio
of 25 and electrodes that are 3 mm off, so that the model is wrong as it is for every person.
"""

from __future__ import annotations

import argparse
import resource
import time

import numpy as np

from locator.forward import ForwardOptions, LeadField, compute_lead_field, electrode_rows
from locator.geometry import icosphere
from locator.head import Surface
from locator.inverse import METHODS, InverseOptions, make_inverse, statistic
from locator.recording import Epochs
from synthetic_heads.series import sphere_lead_field

RADII = (80.0, 86.0, 92.0)
ECCENTRICITIES = (0.5, 0.8, 0.9, 0.95, 0.98)
RATIOS = (15, 25, 50, 80)


def dipoles(n: int) -> tuple[np.ndarray, np.ndarray]:
    """Places (5 n, 3) and three moments each (5 n, 3, 3): radial and two tangential."""
    rng = np.random.default_rng(1)
    direction = rng.normal(size=(len(ECCENTRICITIES) * n, 3))
    direction /= np.linalg.norm(direction, axis=1, keepdims=True)
    first = np.cross(direction, rng.normal(size=direction.shape))
    first /= np.linalg.norm(first, axis=1, keepdims=True)
    share = np.repeat(ECCENTRICITIES, n)[:, None]
    return RADII[0] * share * direction, np.stack(
        [direction, first, np.cross(direction, first)], axis=1
    )


def electrodes(n: int = 64) -> np.ndarray:
    """Upper part of the sphere, turned off the mesh's symmetries."""
    step = np.arange(n) + 0.5
    z = 1 - 1.3 * step / n
    turn = np.pi * (1 + 5**0.5) * step
    places = np.c_[np.sqrt(1 - z**2) * np.cos(turn), np.sqrt(1 - z**2) * np.sin(turn), z]
    turned = np.linalg.qr(np.random.default_rng(4).normal(size=(3, 3)))[0]
    return RADII[2] * places @ turned


def spheres(level: int) -> list[Surface]:
    """Inner skull, outer skull, scalp."""
    points, faces = icosphere(level)
    return [
        Surface(vertices_scanner_mm=r * points, faces=faces, sd_mm=np.zeros(len(points)))
        for r in RADII
    ]


def errors(lead_field: LeadField, ratio: float, n: int) -> np.ndarray:
    """Mean RDM, largest RDM and mean MAG at each eccentricity, (5, 3)."""
    places, moments = dipoles(n)
    at = electrodes()
    rows = electrode_rows(lead_field, at)[:, : len(places)]
    exact = sphere_lead_field(at, places, conductivity_s_per_m=(0.33, 0.33 / ratio, 0.33))
    found, wanted = (np.einsum("esx,smx->esm", field, moments) for field in (rows, exact))
    found, wanted = found - found.mean(axis=0), wanted - wanted.mean(axis=0)
    sizes = np.linalg.norm(found, axis=0), np.linalg.norm(wanted, axis=0)
    rdm = np.linalg.norm(found / sizes[0] - wanted / sizes[1], axis=0)
    rdm = rdm.reshape(len(ECCENTRICITIES), -1)
    mag = (sizes[0] / sizes[1]).reshape(len(ECCENTRICITIES), -1)
    return np.stack([rdm.mean(axis=1), rdm.max(axis=1), mag.mean(axis=1)], axis=1)


def accuracy(n: int, more_sources: int) -> None:
    """Print the errors and times of each route."""
    print("mean RDM (largest) / mean MAG at eccentricity " + ", ".join(map(str, ECCENTRICITIES)))
    rng = np.random.default_rng(2)
    filler = rng.normal(size=(more_sources, 3))
    filler *= 60 * rng.random((more_sources, 1)) / np.linalg.norm(filler, axis=1, keepdims=True)
    for level, route in ((3, "plain"), (3, "subdivided"), (4, "plain")):
        inner, outer, scalp = spheres(level)
        for ratio in RATIOS:
            start = time.perf_counter()
            cpu = time.process_time()
            lead_field = compute_lead_field(
                scalp,
                outer,
                inner,
                np.vstack([dipoles(n)[0], filler]),
                options=ForwardOptions(
                    conductivity_s_per_m=(0.33, 0.33 / ratio, 0.33),
                    route=route,  # type: ignore[arg-type]
                ),
            )
            wall, busy = time.perf_counter() - start, time.process_time() - cpu
            cells = "  ".join(
                f"{mean:.4f} ({most:.3f}) / {mag:.4f}"
                for mean, most, mag in errors(lead_field, ratio, n)
            )
            memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
            print(
                f"{len(inner.vertices_scanner_mm):5d} {route:10s} ratio {ratio:2d}: {cells}"
                f"  {lead_field.potentials_uv_per_nam.shape[1]} sources: {wall:.1f} s"
                f" ({busy:.1f} s of processor), peak {memory:.2f} GB",
                flush=True,
            )


def peaks(n_dipoles: int = 60) -> None:
    """Print the peak error of each method with a wrong model and noise."""
    axis = np.arange(-72.0, 73.0, 9.0)
    grid = np.stack(np.meshgrid(axis, axis, axis, indexing="ij"), axis=-1).reshape(-1, 3)
    grid = grid[np.linalg.norm(grid, axis=1) < 77]
    at = electrodes()
    rng = np.random.default_rng(7)
    believed = at + rng.normal(0, 3 / np.sqrt(3), at.shape)
    rows = sphere_lead_field(believed, grid)
    upper = grid[(grid @ at.mean(axis=0) > 0) & (np.linalg.norm(grid, axis=1) > 20)]
    places = upper[rng.choice(len(upper), n_dipoles, replace=False)]
    # Between the grid points, where no method is exact.
    places = places + rng.uniform(-4.5, 4.5, places.shape)
    places = places[np.linalg.norm(places, axis=1) < 77]
    n_dipoles = len(places)
    true = sphere_lead_field(at, places, conductivity_s_per_m=(0.33, 0.0066, 0.33))
    depth = RADII[0] - np.linalg.norm(places, axis=1)
    times = np.arange(-40, 41) / 200.0
    course = np.exp(-((times - 0.1) ** 2) / 0.0008)
    # Background: independent dipoles everywhere; only their covariance matters.
    background = sphere_lead_field(at, grid).reshape(len(at), -1)
    root = np.linalg.cholesky(background @ background.T)
    root *= 8.0 / np.sqrt(np.mean(np.sum(root**2, axis=1)))
    result: dict[str, list[float]] = {}
    for k in range(n_dipoles):
        moment = rng.normal(size=3)
        moment *= 40 / np.linalg.norm(moment)
        noise = np.einsum("ef,nft->net", root, rng.normal(size=(30, len(at), len(times))))
        # 30 simulated trials stand for 120: half the noise.
        data = 0.5 * noise + (true[:, k] @ moment)[:, None] * course
        data -= data.mean(axis=1, keepdims=True)
        data -= data[:, :, times <= 0].mean(axis=2, keepdims=True)
        epochs = Epochs(
            data_uv=data,
            electrode_names=tuple(f"E{e}" for e in range(len(at))),
            times_s=times,
            sampling_hz=200.0,
            event="event",
            n_trials_read=30,
            dropped_trials=(),
            bad_channels=(),
            other_channels=(),
            testable=True,
        )
        average = data.mean(axis=0)[:, times > 0]
        for method in METHODS:
            inverse = make_inverse(
                rows,
                epochs,
                options=InverseOptions(method=method),  # type: ignore[arg-type]
            )
            power = statistic(inverse, average).max(axis=1)
            result.setdefault(method, []).append(
                float(np.linalg.norm(grid[power.argmax()] - places[k]))
            )
    print("\nmedian peak error, mm: under 25 mm deep / deeper / 90th percentile of all")
    for name, distances in result.items():
        error = np.array(distances)
        print(
            f"{name}: {np.median(error[depth < 25]):.1f} / {np.median(error[depth >= 25]):.1f}"
            f" / {np.percentile(error, 90):.1f}"
        )


def main() -> None:
    """Print every table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--dipoles", type=int, default=60, help="places an eccentricity")
    parser.add_argument("--sources", type=int, default=8000, help="in the timed lead field")
    chosen = parser.parse_args()
    accuracy(chosen.dipoles, max(0, chosen.sources - 5 * chosen.dipoles))
    peaks()


if __name__ == "__main__":
    main()
