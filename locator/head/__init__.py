"""Scalp, outer skull, inner skull and tissues from the one T1 volume."""

from locator.head.build import build_head
from locator.head.given import ROLES, replace_surfaces, skull_thickness_mm
from locator.head.model import (
    BONE,
    BRAIN,
    BRAIN_STEM,
    CEREBELLUM,
    CSF,
    GREY,
    OTHER,
    SOFT,
    WHITE,
    Head,
    HeadOptions,
    Surface,
)

__all__ = [
    "BONE",
    "BRAIN",
    "BRAIN_STEM",
    "CEREBELLUM",
    "CSF",
    "GREY",
    "OTHER",
    "ROLES",
    "SOFT",
    "WHITE",
    "Head",
    "HeadOptions",
    "Surface",
    "build_head",
    "replace_surfaces",
    "skull_thickness_mm",
]
