"""The lead field: what must hold on any head, and what is refused."""

from __future__ import annotations

import numpy as np
import pytest

from locator.errors import ForwardError
from locator.forward import ForwardOptions, LeadField, compute_lead_field, electrode_rows, kernels
from locator.forward.model import in_threads, integrate, make_layer, source_rows
from locator.forward.readout import electrode_weights
from locator.forward.subdivide import butterfly
from locator.forward.surfaces import nearest_on
from locator.geometry import icosphere, mesh_volume_mm3
from locator.head import Surface

PLAIN = ForwardOptions(route="plain")


def surface(vertices: np.ndarray, faces: np.ndarray) -> Surface:
    return Surface(vertices_scanner_mm=vertices, faces=faces, sd_mm=np.zeros(len(vertices)))


def head_shapes(level: int = 2) -> list[Surface]:
    """Inner skull, outer skull and scalp of an egg, wider behind, 6 mm bone, 7 mm scalp."""
    points, faces = icosphere(level)
    egg = np.array([66.0, 82.0, 64.0]) * (1 - 0.08 * points[:, [1]])
    return [surface(points * (egg + offset), faces) for offset in (0.0, 6.0, 13.0)]


def some_sources(n: int = 12, seed: int = 2) -> np.ndarray:
    rng = np.random.default_rng(seed)
    direction = rng.normal(size=(n, 3))
    direction /= np.linalg.norm(direction, axis=1, keepdims=True)
    return direction * np.array([45.0, 60.0, 42.0])


def computed(shapes: list[Surface], sources: np.ndarray, **settings: object) -> LeadField:
    options = ForwardOptions(route="plain", **settings)  # type: ignore[arg-type]
    return compute_lead_field(shapes[2], shapes[1], shapes[0], sources, options=options)


@pytest.fixture(scope="module")
def egg() -> LeadField:
    return computed(head_shapes(), some_sources())


def test_potentials_move_with_the_head(egg):
    # A rigid motion of head, sources and moments leaves every potential as it is.
    rng = np.random.default_rng(5)
    turn = np.linalg.qr(rng.normal(size=(3, 3)))[0]
    turn *= np.linalg.det(turn)
    shift = np.array([30.0, -20.0, 11.0])
    moved = computed(
        [surface(s.vertices_scanner_mm @ turn.T + shift, s.faces) for s in head_shapes()],
        some_sources() @ turn.T + shift,
    )
    electrodes = egg.scalp_vertices_scanner_mm[::9] * 1.01 + [0.7, -0.4, 0.2]
    before = electrode_rows(egg, electrodes)
    after = electrode_rows(moved, electrodes @ turn.T + shift) @ turn
    # Single precision of the stored potentials.
    assert np.abs(after - before).max() < 1e-5 * np.abs(before).max()


def test_mirrored_head_gives_mirrored_potentials(egg):
    flip = np.diag([-1.0, 1.0, 1.0])
    mirrored = computed(
        [surface(s.vertices_scanner_mm @ flip, s.faces[:, ::-1]) for s in head_shapes()],
        some_sources() @ flip,
    )
    expected = egg.potentials_uv_per_nam @ flip
    difference = np.abs(mirrored.potentials_uv_per_nam - expected).max()
    assert difference < 1e-5 * np.abs(expected).max()


def test_scaling_all_conductivities_scales_the_potentials(egg):
    doubled = computed(head_shapes(), some_sources(), conductivity_s_per_m=(0.66, 0.0264, 0.66))
    assert np.allclose(
        2 * doubled.potentials_uv_per_nam, egg.potentials_uv_per_nam, rtol=1e-4, atol=1e-7
    )


def test_bigger_heads_have_weaker_fields(egg):
    # Potential falls with the square of length when everything is scaled.
    large = computed(
        [surface(1.5 * s.vertices_scanner_mm, s.faces) for s in head_shapes()],
        1.5 * some_sources(),
    )
    assert np.allclose(
        1.5**2 * large.potentials_uv_per_nam, egg.potentials_uv_per_nam, rtol=1e-4, atol=1e-7
    )


def test_less_conducting_skull_spreads_and_weakens(egg):
    poor = computed(head_shapes(), some_sources(), conductivity_s_per_m=(0.33, 0.004, 0.33))
    assert (
        np.abs(poor.potentials_uv_per_nam).max(axis=0)
        < np.abs(egg.potentials_uv_per_nam).max(axis=0)
    ).all()


def test_potentials_have_no_mean_and_are_deterministic(egg):
    again = computed(head_shapes(), some_sources())
    assert np.array_equal(again.potentials_uv_per_nam, egg.potentials_uv_per_nam)
    mean = egg.potentials_uv_per_nam.mean(axis=0, dtype=np.float64)
    assert np.abs(mean).max() < 1e-6 * np.abs(egg.potentials_uv_per_nam).max()


def test_order_of_sources_and_electrodes_is_kept(egg):
    order = np.random.default_rng(3).permutation(12)
    shuffled = computed(head_shapes(), some_sources()[order])
    difference = np.abs(shuffled.potentials_uv_per_nam - egg.potentials_uv_per_nam[:, order]).max()
    assert difference < 1e-6 * np.abs(egg.potentials_uv_per_nam).max()
    places = egg.scalp_vertices_scanner_mm[[5, 60, 99]]
    rows = electrode_rows(egg, places)
    assert np.array_equal(electrode_rows(egg, places[::-1]), rows[::-1])


def test_refined_and_plain_agree_within_the_error_of_the_plain():
    shapes, sources = head_shapes(), some_sources()
    plain = computed(shapes, sources)
    fine = compute_lead_field(shapes[2], shapes[1], shapes[0], sources)
    assert fine.route == "subdivided"
    electrodes = shapes[2].vertices_scanner_mm[::5]
    both = [
        electrode_rows(field, electrodes).reshape(len(electrodes), -1) for field in (plain, fine)
    ]
    both = [rows - rows.mean(axis=0) for rows in both]
    rdm = np.linalg.norm(
        both[0] / np.linalg.norm(both[0], axis=0) - both[1] / np.linalg.norm(both[1], axis=0),
        axis=0,
    )
    assert 1e-4 < rdm.mean() < 0.06


# The integrals


def test_solid_angles_close():
    # The double layer of a constant on a closed surface is minus the share of the full angle.
    points, faces = icosphere(2)
    big, small = 90.0 * points, 60.0 * points + [3.0, 2.0, 1.0]
    faces = faces.astype(np.int64)
    outer, inner = kernels.pack_triangles(big, faces), kernels.pack_triangles(small, faces)
    rules = (kernels.RULE_POINTS, kernels.RULE_WEIGHTS, kernels.RULE_STARTS)
    for rows, columns, same, share in (
        (inner, outer, False, -1.0),
        (outer, inner, False, 0.0),
        (outer, outer, True, -0.5),
    ):
        single, double = np.empty((320, 320)), np.zeros((320, 162))
        center = columns[:, kernels.CENTROID : kernels.SIZE].mean(axis=0)
        far = (kernels.pack_blocks(columns, center), center)
        kernels.layers(0, 320, rows, columns, *far, faces, same, *rules, single, double)
        found = double.sum(axis=1) / rows[:, kernels.AREA]
        # On the surface itself the quadrature over touching triangles is the limit.
        assert np.abs(found - share).max() < (0.02 if same else 2e-3)
        assert abs(found.mean() - share) < 2e-3


def test_single_layer_of_a_sphere():
    # Unit charge density on a sphere of radius R: potential R everywhere on and in it (Newton's
    # shell theorem), with the factor 1 / (4 pi). The inscribed mesh has a smaller area.
    points, faces = icosphere(3)
    faces = faces.astype(np.int64)
    packed = kernels.pack_triangles(50.0 * points, faces)
    single, double = np.empty((1280, 1280)), np.zeros((1280, 642))
    rules = (kernels.RULE_POINTS, kernels.RULE_WEIGHTS, kernels.RULE_STARTS)
    far = (kernels.pack_blocks(packed, np.zeros(3)), np.zeros(3))
    kernels.layers(0, 1280, packed, packed, *far, faces, True, *rules, single, double)
    assert single.sum() / packed[:, kernels.AREA].sum() == pytest.approx(50.0, rel=0.005)
    assert np.abs(single - single.T).max() < 0.02 * single.max()


def test_source_terms_equal_quadrature():
    # The exact source integrals against a fine rule, from a source far enough for the rule.
    points, faces = icosphere(1)
    faces = faces.astype(np.int64)
    vertices = 80.0 * points
    from scipy import sparse

    unknowns = sparse.csr_array(sparse.eye_array(len(vertices), format="csr"))
    layer = make_layer(vertices, faces, unknowns, unknowns)
    place = np.array([[5.0, -8.0, 12.0]])
    rows = source_rows(layer, place)
    flux, hat = np.zeros((3, 42)), np.zeros((3, 42))
    first, last = kernels.RULE_STARTS[3], kernels.RULE_STARTS[4]
    for triangle in faces:
        corners = vertices[triangle]
        normal = np.cross(corners[1] - corners[0], corners[2] - corners[0])
        area = np.linalg.norm(normal) / 2
        normal = normal / (2 * area)
        for share, weight in zip(
            kernels.RULE_POINTS[first:last], kernels.RULE_WEIGHTS[first:last], strict=True
        ):
            away = share @ corners - place[0]
            distance = np.linalg.norm(away)
            potential = away / (4 * np.pi * distance**3)
            slope = (normal - 3 * (normal @ away) / distance**2 * away) / (4 * np.pi * distance**3)
            flux[:, triangle] += weight * area * potential[:, None] / 3
            hat[:, triangle] += weight * area * slope[:, None] * share
    assert np.allclose(rows[:, :42], flux, rtol=1e-6, atol=1e-9)
    assert np.allclose(rows[:, 42:], hat, rtol=1e-5, atol=1e-9)


def test_constants_are_in_the_null_space_of_the_curl_blocks():
    from scipy import sparse

    layers = []
    for shape in head_shapes(1):
        unknowns = sparse.csr_array(sparse.eye_array(42, format="csr"))
        layers.append(
            make_layer(shape.vertices_scanner_mm, shape.faces.astype(np.int64), unknowns, unknowns)
        )
    blocks = integrate((layers[0], layers[1], layers[2]), lambda _: None)
    for block in blocks.curl.values():
        assert np.abs(block.sum(axis=1)).max() < 1e-10 * np.abs(block).max()
    for k in range(2):
        assert np.linalg.eigvalsh(blocks.flux[k, k]).min() > 0


def test_work_is_shared_without_gaps():
    seen = np.zeros(1000, dtype=int)

    def work(first: int, last: int) -> None:
        seen[first:last] += 1

    in_threads(work, 1000, 37)
    assert (seen == 1).all()


# Refinement and nearest places


def test_butterfly_reproduces_planes_and_keeps_the_mesh_closed():
    points, faces = icosphere(2)
    matrix, fine = butterfly(faces, len(points))
    vertices = matrix @ points
    assert np.allclose(matrix @ np.ones(len(points)), 1.0)
    # New vertices much nearer to the sphere than the middles of the edges.
    middles = (points[faces] + np.roll(points[faces], 1, axis=1)).reshape(-1, 3) / 2
    assert np.abs(np.linalg.norm(vertices, axis=1) - 1).max() < 0.25 * (
        1 - np.linalg.norm(middles, axis=1).min()
    )
    assert len(vertices) - 3 * len(fine) // 2 + len(fine) == 2
    assert mesh_volume_mm3(vertices, fine) > mesh_volume_mm3(points, faces)


def test_nearest_place_against_a_search_over_many_places():
    points, faces = icosphere(1)
    vertices = points * [30.0, 40.0, 25.0]
    rng = np.random.default_rng(9)
    places = rng.normal(0, 30, (60, 3))
    near = nearest_on(places, vertices, faces.astype(np.int64))
    grid = np.array([(i, j, 20 - i - j) for i in range(21) for j in range(21 - i)]) / 20
    dense = np.einsum("gk,fkx->fgx", grid, vertices[faces]).reshape(-1, 3)
    brute = np.linalg.norm(places[:, None] - dense, axis=2).min(axis=1)
    foot = np.einsum("pk,pkx->px", near.weights, vertices[faces[near.face]])
    assert np.allclose(np.linalg.norm(places - foot, axis=1), near.distance_mm)
    assert (near.distance_mm <= brute + 1e-9).all()
    assert (brute - near.distance_mm).max() < 0.6
    from scipy.spatial import Delaunay

    assert np.array_equal(near.inside, Delaunay(vertices).find_simplex(places) >= 0)


# Electrodes


def test_electrode_weights_reproduce_smooth_fields():
    # A degree-4 harmonic on the sphere, where linear interpolation errs by h^2 |f''| / 8.
    points, faces = icosphere(3)
    rng = np.random.default_rng(6)
    places = rng.normal(size=(200, 3))
    places /= np.linalg.norm(places, axis=1, keepdims=True)

    def field(at: np.ndarray) -> np.ndarray:
        x, y, z = at.T
        return 35 * z**4 - 30 * z**2 + 3 + 40 * x * y * (x**2 - y**2)

    weights = electrode_weights(90 * points, faces, 93 * places)
    assert np.allclose(weights.sum(axis=1), 1.0)
    error = np.abs(weights @ field(points) - field(places)).max()
    near = nearest_on(90 * places, 90 * points, faces.astype(np.int64))
    linear = (near.weights * field(points)[faces[near.face]]).sum(axis=1)
    assert error < 0.15 * np.abs(linear - field(places)).max()
    at_vertices = electrode_weights(90 * points, faces, 90 * points[::40])
    assert np.allclose(at_vertices @ field(points), field(points[::40]), atol=1e-8)


def test_electrodes_over_a_fold_stay_bounded():
    # A narrow ridge, as of an ear: the weights must not explode.
    points, faces = icosphere(3)
    ridge = 1 + 0.25 * np.exp(-((points[:, 1] / 0.08) ** 2)) * (points[:, 0] > 0.5)
    vertices = 90 * points * ridge[:, None]
    weights = electrode_weights(vertices, faces, vertices[points[:, 0] > 0.5] * 1.02)
    assert np.abs(weights).sum(axis=1).max() < 2.6
    assert np.allclose(weights.sum(axis=1), 1.0)


def test_electrodes_elsewhere_are_refused(egg):
    with pytest.raises(ForwardError, match=r"Electrode 1 at \(0, 0, 300\)"):
        electrode_rows(egg, [[0.0, 0.0, 77.0], [0.0, 0.0, 300.0]])
    with pytest.raises(ForwardError, match="not finite"):
        electrode_rows(egg, [[np.nan, 0.0, 77.0]])


# Surfaces


def test_surfaces_that_would_cross_when_refined_are_kept_flat():
    # Two scalp triangles pushed in by 5.6 of 7 mm: smooth refinement overshoots by a quarter of
    # that at the middle of their common edge, and would reach the skull.
    shapes = head_shapes()
    vertices = shapes[2].vertices_scanner_mm.copy()
    faces = shapes[2].faces
    first = int(vertices[:, 2].argmax())
    second = int(faces[(faces == first).any(axis=1)][0][0])
    if second == first:
        second = int(faces[(faces == first).any(axis=1)][0][1])
    both_in = (faces == first).any(axis=1) & (faces == second).any(axis=1)
    for vertex in np.unique(faces[both_in]):
        vertices[vertex] *= 1 - 5.6 / np.linalg.norm(vertices[vertex])
    dented = [shapes[0], shapes[1], surface(vertices, shapes[2].faces)]
    field = compute_lead_field(dented[2], dented[1], dented[0], some_sources())
    told = [finding for finding in field.findings if "kept flat" in finding.problem]
    assert len(told) == 1
    assert "scalp" in told[0].problem
    smooth = compute_lead_field(shapes[2], shapes[1], shapes[0], some_sources())
    assert not [finding for finding in smooth.findings if "kept flat" in finding.problem]
    # Far from the dent nothing changes much.
    far = shapes[2].vertices_scanner_mm[vertices[:, 2] < 0]
    both = [electrode_rows(each, far).reshape(len(far), -1) for each in (field, smooth)]
    both = [rows - rows.mean(axis=0) for rows in both]
    assert np.linalg.norm(both[0] - both[1]) < 0.05 * np.linalg.norm(both[1])


def change(which: int, vertices=None, faces=None) -> list[Surface]:
    shapes = head_shapes()
    old = shapes[which]
    shapes[which] = surface(
        old.vertices_scanner_mm if vertices is None else vertices(old.vertices_scanner_mm.copy()),
        old.faces if faces is None else faces(old.faces.copy()),
    )
    return shapes


def not_finite(vertices: np.ndarray) -> np.ndarray:
    vertices[3] = np.nan
    return vertices


@pytest.mark.parametrize(
    ("shapes", "words"),
    [
        (change(1, faces=lambda f: f[:-1]), "outer skull surface.*|3 edges.*outer skull"),
        (change(0, faces=lambda f: f[:, ::-1]), "point inward .inner skull"),
        (change(2, vertices=not_finite), "1 of 162 vertices are not finite .scalp"),
        (
            change(0, vertices=lambda v: v + np.array([0, 0, 12.0])),
            "inner skull and the outer skull",
        ),
        (change(2, vertices=lambda v: 0.93 * v), "outer skull and the scalp"),
        (change(1, faces=lambda f: np.where(f == 161, 200, f)), "outside 0..161"),
        (change(1, vertices=lambda v: np.vstack([v, v[:1]])), "1 vertices belong to no face"),
        (
            change(
                0,
                vertices=lambda v: np.vstack([v, 0.5 * v]),
                faces=lambda f: np.vstack([f, f + 162]),
            ),
            "2 pieces",
        ),
    ],
)
def test_wrong_surfaces_are_named(shapes, words):
    with pytest.raises(ForwardError, match=words):
        computed(shapes, some_sources())


def test_too_large_surfaces_are_refused():
    shapes = head_shapes()
    points, faces = icosphere(5)
    with pytest.raises(ForwardError, match="scalp has 10242 vertices"):
        computed([shapes[0], shapes[1], surface(100 * points, faces)], some_sources())


@pytest.mark.parametrize(
    ("sources", "words"),
    [
        ([[0.0, 0.0, 68.0]], "1 of 1 sources lie outside the inner skull"),
        ([[0.0, 0.0, 30.0], [0.0, 0.0, 63.9]], "1 less than 1.5 mm inside"),
        (np.zeros((0, 3)), "at least one"),
        ([[0.0, np.inf, 0.0]], "1 of 1 source positions are not finite"),
        ([0.0, 0.0, 0.0], r"\(3,\)"),
    ],
)
def test_wrong_sources_are_named(sources, words):
    with pytest.raises(ForwardError, match=words):
        computed(head_shapes(), np.asarray(sources))


def test_shallow_sources_are_told():
    field = computed(head_shapes(), np.array([[0.0, 0.0, 30.0], [0.0, 0.0, 62.6]]))
    assert any("1 of 2 sources" in finding.problem for finding in field.findings)


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"conductivity_s_per_m": (0.33, 0.0, 0.33)}, "conductivity_s_per_m"),
        ({"conductivity_s_per_m": (0.33, 0.33)}, "three values"),
        ({"route": "best"}, "'best'"),
        ({"least_depth_mm": 0.0}, "least_depth_mm is 0"),
    ],
)
def test_wrong_settings_are_named(settings, words):
    with pytest.raises(ForwardError, match=words):
        ForwardOptions(**settings)


def test_progress_rises_to_one():
    seen: list[float] = []
    shapes = head_shapes(1)
    compute_lead_field(
        shapes[2],
        shapes[1],
        shapes[0],
        0.5 * some_sources(),
        options=PLAIN,
        progress=lambda share, words: seen.append(share),
    )
    assert seen == sorted(seen)
    assert seen[-1] == 1.0
