"""Every design as a plain loop over all its relabellings: numpy, scipy and itertools only.  May not import tfstats.

Each function takes values (units, points), for conditions (units, conditions, points), and yields one row of
statistics (points,) a relabelling, the observed one first.
"""

import itertools

import numpy as np
from scipy import stats


def one_sample(values, two_sided=True):
    units = len(values)
    free = units - 1 if two_sided else units
    for signs in itertools.product((1, -1), repeat=free):
        x = values * np.array(signs + (1,) * (units - free), dtype=float)[:, None]
        yield x.mean(axis=0) / (x.std(axis=0, ddof=1) / np.sqrt(units))


def trimmed(values, two_sided=True):
    """Yuen's t of the 20 % trimmed mean (Yuen 1974, Biometrika 61:165)."""
    units = len(values)
    cut = int(0.2 * units)
    free = units - 1 if two_sided else units
    for signs in itertools.product((1, -1), repeat=free):
        x = np.sort(values * np.array(signs + (1,) * (units - free), dtype=float)[:, None], axis=0)
        kept = x[cut : units - cut]
        w = np.clip(x, x[cut], x[units - cut - 1])
        h = units - 2 * cut
        yield kept.mean(axis=0) / (w.std(axis=0, ddof=1) * np.sqrt(units) / h)


def _arrangements(labels):
    observed = tuple(labels)
    yield observed
    yield from sorted(set(itertools.permutations(observed)) - {observed})


def two_groups(values, labels, equal_variance):
    """Pooled t, or Welch's t as the normal score of its own tail probability; 1 marks the first group."""
    for arrangement in _arrangements(labels):
        member = np.array(arrangement) == 1
        test = stats.ttest_ind(values[member], values[~member], equal_var=equal_variance)
        yield test.statistic if equal_variance else as_score(test.statistic, test.df)


def as_score(t, df):
    return np.sign(t) * stats.norm.isf(stats.t.sf(np.abs(t), df))


def several_groups(values, labels):
    for arrangement in _arrangements(labels):
        codes = np.array(arrangement)
        yield stats.f_oneway(*(values[codes == code] for code in np.unique(codes))).statistic


def slope(values, x):
    for order in itertools.permutations(range(len(x))):
        yield np.array([_slope_t(np.asarray(x)[list(order)], y) for y in values.T])


def _slope_t(x, y):
    fit = stats.linregress(x, y)
    return fit.slope / fit.stderr


def circular_shift(values, labels):
    for step in range(len(labels)):
        member = np.roll(labels, step) == 1
        test = stats.ttest_ind(values[member], values[~member], equal_var=False)
        yield as_score(test.statistic, test.df)


def circular_slope(values, x):
    for step in range(len(x)):
        yield np.array([_slope_t(np.roll(x, step), y) for y in values.T])


def conditions_f(values):
    """F over conditions from sums of squares, (units, conditions, points)."""
    units, conditions = values.shape[:2]
    grand = values.mean(axis=(0, 1))
    of_condition, of_unit = values.mean(axis=0), values.mean(axis=1)
    between = units * ((of_condition - grand) ** 2).sum(axis=0)
    residual = values - of_condition[None] - of_unit[:, None] + grand
    return (between / (conditions - 1)) / ((residual**2).sum(axis=(0, 1)) / ((units - 1) * (conditions - 1)))


def flipped_conditions(values):
    """Each unit's deviations from its own mean are multiplied by one sign."""
    units = len(values)
    centre = values.mean(axis=1, keepdims=True)
    for signs in itertools.product((1, -1), repeat=units - 1):
        turned = np.array(signs + (1,), dtype=float)[:, None, None]
        yield conditions_f(centre + turned * (values - centre))


def shuffled_conditions(values):
    units, conditions = values.shape[:2]
    orders = list(itertools.permutations(range(conditions)))
    for chosen in itertools.product(orders, repeat=units - 1):
        moved = [values[unit][list(order)] for unit, order in enumerate((*chosen, orders[0]))]
        yield conditions_f(np.array(moved))


def freedman_lane(values, x, nuisance, orders):
    """t of x by full least squares on permuted residuals plus the nuisance fit (Freedman & Lane 1983)."""
    units = len(x)
    covariates = np.column_stack([np.ones(units), nuisance])
    fitted = covariates @ np.linalg.lstsq(covariates, values, rcond=None)[0]
    residuals = values - fitted
    model = np.column_stack([x, covariates])
    inverse = np.linalg.inv(model.T @ model)
    for order in orders:
        y = fitted + residuals[np.argsort(order)]
        beta = inverse @ model.T @ y
        left = y - model @ beta
        variance = (left**2).sum(axis=0) / (units - model.shape[1])
        yield beta[0] / np.sqrt(variance * inverse[0, 0])
