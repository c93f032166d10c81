"""The whole test on pseudo-events in event-free stretches of the same recording.

Sign-flipped copies of the trials would give the nominal rate by construction; only stretches in
which nothing was shown tell whether noise that is alike from trial to trial (a drift in step with
the trials, a correlation over time) makes the test say yes too often. Pseudo-events keep the
rhythm of the real ones, so that what is in step with the trials is in step with them too: between
the events they follow each event by one fixed delay, in long pauses they go on with the mean
interval.

Each check averages one run of consecutive pseudo-events; runs do not overlap in time except those
interleaved within the same pause, which count together as one for the interval (Clopper and
Pearson 1934 on the number of separate stretches).
"""

from __future__ import annotations

import logging
import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from locator.errors import RecordingError
from locator.inverse import Inverse
from locator.recording import (
    Continuous,
    EpochOptions,
    Recording,
    cut_epochs,
    prepare_recording,
)
from locator.results import Finding, Progress
from locator.statistics.bounds import group_filters
from locator.statistics.data import NullControl
from locator.statistics.flips import ALPHA, filters, sign_flip_test

LOG = logging.getLogger(__name__)

FEWEST_TRIALS = 12
"""Pseudo-events in a check at least: with fewer, no drift of a usual size shows."""
WANTED_CHECKS = 8
FEWEST_CHECKS = 3
"""Separate stretches under which nothing can be said: two hits of two would still leave 0.16."""


@dataclass(frozen=True, kw_only=True, slots=True)
class _Train:
    """Pseudo-events in one rhythm, and the pause (or the whole session) they belong to."""

    samples: NDArray[np.int64]
    place: str


def _is_clock(names: Sequence[str], samples: NDArray[np.int64], kind: str) -> bool:
    """Whether a kind of event is the scanner's or another clock, which asks nothing of a brain."""
    if re.match(r"(r128|t1|v1|tr|volume|slice|scan|sync)\b", kind.casefold().replace(" ", "")):
        return True
    own = samples[[name == kind for name in names]]
    gaps = np.diff(own)
    return len(gaps) >= 20 and bool(gaps.std() < 0.002 * gaps.mean())


def pseudo_trains(
    recording: Recording, event: str, epoch_s: tuple[float, float]
) -> tuple[_Train, ...]:
    """Place pseudo-events whose epochs touch neither an event nor what follows one.

    Parameters
    ----------
    recording : Recording
    event : str
        The real event, whose rhythm is kept.
    epoch_s : (2,) tuple of float
        The real epoch; its end is how long an event is taken to have consequences.

    Returns
    -------
    tuple of trains
    """
    rate = float(recording.sampling_hz)
    kinds = set(recording.event_names)
    clocks = {
        kind
        for kind in kinds
        if kind != event and _is_clock(recording.event_names, recording.event_samples, kind)
    }
    busy = np.array(
        [
            int(sample)
            for name, sample in zip(recording.event_names, recording.event_samples, strict=True)
            if name not in clocks
        ],
        dtype=np.int64,
    )
    own = np.array([name == event for name in recording.event_names])
    real = recording.event_samples[own]
    before, after = round(-epoch_s[0] * rate), round(epoch_s[1] * rate)
    length = before + after
    total = recording.data_uv.shape[1]
    gaps = np.diff(real)
    usual = gaps[gaps <= 3 * np.median(gaps)] if len(gaps) else np.array([length])
    interval = max(float(usual.mean()), float(length))
    # First and last sample at which a pseudo-event may lie, for every gap between events.
    firsts = np.concatenate([[before], busy + after + before])
    lasts = np.concatenate([busy - after, [total - after - 1]])
    trains: list[_Train] = []
    long = lasts - firsts > 3 * interval
    for first, last in zip(firsts[long], lasts[long], strict=True):
        phases = max(1, int(interval // length))
        for phase in range(phases):
            start = first + phase * interval / phases
            samples = np.arange(start, last + 0.5, interval).round().astype(np.int64)
            trains.append(_Train(samples=samples, place=f"pause {first}"))
    short = ~long & (lasts >= firsts)
    short[0] = short[-1] = False
    room = (lasts - firsts)[short]
    delay = 0
    while len(room) and (room >= delay).mean() > 0.5:
        fits = room >= delay
        trains.append(_Train(samples=firsts[short][fits] + delay, place=f"gaps {delay}"))
        delay += length
    return tuple(trains)


def _not_checked(reason: str) -> NullControl:
    sentence = f"The false-positive rate could not be checked on this recording: {reason}."
    return NullControl(
        rate=float("nan"),
        low=float("nan"),
        high=float("nan"),
        n_checks=0,
        sentence=sentence,
        findings=(
            Finding(
                level="note",
                stage="statistics",
                problem=sentence,
                suggestion=(
                    "Record a few minutes without events (or longer pauses between them) beside"
                    " the task."
                ),
                doubt=0.3,
            ),
        ),
    )


def _interval(rate: float, n: int) -> tuple[float, float]:
    """Clopper-Pearson interval (95 %) for a rate seen on n separate stretches."""
    hits = rate * n
    low = float(stats.beta.ppf(0.025, hits, n - hits + 1)) if hits > 0 else 0.0
    high = float(stats.beta.ppf(0.975, hits + 1, n - hits)) if hits < n else 1.0
    return low, high


def null_control(
    recording: Recording,
    inverse: Inverse,
    *,
    event: str,
    options: EpochOptions | None = None,
    window_s: Sequence[float] | None = None,
    n_trials: int | None = None,
    n_permutations: int = 200,
    continuous: Continuous | None = None,
    rng: np.random.Generator,
    progress: Progress | None = None,
) -> NullControl:
    """How often anything survives where no event was.

    Parameters
    ----------
    recording : Recording
        As read, with all its events.
    inverse : Inverse
        That of the map; its electrodes are used.
    event : str
        The tested event.
    options : EpochOptions, optional
        Those of the real epochs.
    window_s : (2,) sequence of float, optional
        That of the real test.
    n_trials : int, optional
        Good trials of the real test: no check averages more; default: all events.
    n_permutations : int
        Sign patterns per check.
    continuous : Continuous, optional
        The recording as prepared already, with at least the electrodes of the inverse.
    rng : numpy.random.Generator
    progress : callable, optional

    Returns
    -------
    NullControl
        A finding for a person's eye only when the lower bound of the interval is above 0.05.

    References
    ----------
    .. [1] Clopper CJ, Pearson ES (1934). The use of confidence or fiducial limits illustrated in
       the case of the binomial. Biometrika 26:404-413.
    """
    options = options or EpochOptions()
    if recording.averaged_from is not None:
        return _not_checked("it holds a finished average")
    real = sum(name == event for name in recording.event_names)
    most = min(n_trials or real, real)
    trains = pseudo_trains(recording, event, options.epoch_s)
    available = sum(len(train.samples) for train in trains)
    size = int(np.clip(available // WANTED_CHECKS, FEWEST_TRIALS, max(most, FEWEST_TRIALS)))
    runs: list[tuple[str, NDArray[np.int64]]] = []
    separate: dict[str, int] = {}
    for train in trains:
        count = len(train.samples) // size
        separate[train.place] = max(separate.get(train.place, 0), count)
        runs.extend((train.place, train.samples[k * size : (k + 1) * size]) for k in range(count))
    n_separate = sum(separate.values())
    if n_separate < FEWEST_CHECKS:
        return _not_checked(
            f"its event-free stretches hold {available} epochs, {n_separate} checks of"
            f" {size}, and {FEWEST_CHECKS} are needed"
        )
    if continuous is None:
        continuous = prepare_recording(recording, names=inverse.electrode_names, options=options)
    groups = group_filters(filters(inverse), inverse.noise_covariance_uv2)
    survived: list[bool] = []
    places: list[str] = []
    for done, (place, samples) in enumerate(runs):
        try:
            epochs = cut_epochs(
                continuous, samples, event="pseudo-event", options=options,
                good_electrodes=inverse.electrode_names,
            )  # fmt: skip
        except RecordingError:
            continue
        if len(epochs.data_uv) < max(6, size // 2):
            continue
        test = sign_flip_test(
            epochs,
            inverse,
            window_s=window_s,
            n_permutations=n_permutations,
            groups=groups,
            rng=rng,
        )
        survived.append(bool((test.corrected_p < ALPHA).any()))
        places.append(place)
        if progress is not None:
            progress((done + 1) / len(runs), "null control")
    left = sum(min(places.count(place), separate[place]) for place in set(places))
    if left < FEWEST_CHECKS:
        return _not_checked(
            f"only {left} of {len(runs)} event-free stretches hold enough good pseudo-trials"
        )
    rate = float(np.mean(survived))
    low, high = _interval(rate, left)
    hits = int(np.sum(survived))
    sentence = (
        f"On {len(survived)} pseudo-averages of about {size} event-free epochs each, something"
        f" survived in {hits} ({100 * rate:.0f} %; 95 % interval {100 * low:.0f} to"
        f" {100 * high:.0f} %, from {left} stretches separate in time; nominal"
        f" {100 * ALPHA:.0f} %)."
    )
    findings: tuple[Finding, ...] = ()
    if low > ALPHA:
        sentence += " The test says yes too often on this recording."
        findings = (
            Finding(
                level="look",
                stage="statistics",
                problem=sentence,
                suggestion=(
                    "Something is in step with the trials that is no response within the epoch: a"
                    " drift, the pulse, the mains, or a response that lasts longer than --epoch."
                    " Do not trust the map before its cause is known."
                ),
                doubt=0.95,
            ),
        )
    else:
        sentence += " Nothing here speaks against the test."
    LOG.info("Null control: %s of %s, interval %.2f to %.2f", hits, len(survived), low, high)
    return NullControl(
        rate=rate,
        low=low,
        high=high,
        n_checks=len(survived),
        sentence=sentence,
        findings=findings,
    )
