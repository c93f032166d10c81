"""The stages in order: arrays in, results out."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from locator.head import Head
from locator.inverse import Inverse
from locator.labels import Electrodes
from locator.layout import Layout
from locator.markers import Markers
from locator.recording import Epochs
from locator.results import Finding, Frozen
from locator.skin import Skin
from locator.sources import Sources
from locator.statistics import NullControl, Peaks, SourceTest
from locator.volume import Volume


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class InputFile(Frozen):
    """One file that went in.

    Attributes
    ----------
    role : str
        `t1`, `eeg`, `layout`, `landmarks`, `electrodes`, `review`, `session`.
    path : str
        As it was given.
    sha256 : str
        Of its bytes.
    """

    role: str
    path: str
    sha256: str


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Timing(Frozen):
    """What one stage took.

    Attributes
    ----------
    stage : str
    seconds : float
        Wall time; of reading it back when `kept`.
    kept : bool
        Taken from an earlier run because inputs, settings, code and libraries are unchanged.
    peak_mb : float
        Largest memory of the process so far, MB; NaN where the system does not tell.
    """

    stage: str
    seconds: float
    kept: bool
    peak_mb: float


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class LeadFieldSummary(Frozen):
    """What a page says of the lead field without carrying it.

    Attributes
    ----------
    n_sources, n_scalp_vertices : int
    conductivity_s_per_m : tuple of float
        Scalp, skull, brain.
    findings : tuple of Finding
    """

    n_sources: int
    n_scalp_vertices: int
    conductivity_s_per_m: tuple[float, float, float]
    findings: tuple[Finding, ...] = ()


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class RunResults(Frozen):
    """Everything that a page or a scene needs of one `find`, `head` or `run`.

    Attributes
    ----------
    command : str
        `find`, `head` or `run`.
    subject : str
        Name of the subject as given; empty when none was.
    volume : Volume
    skin : Skin
    markers : Markers or None
        None for `head`, and where positions came from elsewhere.
    layout : Layout or None
    electrodes : Electrodes or None
        None for `head`.
    head : Head or None
        None for `find`.
    sources, lead_field, epochs, inverse, test : optional
        None for `find` and `head`.
    peaks, null_control : optional
        None too while they are still being computed.
    complete : bool
        False while the null control and the regions are still to come: what stands of them is
        stale then, and a page must say so.
    settings : mapping of str to mapping
        Stage name to option name to value, every one that was in force.
    session_settings : mapping
        What the person asked for: session keys to values.
    inputs : tuple of InputFile
    timings : tuple of Timing
        In the order of the stages.
    seeds : mapping of str to int
    versions : mapping of str to str
        Of the tool, Python and the libraries.
    own_findings : tuple of Finding
        Of the session itself (reviews that differ and the like).
    """

    command: str
    subject: str = ""
    volume: Volume
    skin: Skin
    markers: Markers | None = None
    layout: Layout | None = None
    electrodes: Electrodes | None = None
    head: Head | None = None
    sources: Sources | None = None
    lead_field: LeadFieldSummary | None = None
    epochs: Epochs | None = None
    inverse: Inverse | None = None
    test: SourceTest | None = None
    peaks: Peaks | None = None
    null_control: NullControl | None = None
    complete: bool = True
    settings: Mapping[str, Mapping[str, Any]]
    session_settings: Mapping[str, Any]
    inputs: tuple[InputFile, ...] = ()
    timings: tuple[Timing, ...] = ()
    seeds: Mapping[str, int]
    versions: Mapping[str, str]
    own_findings: tuple[Finding, ...] = ()

    @property
    def findings(self) -> tuple[Finding, ...]:
        """All findings of all stages: what needs an eye first, the most doubtful first."""
        stages = (
            self.volume,
            self.skin,
            self.markers,
            self.electrodes,
            self.head,
            self.sources,
            self.lead_field,
            self.epochs,
            self.inverse,
            self.test,
            self.peaks,
            self.null_control,
        )
        found = [f for stage in stages if stage is not None for f in stage.findings]
        unique = dict.fromkeys([*self.own_findings, *found])
        return tuple(sorted(unique, key=lambda f: (f.level != "look", -f.doubt)))

    @property
    def side_basis(self) -> str:
        """What left and right rest on, in words."""
        if self.electrodes is not None and self.electrodes.side_basis:
            return self.electrodes.side_basis
        return self.volume.orientation_basis
