"""Bring names and capsules together, with the probability that each label is right."""

from __future__ import annotations

from locator.labels.anatomy import Anatomy, find_anatomy
from locator.labels.assign import contact_points, label_markers
from locator.labels.options import LabelOptions
from locator.labels.result import Electrodes

__all__ = [
    "Anatomy",
    "Electrodes",
    "LabelOptions",
    "contact_points",
    "find_anatomy",
    "label_markers",
]
