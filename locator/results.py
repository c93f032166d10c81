"""What every stage hands on: frozen records, and findings for a person's eye."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, fields
from types import MappingProxyType
from typing import Any, Literal

import numpy as np

Progress = Callable[[float, str], None]
"""Called with a fraction in [0, 1] and a few words; the core never draws a bar."""


def _rebuild(cls: type, values: dict[str, Any]) -> Any:
    return cls(**values)


class Frozen:
    """Base of all results: arrays are copied and locked, mappings are read-only.

    Subclasses are declared with
    ``@dataclass(frozen=True, eq=False, kw_only=True, slots=True)``. One that checks its
    shapes defines ``__post_init__`` and calls ``Frozen.__post_init__(self)`` first (the
    argument-free ``super()`` does not work in a slotted dataclass).
    """

    __slots__ = ()

    def __post_init__(self) -> None:
        """Copy and lock the arrays, wrap the mappings."""
        for field in fields(self):  # type: ignore[arg-type]
            value = getattr(self, field.name)
            if isinstance(value, np.ndarray):
                if value.flags.writeable or value.base is not None:
                    value = np.array(value)
                    value.flags.writeable = False
                object.__setattr__(self, field.name, value)
            elif isinstance(value, Mapping) and not isinstance(value, MappingProxyType):
                object.__setattr__(self, field.name, MappingProxyType(dict(value)))

    def __reduce__(self) -> tuple[Any, ...]:
        """Rebuild through the constructor, so that copies are locked too."""
        values = {}
        for field in fields(self):  # type: ignore[arg-type]
            value = getattr(self, field.name)
            values[field.name] = dict(value) if isinstance(value, MappingProxyType) else value
        return _rebuild, (type(self), values)


Level = Literal["look", "note"]


@dataclass(frozen=True, kw_only=True, slots=True)
class Finding:
    """One thing that somebody should know about a result.

    Attributes
    ----------
    level : {"look", "note"}
        ``look`` needs a person's eye (and exit code 4 under ``--strict``); ``note`` is told only.
    stage : str
        Name of the stage that found it, such as ``"labels"``.
    problem : str
        What was found, with numbers.
    suggestion : str
        What to do about it.
    subject : str
        The electrode, channel, surface or file concerned; empty when it is the whole.
    doubt : float
        How doubtful, from 0 to 1; the report and the window sort by it.
    """

    level: Level
    stage: str
    problem: str
    suggestion: str = ""
    subject: str = ""
    doubt: float = 0.5
