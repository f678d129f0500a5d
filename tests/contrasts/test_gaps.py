"""Channels that differ between subjects, and implanted electrodes in regions, against plain loops."""

import itertools

import numpy as np
import pandas as pd
import pytest
from scipy import stats

import tfstats as tfs

TIMES = np.arange(-3, 5) / 10
BASELINE = tfs.Baseline((-0.3, -0.1))
ALL = ["Fz", "Cz", "Pz"]
CHANNELS = {
    "S0": ALL, "S1": ["Fz", "Pz"], "S2": ALL, "S3": ["Cz", "Fz"], "S4": [*ALL, "Oz"], "S5": ["Pz", "Cz", "Fz"],
    "S6": ["Fz", "Cz"], "S7": ["Cz", "Pz", "Fz"], "S8": ALL,
}  # fmt: skip


def power_of(subject, channels, trials=12):
    rng = np.random.default_rng([int(subject[1:]), 5])
    values = rng.exponential(size=(trials, len(channels), 2, TIMES.size)) + 0.05
    kind = ["a", "b"] * (trials // 2)
    values[::2, :, :, 4:] *= 2.0
    return tfs.TrialPower(
        values, frequencies=[4.0, 8.0], times=TIMES, channels=channels, subject=subject,
        trials=pd.DataFrame({"kind": kind}),
    )  # fmt: skip


@pytest.fixture(scope="module")
def maps():
    powers = [power_of(subject, channels) for subject, channels in CHANNELS.items()]
    return tfs.condition_maps(powers, "kind", BASELINE, missing_channels="leave_gaps").select(times=(0.0, 0.4))


def test_gaps_are_left_where_a_subject_lacks_a_channel(maps):
    assert maps.channels == ("Fz", "Cz", "Pz", "Oz")
    for row, (subject, channels) in enumerate(CHANNELS.items()):
        alone = tfs.condition_maps([power_of(subject, channels)], "kind", BASELINE).select(times=(0.0, 0.4))
        for place, channel in enumerate(maps.channels):
            if channel in channels:
                assert maps.values[row, :, place] == pytest.approx(alone.values[0, :, channels.index(channel)])
            else:
                assert np.isnan(maps.values[row, :, place]).all()
    assert maps.history[-1] == (
        "Channels that some subjects lack are gaps in them: Cz (missing in S1); Pz (missing in S3, S6); "
        "Oz (missing in S0, S1, S2, S3, S5, S6 and 2 more)."
    )


def t_by_point(values):
    n = np.isfinite(values).sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = np.nansum(values, axis=0) / n
        variance = np.nansum((values - mean) ** 2, axis=0) / (n - 1)
        return mean / np.sqrt(variance / n), n


def largest_mass(t, threshold, tested):
    """Clusters of one sign within a channel, along frequency and time."""
    from scipy import ndimage

    best = 0.0
    for channel, sign in itertools.product(range(len(t)), (1, -1)):
        labels, number = ndimage.label((sign * t[channel] > threshold[channel]) & tested[channel])
        for label in range(1, number + 1):
            best = max(best, np.abs(t[channel][labels == label]).sum())
    return best


@pytest.mark.parametrize("fewest", [7, 8])
def test_counts_critical_values_and_null_by_point(maps, fewest):
    contrast = tfs.paired(maps, "a", "b")
    result = tfs.permutation_test(contrast, tfs.ClusterMass(0.05), fewest_subjects=fewest)
    values = maps.values[:, 0] - maps.values[:, 1]
    t, n = t_by_point(values)
    assert np.array_equal(result.subjects_at_point, n)
    assert [int(count) for count in n[:, 0, 0]] == [9, 8, 7, 1]
    tested = n >= fewest
    assert np.array_equal(result.tested, tested)
    assert result.statistic[tested] == pytest.approx(t[tested])
    assert result.df[tested] == pytest.approx(n[tested] - 1.0) and np.isnan(result.df[~tested]).all()
    threshold = stats.t.isf(0.025, np.maximum(n - 1, 1))
    null = []
    for signs in itertools.product((1, -1), repeat=8):
        flipped = values * np.array((*signs, 1))[:, None, None, None]
        null.append(largest_mass(t_by_point(flipped)[0], threshold, tested))
    assert np.sort(result.null) == pytest.approx(np.sort(null), rel=1e-6)
    masses = [row.mass for row in result.clusters.itertuples()]
    assert masses and max(masses) == pytest.approx(null[0])
    expected = [(np.array(null) >= mass * (1 - 1e-9)).mean() for mass in masses]
    assert result.clusters["p"].tolist() == pytest.approx(expected)
    assert result.estimate[tested] == pytest.approx(np.nanmean(values, axis=0)[tested])
    assert result.effect_size[tested] == pytest.approx((t / np.sqrt(n))[tested])


@pytest.mark.parametrize("correction", [tfs.MaxStatistic(), tfs.FalseDiscoveryRate()], ids=lambda one: one.kind)
def test_point_p_values_by_a_loop(maps, correction):
    contrast = tfs.paired(maps, "a", "b")
    result = tfs.permutation_test(contrast, correction, fewest_subjects=7)
    values = maps.values[:, 0] - maps.values[:, 1]
    rows = np.array(
        [
            np.abs(t_by_point(values * np.array((*signs, 1))[:, None, None, None])[0])
            for signs in itertools.product((1, -1), repeat=8)
        ]
    )
    tested = result.tested
    expected = (rows >= rows[0] * (1 - 1e-9)).mean(axis=0)
    assert result.point_p_values[tested] == pytest.approx(expected[tested])
    if correction.kind == "maximum":
        assert np.sort(result.null) == pytest.approx(np.sort(rows[:, tested].max(axis=1)))


def test_parametric_p_goes_by_the_subjects_of_the_point(maps):
    result = tfs.permutation_test(
        tfs.paired(maps, "a", "b"), tfs.FalseDiscoveryRate(p_values="parametric"), fewest_subjects=7
    )
    values = maps.values[:, 0] - maps.values[:, 1]
    for point in ((1, 0, 2), (2, 1, 3)):
        column = values[(slice(None), *point)]
        assert result.point_p_values[point] == pytest.approx(
            stats.ttest_1samp(column[np.isfinite(column)], 0).pvalue, rel=1e-6
        )


def test_without_fewest_subjects_only_what_all_have_is_tested(maps):
    result = tfs.permutation_test(tfs.paired(maps, "a", "b"), tfs.MaxStatistic())
    assert result.tested[0].all() and not result.tested[1:].any() and result.df == 8
    ranks = tfs.permutation_test(tfs.paired(maps, "a", "b"), tfs.MaxStatistic(), fewest_subjects=7, robust="rank")
    assert ranks.tested[:3].all() and not ranks.tested[3].any()


def test_the_result_says_how_many_subjects_are_behind_a_point(maps):
    result = tfs.permutation_test(tfs.paired(maps, "a", "b"), tfs.ClusterMass(0.05), fewest_subjects=7)
    assert "Between 7 and 9 subjects are behind a point; n goes by point." in result.cautions
    assert "a one-sample t over 9 subjects (df = 6 to 8 by point;" in result.methods()
    assert "30 points; 10 points were left out" in result.methods()
    assert any("10 of 40 points (25.0 %) were not tested" in text for text in result.cautions)
    again = tfs.permutation_test(tfs.against_zero(maps, "a"), tfs.MaxStatistic(), fewest_subjects=9)
    assert not any("behind a point" in text for text in again.cautions)


# -- implanted electrodes --------------------------------------------------------------------------------------------

SITES = {
    "S0": {"A1": "hippocampus", "A2": "hippocampus", "B1": "temporal", "B2": None},
    "S1": {"LH1": "hippocampus", "LT1": "temporal", "LT2": "temporal", "LT3": "temporal"},
    "S2": {"X1": "temporal", "X2": ""},
    "S3": {"A1": "hippocampus"},
}


def regions_table():
    return pd.DataFrame(
        [
            {"subject": subject, "channel": channel, "region": region}
            for subject, channels in SITES.items()
            for channel, region in channels.items()
        ]
    )


def test_regions_are_means_of_power_within_a_patient():
    powers = [power_of(subject, list(channels)) for subject, channels in SITES.items()]
    maps = tfs.condition_maps(powers, "kind", BASELINE, regions=regions_table(), missing_channels="leave_gaps")
    assert maps.channels == ("hippocampus", "temporal")
    for row, (power, channels) in enumerate(zip(powers, SITES.values())):
        for place, region in enumerate(maps.channels):
            inside = [number for number, name in enumerate(channels.values()) if name == region]
            if not inside:
                assert np.isnan(maps.values[row, :, place]).all()
                continue
            mean = power.values[:, inside].mean(axis=1)
            window = mean[..., :3].mean(axis=(0, 2))
            for column, start in (("a", 0), ("b", 1)):
                expected = 10 * np.log10(mean[start::2].mean(axis=0) / window[:, None])
                assert maps.values[row, maps.conditions.index(column), place] == pytest.approx(expected)
    assert any(
        text
        == "Power was averaged over each patient's channels in a region before it was made relative: 9 channels of "
        "4 patients in 2 regions (hippocampus, temporal)."
        for text in maps.history
    )
    result = tfs.permutation_test(
        tfs.paired(maps.select(times=(0.0, 0.4)), "a", "b"), tfs.MaxStatistic(), fewest_subjects=3, alternative="greater",
        alpha=0.2,
    )  # fmt: skip
    assert result.subjects_at_point[:, 0, 0].tolist() == [3, 3] and result.tested.all()


def test_subjects_of_the_regions_table_may_be_numbers():
    table = pd.DataFrame({"subject": [7.0, 7.0], "channel": ["A1", "A2"], "region": ["left", "left"]})
    power = tfs.TrialPower(
        np.random.default_rng(0).exponential(size=(4, 2, 1, 8)) + 0.1, frequencies=[4.0], times=TIMES,
        channels=["A1", "A2"], subject="7", trials=pd.DataFrame({"kind": ["a"] * 4}),
    )  # fmt: skip
    assert tfs.condition_maps([power], "kind", BASELINE, regions=table).channels == ("left",)
