"""Carrying out stages: kept ones are read back, the others computed, stored, timed and told."""

from __future__ import annotations

import inspect
import logging
import sys
import time
from collections.abc import Callable
from typing import Any, TypeVar

from locator.errors import FileError
from locator.io.cache import StageCache
from locator.pipeline import Timing

logger = logging.getLogger(__name__)

T = TypeVar("T")

Told = Callable[[str, float, str], None]
"""Called with the stage, a fraction in [0, 1], and a few words; at 1 the stage is done."""


def silent(stage: str, fraction: float, words: str) -> None:
    """Tell nobody."""


def peak_memory_mb() -> float:
    """Largest memory of this process so far, MB; NaN where the system does not tell."""
    try:
        import resource
    except ImportError:
        return float("nan")
    used = float(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
    return used / (1 << 20) if sys.platform == "darwin" else used / (1 << 10)


class NotKeptError(Exception):
    """A stage is not stored yet; never reaches a person."""


class Stages:
    """Carries out the stages of one command in one folder.

    Parameters
    ----------
    cache : StageCache
    told : callable
        Hears of the progress.
    """

    def __init__(self, cache: StageCache, told: Told = silent) -> None:
        self.cache = cache
        self.told = told
        self.timings: list[Timing] = []

    def step(self, stage: str, function: Callable[..., T], /, *args: Any, **settings: Any) -> T:
        """Return the result of a stage, computed only when anything it rests on has changed.

        What is returned was always read back from the disk, so that a stopped and continued
        run goes on with exactly what an undisturbed one would have.
        """
        self.told(stage, 0.0, "")
        began = time.perf_counter()
        key = self.cache.key(stage, function, args, settings)
        result = self.cache.get(stage, key)
        kept = result is not None
        if not kept:
            if "progress" in inspect.signature(function).parameters:
                settings["progress"] = lambda share, words: self.told(
                    stage, min(max(share, 0.001), 0.99), words
                )
            self.cache.put(stage, key, function(*args, **settings))
            result = self.cache.get(stage, key)
            if result is None:
                msg = (
                    f"What stage {stage} stored in {self.cache.folder} cannot be read back."
                    " Check the disk, then start again."
                )
                raise FileError(msg)
        self.note(stage, began, kept=kept)
        return result  # type: ignore[no-any-return]

    def kept(self, stage: str, function: Callable[..., T], /, *args: Any, **settings: Any) -> T:
        """Return the result of a stage that need not be computed.

        Raises
        ------
        NotKeptError
            If it would have to be.
        """
        result = self.cache.get(stage, self.cache.key(stage, function, args, settings))
        if result is None:
            raise NotKeptError(stage)
        return result  # type: ignore[no-any-return]

    def note(self, stage: str, began: float, *, kept: bool = False) -> None:
        """Take down what a stage took since `began` (of `time.perf_counter`)."""
        seconds = time.perf_counter() - began
        timing = Timing(stage=stage, seconds=seconds, kept=kept, peak_mb=peak_memory_mb())
        self.timings.append(timing)
        words = "unchanged, taken from before" if kept else f"{seconds:.1f} s"
        logger.info("stage %s: %s, peak %.0f MB", stage, words, timing.peak_mb)
        self.told(stage, 1.0, words)
