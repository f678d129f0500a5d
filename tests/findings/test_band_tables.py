"""Band tables: the averages, the tests and the correction over the table."""

import itertools

import numpy as np
import pytest
from scipy import stats

import tfstats as tfs
from tfstats.findings.band_tables import BAND_COLUMNS


@pytest.fixture
def maps():
    rng = np.random.default_rng(2)
    values = rng.normal(size=(9, 2, 3, 5, 6))
    values[:, 0, :2, 1:3, 2:5] += 1.5
    return tfs.ConditionMaps(
        values, subjects=[f"S{i}" for i in range(9)], conditions=["recalled", "missed"], channels=["F3", "Fz", "Pz"],
        frequencies=[4.0, 6, 8, 10, 12], times=np.arange(6) / 10, unit="decibel", baseline=tfs.Baseline((-0.5, -0.2)),
    )  # fmt: skip


TESTS = {
    "memory": lambda maps: tfs.paired(maps, "recalled", "missed"),
    "chance": lambda maps: tfs.against_zero(maps, "recalled"),
}
BANDS = {"theta": (4, 8), "alpha": (9, 12), "theta - alpha": ("theta", "alpha")}
WINDOWS = {"early": (0.0, 0.2), "late": (0.3, 0.5)}
GROUPS = {"frontal": ["F3", "Fz"], "back": ["Pz"]}


def test_rows_by_hand(maps):
    table = tfs.band_table(maps, TESTS, BANDS, WINDOWS, channel_groups=GROUPS)
    assert tuple(table.columns) == BAND_COLUMNS and len(table) == 2 * 3 * 2 * 2
    row = table.query("test == 'memory' and band == 'theta' and window == 'early' and channels == 'frontal'").iloc[0]
    x = (maps.values[:, 0] - maps.values[:, 1])[:, :2, :3, :3].mean(axis=(1, 2, 3))
    test = stats.ttest_1samp(x, 0)
    low, high = test.confidence_interval()
    assert (row.estimate, row.statistic, row.df) == pytest.approx((x.mean(), test.statistic, 8))
    assert (row.low, row.high) == pytest.approx((low, high))
    signs = np.array(list(itertools.product((1, -1), repeat=9)))
    means = np.abs(signs @ x)
    assert row.p == pytest.approx((means >= abs(x.sum()) * (1 - 1e-9)).mean())


def test_chance_averages_ratios_and_conditions_average_decibels(maps):
    table = tfs.band_table(maps, TESTS, {"theta": (4, 8)}, {"early": (0.0, 0.2)}).set_index("test")
    part = maps.values[:, 0][:, :, :3, :3]
    by_ratios = 10 * np.log10((10 ** (part / 10)).mean(axis=(1, 2, 3)))
    assert table.loc["chance", "estimate"] == pytest.approx(by_ratios.mean())
    difference = (maps.values[:, 0] - maps.values[:, 1])[:, :, :3, :3].mean(axis=(1, 2, 3))
    assert table.loc["memory", "estimate"] == pytest.approx(difference.mean())


def test_band_against_band(maps):
    table = tfs.band_table(maps, {"memory": TESTS["memory"]}, BANDS, {"early": (0.0, 0.2)}).set_index("band")
    estimates = table["estimate"]
    assert estimates["theta - alpha"] == pytest.approx(estimates["theta"] - estimates["alpha"])


def test_step_down_maximum_by_its_definition(maps):
    # Westfall & Young 1993, Resampling-Based Multiple Testing, with |t|: a plain loop over all flips.
    table = tfs.band_table(maps, {"memory": TESTS["memory"]}, BANDS, WINDOWS, channel_groups=GROUPS)
    difference = maps.values[:, 0] - maps.values[:, 1]
    columns = []
    for row in table.itertuples():
        channels = [maps.channels.index(name) for name in GROUPS[row.channels]]
        times = slice(0, 3) if row.window == "early" else slice(3, 6)

        def mean(frequencies, channels=channels, times=times):
            return difference[:, channels][:, :, frequencies, times].mean(axis=(1, 2, 3))

        band = {"theta": slice(0, 3), "alpha": slice(3, 5)}
        columns.append(mean(band["theta"]) - mean(band["alpha"]) if row.band not in band else mean(band[row.band]))
    values = np.stack(columns, axis=1)
    signs = np.array(list(itertools.product((1, -1), repeat=9)))
    t = np.abs(np.array([stats.ttest_1samp(values * row[:, None], 0).statistic for row in signs]))
    observed = np.abs(stats.ttest_1samp(values, 0).statistic)
    order = np.argsort(-observed)
    adjusted, before = np.empty(observed.size), 0.0
    for place, cell in enumerate(order):
        before = max(before, (t[:, order[place:]].max(axis=1) >= observed[cell] * (1 - 1e-9)).mean())
        adjusted[cell] = before
    assert table["p_corrected"].to_numpy() == pytest.approx(adjusted)
    assert (table["p_corrected"] >= table["p"] - 1e-12).all()


def test_bands_that_share_a_frequency_are_said(maps):
    table = tfs.band_table(maps, TESTS, {"theta": (4, 8), "alpha": (8, 12)}, WINDOWS)
    assert table.attrs["cautions"] == ['The bands "theta" and "alpha" share 8 Hz, since both edges belong to a band.']


def test_an_empty_cell_is_not_tested(maps):
    values = maps.values.copy()
    values[:, :, :, :3, :3] = np.nan
    gaps = tfs.ConditionMaps(
        values, subjects=maps.subjects, conditions=maps.conditions, channels=maps.channels,
        frequencies=maps.frequencies, times=maps.times, unit="decibel",
    )  # fmt: skip
    table = tfs.band_table(gaps, {"memory": TESTS["memory"]}, {"theta": (4, 8)}, WINDOWS).set_index("window")
    assert np.isnan(table.loc["early", "p"]) and np.isfinite(table.loc["late", "p"])
