"""Write an inverse operator as a file that mne reads."""

from __future__ import annotations

import struct
import warnings
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from locator.errors import FileError
from locator.inverse import Inverse, local_frames
from locator.io.files import write_whole
from locator.sources import Sources

FloatArray = NDArray[np.float64]

_MNE_NAMES = {"mne": "MNE", "dspm": "dSPM", "sloreta": "sLORETA", "eloreta": "eLORETA"}
_ID_STRUCT = 31


def mne_settings(inverse: Inverse) -> dict[str, Any]:
    """What to pass to ``mne.minimum_norm.prepare_inverse_operator`` to get the same estimate.

    Examples
    --------
    The file at hand, an average `evoked` of ``nave`` trials::

        operator = read_inverse_operator("inverse.fif")
        ready = prepare_inverse_operator(operator, **mne_settings(inverse))
        currents = apply_inverse(
            evoked, ready, lambda2, method, pick_ori="vector", prepared=True
        )

    ``nave`` is the number of trials in the average that the operator was made for. The currents
    are A·m for `MNE` and `eLORETA`; `dSPM` and `sLORETA` come without unit, as
    ``inverse.noise_norm_per_nam`` times our nAm.
    """
    settings: dict[str, Any] = {
        "nave": inverse.n_average,
        "lambda2": inverse.lambda2,
        "method": _MNE_NAMES[inverse.method],
    }
    if inverse.method == "eloreta":
        settings["method_params"] = {"eps": 1e-6, "max_iter": 50}
    return settings


def write_inverse(
    path: Path,
    inverse: Inverse,
    rows: ArrayLike,
    sources: Sources,
    electrodes_scanner_mm: ArrayLike,
) -> None:
    """Write an inverse operator in the FIF format.

    Places are scanner coordinates: the file's `mri` and `head` frames are both scanner RAS+, in
    metres, joined by the identity. The noise covariance is that of one trial; see
    :func:`mne_settings` for what to pass when the file is used.

    Parameters
    ----------
    path : Path
    inverse : Inverse
    rows : (E, S, 3) array_like
        The lead field that the operator was made from, microvolt per nAm.
    sources : Sources
    electrodes_scanner_mm : (E, 3) array_like
        In the order of ``inverse.electrode_names``.

    Raises
    ------
    FileError
        If the shapes do not fit the operator, or the file cannot be written.
    """
    gain = np.asarray(rows, dtype=np.float64)
    places = sources.positions_scanner_mm
    electrodes = np.asarray(electrodes_scanner_mm, dtype=np.float64)
    n_sources, _, n_electrodes = inverse.kernel_nam_per_uv.shape
    if (
        gain.shape != (n_electrodes, n_sources, 3)
        or places.shape != (n_sources, 3)
        or electrodes.shape != (n_electrodes, 3)
    ):
        msg = (
            f"Lead field {gain.shape}, sources {places.shape} and electrodes {electrodes.shape} do"
            f" not fit an operator of {n_electrodes} electrodes and {n_sources} sources"
            f" (writing {path})."
        )
        raise FileError(msg)
    operator = _operator(inverse, gain, places, electrodes)
    write_whole(path, lambda part: _write(part, operator), check=_check)


def _write(path: Path, operator: Any) -> None:
    from mne.minimum_norm import write_inverse_operator

    with warnings.catch_warnings():
        # The name of the file does not follow mne's habit, on purpose.
        warnings.simplefilter("ignore")
        write_inverse_operator(str(path), operator, overwrite=True, verbose="ERROR")
    path.write_bytes(_without_dates(path.read_bytes()))


def _check(path: Path) -> None:
    from mne.minimum_norm import read_inverse_operator

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        read_inverse_operator(str(path), verbose="ERROR")


def _without_dates(content: bytes) -> bytes:
    """Clear machine and time from the identifiers of a FIF file."""
    changed = bytearray(content)
    at = 0
    while 0 <= at <= len(content) - 16:
        _, kind, size, following = struct.unpack(">iIii", content[at : at + 16])
        if kind & 0xFFFF == _ID_STRUCT and size == 20:
            changed[at + 20 : at + 36] = bytes(16)
        if following < 0:
            break
        at = following if following > 0 else at + 16 + size
    return bytes(changed)


def _operator(
    inverse: Inverse, gain: FloatArray, sources: FloatArray, electrodes: FloatArray
) -> Any:
    import mne
    from mne.io.constants import FIFF
    from mne.minimum_norm import InverseOperator

    names = list(inverse.electrode_names)
    n_electrodes, n_sources = gain.shape[:2]
    info = mne.create_info(names, 1000.0, "eeg", verbose="ERROR")
    for channel, place in zip(info["chs"], electrodes, strict=True):
        channel["loc"][:] = 0.0
        channel["loc"][:3] = place / 1000
        channel["coord_frame"] = FIFF.FIFFV_COORD_HEAD
    identity = mne.transforms.Transform("mri", "head", np.eye(4))
    with info._unlock():
        info["mri_file"] = "T1, scanner coordinates"
        info["meas_file"] = "recording"
        info["meas_id"] = None
        info["file_id"] = None
        info["mri_head_t"] = identity
        info["dev_head_t"] = None
    reference = mne.Projection(
        active=True,
        data={
            "col_names": names,
            "row_names": None,
            "data": np.full((1, n_electrodes), 1 / np.sqrt(n_electrodes)),
            "nrow": 1,
            "ncol": n_electrodes,
        },
        desc="Average EEG reference",
        kind=FIFF.FIFFV_PROJ_ITEM_EEG_AVREF,
        explained_var=None,
    )
    # Volt and ampere metre from microvolt and nanoampere metre.
    volt = 1e-6
    variance, directions = np.linalg.eigh(inverse.noise_covariance_uv2)
    n_silent = n_electrodes - inverse.noise_rank
    variance[:n_silent] = 0.0
    largest = directions[np.abs(directions).argmax(axis=0), np.arange(n_electrodes)]
    directions = directions * np.sign(largest)
    whitener = np.zeros((n_electrodes, n_electrodes))
    whitener[n_silent:] = (directions[:, n_silent:] / np.sqrt(variance[n_silent:])).T
    frames, relative = local_frames(inverse.orientation, inverse.loose, inverse.normals)
    local = np.einsum("esx,sxd->esd", gain - gain.mean(axis=0), frames)
    n_axes = local.shape[2]
    white = whitener @ local.reshape(n_electrodes, -1)
    prior = np.repeat(inverse.depth_prior, n_axes) * np.tile(relative, n_sources)
    prior = prior * (inverse.noise_rank / float(((white**2) @ prior).sum()))
    fields, sing, leads = np.linalg.svd(white * np.sqrt(prior), full_matrices=False)
    fields, sing, leads = (
        fields[:, : inverse.noise_rank],
        sing[: inverse.noise_rank],
        leads[: inverse.noise_rank],
    )
    signs = np.sign(fields[np.abs(fields).argmax(axis=0), np.arange(len(sing))])
    fields, leads = fields * signs, leads * signs[:, None]

    def diagonal(values: FloatArray, kind: int) -> dict[str, Any]:
        return {
            "kind": kind,
            "diag": True,
            "dim": len(values),
            "names": [],
            "data": values,
            "projs": [],
            "bads": [],
            "nfree": 1,
            "eig": None,
            "eigvec": None,
        }

    noise = mne.Covariance(
        inverse.noise_covariance_uv2 * volt**2, names, [], [reference], 1, verbose="ERROR"
    )
    noise.update(eig=variance * volt**2, eigvec=directions.T)
    axes = frames.transpose(0, 2, 1).reshape(-1, 3)
    space = {
        "type": "discrete",
        "id": FIFF.FIFFV_MNE_SURF_UNKNOWN,
        "coord_frame": FIFF.FIFFV_COORD_HEAD,
        "rr": sources / 1000,
        "nn": np.tile([0.0, 0.0, 1.0], (n_sources, 1)) if n_axes == 3 else axes,
        "np": n_sources,
        "ntri": 0,
        "tris": np.zeros((0, 3), dtype=int),
        "nuse": n_sources,
        "nuse_tri": 0,
        "use_tris": None,
        "inuse": np.ones(n_sources, dtype=int),
        "vertno": np.arange(n_sources),
        "nearest": None,
        "nearest_dist": None,
        "pinfo": None,
        "patch_inds": None,
        "dist": None,
        "dist_limit": None,
        "subject_his_id": None,
    }
    return InverseOperator(
        methods=FIFF.FIFFV_MNE_EEG,
        coord_frame=FIFF.FIFFV_COORD_HEAD,
        units="Am",
        source_ori=FIFF.FIFFV_MNE_FREE_ORI if n_axes == 3 else FIFF.FIFFV_MNE_FIXED_ORI,
        nsource=n_sources,
        nchan=n_electrodes,
        source_nn=axes,
        sing=sing,
        eigen_leads_weighted=False,
        eigen_leads={
            "data": leads.T,
            "nrow": leads.shape[1],
            "ncol": leads.shape[0],
            "row_names": [],
            "col_names": [],
        },
        eigen_fields={
            "data": fields.T,
            "nrow": fields.shape[1],
            "ncol": n_electrodes,
            "row_names": [],
            "col_names": names,
        },
        noise_cov=noise,
        # White has no unit, so the prior is in nAm squared.
        source_cov=diagonal(prior * 1e-18, FIFF.FIFFV_MNE_SOURCE_COV),
        depth_prior=diagonal(
            np.repeat(inverse.depth_prior, n_axes), FIFF.FIFFV_MNE_DEPTH_PRIOR_COV
        ),
        orient_prior=diagonal(np.tile(relative, n_sources), FIFF.FIFFV_MNE_ORIENT_PRIOR_COV),
        fmri_prior=None,
        src=mne.SourceSpaces([space]),
        mri_head_t=identity,
        nave=1,
        projs=[reference],
        proj=None,
        whitener=None,
        reginv=None,
        noisenorm=None,
        info=info,
    )
