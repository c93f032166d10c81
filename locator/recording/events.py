"""Which events there are, and which one somebody means."""

from __future__ import annotations

import difflib
import re
from collections import Counter
from collections.abc import Sequence

from locator.errors import RecordingError
from locator.recording.data import Recording


def count_events(names: Sequence[str]) -> dict[str, int]:
    """Kinds of events with how often each occurs, most frequent first.

    Examples
    --------
    >>> count_events(["S2", "S1", "S2"])
    {'S2': 2, 'S1': 1}
    """
    counts = Counter(names)
    return dict(sorted(counts.items(), key=lambda pair: (-pair[1], pair[0])))


def _spellings(name: str) -> tuple[str, ...]:
    """Ways to write one event name, from the strictest to the loosest."""
    compact = re.sub(r"\s+", "", name).casefold()
    last = compact.rsplit("/", 1)[-1]
    number = re.fullmatch(r"[a-z]?0*(\d+)", last)
    plain = re.sub(r"^([a-z])0+(\d)", r"\1\2", last)
    return (name, compact, last, plain, number.group(1) if number else plain)


def match_event(asked: str, kinds: Sequence[str]) -> tuple[str, ...]:
    """Kinds that somebody can mean by a name, at the strictest spelling that fits any.

    Spaces, upper and lower case, a type before a slash (``Stimulus/S  1``) and the letter before
    a number are ignored in turn, so that ``S  1``, ``s1`` and ``1`` all mean ``S1``.

    Parameters
    ----------
    asked : str
        The name as a person wrote it.
    kinds : sequence of str
        The names in the recording.

    Returns
    -------
    tuple of str
        Empty when none fits; several when the name is ambiguous.

    Examples
    --------
    >>> match_event("S  1", ["S1", "S2"]), match_event("2", ["S1", "S2"])
    (('S1',), ('S2',))
    >>> match_event("1", ["R1", "S1"])
    ('R1', 'S1')
    """
    mine = _spellings(asked)
    for level in range(len(mine)):
        wanted = set(mine[: level + 1])
        hits = tuple(kind for kind in kinds if wanted & set(_spellings(kind)[: level + 1]))
        if hits:
            return hits
    return ()


def _listed(counts: dict[str, int]) -> str:
    return ", ".join(f"'{name}' ({count} times)" for name, count in list(counts.items())[:20])


def choose_event(recording: Recording, asked: str | None, *, where: str = "recording") -> str:
    """The kind of event to work on.

    Parameters
    ----------
    recording : Recording
    asked : str or None
        What a person asked for; None: the only kind there is.
    where : str
        Named in the messages.

    Returns
    -------
    str
        One of ``recording.event_names``.

    Raises
    ------
    RecordingError
        If there are no events, several kinds and none was asked for, or none or several that
        fit the name asked for.
    """
    counts = count_events(recording.event_names)
    if not counts:
        msg = (
            f"The recording holds no events, so there is nothing to average ({where})."
            " Give a file with its event markers (for a header with a separate marker file, keep"
            " both side by side), or a finished average."
        )
        raise RecordingError(msg)
    if asked is None or not asked.strip():
        if len(counts) == 1:
            return next(iter(counts))
        msg = (
            f"The recording holds {len(counts)} kinds of events and none was chosen ({where}):"
            f" {_listed(counts)}. Choose one with --event."
        )
        raise RecordingError(msg)
    hits = match_event(asked.strip(), list(counts))
    if len(hits) == 1:
        return hits[0]
    if hits:
        several = _listed({name: counts[name] for name in hits})
        msg = (
            f"The event name '{asked}' fits {len(hits)} kinds ({where}): {several}."
            " Write the one that is meant in full."
        )
        raise RecordingError(msg)
    folded = {kind.casefold(): kind for kind in counts}
    near = difflib.get_close_matches(asked.casefold(), list(folded), n=1, cutoff=0.0)
    msg = (
        f"There is no event '{asked}' in the recording ({where}); the nearest is"
        f" '{folded[near[0]]}'. There are: {_listed(counts)}. Choose one of them with --event."
    )
    raise RecordingError(msg)
