"""A matched sphere for the tests of the statistics: exact lead field, invented epochs."""

from __future__ import annotations

from functools import cache

import numpy as np
from scipy import signal

from locator.forward import LeadField
from locator.geometry import icosphere
from locator.recording import Epochs
from synthetic_heads.series import sphere_lead_field

RADIUS_MM, INNER_MM = 92.0, 80.0
RATE = 250.0
NAMES = (
    "Fp1 Fpz Fp2 AF7 AF3 AFz AF4 AF8 F7 F5 F3 F1 Fz F2 F4 F6 F8 FT7 FC5 FC3 FC1 FCz FC2 FC4 FC6 FT8"
    " T7 C5 C3 C1 Cz C2 C4 C6 T8 TP7 CP5 CP3 CP1 CPz CP2 CP4 CP6 TP8 P7 P5 P3 P1 Pz P2 P4 P6 P8"
    " PO7 PO3 POz PO4 PO8 O1 Oz O2"
).split()


def electrodes_mm(n: int) -> np.ndarray:
    """Evenly over the upper part of the sphere."""
    k = np.arange(n) + 0.5
    z = 1 - 1.3 * k / n
    turn = np.pi * (1 + 5**0.5) * k
    ring = np.sqrt(1 - z**2)
    return RADIUS_MM * np.stack([ring * np.cos(turn), ring * np.sin(turn), z], axis=1)


@cache
def grid_mm(spacing: float = 8.0) -> np.ndarray:
    """Sources in a shell of "grey matter"."""
    line = np.arange(-INNER_MM, INNER_MM + 1, spacing)
    points = np.stack(np.meshgrid(line, line, line, indexing="ij"), axis=-1).reshape(-1, 3)
    depth = np.linalg.norm(points, axis=1) / INNER_MM
    return points[(depth > 0.3) & (depth < 0.93) & (points[:, 2] > -40)]


@cache
def lead_field(spacing: float = 8.0, skull: float = 0.0132) -> LeadField:
    """Exact potentials at a read-out mesh."""
    vertices, faces = icosphere(3)
    sources = grid_mm(spacing)
    return LeadField(
        scalp_vertices_scanner_mm=vertices * RADIUS_MM,
        scalp_faces=faces,
        potentials_uv_per_nam=sphere_lead_field(
            vertices, sources, conductivity_s_per_m=(0.33, skull, 0.33)
        ).astype(np.float32),
        sources_scanner_mm=sources,
        conductivity_s_per_m=np.array([0.33, skull, 0.33]),
    )


def noise_uv(seed: int, positions: np.ndarray, n_samples: int, sd: float = 8.0) -> np.ndarray:
    """Continuous background (E, T): 1/f courses of 120 dipoles, and white noise of 0.5 µV."""
    rng = np.random.default_rng(seed)
    place = rng.standard_normal((120, 3))
    place *= (
        INNER_MM * rng.uniform(0.3, 0.9, (120, 1)) / np.linalg.norm(place, axis=1, keepdims=True)
    )
    axis = rng.standard_normal((120, 3))
    field = np.einsum("esk,sk->es", sphere_lead_field(positions, place), axis)
    white = rng.standard_normal((120, n_samples))
    frequency = np.fft.rfftfreq(n_samples, 1 / RATE)
    shape = np.where(frequency < 0.3, 0, 1 / np.sqrt(np.maximum(frequency, 0.3)))
    course = np.fft.irfft(np.fft.rfft(white) * shape * (frequency < 40), n_samples)
    data = field @ course
    data *= sd / data.std()
    return data + 0.5 * rng.standard_normal(data.shape)


def session(
    seed: int,
    sources: tuple[tuple[np.ndarray, np.ndarray, float], ...] = (),
    *,
    n_trials: int = 60,
    n_electrodes: int = 40,
    sd: float = 8.0,
    skull: float = 0.0132,
) -> tuple[Epochs, np.ndarray]:
    """Epochs with sources (place mm, moment nAm, latency s), and the electrode positions."""
    positions = electrodes_mm(n_electrodes)
    times = np.arange(-50, 76) / RATE
    sos = signal.butter(2, 0.3, "high", fs=RATE, output="sos")
    data = signal.sosfiltfilt(sos, noise_uv(seed, positions, n_trials * 150 + 500, sd), axis=1)
    starts = 250 + 150 * np.arange(n_trials)
    trials = data[:, starts[:, None] + np.arange(len(times))].transpose(1, 0, 2)
    for place, moment, latency in sources:
        field = sphere_lead_field(
            positions, np.atleast_2d(place), conductivity_s_per_m=(0.33, skull, 0.33)
        )
        course = np.exp(-0.5 * ((times - latency) / 0.025) ** 2)
        trials = trials + (field[:, 0] @ moment)[None, :, None] * course
    trials = trials - trials.mean(axis=1, keepdims=True)
    trials = trials - trials[:, :, times <= 0].mean(axis=2, keepdims=True)
    epochs = Epochs(
        data_uv=trials,
        electrode_names=tuple(NAMES[:n_electrodes]),
        times_s=times,
        sampling_hz=RATE,
        event="S1",
        n_trials_read=n_trials,
        dropped_trials=(),
        bad_channels=(),
        other_channels=(),
        testable=True,
        n_average=n_trials,
    )
    return epochs, positions
