"""Compiled integrals over triangles: potentials of single and double layers, and of dipoles.

Everything here works on plain arrays and knows nothing of heads. A mesh is passed as the packed
rows of :func:`pack_triangles`. Lengths in any unit; results carry the factor 1 / (4 pi).

References
----------
.. [1] Wilton DR, Rao SM, Glisson AW, Schaubert DH, Al-Bundak OM, Butler CM (1984). Potential
   integrals for uniform and linear source distributions on polygonal and polyhedral domains.
   IEEE Trans Antennas Propag 32:276-281.
.. [2] van Oosterom A, Strackee J (1983). The solid angle of a plane triangle.
   IEEE Trans Biomed Eng 30:125-126.
.. [3] Dunavant DA (1985). High degree efficient symmetrical Gaussian quadrature rules for the
   triangle. Int J Numer Methods Eng 21:1129-1148.
"""

from __future__ import annotations

import math

import numba
import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_FAST = {"reassoc", "contract", "arcp", "nsz", "afn"}
_QUARTER_PI = 1.0 / (4.0 * math.pi)

# Columns of a packed triangle.
CORNERS, NORMAL, TANGENTS, OUTWARD, LENGTHS, AREA, CENTROID, SIZE = 0, 9, 12, 21, 30, 33, 34, 37
N_COLUMNS = 38

# Distance between centroids, in units of the sum of the two triangles' sizes (centroid to the
# farthest corner), below which the inner integral is exact and the outer rule gets finer. Chosen
# by measurement on spheres: finer rules change the error by less than 2e-4.
FAR = 2.5
_NEAR, _CLOSE, _THIN = 1.5, 0.9, 0.35


def _orbits(*groups: tuple[float, ...]) -> tuple[FloatArray, FloatArray]:
    points, weights = [], []
    for weight, *parts in groups:
        if not parts:
            corners = [(1 / 3, 1 / 3, 1 / 3)]
        elif len(parts) == 1:
            a, b = parts[0], (1 - parts[0]) / 2
            corners = [(a, b, b), (b, a, b), (b, b, a)]
        else:
            a, b = parts
            c = 1 - a - b
            corners = [(a, b, c), (a, c, b), (b, a, c), (b, c, a), (c, a, b), (c, b, a)]
        points += corners
        weights += [weight] * len(corners)
    total = sum(weights)
    return np.array(points), np.array(weights) / total


def _split(rule: tuple[FloatArray, FloatArray]) -> tuple[FloatArray, FloatArray]:
    """Put a rule on each of the four halves-size triangles."""
    points, weights = rule
    quarters = np.array(
        [
            [[1, 0, 0], [0.5, 0.5, 0], [0.5, 0, 0.5]],
            [[0, 1, 0], [0, 0.5, 0.5], [0.5, 0.5, 0]],
            [[0, 0, 1], [0.5, 0, 0.5], [0, 0.5, 0.5]],
            [[0.5, 0.5, 0], [0, 0.5, 0.5], [0.5, 0, 0.5]],
        ]
    )
    return np.concatenate([points @ quarter for quarter in quarters]), np.tile(weights / 4, 4)


_THREE = _orbits((1 / 3, 2 / 3))
# Dunavant's rules of degree 5 (7 points) and 8 (16 points).
_SEVEN = _orbits(
    (0.225,),
    (0.132394152788506, 0.059715871789770),
    (0.125939180544827, 0.797426985353087),
)
_SIXTEEN = _orbits(
    (0.144315607677787,),
    (0.095091634267285, 0.081414823414554),
    (0.103217370534718, 0.658861384496480),
    (0.032458497623198, 0.898905543365938),
    (0.027230314174435, 0.008394777409958, 0.263112829634638),
)
_RULES = (_THREE, _SEVEN, _SIXTEEN, _split(_SIXTEEN))
RULE_POINTS: FloatArray = np.concatenate([points for points, _ in _RULES])
RULE_WEIGHTS: FloatArray = np.concatenate([weights for _, weights in _RULES])
RULE_STARTS: IntArray = np.cumsum([0] + [len(weights) for _, weights in _RULES])


def pack_triangles(vertices: ArrayLike, faces: ArrayLike) -> FloatArray:
    """Everything about each triangle that the integrals use, one row a triangle.

    Parameters
    ----------
    vertices : (V, 3) array_like
    faces : (F, 3) array_like of int
        Outward when seen counter-clockwise.

    Returns
    -------
    (F, 38) ndarray
        Corners (9), unit normal (3), unit tangent of the edge opposite to each corner (9), its
        in-plane outward normal (9), its length (3), area, centroid (3), centroid to farthest
        corner.

    Examples
    --------
    >>> row = pack_triangles([[0, 0, 0], [4, 0, 0], [0, 3, 0]], [[0, 1, 2]])[0]
    >>> row[NORMAL:TANGENTS].tolist(), float(row[AREA]), row[LENGTHS:AREA].tolist()
    ([0.0, 0.0, 1.0], 6.0, [5.0, 3.0, 4.0])
    """
    corners = np.asarray(vertices, dtype=np.float64)[np.asarray(faces)]
    packed = np.empty((len(corners), N_COLUMNS))
    packed[:, CORNERS:NORMAL] = corners.reshape(-1, 9)
    edges = np.roll(corners, -2, axis=1) - np.roll(corners, -1, axis=1)
    normal = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    twice = np.linalg.norm(normal, axis=1)
    normal /= twice[:, None]
    lengths = np.linalg.norm(edges, axis=2)
    tangents = edges / lengths[..., None]
    packed[:, NORMAL:TANGENTS] = normal
    packed[:, TANGENTS:OUTWARD] = tangents.reshape(-1, 9)
    packed[:, OUTWARD:LENGTHS] = np.cross(tangents, normal[:, None]).reshape(-1, 9)
    packed[:, LENGTHS:AREA] = lengths
    packed[:, AREA] = twice / 2
    centroid = corners.mean(axis=1)
    packed[:, CENTROID:SIZE] = centroid
    packed[:, SIZE] = np.linalg.norm(corners - centroid[:, None], axis=2).max(axis=1)
    return packed


@numba.njit(cache=True, nogil=True, fastmath=_FAST, inline="always")
def _exact(x, y, z, triangle, out):  # type: ignore[no-untyped-def]
    """Single layer, and the three linear double layers, of one triangle at one point (x 4 pi)."""
    ax, ay, az = triangle[0] - x, triangle[1] - y, triangle[2] - z
    bx, by, bz = triangle[3] - x, triangle[4] - y, triangle[5] - z
    cx, cy, cz = triangle[6] - x, triangle[7] - y, triangle[8] - z
    a = math.sqrt(ax * ax + ay * ay + az * az)
    b = math.sqrt(bx * bx + by * by + bz * bz)
    c = math.sqrt(cx * cx + cy * cy + cz * cz)
    height = -(ax * triangle[9] + ay * triangle[10] + az * triangle[11])
    length_a, length_b, length_c = triangle[30], triangle[31], triangle[32]
    log_a = math.log((b + c + length_a) / (b + c - length_a))
    log_b = math.log((c + a + length_b) / (c + a - length_b))
    log_c = math.log((a + b + length_c) / (a + b - length_c))
    # Signed distance of the foot of the point from each edge, positive inside.
    away_a = bx * triangle[21] + by * triangle[22] + bz * triangle[23]
    away_b = cx * triangle[24] + cy * triangle[25] + cz * triangle[26]
    away_c = ax * triangle[27] + ay * triangle[28] + az * triangle[29]
    twice = 2.0 * triangle[33]
    angle = 2.0 * math.atan2(
        height * twice,
        a * b * c
        + (ax * bx + ay * by + az * bz) * c
        + (bx * cx + by * cy + bz * cz) * a
        + (cx * ax + cy * ay + cz * az) * b,
    )
    mx = triangle[21] * log_a + triangle[24] * log_b + triangle[27] * log_c
    my = triangle[22] * log_a + triangle[25] * log_b + triangle[28] * log_c
    mz = triangle[23] * log_a + triangle[26] * log_b + triangle[29] * log_c
    out[0] = away_a * log_a + away_b * log_b + away_c * log_c - height * angle
    along_a = mx * triangle[21] + my * triangle[22] + mz * triangle[23]
    along_b = mx * triangle[24] + my * triangle[25] + mz * triangle[26]
    along_c = mx * triangle[27] + my * triangle[28] + mz * triangle[29]
    out[1] = length_a / twice * (away_a * angle + height * along_a)
    out[2] = length_b / twice * (away_b * angle + height * along_b)
    out[3] = length_c / twice * (away_c * angle + height * along_c)


BLOCK = 64
_PER_BLOCK = 13 * BLOCK


def pack_blocks(packed: FloatArray, center: FloatArray) -> NDArray[np.float32]:
    """Three quadrature places, normal and area of each triangle in single precision.

    Laid out in blocks of constant length, so that the far part runs on whole vectors. What is left
    of the last block holds triangles without area, far away.
    """
    n = len(packed)
    n_blocks = -(-n // BLOCK)
    values = np.zeros((13, n_blocks * BLOCK), dtype=np.float32)
    values[:9] = 1e6
    corners = packed[:, CORNERS:NORMAL].reshape(n, 3, 3)
    places = 0.5 * corners + 0.5 * packed[:, None, CENTROID:SIZE] - center
    values[:9, :n] = places.reshape(n, 9).T
    values[9:12, :n] = packed[:, NORMAL:TANGENTS].T
    values[12, :n] = packed[:, AREA]
    blocks = values.reshape(13, n_blocks, BLOCK).transpose(1, 0, 2)
    return np.ascontiguousarray(blocks).ravel()


@numba.njit(cache=True, nogil=True, fastmath=_FAST, inline="always")
def _point(x, y, z, nx, ny, nz):  # type: ignore[no-untyped-def]
    """Inverse distance, and its normal derivative at the source."""
    inverse = np.float32(1.0) / math.sqrt(x * x + y * y + z * z + np.float32(1e-20))
    return inverse, (x * nx + y * ny + z * nz) * inverse * inverse * inverse


@numba.njit(cache=True, nogil=True, fastmath=_FAST)
def layers(  # type: ignore[no-untyped-def]
    first, last, rows, columns, blocks, center, faces, same, points, weights, starts, single, double
):
    """Double integrals of the two layers over pairs of triangles, rows `first` to `last`.

    Fills ``single[i, j]``, the integral over triangle i of the single layer of triangle j with
    unit density, and ``double[i, v]``, the integral over triangle i of the double layer (normal
    derivative at the source) with the linear hat at vertex v of the column mesh. `rows` and
    `columns` are packed triangles, `blocks` the columns once more for the far part, about
    `center`; `faces` the column mesh; `same` says that both are one mesh.
    """
    n = columns.shape[0]
    n_blocks = blocks.shape[0] // _PER_BLOCK
    layer = np.empty(n_blocks * BLOCK)
    hats = np.empty((3, n_blocks * BLOCK))
    centroid = columns[:, CENTROID:SIZE].T.copy()
    size = columns[:, SIZE].copy()
    closeness = np.empty(n)
    value = np.empty(4)
    part = np.empty(4 * BLOCK, dtype=np.float32)
    third, half = np.float32(1.0 / 3.0), np.float32(0.5)
    for i in range(first, last):
        row = rows[i]
        mx, my, mz = row[CENTROID] - center[0], row[CENTROID + 1] - center[1], row[36] - center[2]
        ax = np.float32(0.5 * (row[0] - center[0]) + 0.5 * mx)
        ay = np.float32(0.5 * (row[1] - center[1]) + 0.5 * my)
        az = np.float32(0.5 * (row[2] - center[2]) + 0.5 * mz)
        bx = np.float32(0.5 * (row[3] - center[0]) + 0.5 * mx)
        by = np.float32(0.5 * (row[4] - center[1]) + 0.5 * my)
        bz = np.float32(0.5 * (row[5] - center[2]) + 0.5 * mz)
        cx = np.float32(0.5 * (row[6] - center[0]) + 0.5 * mx)
        cy = np.float32(0.5 * (row[7] - center[1]) + 0.5 * my)
        cz = np.float32(0.5 * (row[8] - center[2]) + 0.5 * mz)
        scale = _QUARTER_PI * row[AREA] / 9.0
        for b in range(n_blocks):
            block = blocks[b * _PER_BLOCK : (b + 1) * _PER_BLOCK]
            for j in range(BLOCK):
                x, y, z = block[j], block[j + BLOCK], block[j + 2 * BLOCK]
                nx, ny = block[j + 9 * BLOCK], block[j + 10 * BLOCK]
                nz = block[j + 11 * BLOCK]
                s0, d0 = _point(ax - x, ay - y, az - z, nx, ny, nz)
                s1, d1 = _point(bx - x, by - y, bz - z, nx, ny, nz)
                s2, d2 = _point(cx - x, cy - y, cz - z, nx, ny, nz)
                total, e0 = s0 + s1 + s2, d0 + d1 + d2
                x, y, z = block[j + 3 * BLOCK], block[j + 4 * BLOCK], block[j + 5 * BLOCK]
                s0, d0 = _point(ax - x, ay - y, az - z, nx, ny, nz)
                s1, d1 = _point(bx - x, by - y, bz - z, nx, ny, nz)
                s2, d2 = _point(cx - x, cy - y, cz - z, nx, ny, nz)
                total, e1 = total + (s0 + s1 + s2), d0 + d1 + d2
                x, y, z = block[j + 6 * BLOCK], block[j + 7 * BLOCK], block[j + 8 * BLOCK]
                s0, d0 = _point(ax - x, ay - y, az - z, nx, ny, nz)
                s1, d1 = _point(bx - x, by - y, bz - z, nx, ny, nz)
                s2, d2 = _point(cx - x, cy - y, cz - z, nx, ny, nz)
                total, e2 = total + (s0 + s1 + s2), d0 + d1 + d2
                area = block[j + 12 * BLOCK]
                mean = half * third * (e0 + e1 + e2)
                part[j] = area * total
                part[j + BLOCK] = area * (half * e0 + mean)
                part[j + 2 * BLOCK] = area * (half * e1 + mean)
                part[j + 3 * BLOCK] = area * (half * e2 + mean)
            base = b * BLOCK
            for j in range(BLOCK):
                layer[base + j] = scale * part[j]
                hats[0, base + j] = scale * part[j + BLOCK]
                hats[1, base + j] = scale * part[j + 2 * BLOCK]
                hats[2, base + j] = scale * part[j + 3 * BLOCK]
        for j in range(n):
            dx = row[CENTROID] - centroid[0, j]
            dy = row[CENTROID + 1] - centroid[1, j]
            dz = row[CENTROID + 2] - centroid[2, j]
            closeness[j] = math.sqrt(dx * dx + dy * dy + dz * dz) / (row[SIZE] + size[j])
        for j in range(n):
            near = closeness[j]
            if near < FAR:
                if near > _NEAR:
                    rule = 0
                elif near > _CLOSE:
                    rule = 1
                elif near > _THIN or same:
                    rule = 2
                else:
                    rule = 3
                s, d0, d1, d2 = 0.0, 0.0, 0.0, 0.0
                for p in range(starts[rule], starts[rule + 1]):
                    u, v, w = points[p, 0], points[p, 1], points[p, 2]
                    _exact(
                        u * row[0] + v * row[3] + w * row[6],
                        u * row[1] + v * row[4] + w * row[7],
                        u * row[2] + v * row[5] + w * row[8],
                        columns[j],
                        value,
                    )
                    s += weights[p] * value[0]
                    d0 += weights[p] * value[1]
                    d1 += weights[p] * value[2]
                    d2 += weights[p] * value[3]
                weight = _QUARTER_PI * row[AREA]
                layer[j] = weight * s
                if same and i == j:
                    d0, d1, d2 = 0.0, 0.0, 0.0
                hats[0, j] = weight * d0
                hats[1, j] = weight * d1
                hats[2, j] = weight * d2
        for j in range(n):
            single[i, j] = layer[j]
            double[i, faces[j, 0]] += hats[0, j]
            double[i, faces[j, 1]] += hats[1, j]
            double[i, faces[j, 2]] += hats[2, j]


@numba.njit(cache=True, nogil=True, fastmath=_FAST)
def vertex_sums(first, last, single, indptr, triangles, curls_row, faces, curls_column, flux, curl):  # type: ignore[no-untyped-def]
    """Sum the single layer from pairs of triangles to pairs of vertices, rows `first` to `last`.

    ``flux[v, w]`` takes each triangle's density as the mean of its three vertex values;
    ``curl[v, w]`` weights with the surface curls of the two hats, which gives the hypersingular
    operator (up to its sign).
    """
    n = faces.shape[0]
    sums = np.empty((4, n))
    for vertex in range(first, last):
        sums[:] = 0.0
        for entry in range(indptr[vertex], indptr[vertex + 1]):
            triangle = triangles[entry]
            cx, cy, cz = curls_row[entry, 0], curls_row[entry, 1], curls_row[entry, 2]
            values = single[triangle]
            for j in range(n):
                sums[0, j] += cx * values[j]
                sums[1, j] += cy * values[j]
                sums[2, j] += cz * values[j]
                sums[3, j] += values[j]
        for j in range(n):
            x, y, z, total = sums[0, j], sums[1, j], sums[2, j], sums[3, j] / 9.0
            for corner in range(3):
                other = faces[j, corner]
                curl[vertex, other] += (
                    x * curls_column[j, corner, 0]
                    + y * curls_column[j, corner, 1]
                    + z * curls_column[j, corner, 2]
                )
                flux[vertex, other] += total


@numba.njit(cache=True, nogil=True, fastmath=_FAST)
def dipole_rows(  # type: ignore[no-untyped-def]
    first,
    last,
    places,
    packed,
    vertices,
    faces,
    curls,
    edges,
    face_edges,
    indptr,
    columns,
    weights,
    out,
):
    """Integrals of unit dipoles against the basis of a mesh, sources `first` to `last`.

    With g the integral over a triangle of ``(r - place) / (4 pi |r - place|^3)``, exact at any
    distance (outward edge normals times edge logarithms, normal times solid angle), fills
    ``out[3 s + axis]`` with the potential (against the mean-of-vertices flux basis) and then the
    normal derivative (against the hats, by the surface curl of each: moment . (g x curl)), both
    gathered by the sparse rows `indptr`, `columns`, `weights` from vertices to unknowns.
    """
    n = indptr.shape[0] - 1
    distance = np.empty(vertices.shape[0])
    lengths = np.empty(edges.shape[0])
    logs = np.empty(edges.shape[0])
    flux = np.empty((vertices.shape[0], 3))
    hat = np.empty((vertices.shape[0], 3))
    for e in range(edges.shape[0]):
        u, v = edges[e, 0], edges[e, 1]
        dx = vertices[u, 0] - vertices[v, 0]
        dy = vertices[u, 1] - vertices[v, 1]
        dz = vertices[u, 2] - vertices[v, 2]
        lengths[e] = math.sqrt(dx * dx + dy * dy + dz * dz)
    for s in range(first, last):
        x, y, z = places[s, 0], places[s, 1], places[s, 2]
        flux[:] = 0.0
        hat[:] = 0.0
        for v in range(vertices.shape[0]):
            dx, dy, dz = vertices[v, 0] - x, vertices[v, 1] - y, vertices[v, 2] - z
            distance[v] = math.sqrt(dx * dx + dy * dy + dz * dz)
        for e in range(edges.shape[0]):
            both = distance[edges[e, 0]] + distance[edges[e, 1]]
            logs[e] = math.log((both + lengths[e]) / (both - lengths[e]))
        for t in range(faces.shape[0]):
            row = packed[t]
            ax, ay, az = row[0] - x, row[1] - y, row[2] - z
            bx, by, bz = row[3] - x, row[4] - y, row[5] - z
            cx, cy, cz = row[6] - x, row[7] - y, row[8] - z
            a, b, c = distance[faces[t, 0]], distance[faces[t, 1]], distance[faces[t, 2]]
            height = -(ax * row[9] + ay * row[10] + az * row[11])
            angle = 2.0 * math.atan2(
                height * 2.0 * row[33],
                a * b * c
                + (ax * bx + ay * by + az * bz) * c
                + (bx * cx + by * cy + bz * cz) * a
                + (cx * ax + cy * ay + cz * az) * b,
            )
            la, lb, lc = logs[face_edges[t, 0]], logs[face_edges[t, 1]], logs[face_edges[t, 2]]
            gx = -(row[21] * la + row[24] * lb + row[27] * lc + row[9] * angle)
            gy = -(row[22] * la + row[25] * lb + row[28] * lc + row[10] * angle)
            gz = -(row[23] * la + row[26] * lb + row[29] * lc + row[11] * angle)
            for corner in range(3):
                vertex = faces[t, corner]
                ux, uy, uz = curls[t, corner, 0], curls[t, corner, 1], curls[t, corner, 2]
                flux[vertex, 0] += gx
                flux[vertex, 1] += gy
                flux[vertex, 2] += gz
                hat[vertex, 0] += gy * uz - gz * uy
                hat[vertex, 1] += gz * ux - gx * uz
                hat[vertex, 2] += gx * uy - gy * ux
        for row_index in range(n):
            f0, f1, f2, h0, h1, h2 = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
            for entry in range(indptr[row_index], indptr[row_index + 1]):
                vertex = columns[entry]
                weight = weights[entry]
                f0 += weight * flux[vertex, 0]
                f1 += weight * flux[vertex, 1]
                f2 += weight * flux[vertex, 2]
                h0 += weight * hat[vertex, 0]
                h1 += weight * hat[vertex, 1]
                h2 += weight * hat[vertex, 2]
            third = _QUARTER_PI / 3.0
            base = 3 * (s - first)
            out[base, row_index] = third * f0
            out[base + 1, row_index] = third * f1
            out[base + 2, row_index] = third * f2
            out[base, n + row_index] = _QUARTER_PI * h0
            out[base + 1, n + row_index] = _QUARTER_PI * h1
            out[base + 2, n + row_index] = _QUARTER_PI * h2


@numba.njit(cache=True, nogil=True)
def nearest_triangles(first, last, points, packed, distance, face, weights):  # type: ignore[no-untyped-def]
    """Nearest triangle of each point: its distance, index, and barycentric weights there."""
    for p in range(first, last):
        best = np.inf
        x, y, z = points[p, 0], points[p, 1], points[p, 2]
        for t in range(packed.shape[0]):
            row = packed[t]
            dx, dy, dz = row[34] - x, row[35] - y, row[36] - z
            lower = math.sqrt(dx * dx + dy * dy + dz * dz) - row[37]
            if lower > 0.0 and lower * lower > best:
                continue
            ax, ay, az = row[0] - x, row[1] - y, row[2] - z
            bx, by, bz = row[3] - x, row[4] - y, row[5] - z
            cx, cy, cz = row[6] - x, row[7] - y, row[8] - z
            aa, bb = ax * ax + ay * ay + az * az, bx * bx + by * by + bz * bz
            cc = cx * cx + cy * cy + cz * cz
            ab, bc = ax * bx + ay * by + az * bz, bx * cx + by * cy + bz * cz
            ca = cx * ax + cy * ay + cz * az
            # Nearest place on the triangle by its Voronoi regions, from inner products alone.
            d1, d2 = aa - ab, aa - ca
            d3, d4 = ab - bb, ab - bc
            d5, d6 = ca - bc, ca - cc
            # d1 = ab.ap, d2 = ac.ap, d3 = ab.bp, d4 = ac.bp, d5 = ab.cp, d6 = ac.cp
            vc = d1 * d4 - d3 * d2
            vb = d5 * d2 - d1 * d6
            va = d3 * d6 - d5 * d4
            if d1 <= 0.0 and d2 <= 0.0:
                u, v, w = 1.0, 0.0, 0.0
            elif d3 >= 0.0 and d4 <= d3:
                u, v, w = 0.0, 1.0, 0.0
            elif vc <= 0.0 and d1 >= 0.0 and d3 <= 0.0:
                v = d1 / (d1 - d3)
                u, w = 1.0 - v, 0.0
            elif d6 >= 0.0 and d5 <= d6:
                u, v, w = 0.0, 0.0, 1.0
            elif vb <= 0.0 and d2 >= 0.0 and d6 <= 0.0:
                w = d2 / (d2 - d6)
                u, v = 1.0 - w, 0.0
            elif va <= 0.0 and d4 - d3 >= 0.0 and d5 - d6 >= 0.0:
                w = (d4 - d3) / ((d4 - d3) + (d5 - d6))
                u, v = 0.0, 1.0 - w
            else:
                whole = va + vb + vc
                v, w = vb / whole, vc / whole
                u = 1.0 - v - w
            px = u * ax + v * bx + w * cx
            py = u * ay + v * by + w * cy
            pz = u * az + v * bz + w * cz
            square = px * px + py * py + pz * pz
            if square < best:
                best = square
                face[p] = t
                weights[p, 0], weights[p, 1], weights[p, 2] = u, v, w
        distance[p] = math.sqrt(best)
