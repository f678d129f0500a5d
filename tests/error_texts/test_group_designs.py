"""The exact text of each refusal by designs over groups, covariates, several conditions and trials, and by regions."""

import re

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tfstats.contrasts import restricted


def refused(text):
    return pytest.raises(tfs.InputError, match=f"^{re.escape(text)}$")


def maps_of(subjects=8, conditions=("task", "rest"), participants=True, **columns):
    names = [f"S{number}" for number in range(subjects)]
    table = {
        "participant_id": names,
        "group": ["patient", "control"] * (subjects // 2) + ["control"] * (subjects % 2),
        "age": 30.0 + np.arange(subjects) ** 2,
        "site": ["north"] * subjects,
        **columns,
    }
    return tfs.ConditionMaps(
        np.random.default_rng(0).normal(size=(subjects, len(conditions), 2, 2, 3)), subjects=names,
        conditions=conditions, channels=["Fz", "Pz"], frequencies=[4, 8], times=[0.0, 0.1, 0.2], unit="decibel",
        participants=pd.DataFrame(table) if participants else None,
    )  # fmt: skip


COLUMNS = '"age", "group", "participant_id", "site"'


# -- groups --------------------------------------------------------------------------------------------------------------


def test_groups():
    maps = maps_of()
    with refused(
        'between_groups: expected two different groups, got "patient" twice; name the group it is compared with.'
    ):
        tfs.between_groups(maps, "group", "patient", "patient", condition="task")
    with refused(
        'between_groups, column "group": expected at least two subjects in group "Patient", got 0 (groups there: "control", '
        '"patient"); use the spelling of the participants table.'
    ):
        tfs.between_groups(maps, "group", "Patient", "control", condition="task")
    with refused(
        f'between_groups: expected a column among {COLUMNS}, got "Group"; did you mean "group"? use the name in the table.'
    ):
        tfs.between_groups(maps, "Group", "patient", "control", condition="task")
    with refused("between_groups: expected ConditionMaps, got list; make them with condition_maps."):
        tfs.between_groups([], "group", "patient", "control")
    with refused(
        "between_groups: expected maps with a participants table, got none; give participants to condition_maps."
    ):
        tfs.between_groups(maps_of(participants=False), "group", "patient", "control", condition="task")
    with refused(
        "between_groups: expected at least two subjects, got 1; for one subject compare trials with trialwise or "
        "trialwise_change."
    ):
        tfs.between_groups(maps_of(1), "group", "patient", "control", condition="task")


def test_all_that_is_wrong_with_groups_at_once():
    maps = maps_of(
        age=["30", "n/a", "forty", "50", "inf", "60", "61", "62"], site=["a", None, "b", "a", "b", "", "a", "b"]
    )
    with refused(
        'between_groups, column "group": expected at least two subjects in group "patients", got 0 (groups there: "control", '
        '"patient"); use the spelling of the participants table.\n'
        'between_groups: expected one of the conditions "rest", "task", got none named; give condition, or combine with a '
        "weight for each.\n"
        'between_groups, nuisance: expected a column among "age", "group", "participant_id", "site", got "sleep"; use the '
        "name in the table.\n"
        'between_groups, blocks, column "site": expected a value for every subject, got none for "S1", "S5"; fill it in, or '
        "leave them out."
    ):
        tfs.between_groups(maps, "group", "patients", "control", nuisance=["sleep"], blocks="site")


def test_values_of_the_participants_table():
    where = 'between_groups, nuisance, column "age"'
    settings = {"condition": "task", "nuisance": ["age"]}
    with refused(
        f'{where}: expected a value for every subject, got none for "S1", "S4"; fill it in, or leave them out.'
    ):
        tfs.between_groups(
            maps_of(age=[30, None, 31, 32, np.nan, 33, 34, 35]), "group", "patient", "control", **settings
        )
    with refused(
        f'{where}: expected a finite number for every subject, got "S2: forty", "S4: inf", "S5: 31,5"; give numbers; a '
        "covariate of labels needs one column of 0 and 1 a label."
    ):
        tfs.between_groups(
            maps_of(age=["30", "29", "forty", "50", "inf", "31,5", "61", "62"]),
            "group",
            "patient",
            "control",
            **settings,
        )
    with refused(
        'between_groups, column "group": expected a value for every subject, got none for "S0", "S3", "S6"; fill it in, or '
        "leave them out."
    ):
        tfs.between_groups(
            maps_of(group=["N/A", "control", "patient", " ", "patient", "control", None, "control"]), "group", "patient",
            "control", condition="task",
        )  # fmt: skip


def test_models_that_cannot_be_estimated():
    maps = maps_of(twin=[1, 0] * 4, place=["x", "y"] * 4)
    determined = (
        'between_groups, column "group": expected values that vary apart from blocks and nuisance covariates, got values that '
        "these determine; leave out the covariate that says the same."
    )
    with refused(determined):
        tfs.between_groups(maps, "group", "patient", "control", condition="task", nuisance=["twin"])
    with refused(determined):
        tfs.between_groups(maps, "group", "patient", "control", condition="task", blocks="place")
    five = maps_of(5, b=[1, 5, 2, 8, 3], c=[9, 1, 4, 4, 2], d=[3, 3, 1, 0, 7])
    with refused(
        "between_groups: expected more subjects than the 5 parameters of the model, got 5; leave out covariates or add "
        "subjects."
    ):
        tfs.between_groups(five, "group", "patient", "control", condition="task", nuisance=["b", "c", "d"])


def test_values_that_the_covariates_determine():
    maps = maps_of()
    values = np.broadcast_to(maps.participants["age"].to_numpy()[:, None, None, None, None], maps.values.shape)
    explained = tfs.ConditionMaps(
        values * 2.0, subjects=maps.subjects, conditions=maps.conditions, channels=maps.channels,
        frequencies=maps.frequencies, times=maps.times, unit="decibel", participants=maps.participants,
    )  # fmt: skip
    contrast = tfs.between_groups(explained, "group", "patient", "control", condition="task", nuisance=["age"])
    with refused(
        "between_groups, patient - control (task): expected compared values that vary apart from blocks and nuisance "
        "covariates, got values that these determine at every point; leave out the covariate that says the same."
    ):
        tfs.permutation_test(contrast, tfs.MaxStatistic())


def test_several_groups():
    maps = maps_of(kind=["a", "a", "b", "b", "c", "a", "b", "a"])
    with refused(
        'several_groups, column "kind": expected at least two subjects in group "c", got 1 (groups there: "a", "b", "c"); use '
        "the spelling of the participants table."
    ):
        tfs.several_groups(maps, "kind", condition="task")
    with refused('several_groups, column "kind": expected at least two groups, got "a"; name the groups.'):
        tfs.several_groups(maps, "kind", ["a", "a"], condition="task")
    with refused(
        'several_groups: expected a column among "age", "group", "kind", "participant_id", "site", got "kinds"; did you mean '
        '"kind"? use the name in the table.'
    ):
        tfs.several_groups(maps, "kinds", condition="task")
    with refused(
        "alternative for several_groups: expected \"two-sided\", the upper tail of F, got 'greater'; F has no sign; leave it "
        "out."
    ):
        tfs.permutation_test(
            tfs.several_groups(maps, "kind", ["a", "b"], condition="task"), tfs.MaxStatistic(), alternative="greater"
        )


def test_slopes():
    maps = maps_of(score=[1, 2, None, 4, 5, 6, 7, 8], same=[3.0] * 8)
    with refused(
        'slope, column "score": expected a value for every subject, got none for "S2"; fill it in, or leave them out.'
    ):
        tfs.slope(maps, "score", condition="task")
    with refused(
        'slope, column "same": expected values that vary apart from blocks and nuisance covariates, got values that these '
        "determine; leave out the covariate that says the same."
    ):
        tfs.slope(maps, "same", condition="task")
    with refused(
        'slope, column "group": expected a finite number for every subject, got "S0: patient", "S1: control", "S2: patient", '
        '"S3: control", "S4: patient", "S5: control", "S6: patient", "S7: control"; give numbers; a covariate of labels needs '
        "one column of 0 and 1 a label."
    ):
        tfs.slope(maps, "group", condition="task")


def test_what_subjects_are_compared_on():
    maps = maps_of()
    with refused("slope: expected condition or combine, got both; leave one out."):
        tfs.slope(maps, "age", condition="task", combine={"task": 1, "rest": -1})
    with refused(
        'slope, condition: expected conditions among "rest", "task", got "Task"; use the spelling of the data.'
    ):
        tfs.slope(maps, "age", condition="Task")
    with refused(
        'slope, combine: expected conditions among "rest", "task", got "sleep"; use the spelling of the data.'
    ):
        tfs.slope(maps, "age", combine={"task": 1, "sleep": -1})
    with refused("slope, combine: expected at least one weight other than zero, got zeros only; give the weights."):
        tfs.slope(maps, "age", combine={"task": 0, "rest": 0})
    with refused(
        'slope, combine: expected a mapping of condition to number, got [\'task\']; write {"recalled": 1, "missed": -1}.'
    ):
        tfs.slope(maps, "age", combine=["task"])
    with refused(
        "slope, combine, condition \"task\": expected a number, got 'one'; write its weight.\n"
        'slope, combine, condition "rest": expected a finite number, got nan; write its weight.'
    ):
        tfs.slope(maps, "age", combine={"task": "one", "rest": float("nan")})


def test_settings_that_only_sign_flips_take():
    contrast = tfs.between_groups(maps_of(), "group", "patient", "control", condition="task")
    with refused(
        "robust: expected None for a design without sign flips of one value, got 'rank'; leave it out, or use it with paired, "
        "against_zero or weighted.\n"
        "fewest_subjects: expected None for this design, in which every subject must be present at a point, got 6; leave it "
        "out, or use it with paired, against_zero or weighted."
    ):
        tfs.permutation_test(contrast, tfs.MaxStatistic(), robust="rank", fewest_subjects=6)


def test_too_few_relabellings_of_groups():
    contrast = tfs.between_groups(maps_of(6, group=["a", "a", "a", "b", "b", "b"]), "group", "a", "b", condition="task")
    with refused(
        "between_groups, a - b (task): expected enough subjects for a p of 0.05, got 20 distinct relabellings, whose smallest p "
        "is 0.1 (two-sided); add subjects until 1 over the number of relabellings is at most 0.05."
    ):
        tfs.permutation_test(contrast, tfs.MaxStatistic())


# -- several conditions --------------------------------------------------------------------------------------------------

CELLS = ("2/recalled", "2/missed", "4/recalled", "4/missed")
FACTORS = {"load": ["2", "4"], "memory": ["recalled", "missed"]}


def test_conditions():
    maps = maps_of(conditions=("2", "4", "6"))
    with refused('repeated_measures: expected at least two different conditions, got "2"; name the conditions.'):
        tfs.repeated_measures(maps, ["2"])
    with refused('repeated_measures: expected at least two different conditions, got "2", "4"; name the conditions.'):
        tfs.repeated_measures(maps, ["2", "4", "2"])
    with refused('repeated_measures: expected conditions among "2", "4", "6", got "8"; use the spelling of the data.'):
        tfs.repeated_measures(maps, ["2", "8"])
    with refused(
        'repeated_measures, scheme: expected one of "labels", "signs", got \'shuffle\'; choose one of them.\n'
        'repeated_measures, effect: expected factors that it belongs to, got \'load\'; give factors = {"load": ["2", "4"]}.'
    ):
        tfs.repeated_measures(maps, effect="load", scheme="shuffle")
    with refused("repeated_measures: expected conditions or factors, got both; leave one out."):
        tfs.repeated_measures(maps, ["2", "4"], factors={"load": ["2", "4"]}, effect="load")


def test_factors():
    maps = maps_of(conditions=CELLS)
    with refused(
        'repeated_measures, factor "load": expected at least two different levels, got "2"; name its levels.\n'
        'repeated_measures, effect: expected one of the factors "load", "memory", or several joined by ":", got '
        "'load:side'; name a main effect or an interaction."
    ):
        tfs.repeated_measures(maps, factors={"load": ["2"], "memory": ["recalled", "missed"]}, effect="load:side")
    with refused(
        'repeated_measures, effect: expected one of the factors "load", "memory", or several joined by ":", got None; name a '
        "main effect or an interaction."
    ):
        tfs.repeated_measures(maps, factors=FACTORS)
    with refused(
        'repeated_measures, effect: expected one of the factors "load", "memory", or several joined by ":", got '
        "'load:load'; name a main effect or an interaction."
    ):
        tfs.repeated_measures(maps, factors=FACTORS, effect="load:load")
    with refused(
        'repeated_measures, scheme: expected "signs" for an interaction, got "labels"; labels of one factor alone can be '
        "shuffled; use signs."
    ):
        tfs.repeated_measures(maps, factors=FACTORS, effect="load:memory", scheme="labels")
    with refused(
        'repeated_measures: expected conditions among "2/missed", "2/recalled", "4/missed", "4/recalled", got "6/missed", '
        '"6/recalled"; use the spelling of the data.'
    ):
        tfs.repeated_measures(maps, factors={**FACTORS, "load": ["2", "6"]}, effect="load")


def test_missing_cells_name_subject_and_condition():
    maps = maps_of(conditions=CELLS)
    values = maps.values.copy()
    values[2, 3] = np.nan
    values[6, 0] = np.nan
    gaps = tfs.ConditionMaps(
        values, subjects=maps.subjects, conditions=CELLS, channels=maps.channels, frequencies=maps.frequencies,
        times=maps.times, unit="decibel",
    )  # fmt: skip
    with refused(
        'repeated_measures, subject S2: expected values in condition "4/missed", got none that is finite; leave out the subject '
        "or the condition.\n"
        'repeated_measures, subject S6: expected values in condition "2/recalled", got none that is finite; leave out the '
        "subject or the condition."
    ):
        tfs.repeated_measures(gaps, factors=FACTORS, effect="load")


# -- one subject ---------------------------------------------------------------------------------------------------------

TIMES = np.arange(-4, 4) / 10


def power_of(trials=12, subject="S7", channels=("Fz", "Pz"), frequencies=(4.0, 8.0), times=TIMES, **columns):
    table = {
        "memory": ["recalled", "missed"] * (trials // 2) + ["missed"] * (trials % 2),
        "number": np.arange(trials),
        **columns,
    }
    return tfs.TrialPower(
        np.random.default_rng(3).exponential(size=(trials, len(channels), len(frequencies), len(times))) + 0.1,
        frequencies=frequencies, times=times, channels=channels, subject=subject, trials=pd.DataFrame(table),
    )  # fmt: skip


def relative(power, **more):
    return tfs.normalized_trials(power, tfs.Baseline((-0.4, -0.2), **{"order": "trial_first", **more}))


def test_kinds_of_trials():
    trials = relative(power_of())
    with refused("trialwise: expected relative trials, got TrialPower; make them with normalized_trials."):
        tfs.trialwise(power_of(), "memory", "recalled", "missed")
    with refused(
        'trialwise, labels: expected one of "assigned", "behaviour", got \'random\'; say who decided the label of a trial.\n'
        'trialwise: expected two different labels, got "missed" twice; name the label it is compared with.\n'
        'subject S7, trialwise: expected a column among "memory", "number", got "memry"; did you mean "memory"? use the name in '
        "the table.\n"
        'subject S7, trialwise, nuisance: expected a column among "memory", "number", got "speed"; use the name in the table.\n'
        'subject S7, trialwise, blocks: expected a column among "memory", "number", got "run"; use the name in the table.'
    ):
        tfs.trialwise(trials, "memry", "missed", "missed", labels="random", nuisance=["speed"], blocks="run")
    with refused(
        'subject S7, trialwise: expected at least two trials with memory "forgotten", got 0 (labels there: "missed", '
        '"recalled"); use the spelling of the trial table.'
    ):
        tfs.trialwise(trials, "memory", "recalled", "forgotten")
    with refused(
        'trialwise: expected trials normalized without regard to their label (reference "pooled" or "named"), got reference '
        '"own", in which the labels enter the normalization and are no longer exchangeable; use Baseline(reference="pooled") '
        'or order="trial_first".'
    ):
        own = tfs.normalized_trials(
            power_of(), tfs.Baseline((-0.4, -0.2), reference="own", order="trial_by_reference"), by="memory"
        )
        tfs.trialwise(own, "memory", "recalled", "missed")


def test_columns_of_trials():
    trials = relative(power_of(run=["1", None] * 6, speed=[1.0, 2.0, None, "fast", *range(8)]))
    with refused(
        'subject S7, trialwise, nuisance, column "speed": expected a value for every trial, got none for "2"; fill it in, or '
        "leave them out.\n"
        'subject S7, trialwise, blocks, column "run": expected a value for every trial, got none for "1", "11", "3", "5", "7", '
        '"9"; fill it in, or leave them out.'
    ):
        tfs.trialwise(trials, "memory", "recalled", "missed", nuisance=["speed"], blocks="run")


def test_slopes_over_trials():
    trials = relative(power_of(same=[2.0] * 12, few=[1.0, 2.0, 3.0] + [None] * 9))
    with refused(
        'subject S7, trialwise_slope, column "same": expected numbers that vary over at least four trials, got 12 numbers, 1 '
        "different; name a column of numbers."
    ):
        tfs.trialwise_slope(trials, "same")
    with refused(
        'subject S7, trialwise_slope, column "few": expected numbers that vary over at least four trials, got 3 numbers, 3 '
        "different; name a column of numbers."
    ):
        tfs.trialwise_slope(trials, "few")
    with refused(
        'subject S7, trialwise_slope: expected a column among "few", "memory", "number", "same", got "speed"; use the name in '
        "the table."
    ):
        tfs.trialwise_slope(trials, "speed")


def test_trials_whose_labels_the_rest_of_the_model_determines():
    trials = relative(power_of(run=["1", "2"] * 6, code=[1, 0] * 6))
    for settings in ({"blocks": "run"}, {"nuisance": ["code"]}):
        with refused(
            'subject S7, trialwise, column "memory": expected values that vary apart from blocks and nuisance covariates, got '
            "values that these determine; leave out the covariate that says the same."
        ):
            tfs.trialwise(trials, "memory", "recalled", "missed", **settings)
    few = relative(power_of(5, a=[1, 5, 2, 8, 3], b=[9, 1, 4, 4, 2], c=[3, 3, 1, 0, 7]))
    with refused(
        "subject S7, trialwise: expected more trials than the 5 parameters of the model, got 5; leave out covariates or add "
        "trials."
    ):
        tfs.trialwise(few, "memory", "recalled", "missed", nuisance=["a", "b", "c"])
    with refused(
        'subject S7, trialwise_slope, column "number": expected values that vary apart from blocks and nuisance covariates, got '
        "values that these determine; leave out the covariate that says the same."
    ):
        tfs.trialwise_slope(trials, "number", nuisance=["number"])


def test_change_from_baseline():
    with refused("trialwise_change: expected TrialPower, got RelativeTrials; read it with read_power."):
        tfs.trialwise_change(relative(power_of()), (-0.4, -0.2))
    with refused(
        "subject S7, trialwise_change: expected at least two trials, got 1; one trial has no spread to test against."
    ):
        tfs.trialwise_change(power_of(1), (-0.4, -0.2))
    with refused(
        "subject S7, trialwise_change: expected times outside the baseline that hold a window of its length, got -0.4 to 0.3 s "
        "with a window of 6 samples; shorten the baseline window or read more of the trial."
    ):
        tfs.trialwise_change(power_of(), (-0.4, 0.1))
    with refused(
        "subject S7, trialwise_change, baseline_window: expected a window that holds at least one point of the axis -0.4 to "
        "0.3 s, got 1 to 2 s; choose a window inside the data."
    ):
        tfs.trialwise_change(power_of(), (1, 2))


# -- trial-level effects of many subjects ----------------------------------------------------------------------------------

BASELINE = tfs.Baseline((-0.4, -0.2), order="trial_first")


def test_effects_over_trials():
    with refused(
        "trial_effect_maps: expected both labels or neither, got one; give first and second, or a column of numbers."
    ):
        tfs.trial_effect_maps([power_of()], "memory", BASELINE, first="recalled")
    with refused("trial_effect_maps, powers: expected at least one subject, got none; check the pattern of the files."):
        tfs.trial_effect_maps([], "number", BASELINE)
    powers = [
        power_of(subject="A"),
        power_of(subject="B", memory=["recalled"] * 11 + ["missed"]),
        power_of(subject="C"),
    ]
    del powers[2].trials["memory"]
    with refused(
        'subject B, trial_effect_maps: expected at least two trials with memory "missed", got 1; leave the subject out.\n'
        'subject C, trial_effect_maps: expected a column among "number", got "memory"; use the name in the table.'
    ):
        tfs.trial_effect_maps(powers, "memory", BASELINE, first="recalled", second="missed")
    with refused(
        'subject S7, trial_effect_maps, column "memory": expected numbers that vary over at least three trials, got 0 numbers; '
        "name a column of numbers, or give first and second."
    ):
        tfs.trial_effect_maps([power_of()], "memory", BASELINE)
    with refused(
        "subject S7, trial_effect_maps: expected trials that vary apart from the nuisance columns, got 12 trials that do not; "
        "leave out a column."
    ):
        tfs.trial_effect_maps([power_of(twice=np.arange(12) * 2)], "number", BASELINE, nuisance=["twice"])


def test_axes_of_subjects():
    powers = [
        power_of(subject="A"),
        power_of(subject="B", channels=("Fz", "Cz")),
        power_of(subject="C", frequencies=(4.0, 9.0)),
        power_of(subject="D", times=np.arange(-4, 5) / 10),
    ]
    with refused(
        'subject B, channels: expected those of subject A, got "Cz", "Fz"; bring all to the same.\n'
        "subject C, frequencies: expected those of subject A, got 4 to 9 in 2 steps; bring all subjects to the same axis.\n"
        "subject D, times: expected those of subject A, got -0.4 to 0.4 in 9 steps; bring all subjects to the same axis."
    ):
        tfs.trial_effect_maps(powers, "number", BASELINE)
    with refused(
        'maps, subjects: expected each subject once, got "A" more than once; rename or drop the repeated ones.'
    ):
        tfs.trial_effect_maps([power_of(subject="A"), power_of(subject="A")], "number", BASELINE)


# -- a part of the plane -----------------------------------------------------------------------------------------------------


def test_parts_of_the_plane():
    contrast = tfs.paired(maps_of(), "task", "rest")
    with refused(
        'test, channels: expected channels among "Fz", "Pz", got "Oz"; use the spelling of the data.\n'
        "test, frequencies: expected a window that holds at least one point of the axis 4 to 8 Hz, got 20 to 30 Hz; choose a "
        "window inside the data.\n"
        "test, times: expected a window that holds at least one point of the axis 0 to 0.2 s, got 0.5 to 1 s; choose a window "
        "inside the data."
    ):
        restricted(contrast, channels=["Oz"], frequencies=(20, 30), times=(0.5, 1.0))


# -- regions and gaps --------------------------------------------------------------------------------------------------------


def test_regions():
    powers = [power_of(subject="A"), power_of(subject="B"), power_of(subject="C")]
    baseline = tfs.Baseline((-0.4, -0.2))

    def maps(table, **more):
        return tfs.condition_maps(powers, "memory", baseline, regions=table, **more)

    with refused(
        'condition_maps, regions: expected a table with the columns "channel", "region", "subject", got "channel", "site"; give '
        "one row a channel."
    ):
        maps(pd.DataFrame({"channel": ["Fz"], "site": ["left"]}))
    with refused(
        'condition_maps, regions: expected a table with the columns "channel", "region", "subject", got dict; give one row a '
        "channel."
    ):
        maps({"A": "left"})
    rows = [("A", "Fz", "front"), ("A", "Pz", "back"), ("B", "Fz", "front"), ("B", "Oz", "back")]
    table = pd.DataFrame(rows, columns=["subject", "channel", "region"])
    with refused(
        'subject B, mean_across, channels, group "back": expected channels among "Fz", "Pz", got "Oz"; use the spelling of the '
        "data.\n"
        'subject C, regions: expected at least one row in the regions table, got none (subjects there: "A", "B"); add the '
        "subject's channels, or leave the subject out."
    ):
        maps(table)
    with refused(
        'condition_maps, missing_channels: expected one of "keep_common", "leave_gaps", "refuse", got \'gaps\'; choose one of '
        "them."
    ):
        maps(table, missing_channels="gaps")
