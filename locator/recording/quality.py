"""Bad channels and bad trials by one stated robust rule.

Channels, on the epochs with the median over channels taken away at every sample:

* flat: robust amplitude (1.4826 times the median absolute deviation, reference of the file) under
  ``flat_uv``, or under a fiftieth of the median channel's;
* noisy: the logarithm of the amplitude is more than ``channel_z`` robust standard deviations above
  the median channel, and the amplitude more than 2.5 times that;
* alone: the best correlation with any other channel is under 0.4, more than ``channel_z`` robust
  standard deviations under the median channel, which has over 0.6;
* bad by itself in more than ``channel_share`` of the trials.

Trials, on the average reference over the good electrodes: bad when in any channel the logarithm
of the peak-to-peak amplitude is more than ``trial_z`` robust standard deviations above that
channel's median, or the amplitude is over ``largest_uv``. The rule looks at sizes only, never at
signs, so that trials may still be flipped in sign by the test. Robust standard deviations have a
floor of 0.1 (10 % in amplitude). Thresholds: common practice, no source, unless
:class:`~locator.recording.data.EpochOptions` names one.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from locator.errors import RecordingError
from locator.recording.data import EpochOptions

FloatArray = NDArray[np.float64]

FLOOR = 0.1
FLAT_SHARE = 0.02
LEAST_RATIO = 2.5
LEAST_CORRELATION = 0.4
USUAL_CORRELATION = 0.6
LARGEST_MEDIAN_UV = 2000.0


def _robust_z(values: FloatArray, axis: int | None = None) -> FloatArray:
    centre = np.median(values, axis=axis, keepdims=True)
    spread = 1.4826 * np.median(np.abs(values - centre), axis=axis, keepdims=True)
    scores: FloatArray = (values - centre) / np.maximum(spread, FLOOR)
    return scores


def _amplitude(data: FloatArray) -> FloatArray:
    """Robust amplitude of each channel over all trials, each trial about its own median."""
    centred = data - np.median(data, axis=2, keepdims=True)
    spread: FloatArray = 1.4826 * np.median(np.abs(centred), axis=(0, 2))
    return spread


def judge_channels(
    data_uv: FloatArray,
    names: Sequence[str],
    marked_bad: Sequence[str],
    options: EpochOptions,
    where: str,
) -> dict[str, str]:
    """Name the bad channels with the reason of each.

    Parameters
    ----------
    data_uv : (N, E, T) ndarray
        Filtered epochs, reference of the file.
    names : (E,) sequence of str
    marked_bad : sequence of str
        Marked bad in the file.
    options : EpochOptions
    where : str
        Named in the messages.

    Returns
    -------
    dict of str to str

    Raises
    ------
    RecordingError
        If the amplitudes are not those of an EEG in microvolt.
    """
    bad = {name: "marked bad in the file, or not finite" for name in marked_bad}
    own = _amplitude(data_uv)
    alive = own[own >= options.flat_uv]
    usual = float(np.median(alive)) if len(alive) else 0.0
    if usual > LARGEST_MEDIAN_UV or len(alive) == 0:
        if len(alive):
            what = f"their usual amplitude is {usual:.3g} uV"
        else:
            what = f"all channels are flat, at most {own.max():.2g} uV"
        msg = (
            f"The amplitudes are not those of an EEG in uV: {what} ({where}). Check the unit"
            " that the file declares for its channels, and the amplifier."
        )
        raise RecordingError(msg)
    limit = max(options.flat_uv, FLAT_SHARE * usual)
    for row, name in enumerate(names):
        if name not in bad and own[row] < limit:
            bad[name] = (
                f"flat, {own[row]:.2g} uV (limit {limit:.2g} uV): the reference, or not connected"
            )
    for _ in range(3):
        good = np.array([row for row, name in enumerate(names) if name not in bad])
        if len(good) < options.at_least:
            return bad
        part = data_uv[:, good] - np.median(data_uv[:, good], axis=1, keepdims=True)
        amplitude = np.maximum(_amplitude(part), 1e-9)
        score = _robust_z(np.log(amplitude))
        ratio = amplitude / np.median(amplitude)
        wrong = (score > options.channel_z) & (ratio > LEAST_RATIO)
        found = {
            names[good[row]]: (
                f"noisy, {amplitude[row]:.1f} uV, {ratio[row]:.1f} times the usual"
                f" {np.median(amplitude):.1f} uV ({score[row]:+.1f} robust SD)"
            )
            for row in np.flatnonzero(wrong)
        }
        if not found:
            flat = part.transpose(1, 0, 2).reshape(len(good), -1)
            matrix = np.abs(np.corrcoef(flat))
            np.fill_diagonal(matrix, 0.0)
            best = matrix.max(axis=1)
            score = _robust_z(best)
            alone = (
                (best < LEAST_CORRELATION)
                & (score < -options.channel_z)
                & (np.median(best) > USUAL_CORRELATION)
            )
            found = {
                names[good[row]]: (
                    f"unlike all others, best correlation {best[row]:.2f}"
                    f" (usual {np.median(best):.2f})"
                )
                for row in np.flatnonzero(alone)
            }
        if not found:
            return bad
        bad.update(found)
    return bad


def judge_trials(
    data_uv: FloatArray,
    names: Sequence[str],
    options: EpochOptions,
    *,
    spare_channels: bool = False,
) -> tuple[NDArray[np.bool_], dict[int, str], dict[str, str]]:
    """Tell good trials from bad ones.

    Parameters
    ----------
    data_uv : (N, E, T) ndarray
        Filtered epochs of the good electrodes.
    names : (E,) sequence of str
    options : EpochOptions
    spare_channels : bool
        Never call a channel bad.

    Returns
    -------
    keep : (N,) ndarray of bool
    reasons : dict of int to str
        For each trial that is not kept.
    late : dict of str to str
        Channels that turned out bad, with the reason.
    """
    late: dict[str, str] = {}
    while True:
        rows = np.array([row for row, name in enumerate(names) if name not in late])
        part = data_uv[:, rows] - data_uv[:, rows].mean(axis=1, keepdims=True)
        size = np.maximum(np.ptp(part, axis=2), 1e-9)
        score = _robust_z(np.log(size), axis=0)
        over = (score > options.trial_z) | (size > options.largest_uv)
        if spare_channels or len(rows) <= options.at_least:
            break
        # A trial with a single bad channel speaks against the channel, not against the trial.
        alone = over & (over.sum(axis=1, keepdims=True) <= 2)
        share = alone.mean(axis=0)
        worst = int(np.argmax(share))
        if share[worst] <= options.channel_share:
            break
        late[names[rows[worst]]] = (
            f"bad by itself in {100 * share[worst]:.0f} % of the trials"
            f" (limit {100 * options.channel_share:.0f} %)"
        )
    reasons = {}
    usual = np.median(size, axis=0)
    for trial in np.flatnonzero(over.any(axis=1)):
        channel = int(np.argmax(np.where(over[trial], score[trial], -np.inf)))
        count = int(over[trial].sum())
        more = f", and {count - 1} more channels" if count > 1 else ""
        reasons[int(trial)] = (
            f"{names[rows[channel]]} {size[trial, channel]:.0f} uV peak to peak,"
            f" {score[trial, channel]:.1f} robust SD above its usual {usual[channel]:.0f} uV{more}"
        )
    return ~over.any(axis=1), reasons, late
