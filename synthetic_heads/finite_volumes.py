"""Potentials of dipoles on voxel labels by finite volumes: a witness that uses no surfaces.

The flow of current is balanced over coarse cells (2 mm), but the conductance between two cells is
put together from the fine labels (1 mm): along each fine line that joins the two cells the
resistivities add up, and the lines are parallel. So thin layers keep their resistance.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
import pyamg
from numpy.typing import ArrayLike, NDArray
from scipy import sparse
from scipy.sparse import csgraph

from synthetic_heads.heads import (
    AIR,
    BONE,
    BRAINSTEM,
    CEREBELLUM,
    CSF,
    EYE,
    FAT,
    GREY,
    MARROW,
    MUSCLE,
    SKIN,
    WHITE,
)

FloatArray = NDArray[np.float64]

TISSUE_S_PER_M: Mapping[int, float] = MappingProxyType(
    {
        AIR: 0.0,
        SKIN: 0.43,
        FAT: 0.43,
        MUSCLE: 0.43,
        EYE: 0.43,
        BONE: 0.008,
        MARROW: 0.025,
        CSF: 1.79,
        GREY: 0.33,
        CEREBELLUM: 0.33,
        WHITE: 0.14,
        BRAINSTEM: 0.14,
    }
)
"""S/m: the six isotropic compartments of Vorwerk et al. 2014 NeuroImage 100:590 (values from
memory; CSF from Baumann et al. 1997 IEEE Trans Biomed Eng 44:220). The published scalp value is
of the whole scalp, fat and muscle included."""

# A current of 1 nA through 1 S/m * mm is 1 uV; a dipole of 1 nAm is 1000 nA * mm.
_NA_MM_PER_NAM = 1000.0
_MOST_OHM_M = 250.0
_TOLERANCE = 1e-6
_MOST_STEPS = 200
_SMOOTHING_STEPS = 2
_AT_ONCE = 16
_AXES = (0, 1, 2)


@dataclass(frozen=True, eq=False, kw_only=True)
class VoxelConductor:
    """A head as coarse cells with conductances between them.

    Attributes
    ----------
    matrix : (N, N) sparse
        Balance of currents, S/m * mm; symmetric, its rows add up to zero.
    cell : (I, J, K) ndarray of int64
        Number of each coarse cell, -1 outside the head.
    resistivity_ohm_m : (A, B, C) ndarray
        Of the fine voxels (padded), clipped in air.
    fine_from_scanner : (4, 4) ndarray
        Scanner mm to indices of the fine voxels.
    fine_mm : (3,) ndarray
    factor : int
        Fine voxels per cell along each axis.
    """

    matrix: sparse.csr_matrix
    cell: NDArray[np.int64]
    resistivity_ohm_m: FloatArray
    fine_from_scanner: FloatArray
    fine_mm: FloatArray
    factor: int


def build_conductor(
    labels: ArrayLike,
    scanner_from_voxel: ArrayLike,
    *,
    voxel_mm: float = 2.0,
    conductivity_s_per_m: Mapping[int, float] = TISSUE_S_PER_M,
) -> VoxelConductor:
    """Put the cells and conductances together.

    Parameters
    ----------
    labels : (I, J, K) array_like of int
        Tissue codes.
    scanner_from_voxel : (4, 4) array_like
        Affine with orthogonal axes, to scanner mm.
    voxel_mm : float
        Edge of the cells; a whole multiple of the voxels'.
    conductivity_s_per_m : mapping of int to float
        By tissue code; 0 conducts nothing.

    Returns
    -------
    VoxelConductor
        The largest connected part.

    Raises
    ------
    ValueError
        If a code has no conductivity, the axes are not orthogonal, or ``voxel_mm`` does not fit.
    """
    labels = np.asarray(labels)
    affine = np.array(scanner_from_voxel, float)
    fine_mm = np.linalg.norm(affine[:3, :3], axis=0)
    cosines = (affine[:3, :3] / fine_mm).T @ (affine[:3, :3] / fine_mm)
    if not np.allclose(cosines, np.eye(3), atol=1e-6):
        msg = "The axes of the label grid are not orthogonal."
        raise ValueError(msg)
    factor = max(round(voxel_mm / float(fine_mm.mean())), 1)
    if not np.allclose(factor * fine_mm, voxel_mm, rtol=1e-3):
        msg = (
            f"voxel_mm is {voxel_mm:g}, the labels have {fine_mm.round(3).tolist()} mm:"
            " it must be a whole multiple."
        )
        raise ValueError(msg)
    unknown = sorted(set(np.unique(labels).tolist()) - set(conductivity_s_per_m))
    if unknown:
        msg = f"Tissue codes {unknown} have no conductivity."
        raise ValueError(msg)

    table = np.zeros(int(labels.max()) + 1)
    for code, value in conductivity_s_per_m.items():
        if 0 <= code < len(table):
            table[code] = value
    inside = np.argwhere(table[labels] > 0)
    low, high = inside.min(0), inside.max(0) + 1
    labels = labels[tuple(slice(a, b) for a, b in zip(low, high, strict=True))]
    # One coarse cell of air all round, and a whole number of cells along each axis.
    spare = [(factor, factor + (-n) % factor) for n in labels.shape]
    sigma = np.pad(table[labels], spare)
    affine[:3, 3] += affine[:3, :3] @ (low - factor)
    with np.errstate(divide="ignore"):
        resistivity = 1.0 / sigma

    conductances = [_conductances(resistivity, axis, factor, fine_mm) for axis in _AXES]
    shape = tuple(n // factor for n in sigma.shape)
    number = np.arange(np.prod(shape)).reshape(shape)
    first, second, values = [], [], []
    for axis, conductance in zip(_AXES, conductances, strict=True):
        before = number.take(np.arange(shape[axis] - 1), axis)
        after = number.take(np.arange(1, shape[axis]), axis)
        conducts = conductance > 0
        first.append(before[conducts])
        second.append(after[conducts])
        values.append(conductance[conducts])
    rows, columns, weights = (np.concatenate(part) for part in (first, second, values))
    graph = sparse.coo_matrix((weights, (rows, columns)), shape=(number.size, number.size)).tocsr()
    _, part = csgraph.connected_components(graph, directed=False)
    largest = np.bincount(part[rows]).argmax()
    kept = part == largest
    cell = np.where(kept, np.cumsum(kept) - 1, -1).reshape(shape)
    graph = graph[kept][:, kept]
    graph = graph + graph.T
    matrix = (sparse.diags(np.asarray(graph.sum(1)).ravel()) - graph).tocsr()
    matrix.sort_indices()
    return VoxelConductor(
        matrix=matrix,
        cell=cell,
        resistivity_ohm_m=np.minimum(resistivity, _MOST_OHM_M),
        fine_from_scanner=np.linalg.inv(affine),
        fine_mm=fine_mm,
        factor=factor,
    )


def _conductances(
    resistivity: FloatArray, axis: int, factor: int, fine_mm: FloatArray
) -> FloatArray:
    """Return the conductance between neighbouring cells along an axis, S/m * mm."""
    moved = np.moveaxis(resistivity, axis, 0)
    n_faces = moved.shape[0] // factor - 1
    # From the middle of one cell to the middle of the next; an odd factor begins and ends
    # in the middle of a fine voxel.
    weights = np.ones(factor) if factor % 2 == 0 else np.r_[0.5, np.ones(factor - 1), 0.5]
    ohm = np.zeros((n_faces, *moved.shape[1:]))
    for step, weight in enumerate(weights):
        start = factor // 2 + step
        ohm += weight * moved[start : start + factor * n_faces : factor][:n_faces]
    lines = 1.0 / ohm
    lines = lines.reshape(
        n_faces, lines.shape[1] // factor, factor, lines.shape[2] // factor, factor
    )
    across = np.prod(np.delete(fine_mm, axis)) / fine_mm[axis]
    return np.moveaxis(lines.sum((2, 4)) * across, 0, axis)


def _corners(position: FloatArray) -> tuple[NDArray[np.int64], FloatArray]:
    """Return the eight grid points round a position and their trilinear weights."""
    base = np.floor(position).astype(np.int64)
    part = position - base
    offsets = np.stack(np.meshgrid([0, 1], [0, 1], [0, 1], indexing="ij"), -1).reshape(8, 3)
    weights = np.prod(np.where(offsets == 1, part, 1 - part), axis=1)
    return base + offsets, weights


def _cell_numbers(cell: NDArray[np.int64], index: NDArray[np.int64]) -> NDArray[np.int64]:
    inside = np.all((index >= 0) & (index < cell.shape), axis=1)
    numbers = np.full(len(index), -1, dtype=np.int64)
    numbers[inside] = cell[tuple(index[inside].T)]
    return numbers


def gradient_rows(conductor: VoxelConductor, places_mm: ArrayLike) -> sparse.csr_matrix:
    """Return the rows that take the gradient of a potential at given places.

    The drop of potential between neighbouring cells is interpolated, then shared out along the
    fine line through the place in proportion to its resistivities (the current along a line is
    the same everywhere).

    Parameters
    ----------
    conductor : VoxelConductor
    places_mm : (S, 3) array_like
        Scanner mm.

    Returns
    -------
    (3 * S, N) sparse
        Per mm, along the scanner axes; rows 3 s, 3 s + 1, 3 s + 2 belong to place s.

    Raises
    ------
    ValueError
        If a place is outside the conducting head.
    """
    places = np.asarray(places_mm, float).reshape(-1, 3)
    to_fine = conductor.fine_from_scanner
    fine = places @ to_fine[:3, :3].T + to_fine[:3, 3]
    turn = to_fine[:3, :3] * conductor.fine_mm[:, None]  # grid directions from scanner directions
    factor, cell = conductor.factor, conductor.cell
    rows, columns, values = [], [], []
    for s, position in enumerate(fine):
        coarse = (position - (factor - 1) / 2) / factor
        for axis in _AXES:
            step = np.eye(3, dtype=np.int64)[axis]
            index, weights = _corners(coarse - 0.5 * step)
            before = _cell_numbers(cell, index)
            after = _cell_numbers(cell, index + step)
            weights = np.where((before >= 0) & (after >= 0), weights, 0.0)
            if weights.sum() < 0.05:
                msg = (
                    f"Dipole {s} at {places[s].round(1).tolist()} mm is not inside the conducting"
                    " head."
                )
                raise ValueError(msg)
            used = weights > 0
            weights = weights[used] / weights.sum()
            weights = weights * _share_of_drop(conductor, position, axis) / conductor.fine_mm[axis]
            for scanner_axis in _AXES:
                part = weights * turn[axis, scanner_axis]
                rows.append(np.full(2 * len(part), 3 * s + scanner_axis))
                columns.append(np.concatenate([after[used], before[used]]))
                values.append(np.concatenate([part, -part]))
    shape = (3 * len(places), conductor.matrix.shape[0])
    if not rows:
        return sparse.csr_matrix(shape)
    entries = (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns)))
    return sparse.csr_matrix(entries, shape=shape)


def _share_of_drop(conductor: VoxelConductor, position: FloatArray, axis: int) -> float:
    """Return the part of a cell-to-cell drop that falls over one fine voxel at a position."""
    resistivity = conductor.resistivity_ohm_m
    nearest = np.clip(np.rint(position).astype(int), 0, np.array(resistivity.shape) - 1)
    own = resistivity[tuple(nearest)]
    start = position[axis] - conductor.factor / 2 + 0.5  # in voxels, edges at whole numbers
    edges = np.arange(int(np.floor(start)), int(np.ceil(start + conductor.factor)) + 1)
    covered = np.diff(np.clip(edges, start, start + conductor.factor))
    line = [slice(int(i), int(i) + 1) for i in nearest]
    voxels = np.clip(edges[:-1], 0, resistivity.shape[axis] - 1)
    line[axis] = slice(int(voxels[0]), int(voxels[-1]) + 1)
    ohm = resistivity[tuple(line)].ravel()[voxels - voxels[0]]
    return float(own / (covered @ ohm))


def electrode_rows(conductor: VoxelConductor, electrodes_mm: ArrayLike) -> sparse.csr_matrix:
    """Return the rows that read the potential at contact points on the skin.

    Around each contact a plane is fitted to the cells, by weights that fall off within a cell's
    width; across the skin the potential hardly changes, since no current leaves it.

    Parameters
    ----------
    conductor : VoxelConductor
    electrodes_mm : (E, 3) array_like
        Scanner mm; taken to the nearest cell when they float.

    Returns
    -------
    (E, N) sparse
        Rows add up to 1.
    """
    electrodes = np.asarray(electrodes_mm, float).reshape(-1, 3)
    to_fine = conductor.fine_from_scanner
    factor, cell = conductor.factor, conductor.cell
    fine = electrodes @ to_fine[:3, :3].T + to_fine[:3, 3]
    coarse = (fine - (factor - 1) / 2) / factor
    inside = np.argwhere(cell >= 0)
    block = np.stack(np.meshgrid(*[np.arange(-3, 4)] * 3, indexing="ij"), -1).reshape(-1, 3)
    rows, columns, values = [], [], []
    for e, position in enumerate(coarse):
        index = np.rint(position).astype(np.int64) + block
        numbers = _cell_numbers(cell, index)
        if (
            np.all(numbers < 0)
            or np.min(((index[numbers >= 0] - position) ** 2).sum(1), initial=np.inf) > 4.0
        ):
            position = inside[((inside - position) ** 2).sum(1).argmin()].astype(float)
            index = np.rint(position).astype(np.int64) + block
            numbers = _cell_numbers(cell, index)
        used = numbers >= 0
        offset = index[used] - position
        weight = np.exp(-0.5 * (offset**2).sum(1) / 0.8**2)
        # Along the skin the fit is a plane, across it a constant.
        outward = -(weight @ offset)
        outward /= max(float(np.linalg.norm(outward)), 1e-9)
        along = np.linalg.svd(outward[None])[2][1:]
        design = np.column_stack([np.ones(len(offset)), offset @ along.T])
        normal = design.T @ (weight[:, None] * design)
        row = np.linalg.solve(normal, design.T * weight)[0]
        rows.append(np.full(len(row), e))
        columns.append(numbers[used])
        values.append(row)
    entries = (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns)))
    return sparse.csr_matrix(entries, shape=(len(electrodes), conductor.matrix.shape[0]))


class _Solver:
    """Conjugate gradients for several right sides at once, with multigrid as preconditioner.

    The levels come from smoothed aggregation; each V cycle smooths by a Chebyshev polynomial, so
    that everything is a product of a sparse matrix with a block of columns. The preconditioner
    works in single precision, the iteration in double.
    """

    def __init__(self, matrix: sparse.csr_matrix) -> None:
        # One cell is tied to ground. The currents add up to zero, so nothing flows through the tie;
        # it only makes the system regular.
        tie = sparse.coo_matrix(([float(matrix.diagonal().max())], ([0], [0])), shape=matrix.shape)
        self.matrix = (matrix + tie).tocsr()
        levels = pyamg.smoothed_aggregation_solver(self.matrix, max_coarse=400).levels
        self.matrices = [sparse.csr_matrix(level.A, dtype=np.float32) for level in levels]
        self.inverse_diagonals = [1.0 / matrix.diagonal()[:, None] for matrix in self.matrices]
        self.largest = [
            _largest_eigenvalue(matrix, inverse)
            for matrix, inverse in zip(self.matrices, self.inverse_diagonals, strict=True)
        ]
        self.up = [sparse.csr_matrix(level.P, dtype=np.float32) for level in levels[:-1]]
        self.down = [sparse.csr_matrix(up.T) for up in self.up]
        self.coarsest = np.linalg.inv(levels[-1].A.toarray()).astype(np.float32)

    def _smooth(self, level: int, right: FloatArray, start: FloatArray | None) -> FloatArray:
        """Damp the upper three quarters of the spectrum by Chebyshev steps."""
        matrix, inverse = self.matrices[level], self.inverse_diagonals[level]
        upper = 1.1 * self.largest[level]
        lower = upper / 4
        middle, half = (upper + lower) / 2, (upper - lower) / 2
        residual = right if start is None else right - matrix @ start
        step = inverse * residual / middle
        solution = step.copy() if start is None else start + step
        ratio = half / middle
        for _ in range(_SMOOTHING_STEPS - 1):
            residual = residual - matrix @ step
            following = 1.0 / (2 * middle / half - ratio)
            step = following * ratio * step + (2 * following / half) * (inverse * residual)
            solution += step
            ratio = following
        return solution

    def _cycle(self, right: FloatArray, level: int = 0) -> FloatArray:
        if level == len(self.matrices) - 1:
            return self.coarsest @ right
        solution = self._smooth(level, right, None)
        residual = right - self.matrices[level] @ solution
        solution += self.up[level] @ self._cycle(self.down[level] @ residual, level + 1)
        return self._smooth(level, right, solution)

    def solve(self, currents: FloatArray) -> FloatArray:
        """Return the potentials of currents that add up to zero.

        Parameters
        ----------
        currents : (N, M) ndarray
            One system per column, nA.

        Returns
        -------
        (N, M) ndarray
            uV, mean zero.

        Raises
        ------
        ArithmeticError
            If a system does not converge.
        """
        residual = currents - currents.mean(0)
        goal = _TOLERANCE * np.maximum(np.linalg.norm(residual, axis=0), 1e-300)
        solution = np.zeros_like(residual)
        direction = np.zeros_like(residual)
        size_before = np.ones(residual.shape[1])
        for k in range(_MOST_STEPS):
            better = self._cycle(residual.astype(np.float32)).astype(np.float64)
            size = np.einsum("nm,nm->m", residual, better)
            direction *= size / size_before if k else 0.0
            direction += better
            image = self.matrix @ direction
            length = size / np.maximum(np.einsum("nm,nm->m", direction, image), 1e-300)
            solution += length * direction
            residual -= length * image
            if np.all(np.linalg.norm(residual, axis=0) <= goal):
                return solution - solution.mean(0)
            size_before = np.maximum(size, 1e-300)
        msg = f"The potentials did not converge in {_MOST_STEPS} steps."
        raise ArithmeticError(msg)


def _largest_eigenvalue(matrix: sparse.csr_matrix, inverse_diagonal: FloatArray) -> float:
    """Estimate the largest eigenvalue of the scaled matrix by power iteration."""
    vector = np.random.default_rng(0).normal(size=(matrix.shape[0], 1)).astype(np.float32)
    value = 1.0
    for _ in range(15):
        vector = inverse_diagonal * (matrix @ vector)
        value = float(np.linalg.norm(vector))
        vector /= value
    return value


def finite_volume_lead_field(
    labels: ArrayLike,
    scanner_from_voxel: ArrayLike,
    electrodes_mm: ArrayLike,
    places_mm: ArrayLike,
    *,
    moments: ArrayLike | None = None,
    voxel_mm: float = 2.0,
    conductivity_s_per_m: Mapping[int, float] = TISSUE_S_PER_M,
) -> FloatArray:
    """Return the potentials of dipoles at the electrodes, average reference.

    By reciprocity the potential of a dipole at an electrode is the gradient, at the dipole, of
    the potential that a current into that electrode and out of all of them makes. So either one
    system per electrode is solved, or one per dipole: whichever are fewer. Both give the same.

    Parameters
    ----------
    labels : (I, J, K) array_like of int
        Tissue codes.
    scanner_from_voxel : (4, 4) array_like
        Affine with orthogonal axes, to scanner mm.
    electrodes_mm : (E, 3) array_like
        Contact points on the skin, scanner mm.
    places_mm : (S, 3) array_like
        Dipoles, scanner mm.
    moments : (S, 3) array_like, optional
        nAm along the scanner axes.
    voxel_mm : float
        Edge of the cells. On the layered sphere see ``tests/test_finite_volumes.py``.
    conductivity_s_per_m : mapping of int to float
        By tissue code.

    Returns
    -------
    (E, S, 3) ndarray
        µV per nAm for unit dipoles along the scanner axes; with ``moments`` (E, S), µV.

    Raises
    ------
    ValueError
        As `build_conductor` and `gradient_rows`.
    ArithmeticError
        If a system does not converge.

    References
    ----------
    .. [1] Rush S, Driscoll DA (1969). EEG electrode sensitivity: an application of reciprocity.
       IEEE Trans Biomed Eng 16:15.
    """
    conductor = build_conductor(
        labels, scanner_from_voxel, voxel_mm=voxel_mm, conductivity_s_per_m=conductivity_s_per_m
    )
    gradient = gradient_rows(conductor, places_mm)
    n_sources = gradient.shape[0] // 3
    if moments is not None:
        q = np.asarray(moments, float).reshape(n_sources, 3)
        mix = sparse.block_diag([row[None] for row in q], format="csr") if n_sources else None
        gradient = mix @ gradient if mix is not None else gradient[:0]
    contacts = electrode_rows(conductor, electrodes_mm)
    n_electrodes = contacts.shape[0]
    solver = _Solver(conductor.matrix)
    lead = np.zeros((n_electrodes, gradient.shape[0]))
    by_dipole = gradient.shape[0] < n_electrodes
    spread = sparse.csr_matrix(contacts.mean(0))
    for first in range(0, gradient.shape[0] if by_dipole else n_electrodes, _AT_ONCE):
        some = slice(first, first + _AT_ONCE)
        if by_dipole:
            lead[:, some] = contacts @ solver.solve(gradient[some].toarray().T.copy())
        else:
            currents = (contacts[some].toarray() - spread.toarray()).T.copy()
            lead[some] = (gradient @ solver.solve(currents)).T
    lead = _NA_MM_PER_NAM * (lead - lead.mean(0))
    return lead if moments is not None else lead.reshape(n_electrodes, n_sources, 3)
