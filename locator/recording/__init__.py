"""The recording: channels, filtering, events, epochs, and what must not be used."""

from __future__ import annotations

from locator.recording.artefact import ScannerEvidence, refuse_scanner_artefact, scanner_evidence
from locator.recording.channels import Channels, find_channels, scalp_electrodes
from locator.recording.continuous import Continuous, check_times, prepare_recording
from locator.recording.data import EpochOptions, Epochs, Recording
from locator.recording.epochs import cut_epochs, make_epochs
from locator.recording.events import choose_event, count_events, match_event

__all__ = [
    "Channels",
    "Continuous",
    "EpochOptions",
    "Epochs",
    "Recording",
    "ScannerEvidence",
    "check_times",
    "choose_event",
    "count_events",
    "cut_epochs",
    "find_channels",
    "make_epochs",
    "match_event",
    "prepare_recording",
    "refuse_scanner_artefact",
    "scalp_electrodes",
    "scanner_evidence",
]
