"""Which points are tested, and the compared values with everything else set to zero."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tfstats.contrasts.contrast import ONE_SAMPLE_STATISTICS, ONE_SAMPLE_T, TRIMMED_T, Contrast
from tfstats.foundations.errors import refusal
from tfstats.permutation.point_distributions import fixed_columns
from tfstats.permutation.regression_engine import orthonormal_columns

__all__ = ["TestedPoints", "as_tested", "signed_ranks", "tested_points"]

Values = NDArray[np.float32] | NDArray[np.float64]


@dataclass(frozen=True)
class TestedPoints:
    """Compared values ready for an engine.

    `values` has no NaN: untested points and missing units are zero.  `units` counts the units at each point.
    """

    __test__ = False  # not a test class, whatever pytest makes of the name

    values: Values
    tested: NDArray[np.bool_]
    units: NDArray[np.int64]
    complete: bool
    """Whether every tested point has all units."""


def tested_points(contrast: Contrast, fewest_units: int | None = None) -> TestedPoints:
    """Points where all units (or at least `fewest_units`) are finite and not all alike.

    Whether values are alike is judged by what no relabelling can change: for one sample the sum of squares, for groups
    and slopes the spread about block means, for conditions the spread within subjects.  A study is refused only when
    no point is left.
    """
    values = contrast.values
    finite = np.isfinite(values)
    if contrast.components is not None:
        finite = finite.all(axis=1)
    units = finite.sum(axis=0)
    total = len(values)
    enough = units >= (total if fewest_units is None else min(fewest_units, total))
    where = f"{contrast.design}, {contrast.difference}"
    if not enough.any():
        fewest = "all" if fewest_units is None else f"at least {fewest_units}"
        raise refusal(
            where,
            f"at least one point that is finite in {fewest} {contrast.unit_kind}s",
            "none",
            "choose frequencies and times that all of them have, or leave out those without data",
        )
    tested = enough & _varies(contrast, finite)
    if not tested.any():
        raise refusal(
            where,
            "compared values that vary",
            f"the same value in every {contrast.unit_kind} at every point",
            "check that the conditions are not the same data",
        )
    single = values.dtype == np.float32
    ready: Values = np.ascontiguousarray(values, np.float32) if single else np.ascontiguousarray(values, np.float64)
    if not tested.all() or not finite.all():
        ready = ready.copy() if ready is values else ready
        ready[..., ~tested] = 0.0
        np.nan_to_num(ready, copy=False, nan=0.0)
    if contrast.rank:
        ready = _ranks(ready)
        ready[..., ~tested] = 0.0
    if contrast.nuisance is not None:
        tested = tested & _varies_apart_from_nuisance(contrast, ready)
        if not tested.any():
            raise refusal(
                where,
                "compared values that vary apart from blocks and nuisance covariates",
                "values that these determine at every point",
                "leave out the covariate that says the same",
            )
        if np.any(ready[..., ~tested]):
            ready = ready.copy()
            ready[..., ~tested] = 0.0
    complete = bool(units[tested].min() == total)
    return TestedPoints(ready, tested, np.where(tested, units, total).astype(np.int64), complete)


def _varies(contrast: Contrast, finite: NDArray[np.bool_]) -> NDArray[np.bool_]:
    values = contrast.values
    if contrast.statistic in ONE_SAMPLE_STATISTICS:
        return np.asarray(np.any((values != 0) & finite, axis=0))
    if contrast.components is not None:
        return np.asarray(np.any(values != values[:, :1], axis=(0, 1)))
    # Means of equal numbers differ from them by rounding only: compare with the first unit of the block instead.
    first_of_block = np.argmax(fixed_columns(contrast) > 0, axis=0)
    reference = first_of_block[np.argmax(fixed_columns(contrast), axis=1)]
    return np.asarray(np.any(values != values[reference], axis=0))


def _varies_apart_from_nuisance(contrast: Contrast, values: Values) -> NDArray[np.bool_]:
    """Where residuals are more than rounding: their sum of squares is the same in all relabellings."""
    assert contrast.nuisance is not None
    fixed = fixed_columns(contrast)
    known = np.concatenate([fixed, orthonormal_columns(contrast.nuisance, fixed)], axis=1)
    flat = np.asarray(values.reshape(len(values), -1), dtype=np.float64)
    left = flat - known @ (known.T @ flat)
    rounding = 1e-26 * np.einsum("ij,ij->j", flat, flat)
    return np.asarray((np.einsum("ij,ij->j", left, left) > rounding).reshape(values.shape[1:]))


def _ranks(values: Values) -> Values:
    from scipy import stats

    ranks: Values = stats.rankdata(values, axis=0).astype(values.dtype)
    return ranks


def as_tested(contrast: Contrast, robust: str | None) -> Contrast:
    """The contrast whose values or statistic are what a robust test looks at; itself without one."""
    if robust == "rank":
        return replace(contrast, values=signed_ranks(contrast))
    if robust == "trimmed":
        return replace(contrast, statistic=TRIMMED_T)
    return contrast


def signed_ranks(contrast: Contrast) -> NDArray[np.float64]:
    """Compared values as Wilcoxon's signed ranks: mid-ranks of |value| over the units present, zeros dropped and kept as 0.

    The sum of squares of the ranks does not change under flips, so the one-sample t of signed ranks orders relabellings
    as the signed-rank sum does (Wilcoxon 1945, Biometrics Bulletin 1:80).
    """
    from scipy import stats

    if contrast.statistic != ONE_SAMPLE_T:
        raise TypeError("signed ranks belong to one-sample values")
    size = np.abs(contrast.values.astype(np.float64))
    missing = np.isnan(size)
    ranks = stats.rankdata(np.where(missing, np.inf, size), axis=0)
    ranks = np.where(size > 0, ranks - (size == 0).sum(axis=0), 0.0)
    return np.asarray(np.where(missing, np.nan, ranks * np.sign(contrast.values)))
