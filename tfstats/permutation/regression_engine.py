"""Null distributions of regression statistics: slopes, adjusted groups, and F over groups within blocks.

The data are residuals r (units, points) after all that a relabelling cannot change (intercept, block means) and, by
Freedman & Lane 1983, J. Bus. Econ. Stat. 1:292, after the nuisance covariates.  A relabelling moves the rows of the
orthonormal effect columns U and nuisance columns Q against r.  Then with S_U = sum (U'r)^2 and S_Q = sum (Q'r)^2 the
residual sum of squares is r'r - S_Q - S_U, so a relabelling costs one product of (columns x units) with the data
(Winkler et al. 2014, NeuroImage 92:381, for the pivotal statistic).

Here are no claims to the speed of the sign-flip engine: maps are made in panels by BLAS, one thread a panel, and
summarised by the shared kernels, so that any number of threads gives the same bytes.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator

import numpy as np
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

from tfstats.kernels.components import map_workspace, summarise_map
from tfstats.kernels.normal_score import fitted_score, normal_scores
from tfstats.kernels.trimmed_means import trimmed_t_maps
from tfstats.permutation.row_panels import Progress, run_in_threads
from tfstats.permutation.sign_flip_engine import LARGEST_T, Summary, Tail

__all__ = [
    "MapMaker",
    "condition_label_maps",
    "counts_of_maps",
    "null_of_maps",
    "orthonormal_columns",
    "regression_maps",
    "trimmed_maps",
    "unequal_variance_maps",
]

Floats = NDArray[np.float64]
Codes = NDArray[np.integer]
MapMaker = Callable[[Codes], Floats]
"""From rows of relabelling codes to (rows, points) statistics."""

SUMMARY_CODES: dict[str, int] = {"maximum": 0, "mass": 1, "extent": 2, "enhanced": 3}
TAIL_CODES: dict[str, int] = {"two-sided": 0, "greater": 1, "less": 2}
PANEL_BYTES = 32 * 2**20


def orthonormal_columns(columns: Floats, without: Floats) -> Floats:
    """An orthonormal basis of what the columns add to those of `without` (units, few); redundant ones fall away."""
    # Units must not decide what is redundant: a covariate in V^2 counts as much as one in years.
    alike = columns / np.maximum(np.linalg.norm(columns, axis=0), 1e-300)
    rest = alike - without @ (without.T @ alike) if without.size else alike
    left, sizes, _ = np.linalg.svd(rest, full_matrices=False)
    return np.ascontiguousarray(left[:, sizes > 1e-9])


def _panel_rows(points: int, columns: int) -> int:
    return max(1, min(64, PANEL_BYTES // (8 * points * (columns + 1))))


def null_of_maps(
    make: MapMaker,
    rows: Callable[[int, int], Codes],
    total: int,
    *,
    shape: tuple[int, int, int],
    critical: Floats,
    summary: Summary,
    tail: Tail,
    edges: NDArray[np.int64],
    threads: int,
    columns: int = 1,
    exponents: tuple[float, float] = (0.5, 2.0),
    progress: Progress | None = None,
) -> Floats:
    """One extremeness a relabelling from whatever makes its map; memory is a panel of maps a thread."""
    null = np.full(total, np.nan)
    size = _panel_rows(int(np.prod(shape)), columns)

    def work(piece: tuple[int, Codes]) -> int:
        first, part = piece
        maps = make(part)
        space = map_workspace(shape)
        for row, one in enumerate(maps):
            null[first + row] = summarise_map(
                one.reshape(shape), critical, TAIL_CODES[tail], SUMMARY_CODES[summary], edges, *exponents, *space
            )
        return len(part)

    # One BLAS thread a panel: ours are the threads, and sums do not depend on how many there are.
    with threadpool_limits(1, user_api="blas"):
        run_in_threads(work, _panels(rows, total, size), threads, progress)
    return null


def counts_of_maps(
    make: MapMaker,
    rows: Callable[[int, int], Codes],
    total: int,
    *,
    points: int,
    tail: Tail,
    tolerance: float,
    threads: int,
    columns: int = 1,
) -> NDArray[np.int64]:
    """By point, how many relabellings are at least as extreme as row 0."""

    def extremeness(maps: Floats) -> Floats:
        return np.abs(maps) if tail == "two-sided" else -maps if tail == "less" else maps

    with threadpool_limits(1, user_api="blas"):
        observed = extremeness(make(rows(0, 1)))[0]
        limit = observed - tolerance * np.abs(observed)
        size = _panel_rows(points, columns)
        tally = np.zeros(points, dtype=np.int64)
        one_at_a_time = threading.Lock()

        def work(piece: tuple[int, Codes]) -> int:
            reached = (extremeness(make(piece[1])) >= limit).sum(axis=0)
            # Whole numbers: the order of adding cannot matter.
            with one_at_a_time:
                np.add(tally, reached, out=tally)
            return len(piece[1])

        run_in_threads(work, _panels(rows, total, size), threads, None)
    return tally


def _panels(rows: Callable[[int, int], Codes], total: int, size: int) -> Iterator[tuple[int, Codes]]:
    for first in range(0, total, size):
        yield first, rows(first, min(total, first + size))


def regression_maps(residuals: Floats, effect: Floats, nuisance: Floats, df: float, *, as_f: bool) -> MapMaker:
    """t of one effect column, or F of several, for rows of orders (rows, units).

    residuals (units, points) float64; effect (units, a), nuisance (units, q) orthonormal; df of the residuals.
    """
    squares = np.einsum("ij,ij->j", residuals, residuals)
    effects, nuisances = effect.shape[1], nuisance.shape[1]
    both = np.concatenate([effect, nuisance], axis=1).T
    largest = LARGEST_T**2 if as_f else LARGEST_T

    def make(orders: Codes) -> Floats:
        moved = both[:, orders].transpose(1, 0, 2).reshape(-1, both.shape[1])
        sums = (moved @ residuals).reshape(len(orders), effects + nuisances, -1)
        gained = np.einsum("rkp,rkp->rp", sums[:, :effects], sums[:, :effects])
        left = squares - gained
        if nuisances:
            left = left - np.einsum("rkp,rkp->rp", sums[:, effects:], sums[:, effects:])
        # A perfect fit leaves rounding, possibly below zero; a point of zeros has statistic 0.
        left = np.maximum(left, 1e-14 * squares)
        with np.errstate(divide="ignore", invalid="ignore"):
            if as_f:
                statistic = (gained / effects) / (left / df)
            else:
                statistic = sums[:, 0] / np.sqrt(left / df)
        return np.clip(np.nan_to_num(statistic, nan=0.0), -largest, largest)

    return make


def unequal_variance_maps(
    residuals: Floats, effect: Floats, nuisance: Floats, fixed: Floats, membership: NDArray[np.uint8]
) -> MapMaker:
    """Normal score of the group difference with a variance for each group, after nuisance and blocks.

    The estimate is the least-squares one, its variance comes from the residual variances of the two groups (Winkler et
    al. 2014, their v; without nuisance it is Welch's t), and the degrees of freedom from the same delta method as
    Satterthwaite's: V^2 / sum over groups of (dV/ds_g^2 s_g^2)^2 / nu_g, nu_g the group's share of residual df.

    effect (units, 1), nuisance (units, q) orthonormal; fixed (units, f) orthonormal columns that no relabelling changes.
    """
    basis = np.concatenate([effect, nuisance], axis=1)
    model = np.concatenate([basis, fixed], axis=1)
    leverage = np.einsum("ij,ij->i", model, model)
    ones = membership == 1
    shares = np.array([(1.0 - leverage[ones]).sum(), (1.0 - leverage[~ones]).sum()])
    # The model's columns are orthonormal, so model' model = 1 and the two groups' parts share eigenvectors.
    eigenvalues, vectors = np.linalg.eigh(model[ones].T @ model[ones])
    eigenvalues = np.clip(eigenvalues, 0.0, 1.0)
    weights = vectors[0] ** 2
    fit = fitted_score(max(1.0, float(shares.min())), float(shares.sum()))

    def make(orders: Codes) -> Floats:
        out = np.empty((len(orders), residuals.shape[1]))
        for row, order in enumerate(orders):
            moved = basis[order]
            group = membership[order] == 1
            sums = moved.T @ residuals
            left = residuals - moved @ sums
            square = left**2
            within_first = square[group].sum(axis=0)
            first = within_first / shares[0]
            second = (square.sum(axis=0) - within_first) / shares[1]
            variance, from_first, from_second = _sandwich(first, second, eigenvalues, weights)
            with np.errstate(divide="ignore", invalid="ignore"):
                t = sums[0] / np.sqrt(variance)
                df = variance**2 / (from_first**2 / shares[0] + from_second**2 / shares[1])
            t = np.clip(np.nan_to_num(t, nan=0.0), -LARGEST_T, LARGEST_T)
            df = np.clip(np.nan_to_num(df, nan=1.0), max(1.0, shares.min()), shares.sum())
            normal_scores(t, df, fit, out[row])
        return out

    return make


def _sandwich(first: Floats, second: Floats, eigenvalues: Floats, weights: Floats) -> tuple[Floats, Floats, Floats]:
    """Variance of the effect for two group variances, and the parts of its relative change that belong to each."""
    variance = np.zeros_like(first)
    from_first = np.zeros_like(first)
    from_second = np.zeros_like(first)
    for share, weight in zip(eigenvalues, weights):
        with np.errstate(divide="ignore", invalid="ignore"):
            precision = share / first + (1.0 - share) / second
            variance += weight / precision
            from_first += weight * share / first / precision**2
            from_second += weight * (1.0 - share) / second / precision**2
    return variance, from_first, from_second


def trimmed_maps(values: NDArray[np.floating], trimmed: float) -> MapMaker:
    """Yuen's t of the trimmed mean for rows of flips (rows, units) over values (units, points)."""
    flat = np.ascontiguousarray(values, dtype=np.float64)
    cut = int(np.floor(trimmed * len(flat)))

    def make(flips: Codes) -> Floats:
        maps = np.empty((len(flips), flat.shape[1]))
        trimmed_t_maps(flat, np.ascontiguousarray(flips, np.uint8), cut, LARGEST_T, maps)
        return maps

    return make


def condition_label_maps(values: NDArray[np.floating], components: Floats) -> MapMaker:
    """F of conditions whose labels are shuffled within each unit: values (units, conditions, points).

    Rows of codes (rows, units, conditions): which of the unit's conditions takes each place.  `components` (effects,
    conditions) are the orthonormal contrasts tested.
    """
    units, conditions, points = values.shape
    flat = np.asarray(values, dtype=np.float64).reshape(units * conditions, points)
    effects = len(components)
    df = (units - 1) * effects
    offsets = (np.arange(units) * conditions)[:, None]

    def make(codes: Codes) -> Floats:
        out = np.empty((len(codes), points))
        for row, order in enumerate(codes):
            moved = flat[(offsets + order).ravel()].reshape(units, conditions, points)
            contrasts = np.tensordot(components, moved, axes=(1, 1))
            means = contrasts.mean(axis=1)
            between = units * (means**2).sum(axis=0)
            left = (contrasts**2).sum(axis=(0, 1)) - between
            left = np.maximum(left, 1e-14 * (between + left))
            with np.errstate(divide="ignore", invalid="ignore"):
                out[row] = (between / effects) / (left / df)
        return np.clip(np.nan_to_num(out, nan=0.0), 0.0, LARGEST_T**2)

    return make
