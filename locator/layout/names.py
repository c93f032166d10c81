"""Electrode names of the 10-20, 10-10 and 10-05 systems, and channel names as people write them."""

from __future__ import annotations

import difflib
import re

# Rows from the nasion to the inion: hundredths of the sagittal arc, name near the midline, name
# at the side (columns 7 and beyond). Oostenveld & Praamstra 2001, Clin Neurophysiol 112:713.
ROWS: tuple[tuple[int, str, str], ...] = (
    (0, "N", "N"),
    (5, "NFp", "NFp"),
    (10, "Fp", "Fp"),
    (15, "AFp", "AFp"),
    (20, "AF", "AF"),
    (25, "AFF", "AFF"),
    (30, "F", "F"),
    (35, "FFC", "FFT"),
    (40, "FC", "FT"),
    (45, "FCC", "FTT"),
    (50, "C", "T"),
    (55, "CCP", "TTP"),
    (60, "CP", "TP"),
    (65, "CPP", "TPP"),
    (70, "P", "P"),
    (75, "PPO", "PPO"),
    (80, "PO", "PO"),
    (85, "POO", "POO"),
    (90, "O", "O"),
    (95, "OI", "OI"),
    (100, "I", "I"),
)

# Columns of one side, in eighths of the arc from the midline (0) to the ring (8); beyond the ring
# 10 is half of the way down to the lower ring and 12 is on it.
COLUMNS: tuple[tuple[int, int, str], ...] = (
    (1, 1, "h"),
    (2, 1, ""),
    (3, 3, "h"),
    (4, 3, ""),
    (5, 5, "h"),
    (6, 5, ""),
    (7, 7, "h"),
    (8, 7, ""),
    (10, 9, "h"),
    (12, 9, ""),
)

# Klem et al. 1999; the names of 1958 that were changed when 10-10 was defined.
OLD_NAMES = {"T3": "T7", "T4": "T8", "T5": "P7", "T6": "P8"}

# Other spellings of the same place.
_SAME = {"Nasion": "Nz", "Inion": "Iz", "NAS": "Nz", "INI": "Iz", "O9": "I1", "O10": "I2"}


def _all_places() -> dict[str, tuple[int, float, int]]:
    """Every name with its row (hundredths), its column (eighths) and its side (-1 left, 1 right).

    On the ring (`column` 8) of the rows Fp and O, and on the lower ring of N and I, names step
    along the ring instead: `Fp1` stands at a tenth of the way from `Fpz` towards `Oz`.
    """
    places: dict[str, tuple[int, float, int]] = {}
    for row, middle, lateral in ROWS:
        places[middle + "z"] = (row, 0, 0)
        for column, digit, half in COLUMNS:
            for side in (-1, 1):
                number = digit if side < 0 else digit + 1
                at_rim = row in (0, 5, 10, 90, 95, 100)
                if at_rim:
                    # These rows have only columns 1h and 1, which lie along a ring.
                    if digit == 1:
                        places[f"{middle}{number}{half}"] = (row, column, side)
                    continue
                stem = lateral if digit >= 7 else middle
                places[f"{stem}{number}{half}"] = (row, column, side)
    for number, side in ((1, -1), (2, 1)):
        places[f"A{number}"] = (-1, 0, side)
        places[f"M{number}"] = (-2, 0, side)
    return places


PLACES = _all_places()
"""Canonical name to (row in hundredths, column in eighths, side); rows -1 and -2 are A and M."""

_LOWER = {name.lower(): name for name in PLACES}
_LOWER |= {name.lower(): new for name, new in OLD_NAMES.items()}
_LOWER |= {name.lower(): new for name, new in _SAME.items()}

# What stands behind a name in a referential recording: common references, linked ears or mastoids.
_REFERENCE = re.compile(
    r"(?:[-_/: ]+)(?:ref\d*|reference|le|ar|avg?|average|car|org|gnd|a1|a2|m1|m2|a1a2|m1m2|a12|m12"
    r"|a1\+a2|m1\+m2|\(a1\+a2\)/?2?|fcz|cpz|g1?|lin|linked|mast|0|x)$"
)
_PREFIX = re.compile(r"^(?:eeg|pol|ch|chan|channel|elec|electrode)(?:[-_/:. ]+|(?=[a-z]))")


def normalise_name(text: str) -> str | None:
    """Canonical 10-05 spelling of a name as people write it.

    Parameters
    ----------
    text : str
        Such as ``"EEG Fp1-REF"``, ``"FP1"``, ``"T3"``, ``"fc5."`` or ``"Cz-A1"``.

    Returns
    -------
    str or None
        The canonical name; None when the text names no place of the 10-05 system (a bipolar
        derivation such as ``"F3-C3"`` names two).

    References
    ----------
    .. [1] Klem GH et al. (1999). The ten-twenty electrode system of the International
       Federation. Electroencephalogr Clin Neurophysiol Suppl 52:3-6.
    .. [2] Oostenveld R, Praamstra P (2001). The five percent electrode system for
       high-resolution EEG and ERP measurements. Clin Neurophysiol 112:713-719.

    Examples
    --------
    >>> [normalise_name(text) for text in ("EEG Fp1-REF", "FPZ", "T3", "Cz-A1", "fc5.", "ECG")]
    ['Fp1', 'Fpz', 'T7', 'Cz', 'FC5', None]
    """
    word = " ".join(str(text).split()).strip("\"'").lower()
    word = word.rstrip(".").strip()
    for candidate in (word, _PREFIX.sub("", word)):
        if candidate in _LOWER:
            return _LOWER[candidate]
        bare = _REFERENCE.sub("", candidate).strip(" .-_")
        if bare in _LOWER:
            return _LOWER[bare]
        # A blank inside the name ("Fp 1", "C 3") is a habit of some recorders.
        tight = bare.replace(" ", "")
        if tight in _LOWER:
            return _LOWER[tight]
    return None


_KINDS: tuple[tuple[str, str], ...] = (
    ("ecg", r"\b(?:ecg|ekg|cardio)|^(?:ecg|ekg)|heart"),
    ("eog", r"eog|^(?:loc|roc|e1|e2)\b|^(?:lo1|lo2|io1|io2|so1|so2)$|\beye"),
    ("emg", r"emg|\bchin|^(?:lat|rat)$|^leg\b|masseter|deltoid"),
    ("trigger", r"^sti\b|^sti ?\d+|status|trig|marker|event|annotation|^ttl|^dio?\d*$|stim"),
    ("reference", r"^(?:eeg )?(?:ref|reference|gnd|ground|cms|drl)\d*$"),
    ("meg", r"^meg|^ref_meg|^mlt|^mrt"),
    (
        "other",
        r"resp|spo2|sao2|pulse|pleth|ppg|gsr|eda|scr|temp|acc|gyro|photo|snore|flow|thor|abdo"
        r"|^dc\d*$|^aux|^misc|^bip|^x\d+$|^pos",
    ),
)
_KINDS_COMPILED = tuple((kind, re.compile(pattern)) for kind, pattern in _KINDS)


def channel_kind(text: str) -> str:
    """What a channel of this name records.

    Parameters
    ----------
    text : str
        Channel name as it stands in the recording.

    Returns
    -------
    str
        ``"electrode"`` for a place of the 10-05 system (ear lobes and mastoids too), else
        ``"ecg"``, ``"eog"``, ``"emg"``, ``"trigger"``, ``"reference"``, ``"meg"`` or ``"other"``.

    Examples
    --------
    >>> [channel_kind(text) for text in ("EEG T3-LE", "ECG1", "HEOG", "STI 014", "GND", "SpO2")]
    ['electrode', 'ecg', 'eog', 'trigger', 'reference', 'other']
    """
    if normalise_name(text) is not None:
        return "electrode"
    word = " ".join(str(text).split()).lower()
    for kind, pattern in _KINDS_COMPILED:
        if pattern.search(word):
            return kind
    return "other"


def nearest_names(text: str, known: tuple[str, ...] | None = None, count: int = 3) -> list[str]:
    """Known names that look most like `text`, best first.

    Examples
    --------
    >>> nearest_names("Fp7")[0] in ("AFp7", "Fp1", "Fp2", "F7")
    True
    """
    pool = {name.lower(): name for name in known} if known is not None else _LOWER
    word = _PREFIX.sub("", " ".join(str(text).split()).lower())
    word = _REFERENCE.sub("", word)
    found: list[str] = []
    for match in difflib.get_close_matches(word, list(pool), n=3 * count, cutoff=0.4):
        if pool[match] not in found:
            found.append(pool[match])
    return found[:count]
