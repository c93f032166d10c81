"""What survives correction for multiple comparisons, where its peak is, and how far to believe it."""

from __future__ import annotations

from locator.statistics.data import NullControl, Peaks, SourceTest
from locator.statistics.discovery import false_discovery
from locator.statistics.flips import sign_flip_test
from locator.statistics.null_control import null_control
from locator.statistics.peaks import PeakOptions, find_peaks
from locator.statistics.region import RegionOptions, peak_region

__all__ = [
    "NullControl",
    "PeakOptions",
    "Peaks",
    "RegionOptions",
    "SourceTest",
    "false_discovery",
    "find_peaks",
    "null_control",
    "peak_region",
    "sign_flip_test",
]
