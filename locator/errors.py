"""The one tree of errors: each knows the exit code that the command line gives for it."""

from __future__ import annotations


class LocatorError(Exception):
    """Something asked of the tool cannot be done; the message says what, where and what to do."""

    exit_code = 3


class CommandLineError(LocatorError):
    """The command line itself is wrong."""

    exit_code = 2


class SettingError(LocatorError, ValueError):
    """A setting or a session file cannot be used."""


class FileError(LocatorError):
    """A file is absent, unreadable, or not what it claims to be."""


class BusyError(LocatorError):
    """Another command is at work in the same output folder."""


class VolumeError(LocatorError, ValueError):
    """The T1 volume cannot be used."""


class SkinError(LocatorError, ValueError):
    """No skin surface can be made from the volume."""


class MarkerError(LocatorError, ValueError):
    """No usable capsules can be found in the volume."""


class LabelError(LocatorError, ValueError):
    """Names and capsules cannot be brought together."""


class SideError(LabelError):
    """Left and right of the image and of the marker contradict each other."""


class HeadError(LocatorError, ValueError):
    """No head surfaces fit for a field model can be made."""


class ForwardError(LocatorError, ValueError):
    """The lead field cannot be computed."""


class RecordingError(LocatorError, ValueError):
    """The recording cannot be used."""


class InverseError(LocatorError, ValueError):
    """The source estimate cannot be made."""


class StatisticsError(LocatorError, ValueError):
    """The statistical test cannot be made."""
