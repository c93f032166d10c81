"""The largest statistic over thousands of sources without visiting most of them, exactly.

Filters of neighbouring sources look at nearly the same three field patterns. Sources are put in
groups; each group has three orthonormal patterns ``q``, and every filter ``B`` of it splits into
``B = M q + R`` with a small rest ``R``. For any field ``c`` (in coordinates in which noise is
white) the length of ``B c`` is at most ``max |M| |q c| + max |R| sqrt(|c|² - |q c|²)``. Where that
is below a value already reached for the same sign pattern, no member of the group can be the
maximum, and only the remaining members (one or two in a hundred) are computed. The result is the
maximum itself, not an approximation.
"""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from locator.results import Frozen

FloatArray = NDArray[np.float64]
Single = NDArray[np.float32]

MEMBERS = 7
ROUNDS = 2
MARGIN = 2e-4
"""Relative slack of the bound for single precision."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class FilterGroups(Frozen):
    """Filters in groups, for `largest`.

    Attributes
    ----------
    whiten : (r, E) ndarray
        From potentials to the coordinates of the rest.
    filters : (3 S, r) ndarray of float32
        Sources in the order of their groups.
    starts : (G + 1,) ndarray of int64
        First source of each group.
    patterns : (3 G, r) ndarray of float32
    gain, rest : (G,) ndarray of float32
        Largest operator norm of ``M`` and of ``R`` in each group.
    """

    whiten: FloatArray
    filters: Single
    starts: NDArray[np.int64]
    patterns: Single
    gain: Single
    rest: Single


@numba.njit(nogil=True, cache=True, fastmath=True)
def _add_shares(products, share):  # type: ignore[no-untyped-def]
    """Sum the squares of each 3 by 3 block of the products."""
    for source in range(share.shape[0]):
        for component in range(3):
            row = products[3 * source + component]
            for group in range(share.shape[1]):
                a, b, c = row[3 * group], row[3 * group + 1], row[3 * group + 2]
                share[source, group] += a * a + b * b + c * c


def _assign(filters: FloatArray, patterns: FloatArray) -> NDArray[np.intp]:
    """Group whose patterns leave least of each filter; (S, 3, r) and (G, 3, r)."""
    n_sources, _, rank = filters.shape
    flat = filters.reshape(-1, rank).astype(np.float32)
    best = np.full(n_sources, -1.0, dtype=np.float32)
    group = np.zeros(n_sources, dtype=np.intp)
    for first in range(0, len(patterns), 128):
        part = patterns[first : first + 128].reshape(-1, rank).astype(np.float32)
        share = np.zeros((n_sources, len(part) // 3), dtype=np.float32)
        _add_shares(flat @ part.T, share)
        place = share.argmax(axis=1)
        value = share[np.arange(n_sources), place]
        better = value > best
        best[better] = value[better]
        group[better] = first + place[better]
    return group


def group_filters(weights: FloatArray, covariance_uv2: FloatArray) -> FilterGroups:
    """Put filters in groups of similar ones.

    Parameters
    ----------
    weights : (S, 3, E) ndarray
        Standardised filters.
    covariance_uv2 : (E, E) ndarray
        Of the noise; it only decides how tight the bounds are.

    Returns
    -------
    FilterGroups
    """
    n_sources, _, n_electrodes = weights.shape
    values, vectors = np.linalg.eigh(covariance_uv2)
    values = np.maximum(values, 1e-3 * max(float(values.mean()), 1e-300))
    colour = vectors * np.sqrt(values)
    whiten = (vectors / np.sqrt(values)).T
    white = weights @ colour
    n_groups = max(1, n_sources // MEMBERS)
    places = np.linspace(0, n_sources - 1, n_groups).round().astype(int)
    axes = np.linalg.svd(white[places], full_matrices=False)[2]
    # Under three electrodes there are fewer than three directions.
    patterns = np.zeros((n_groups, 3, n_electrodes))
    patterns[:, : axes.shape[1]] = axes
    group = _assign(white, patterns)
    for _ in range(ROUNDS):
        gram = np.zeros((n_groups, n_electrodes, n_electrodes))
        for number in np.unique(group):
            members = white[group == number].reshape(-1, n_electrodes)
            gram[number] = members.T @ members
        found = np.linalg.eigh(gram)[1][:, :, -3:].transpose(0, 2, 1)
        there = np.isin(np.arange(n_groups), group)
        patterns[there, : found.shape[1]] = found[there]
        group = _assign(white, patterns)
    used, group = np.unique(group, return_inverse=True)
    patterns = patterns[used]
    order = np.argsort(group, kind="stable")
    starts = np.concatenate([[0], np.cumsum(np.bincount(group, minlength=len(used)))])
    inside = np.einsum("sce,sqe->scq", white, patterns[group], optimize=True)
    beyond = white - np.einsum("scq,sqe->sce", inside, patterns[group], optimize=True)
    gain, rest = np.zeros(len(used)), np.zeros(len(used))
    np.maximum.at(gain, group, np.linalg.norm(inside, 2, axis=(1, 2)))
    np.maximum.at(rest, group, np.linalg.norm(beyond, 2, axis=(1, 2)))
    return FilterGroups(
        whiten=whiten,
        filters=white[order].reshape(-1, n_electrodes).astype(np.float32),
        starts=starts.astype(np.int64),
        patterns=patterns.reshape(-1, n_electrodes).astype(np.float32),
        gain=gain.astype(np.float32),
        rest=rest.astype(np.float32),
    )


@numba.njit(nogil=True, cache=True, fastmath=True)
def _exact(filters, first, last, field, best):  # type: ignore[no-untyped-def]
    """Largest power of the sources from first to last for one field, at least `best`."""
    rank = field.shape[0]
    for source in range(first, last):
        one, two, three = filters[3 * source], filters[3 * source + 1], filters[3 * source + 2]
        x, y, z = np.float32(0.0), np.float32(0.0), np.float32(0.0)
        for k in range(rank):
            x += one[k] * field[k]
            y += two[k] * field[k]
            z += three[k] * field[k]
        best = max(best, x * x + y * y + z * z)
    return best


@numba.njit(nogil=True, cache=True, fastmath=True)
def _search(inside, lengths, fields, filters, starts, gain, rest, n_samples, maxima):  # type: ignore[no-untyped-def]
    """Maximum over sources and samples of every pattern of signs.

    `inside` (3 G, C) holds ``q c`` of every group and column, `lengths` (C,) the squared length
    of every column, `fields` (C, r) the columns themselves; `n_samples` columns make a pattern.
    """
    n_groups = gain.shape[0]
    bound = np.zeros((n_groups, n_samples), dtype=np.float32)
    top = np.zeros(n_samples, dtype=np.float32)
    at = np.zeros(n_samples, dtype=np.int64)
    more = np.float32(1.0 + MARGIN)
    for pattern in range(maxima.shape[0]):
        offset = pattern * n_samples
        length = lengths[offset : offset + n_samples]
        top[:] = np.float32(-1.0)
        for group in range(n_groups):
            a = inside[3 * group, offset : offset + n_samples]
            b = inside[3 * group + 1, offset : offset + n_samples]
            c = inside[3 * group + 2, offset : offset + n_samples]
            row = bound[group]
            along, across = gain[group], rest[group]
            for sample in range(n_samples):
                held = a[sample] * a[sample] + b[sample] * b[sample] + c[sample] * c[sample]
                left = max(length[sample] * more - held, np.float32(0.0))
                value = along * np.sqrt(held) + across * np.sqrt(left)
                row[sample] = value * value * more
            for sample in range(n_samples):
                if row[sample] > top[sample]:
                    top[sample], at[sample] = row[sample], group
        # The most promising group of each sample first: the maximum is known almost at once.
        best = np.float32(0.0)
        for sample in np.argsort(-top):
            if top[sample] <= best:
                break
            group = at[sample]
            best = _exact(filters, starts[group], starts[group + 1], fields[offset + sample], best)
        for sample in range(n_samples):
            if top[sample] <= best:
                continue
            for group in range(n_groups):
                if bound[group, sample] > best:
                    best = _exact(
                        filters, starts[group], starts[group + 1], fields[offset + sample], best
                    )
        maxima[pattern] = best


def largest(groups: FilterGroups, sums: Single) -> Single:
    """Maximum of the statistic over sources and samples.

    Parameters
    ----------
    groups : FilterGroups
    sums : (P, r, T) ndarray of float32
        Averages in the coordinates of the groups, one for each pattern of signs.

    Returns
    -------
    (P,) ndarray of float32
    """
    n_patterns, rank, n_samples = sums.shape
    columns = np.ascontiguousarray(sums.transpose(1, 0, 2).reshape(rank, -1))
    maxima = np.zeros(n_patterns, dtype=np.float32)
    _search(
        groups.patterns @ columns,
        (columns**2).sum(axis=0),
        np.ascontiguousarray(columns.T),
        groups.filters,
        groups.starts,
        groups.gain,
        groups.rest,
        n_samples,
        maxima,
    )
    return maxima
