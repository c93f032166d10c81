"""Shape guarantees of the surfaces over random perturbations of their radii."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from locator.geometry import icosphere, mesh_volume_mm3
from locator.head.shape import distance_to_mesh, limit_slope, ring_neighbours, separate

RAYS, FACES = icosphere(2)
RING = ring_neighbours(FACES, len(RAYS))
ANGLE = float(np.arccos(np.clip((RAYS[:, None] * RAYS[RING]).sum(axis=2), -1, 1)).mean())


def bumpy(seed: int, size: float, roughness: float) -> np.ndarray:
    """Radii of a random closed surface about 70 mm wide: smooth bumps and rough ones."""
    rng = np.random.default_rng(seed)
    smooth = sum(
        rng.normal(0, size / k) * np.sin(k * (RAYS @ rng.normal(0, 1.5, 3)) + rng.uniform(0, 6))
        for k in range(1, 4)
    )
    return np.clip(70 + smooth + rng.normal(0, roughness, len(RAYS)), 25, 140)


@settings(max_examples=200, deadline=None)
@given(
    seed=st.integers(0, 2**31),
    size=st.floats(0, 15),
    roughness=st.floats(0, 6),
    gap=st.floats(-10, 12),
    least=st.floats(2.5, 5),
)
def test_separated_surfaces_are_apart_nested_and_outward(seed, size, roughness, gap, least):
    inner = bumpy(seed, size, roughness)
    wanted = bumpy(seed + 1, size, roughness) + gap
    outer = separate(inner, wanted, RAYS, FACES, least)
    assert (outer >= wanted).all()
    one, other = RAYS * inner[:, None], RAYS * outer[:, None]
    assert distance_to_mesh(one, other, FACES, 2 * least).min() >= least - 1e-6
    assert distance_to_mesh(other, one, FACES, 2 * least).min() >= least - 1e-6
    # Nested everywhere: 1/r is linear over each face, so vertices decide.
    assert (outer > inner).all()
    # Outward and star-shaped: every face is seen from the centre from inside.
    for points in (one, other):
        corners = points[FACES]
        normal = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
        assert (np.einsum("ij,ij->i", normal, corners.mean(axis=1)) > 0).all()
        assert mesh_volume_mm3(points, FACES) > 0


@settings(max_examples=50, deadline=None)
@given(seed=st.integers(0, 2**31), roughness=st.floats(0, 6))
def test_surfaces_that_are_apart_are_left_alone(seed, roughness):
    inner = bumpy(seed, 5, roughness)
    outer = separate(inner, inner * 1.6, RAYS, FACES, 2.5)
    assert np.allclose(outer, inner * 1.6)


@settings(max_examples=50, deadline=None)
@given(seed=st.integers(0, 2**31), roughness=st.floats(0, 10), outward=st.booleans())
def test_limited_slopes_are_limited_and_one_sided(seed, roughness, outward):
    radii = bumpy(seed, 10, roughness)
    limited = limit_slope(radii, RING, ANGLE, 1.0, outward=outward)
    assert ((limited >= radii - 1e-9) if outward else (limited <= radii + 1e-9)).all()
    step = np.abs(np.log(limited)[:, None] - np.log(limited)[RING])
    assert step.max() <= 1.0 * ANGLE + 1e-9
