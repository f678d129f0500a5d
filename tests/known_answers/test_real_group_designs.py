"""Two open EEG recordings under the designs over people and runs, against scipy and statsmodels on the same numbers.

Zyma et al. 2019, Data 4:14 (36 people, PhysioNet, ODC-By 1.0): `count_quality` splits them into 26 who count well and 10 who
do not.  Schalk et al. 2004, IEEE Trans. Biomed. Eng. 51:1034 (one person, PhysioNet, ODC-By 1.0): 45 executed fist movements in
three runs.  The sizes of the alpha fall were computed once with numpy and scipy outside this project, so their tolerance is wide.
"""

from __future__ import annotations

import importlib.util
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import statsmodels.formula.api as smf
from scipy import stats

import tfstats as tfs

DATA = Path(__file__).resolve().parents[3] / "shared" / "data"

pytestmark = pytest.mark.skipif(
    not (DATA / "recordings.py").is_file(), reason="the open recordings are not in ../shared/data beside this checkout"
)

ALPHA_BAND = np.arange(8.0, 14.0)
PLACES = ["Fz", "C3", "C4", "P3", "Pz", "P4", "O1", "O2"]
GAIN = {"arithmetic": 1, "rest": -1}
REST = tfs.Baseline((0.5, 1.5), reference="named", reference_condition="baseline")


@pytest.fixture(scope="module")
def recordings():
    found = importlib.util.spec_from_file_location("open_recordings_of_groups", DATA / "recordings.py")
    module = importlib.util.module_from_spec(found)
    found.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def people():
    table = pd.read_csv(DATA / "mental_arithmetic_participants.tsv", sep="\t")
    assert table["count_quality"].value_counts().to_dict() == {"good": 26, "bad": 10}
    return table


@pytest.fixture(scope="module")
def powers(recordings):
    """Alpha power of segments of two seconds, every eighth time of the middle second."""
    made = []
    for person in recordings.mental_arithmetic():
        places = [person["channels"].index(name) for name in PLACES]
        parts = ["baseline", "rest", "arithmetic"]
        signals = np.concatenate([person[part][:, places] for part in parts])
        power = tfs.morlet_power(
            signals, sampling_rate=person["sampling_rate"], start=0.0, frequencies=ALPHA_BAND, wavelet_cycles=5,
            channels=PLACES, subject=person["subject"], every=8,
            trials=pd.DataFrame({"part": np.repeat(parts, [len(person[part]) for part in parts])}),
        )  # fmt: skip
        made.append(power.select(times=(0.45, 1.55)))
    return made


@pytest.fixture(scope="module")
def maps(powers, people):
    """One value a person, part and channel: decibels averaged over the band and the middle second."""
    whole = tfs.condition_maps(powers, "part", REST, participants=people)
    return whole.mean_across("frequencies").mean_across("times")


def column(maps, channel):
    values = maps.values[:, :, maps.channels.index(channel), 0, 0]
    return values[:, maps.conditions.index("arithmetic")] - values[:, maps.conditions.index("rest")]


def test_alpha_falls_while_people_subtract(maps):
    result = tfs.permutation_test(tfs.paired(maps, "arithmetic", "rest"), tfs.MaxStatistic(), permutations=2000)
    at_pz = result.channels.index("Pz")
    assert -3.0 < result.estimate[at_pz, 0, 0] < -0.5
    assert result.statistic[at_pz, 0, 0] < -3.0 and result.mask[at_pz, 0, 0]


@pytest.mark.parametrize("equal_variance", [False, True])
def test_counting_well_by_condition(maps, people, equal_variance):
    contrast = tfs.between_groups(maps, "count_quality", "good", "bad", combine=GAIN, equal_variance=equal_variance)
    assert contrast.labels.sum() == 26 and len(contrast.labels) == 36
    result = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=2000)
    good = (people["count_quality"] == "good").to_numpy()
    for place, channel in enumerate(PLACES):
        gain = column(maps, channel)
        test = stats.ttest_ind(gain[good], gain[~good], equal_var=equal_variance)
        t = result.statistic if equal_variance else result.welch_t
        assert t[place, 0, 0] == pytest.approx(test.statistic)
        # Shuffles and the t distribution agree about an ordinary difference of this size.
        assert result.point_p_values[place, 0, 0] == pytest.approx(test.pvalue, abs=0.06)
    gain = column(maps, "Pz")
    oracle = stats.permutation_test(
        (gain[good], gain[~good]), lambda x, y, axis: stats.ttest_ind(x, y, axis=axis, equal_var=equal_variance).statistic,
        n_resamples=3000, vectorized=True, rng=np.random.default_rng(1),
    )  # fmt: skip
    assert result.point_p_values[PLACES.index("Pz"), 0, 0] == pytest.approx(oracle.pvalue, abs=0.04)


def test_group_by_condition_in_decibels_does_not_depend_on_the_baseline(powers, maps, people):
    pooled = tfs.condition_maps(
        powers, "part", tfs.Baseline((0.5, 0.8)), conditions=["rest", "arithmetic"], participants=people
    )
    one = tfs.between_groups(maps, "count_quality", "good", "bad", combine=GAIN)
    averaged = pooled.mean_across("frequencies").mean_across("times")
    other = tfs.between_groups(averaged, "count_quality", "good", "bad", combine=GAIN)
    assert other.values == pytest.approx(one.values, abs=1e-9)
    # On one condition alone it does: what is compared is another number.
    single, again = (
        tfs.between_groups(each, "count_quality", "good", "bad", condition="arithmetic") for each in (maps, averaged)
    )
    assert np.abs(single.values - again.values).max() > 0.1
    assert any("baseline power" in text for text in single.cautions) and not one.cautions[len(maps.cautions) :]


def test_subtractions_with_age_taken_out(maps, people):
    contrast = tfs.slope(maps, "subtractions_per_4_min", combine=GAIN, nuisance=["age"])
    result = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=2000)
    assert result.df == 33 and not result.exact
    for place, channel in enumerate(PLACES):
        fit = smf.ols("gain ~ subtractions_per_4_min + age", people.assign(gain=column(maps, channel))).fit()
        assert result.statistic[place, 0, 0] == pytest.approx(fit.tvalues["subtractions_per_4_min"])
        assert result.estimate[place, 0, 0] == pytest.approx(fit.params["subtractions_per_4_min"])
        assert result.point_p_values[place, 0, 0] == pytest.approx(fit.pvalues["subtractions_per_4_min"], abs=0.06)
    assert result.estimate_unit == "dB per unit of subtractions_per_4_min"
    assert "age taken out (Freedman & Lane 1983)" in result.methods()
    ranks = tfs.permutation_test(
        tfs.slope(maps, "subtractions_per_4_min", combine=GAIN, rank=True), tfs.MaxStatistic(), permutations=200
    )
    rho = stats.spearmanr(people["subtractions_per_4_min"], column(maps, "Pz")).statistic
    assert ranks.effect_size[PLACES.index("Pz"), 0, 0] == pytest.approx(rho)


def test_groups_with_age_taken_out_and_within_sexes(maps, people):
    contrast = tfs.between_groups(
        maps, "count_quality", "good", "bad", combine=GAIN, nuisance=["age"], blocks="sex", equal_variance=True
    )
    result = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=500)
    formula = "gain ~ C(count_quality, Treatment('bad')) + age + C(sex)"
    for place, channel in enumerate(PLACES):
        fit = smf.ols(formula, people.assign(gain=column(maps, channel))).fit()
        assert result.statistic[place, 0, 0] == pytest.approx(fit.tvalues.iloc[1])
    assert result.df == 36 - 4


# -- one person, three runs ----------------------------------------------------------------------------------------------

MOTOR = ["C3", "Cz", "C4"]


@pytest.fixture(scope="module")
def fists(recordings):
    """Decibels of each executed movement against its own rest, 8 to 13 Hz, averaged over band and movement."""
    signals, table = [], []
    for run in (3, 7, 11):
        cut = recordings.fist_movement(runs=(run,), start=-2.5, stop=4.4)
        # The common reference carries what lies below it to every electrode; the average takes most of that out.
        against_average = cut["trials"] - cut["trials"].mean(axis=1, keepdims=True)
        signals.append(against_average[:, [cut["channels"].index(name) for name in MOTOR]])
        table += [{"side": side, "run": run} for side in cut["side"]]
    power = tfs.morlet_power(
        np.concatenate(signals), sampling_rate=cut["sampling_rate"], start=cut["start"], frequencies=ALPHA_BAND,
        wavelet_cycles=7, channels=MOTOR, trials=pd.DataFrame(table).assign(number=range(len(table))), subject="1", every=16,
    )  # fmt: skip
    return tfs.normalized_trials(
        power.select(times=(-2.05, 3.55)), tfs.Baseline((-2.0, -0.5), order="trial_first")
    ).select(times=(0.5, 3.5))


def test_power_falls_over_the_motor_areas(fists):
    mean = np.asarray(fists.values).mean(axis=(0, 2, 3))
    assert -2.9 < mean[0] < -0.9 and -2.8 < mean[2] < -0.8
    assert abs(mean[1]) < 0.9


@pytest.mark.parametrize("labels", ["assigned", "behaviour"])
def test_left_against_right_within_runs(fists, labels):
    contrast = tfs.trialwise(fists, "side", "left", "right", labels=labels, blocks="run", equal_variance=True)
    assert contrast.relabelling.block_names == ("11", "3", "7")
    result = tfs.permutation_test(contrast, tfs.ClusterMass(0.05), permutations=1000)
    values = np.asarray(fists.values)
    for point in ((0, 2, 5), (2, 3, 10), (1, 0, 0)):
        fit = smf.ols(
            "y ~ C(side, Treatment('right')) + C(run)", fists.trials.assign(y=values[(slice(None), *point)])
        ).fit()
        assert result.statistic[point] == pytest.approx(fit.tvalues.iloc[-1 if "side" in fit.tvalues.index[-1] else 1])
        assert result.df == fit.df_resid
    # The lateral difference is not significant in this person.
    assert not result.mask.any()
    assert "with run taken out" in result.methods()


def test_lateral_difference_within_runs(fists):
    """C3 less C4, one value a trial, with the trial number taken out too."""
    values = np.asarray(fists.values).mean(axis=(2, 3))
    lateral = tfs.RelativeTrials(
        (values[:, 0] - values[:, 2])[:, None, None, None], frequencies=np.array([10.5]), times=np.array([2.0]),
        channels=("C3 - C4",), trials=fists.trials, subject="1", unit="decibel", baseline=fists.baseline,
    )  # fmt: skip
    contrast = tfs.trialwise(lateral, "side", "left", "right", labels="assigned", blocks="run", nuisance=["number"])
    result = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=2000)
    fit = smf.ols(
        "y ~ C(side, Treatment('right')) + C(run) + number", fists.trials.assign(y=values[:, 0] - values[:, 2])
    ).fit()
    assert result.estimate.item() == pytest.approx(fit.params["C(side, Treatment('right'))[T.left]"])
    p = fit.pvalues["C(side, Treatment('right'))[T.left]"]
    assert result.p_values.item() == pytest.approx(p, abs=0.06) and result.p_values.item() > 0.05
