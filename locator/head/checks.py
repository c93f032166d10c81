"""What may be wrong with a head: volume, leak, thickness, field of view."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from locator.head.brain import Brain
from locator.head.grid import WorkGrid
from locator.results import Finding
from locator.volume import Volume

FloatArray = NDArray[np.float64]

LEAST_VAULT_MM, MOST_VAULT_MM = 4.0, 11.0
"""Mean thickness of the vault outside which a person should look."""

LEAST_CEREBELLUM, MOST_CEREBELLUM = 0.07, 0.16
"""Share of the cerebellum in the brain's volume outside which a person should look."""


def check_head(
    volume: Volume,
    grid: WorkGrid,
    brain: Brain,
    *,
    radii: list[FloatArray],
    vault: NDArray[np.bool_],
    rays: FloatArray,
    padded: FloatArray,
    brain_ml: float,
    cerebellum_ml: float,
) -> tuple[Finding, ...]:
    """Compare the head with what adults have, and say where a person should look.

    Volumes: adult brains hold about 950 to 1700 mL without CSF, a tenth of it cerebellum (values
    from memory); the vault is 5.4 to 8.2 mm thick by region (Li et al. 2007, Int J Vehicle Safety).
    """
    findings = []

    def add(level: str, problem: str, suggestion: str, subject: str, doubt: float) -> None:
        findings.append(
            Finding(
                level="look" if level == "look" else "note",
                stage="head",
                problem=problem,
                suggestion=suggestion,
                subject=subject,
                doubt=doubt,
            )
        )

    if not 900 <= brain_ml <= 1750:
        add(
            "look",
            f"The brain holds {brain_ml:.0f} mL, outside the 900 to 1750 mL of adults.",
            "Look at the surfaces over the T1; a child, a lesion or a failed outline are possible.",
            "inner_skull",
            0.8,
        )
    share = cerebellum_ml / max(brain_ml, 1.0)
    if not LEAST_CEREBELLUM <= share <= MOST_CEREBELLUM:
        what = (
            f"The cerebellum holds {cerebellum_ml:.0f} mL, {100 * share:.0f} % of the brain;"
            " 8 to 13 % is usual"
            if cerebellum_ml > 0
            else "No cerebellum was told from the rest of the brain"
        )
        add(
            "look",
            f"{what}. The base of the brain may be cut off, or cerebellum be counted as cortex.",
            "Look at the back of the skull's base over the T1; distrust sources there.",
            "inner_skull",
            0.5,
        )
    if brain.leak > 1.5:
        add(
            "look",
            f"The outline of the brain depends on its threshold (volumes differ {brain.leak:.2f}-fold).",
            "Look at the base of the brain over the T1; a sharper T1 helps.",
            "inner_skull",
            0.6,
        )
    thickness = (radii[1] - radii[0])[vault]
    if len(thickness) and not LEAST_VAULT_MM <= float(np.mean(thickness)) <= MOST_VAULT_MM:
        add(
            "look",
            f"The vault is {np.mean(thickness):.1f} mm thick on average; 5 to 9 mm is usual.",
            "Look at both tables of the skull over the T1.",
            "outer_skull",
            0.6,
        )
    many = int((padded > 0.1).sum())
    if many:
        place = rays[padded > 0.1].mean(axis=0)
        words = place_words(place)
        add(
            "note",
            f"Bone or scalp is thinner than the model allows at {many} of {len(padded)} vertices"
            f" (mostly {words}); there the outer surfaces were moved out by up to"
            f" {padded.max():.1f} mm.",
            "Sources under such places are slightly less certain.",
            "outer_skull",
            0.2,
        )
    if grid.cut_faces:
        add(
            "look",
            f"The volume ends inside the head ({', '.join(grid.cut_faces)}); the scalp there is its"
            " edge.",
            "Electrodes near that edge are less certain; scan the whole head.",
            "scalp",
            0.6,
        )
    if grid.vertex_k - grid.bottom_k < 150:
        add(
            "note",
            f"The volume ends {grid.vertex_k - grid.bottom_k:.0f} mm below the top of the head.",
            "The lower part of the model is closed there with a plane.",
            "scalp",
            0.3,
        )
    largest = float(volume.voxel_mm.max())
    if largest > 1.55:
        sizes = " x ".join(f"{s:.1f}" for s in volume.voxel_mm)
        add(
            "look",
            f"Voxels of {sizes} mm are too coarse for thin bone; all surfaces are less certain.",
            "Use a T1 of about 1 mm where there is one.",
            "",
            0.6,
        )
    return tuple(findings)


def place_words(direction: FloatArray, least: float = 0.3) -> str:
    """Where a direction (3,) leads, by the parts of it that are over `least`."""
    words = []
    for value, (minus, plus) in zip(
        direction, (("left", "right"), ("behind", "in front"), ("below", "above")), strict=True
    ):
        if abs(value) > least:
            words.append(plus if value > 0 else minus)
    return " and ".join(words) or "scattered"
