"""The symmetric boundary-element system of three nested surfaces."""

from __future__ import annotations

import logging
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.linalg import cho_solve, cholesky, solve_triangular

from locator.forward import kernels
from locator.forward.subdivide import mesh_edges

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

logger = logging.getLogger(__name__)


def in_threads(work: Callable[[int, int], None], n: int, chunk: int) -> None:
    """Run `work(first, last)` over ``range(n)`` in pieces, on as many threads as numba has."""
    pieces = [(first, min(first + chunk, n)) for first in range(0, n, chunk)]
    with ThreadPoolExecutor(max_workers=numba.get_num_threads()) as pool:
        for job in [pool.submit(work, *piece) for piece in pieces]:
            job.result()


@dataclass(frozen=True)
class Layer:
    """One surface as it is integrated over, and the unknowns that it carries."""

    vertices: FloatArray
    faces: IntArray
    packed: FloatArray
    center: FloatArray
    blocks: NDArray[np.float32]
    curls: FloatArray
    potential: sparse.csr_array
    flux: sparse.csr_array
    indptr: IntArray
    incident: IntArray
    incident_curls: FloatArray


def make_layer(
    vertices: FloatArray, faces: IntArray, potential: sparse.csr_array, flux: sparse.csr_array
) -> Layer:
    """Pack a mesh; `potential` and `flux` carry unknowns to the values at its vertices."""
    packed = kernels.pack_triangles(vertices, faces)
    tangents = packed[:, kernels.TANGENTS : kernels.OUTWARD].reshape(-1, 3, 3)
    lengths = packed[:, kernels.LENGTHS : kernels.AREA]
    area = packed[:, kernels.AREA]
    curls = -tangents * (lengths / (2 * area[:, None]))[..., None]
    center = vertices.mean(axis=0)
    order = np.argsort(faces.ravel(), kind="stable")
    counts = np.bincount(faces.ravel(), minlength=len(vertices))
    return Layer(
        vertices=np.ascontiguousarray(vertices),
        faces=np.ascontiguousarray(faces),
        packed=packed,
        center=center,
        blocks=kernels.pack_blocks(packed, center),
        curls=np.ascontiguousarray(curls),
        potential=potential,
        flux=flux,
        indptr=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
        incident=(order // 3).astype(np.int64),
        incident_curls=np.ascontiguousarray(curls.reshape(-1, 3)[order]),
    )


@dataclass(frozen=True)
class Blocks:
    """The geometry-only matrices between the unknowns of the layers (inner, outer, scalp)."""

    flux: dict[tuple[int, int], FloatArray]
    mixed: dict[tuple[int, int], FloatArray]
    curl: dict[tuple[int, int], FloatArray]


def integrate(layers: tuple[Layer, Layer, Layer], tick: Callable[[float], None]) -> Blocks:
    """All surface integrals of the system; no conductivity enters."""
    flux: dict[tuple[int, int], FloatArray] = {}
    mixed: dict[tuple[int, int], FloatArray] = {}
    curl: dict[tuple[int, int], FloatArray] = {}
    pairs = [(0, 0), (0, 1), (1, 0), (1, 1), (1, 2), (2, 2)]
    for done, (k, m) in enumerate(pairs):
        row, column = layers[k], layers[m]
        single = np.empty((len(row.faces), len(column.faces)))
        double = np.zeros((len(row.faces), len(column.vertices)))

        def fill(
            first: int,
            last: int,
            row: Layer = row,
            column: Layer = column,
            single: FloatArray = single,
            double: FloatArray = double,
            same: bool = k == m,
        ) -> None:
            kernels.layers(
                first,
                last,
                row.packed,
                column.packed,
                column.blocks,
                column.center,
                column.faces,
                same,
                kernels.RULE_POINTS,
                kernels.RULE_WEIGHTS,
                kernels.RULE_STARTS,
                single,
                double,
            )

        in_threads(fill, len(row.faces), 64)
        if k < 2:
            gather = _mean_of_vertices(row) @ row.flux
            mixed[k, m] = (column.potential.T @ (gather.T @ double).T).T
        if k <= m:
            if k == m:
                single += single.T
                single *= 0.5
            flux_all = np.zeros((len(row.vertices), len(column.vertices)))
            curl_all = np.zeros_like(flux_all)

            def gather_rows(
                first: int,
                last: int,
                row: Layer = row,
                column: Layer = column,
                single: FloatArray = single,
                flux_all: FloatArray = flux_all,
                curl_all: FloatArray = curl_all,
            ) -> None:
                kernels.vertex_sums(
                    first,
                    last,
                    single,
                    row.indptr,
                    row.incident,
                    row.incident_curls,
                    column.faces,
                    column.curls,
                    flux_all,
                    curl_all,
                )

            in_threads(gather_rows, len(row.vertices), 64)
            curl[k, m] = _project(row.potential, curl_all, column.potential)
            if m < 2:
                flux[k, m] = _project(row.flux, flux_all, column.flux)
        tick((done + 1) / len(pairs))
    return Blocks(flux=flux, mixed=mixed, curl=curl)


def _project(left: sparse.csr_array, dense: FloatArray, right: sparse.csr_array) -> FloatArray:
    half = left.T @ dense
    return np.ascontiguousarray((right.T @ half.T).T)


def _mean_of_vertices(layer: Layer) -> sparse.csr_array:
    n = len(layer.faces)
    return sparse.csr_array(
        (np.full(3 * n, 1 / 3), (np.repeat(np.arange(n), 3), layer.faces.ravel())),
        shape=(n, len(layer.vertices)),
    )


def transfer(blocks: Blocks, conductivity: tuple[float, float, float]) -> FloatArray:
    """Scalp unknowns from the source integrals on the innermost surface.

    Parameters
    ----------
    blocks : Blocks
    conductivity : (brain, skull, scalp)
        S/m.

    Returns
    -------
    (n_scalp, n_flux_inner + n_potential_inner) ndarray
        To be applied to (integral of the unit-conductivity potential against the flux basis,
        of its normal derivative against the potential basis).
    """
    brain, skull, scalp = conductivity
    s, d, w = blocks.flux, blocks.mixed, blocks.curl
    single = np.block(
        [
            [(1 / brain + 1 / skull) * s[0, 0], -s[0, 1] / skull],
            [-s[0, 1].T / skull, (1 / skull + 1 / scalp) * s[1, 1]],
        ]
    )
    n_flux = s[0, 0].shape[0]
    sizes = [w[k, k].shape[0] for k in range(3)]
    double = np.block(
        [
            [-2 * d[0, 0], d[0, 1], np.zeros((n_flux, sizes[2]))],
            [d[1, 0], -2 * d[1, 1], d[1, 2]],
        ]
    )
    n_inner, n_near = sizes[0], sizes[0] + sizes[1]
    curl = np.zeros((sum(sizes), sum(sizes)))
    curl[:n_inner, :n_inner] = (brain + skull) * w[0, 0]
    curl[:n_inner, n_inner:n_near] = -skull * w[0, 1]
    curl[n_inner:n_near, :n_inner] = -skull * w[0, 1].T
    curl[n_inner:n_near, n_inner:n_near] = (skull + scalp) * w[1, 1]
    curl[n_inner:n_near, n_near:] = -scalp * w[1, 2]
    curl[n_near:, n_inner:n_near] = -scalp * w[1, 2].T
    curl[n_near:, n_near:] = scalp * w[2, 2]
    # Potentials are defined up to a constant: charge the mean of the scalp.
    deflation = np.trace(curl[n_near:, n_near:]) / sizes[2] ** 2
    curl[n_near:, n_near:] += deflation
    factor = cholesky(single, lower=True, overwrite_a=True, check_finite=False)
    half = solve_triangular(factor, double, lower=True, check_finite=False)
    curl += half.T @ half
    curl_factor = cholesky(curl, lower=True, overwrite_a=True, check_finite=False)
    unit = np.zeros((sum(sizes), sizes[2]))
    unit[n_near:] = np.eye(sizes[2])
    solution = cho_solve((curl_factor, True), unit, overwrite_b=True, check_finite=False)
    fluxes = solve_triangular(factor, half @ solution, lower=True, trans="T", check_finite=False)
    result = np.empty((sizes[2], n_flux + n_inner))
    result[:, :n_flux] = -fluxes[:n_flux].T / brain
    result[:, n_flux:] = -solution[:n_inner].T
    return result


def source_rows(layer: Layer, places: FloatArray) -> FloatArray:
    """Source integrals for unit moments along x, y, z, (3 S, n_flux + n_potential)."""
    if layer.flux is not layer.potential:
        msg = "flux and potential unknowns of the inner skull must share one basis"
        raise ValueError(msg)
    edges, face_edges = mesh_edges(layer.faces)
    gather = layer.potential.T.tocsr()
    rows = np.empty((3 * len(places), 2 * gather.shape[0]))

    def fill(first: int, last: int) -> None:
        kernels.dipole_rows(
            first,
            last,
            places,
            layer.packed,
            layer.vertices,
            layer.faces,
            layer.curls,
            edges,
            face_edges,
            gather.indptr,
            gather.indices,
            gather.data,
            rows[3 * first : 3 * last],
        )

    in_threads(fill, len(places), 32)
    return rows
