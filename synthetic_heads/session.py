"""An invented EEG-MRI session: head, cap, scan and recording, with the truth beside them."""

from __future__ import annotations

import gzip
import json
from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
from numpy.typing import NDArray

from synthetic_heads.cap import Cap, make_cap
from synthetic_heads.currents import Dipole, choose_dipole
from synthetic_heads.heads import SyntheticHead, make_head
from synthetic_heads.recording import make_recording, write_recording
from synthetic_heads.scan import make_scan
from synthetic_heads.tape import NAMES_61

Progress = Callable[[str], None]

GYROMAGNETIC_MHZ_PER_T = 42.577
OIL_SHIFT_PPM = 3.4
"""Oil under water, 3.35 to 3.5 ppm (usual value of the -CH2- line)."""


@dataclass(frozen=True, kw_only=True)
class SessionSettings:
    """What an invented session is made of.

    Attributes
    ----------
    seed : int
        All draws.
    kind : str
        ``shaped`` or ``sphere``.
    names : tuple of str
        Electrodes with a channel.
    also : tuple of str
        Further places with a capsule: reference and ground.
    cap : mapping
        Further settings of ``make_cap``.
    scan : mapping
        Further settings of ``make_scan``.
    bandwidth_hz_per_voxel : float or None
        Receive bandwidth along the read axis; None: no chemical shift.
    field_t : float
        Field strength, tesla; with the bandwidth it gives the chemical shift.
    shift_sign : int
        Polarity of the read gradient, 1 or -1 (no header tells it).
    n_dipoles : int
        Dipoles that follow the events; 0: nothing does.
    amplitude_nam : float
        Their strength, nAm.
    orientation : str
        ``tangential``, ``radial`` or ``cortex``.
    recording : mapping
        Further settings of ``make_recording``.
    """

    seed: int = 0
    kind: str = "shaped"
    names: tuple[str, ...] = NAMES_61
    also: tuple[str, ...] = ()
    cap: Mapping[str, Any] = field(default_factory=dict)
    scan: Mapping[str, Any] = field(default_factory=dict)
    bandwidth_hz_per_voxel: float | None = 240.0
    field_t: float = 3.0
    shift_sign: int = -1
    n_dipoles: int = 1
    amplitude_nam: float = 40.0
    orientation: str = "tangential"
    recording: Mapping[str, Any] = field(default_factory=dict)

    @property
    def shift_voxels(self) -> float:
        """Chemical shift of fat along the read axis, voxels."""
        if not self.bandwidth_hz_per_voxel:
            return 0.0
        hertz = OIL_SHIFT_PPM * GYROMAGNETIC_MHZ_PER_T * self.field_t
        return self.shift_sign * hertz / self.bandwidth_hz_per_voxel


@dataclass(frozen=True, eq=False, kw_only=True)
class SyntheticSession:
    """A session in memory, with its truth."""

    head: SyntheticHead
    cap: Cap
    intensity: NDArray[np.float32]
    scanner_from_voxel: NDArray[np.float64]
    sidecar: dict[str, Any]
    dipoles: tuple[Dipole, ...]
    settings: SessionSettings
    truth: dict[str, Any]


CAP_DEFAULTS: dict[str, Any] = {
    "slide_mm": 3.0,
    "turn_deg": 2.0,
    "jitter_mm": 2.0,
    "n_off": 1,
    "n_extra": 2,
}
SCAN_DEFAULTS: dict[str, Any] = {"axes": "LIA", "bias": 0.15, "noise": 0.03, "read_axis": 1}


def make_session(
    settings: SessionSettings | None = None, *, progress: Progress | None = None
) -> SyntheticSession:
    """Draw head, cap and scan, and choose the dipoles; the recording is made on writing.

    Parameters
    ----------
    settings : SessionSettings, optional
        What to make.
    progress : callable, optional
        Called with a line of text at each step.

    Returns
    -------
    SyntheticSession
        The session and the truth about it.
    """
    chosen = settings or SessionSettings()
    say = progress or (lambda _: None)
    say(f"drawing a {chosen.kind} head (seed {chosen.seed})")
    head = make_head(chosen.seed, chosen.kind)
    vertices, faces = head.surfaces["scalp"]
    say(f"putting on a cap of {len(chosen.names)} electrodes")
    cap_settings = {**CAP_DEFAULTS, "also": chosen.also, **chosen.cap}
    cap = make_cap(vertices, faces, head.landmarks_mm, chosen.names, chosen.seed, **cap_settings)
    say("scanning")
    scan_settings = {**SCAN_DEFAULTS, **chosen.scan}
    image, affine = make_scan(
        head,
        cap,
        seed=chosen.seed,
        chemical_shift_voxels=chosen.shift_voxels,
        **scan_settings,
    )
    read_axis = int(scan_settings["read_axis"])
    shift_mm = affine[:3, read_axis] * chosen.shift_voxels
    dipoles = tuple(
        choose_dipole(
            head,
            chosen.seed + 1000 * index,
            amplitude_nam=chosen.amplitude_nam,
            orientation=chosen.orientation,
        )
        for index in range(chosen.n_dipoles)
    )
    sidecar = _sidecar(chosen, scan_settings, image.shape)
    truth = {
        "about": "Invented data: no person, no scanner, no recording device is behind it.",
        "space": "scanner RAS+ mm (sform and qform of the T1, code 1)",
        "seed": chosen.seed,
        "kind": head.kind,
        "landmarks_mm": {k: _plain(v) for k, v in head.landmarks_mm.items()},
        "center_mm": _plain(head.center_mm),
        "radii_mm": head.radii_mm,
        "head_settings": {k: round(v, 4) for k, v in head.settings.items()},
        **cap.truth(),
        "chemical_shift_mm": _plain(shift_mm),
        "chemical_shift_voxels": round(chosen.shift_voxels, 6),
        "read_axis": read_axis,
        "dipoles": [_dipole(d) for d in dipoles],
        "settings": _jsonable(asdict(chosen)),
        "scan_settings": _jsonable(scan_settings),
    }
    return SyntheticSession(
        head=head,
        cap=cap,
        intensity=image,
        scanner_from_voxel=affine,
        sidecar=sidecar,
        dipoles=dipoles,
        settings=chosen,
        truth=truth,
    )


def write_session(
    folder: str | Path,
    session: SyntheticSession,
    *,
    recording: bool = True,
    surfaces: bool = False,
    progress: Progress | None = None,
) -> dict[str, Path]:
    """Write a session: T1 with sidecar, recording, truth; same session, same bytes.

    Parameters
    ----------
    folder : path
        Made if it is not there; existing files of the same names are replaced.
    session : SyntheticSession
        What ``make_session`` made.
    recording : bool
        Also make and write the EEG.
    surfaces : bool
        Also write the tissue labels and the true surfaces.
    progress : callable, optional
        Called with a line of text at each step.

    Returns
    -------
    dict of str to Path
        ``t1``, ``t1_json``, ``truth`` and, when written, ``eeg``, ``labels``, ``scalp`` ...
    """
    say = progress or (lambda _: None)
    out = Path(folder)
    out.mkdir(parents=True, exist_ok=True)
    paths = {"t1": out / "T1.nii.gz", "t1_json": out / "T1.json", "truth": out / "truth.json"}
    say(f"writing {paths['t1']}")
    stored = np.clip(np.rint(session.intensity), 0, 32767).astype(np.int16)
    write_nifti(paths["t1"], stored, session.scanner_from_voxel)
    _write_json(paths["t1_json"], session.sidecar)
    truth = dict(session.truth)
    if recording:
        say("making the recording")
        on_channel = [n not in session.cap.also for n in session.cap.names]
        made = make_recording(
            session.head,
            [n for n, on in zip(session.cap.names, on_channel, strict=True) if on],
            session.cap.contacts_mm[np.array(on_channel)],
            seed=session.settings.seed,
            dipoles=session.dipoles,
            **session.settings.recording,
        )
        paths["eeg"] = out / "eeg.vhdr"
        say(f"writing {paths['eeg']}")
        write_recording(paths["eeg"], made)
        truth["recording"] = made.truth
    if surfaces:
        paths["labels"] = out / "labels.nii.gz"
        write_nifti(paths["labels"], session.head.labels, session.head.scanner_from_voxel)
        for name, (vertices, faces) in session.head.surfaces.items():
            paths[name] = out / f"{name}.surf.gii"
            _write_surface(paths[name], vertices, faces)
    _write_json(paths["truth"], truth)
    say(f"the truth is in {paths['truth']}")
    return paths


def write_nifti(path: Path, data: NDArray[Any], affine: NDArray[np.float64]) -> None:
    """Write a NIfTI with sform and qform (code 1), without the time of day in the file."""
    image = nib.Nifti1Image(data, affine)
    image.set_sform(affine, code=1)
    image.set_qform(affine, code=1)
    image.header.set_xyzt_units("mm", "sec")
    raw = image.to_bytes()
    with path.open("wb") as file, gzip.GzipFile("", "wb", 6, file, mtime=0) as packed:
        packed.write(raw)


def _write_surface(path: Path, vertices: NDArray[np.float64], faces: NDArray[np.int32]) -> None:
    """Write a GIFTI surface in scanner mm."""
    space = nib.gifti.GiftiCoordSystem(
        dataspace="NIFTI_XFORM_SCANNER_ANAT", xformspace="NIFTI_XFORM_SCANNER_ANAT"
    )
    points = nib.gifti.GiftiDataArray(
        vertices.astype(np.float32), intent="NIFTI_INTENT_POINTSET", coordsys=space
    )
    triangles = nib.gifti.GiftiDataArray(
        faces.astype(np.int32), intent="NIFTI_INTENT_TRIANGLE", coordsys=space
    )
    path.write_bytes(nib.gifti.GiftiImage(darrays=[points, triangles]).to_bytes())


def _sidecar(
    settings: SessionSettings, scan_settings: Mapping[str, Any], shape: Sequence[int]
) -> dict[str, Any]:
    """Sidecar of the T1 as a converter would write it; all invented."""
    read_axis = int(scan_settings["read_axis"])
    phase = (read_axis + 1) % 3
    sidecar: dict[str, Any] = {
        "Modality": "MR",
        "Manufacturer": "invented",
        "ProtocolName": "t1 inversion recovery gradient echo (invented)",
        "MagneticFieldStrength": settings.field_t,
        "ImagingFrequency": round(GYROMAGNETIC_MHZ_PER_T * settings.field_t, 4),
        "MRAcquisitionType": "3D",
        "ScanningSequence": "GR\\IR",
        "RepetitionTime": 2.3,
        "InversionTime": 0.9,
        "EchoTime": 0.0029,
        "FlipAngle": 9,
        "PhaseEncodingAxis": "ijk"[phase],
        "FrequencyEncodingAxis": "ijk"[read_axis],
        "AcquisitionMatrix": [int(n) for n in shape],
    }
    if settings.bandwidth_hz_per_voxel:
        sidecar["PixelBandwidth"] = settings.bandwidth_hz_per_voxel
    return sidecar


def _dipole(dipole: Dipole) -> dict[str, Any]:
    known: dict[str, Any] = _jsonable(asdict(dipole))
    return known


def _plain(values: Any) -> list[float]:
    return [round(float(value), 4) for value in np.asarray(values).ravel()]


def _jsonable(value: Any) -> Any:
    """The same in plain JSON types."""
    if isinstance(value, Mapping):
        return {str(key): _jsonable(item) for key, item in value.items()}
    if isinstance(value, np.ndarray):
        return _jsonable(value.tolist())
    if isinstance(value, (list, tuple)):
        return [_jsonable(item) for item in value]
    if isinstance(value, np.generic):
        return value.item()
    return value


def _write_json(path: Path, content: Mapping[str, Any]) -> None:
    path.write_text(json.dumps(_jsonable(content), indent=1) + "\n", encoding="utf-8")
