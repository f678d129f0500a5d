"""The exact text of each refusal by baselines, relative trials, condition maps and the generator."""

from contextlib import contextmanager

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tfstats.simulated_power import PlantedEffect, StudyDesign, lamp_sequences, simulate_subject

TIMES = np.arange(-6, 10) * 0.1


@contextmanager
def refused(*texts):
    with pytest.raises(tfs.InputError) as caught:
        yield
    assert caught.value.problems == texts


def power_of(
    subject="S1", channels=("Fz", "Pz"), labels=("recalled", "missed"), times=TIMES, frequencies=(4.0, 8.0), **more
):
    trials = more.pop("trials", pd.DataFrame({"memory": list(labels) * 4}))
    values = more.pop("values", None)
    if values is None:
        values = np.random.default_rng(0).exponential(size=(len(trials), len(channels), len(frequencies), len(times)))
    return tfs.TrialPower(
        values, frequencies=frequencies, times=times, channels=channels, trials=trials, subject=subject, **more
    )


def maps_of(values=None, **more):
    values = np.zeros((2, 2, 1, 2, 3)) if values is None else values
    names = {
        "subjects": ["S1", "S2"],
        "conditions": ["recalled", "missed"],
        "channels": ["Fz"],
        "frequencies": [4, 8],
        "times": [0.0, 0.1, 0.2],
        "unit": "decibel",
    }
    return tfs.ConditionMaps(values, **{**names, **more})


# -- Baseline -------------------------------------------------------------------------------------


def test_all_mistakes_of_a_baseline_at_once():
    with refused(
        "baseline, window: expected seconds within 100 of the event, got -500 to -200, probably milliseconds; "
        "divide both edges by 1000.",
        'baseline, unit: expected one of "decibel", "none", "percent_change", "ratio", "z_score", got \'dB\'; '
        "choose one of them.",
        'baseline, reference: expected one of "named", "own", "pooled", got \'mine\'; choose one of them.',
        'baseline, order: expected one of "average_first", "trial_by_reference", "trial_first", got None; '
        "choose one of them.",
        'baseline, baseline_mean: expected one of "arithmetic", "geometric", got \'median\'; '
        "choose one of them or leave it out for the default.",
        'baseline, within: expected the name of one trial column, got 3; write a column such as "run".',
    ):
        tfs.Baseline((-500, -200), "dB", "mine", None, within=3, baseline_mean="median")


@pytest.mark.parametrize(
    "window, text",
    [
        ("early", "two numbers, start and stop in s, got 'early'; write (-0.5, -0.2) for instance."),
        ((-0.5,), "two numbers, start and stop in s, got (-0.5,); write (-0.5, -0.2) for instance."),
        (None, "two numbers, start and stop in s, got None; write (-0.5, -0.2) for instance."),
        ((-0.5, np.inf), "two finite numbers in s, got -0.5 to inf; write (-0.5, -0.2) for instance."),
        ((-0.2, -0.5), "a start not after its stop, in s, got -0.2 to -0.5; exchange the two edges."),
    ],
)
def test_windows(window, text):
    with refused(f"baseline, window: expected {text}"):
        tfs.Baseline(window)


def test_reference_conditions():
    with refused(
        'baseline, reference_condition: expected the condition whose baseline is used with reference "named", got None; '
        'name it, or use reference "pooled" or "own".'
    ):
        tfs.Baseline(reference="named")
    with refused(
        'baseline, reference_condition: expected no reference condition with reference "pooled", got "rest"; '
        'leave it out or set reference "named".'
    ):
        tfs.Baseline(reference_condition="rest")


def test_z_scores():
    with refused(
        'baseline, baseline_mean: expected an arithmetic mean with unit "z_score", got "geometric"; '
        "leave baseline_mean out or choose another unit.",
        'baseline, within: expected no trial column with unit "z_score" and order "average_first", got \'run\'; '
        'leave within out, or use order "trial_by_reference" or another unit.',
    ):
        tfs.Baseline(unit="z_score", baseline_mean="geometric", within="run")


@pytest.mark.parametrize(
    "choice, text",
    [
        (
            {"unit": "none"},
            'power relative to a baseline, got unit "none"; use a Baseline with unit "decibel", "percent_change", '
            '"ratio" or "z_score".',
        ),
        (
            {"order": "trial_first", "baseline_mean": "arithmetic"},
            'decibels whose mean is zero under no change, got unit "decibel" by order "trial_first" with a baseline mean '
            'that is arithmetic (about -1.7 to -2.5 dB under no change); set baseline_mean "geometric" or leave it out, or '
            'use order "average_first".',
        ),
        (
            {"unit": "percent_change", "order": "trial_first"},
            'values whose mean is that of no change when nothing changes, got unit "percent_change" by order "trial_first" '
            "with a baseline mean that is arithmetic (dividing each trial by its own noisy baseline shifts the mean); use "
            'order "average_first" or "trial_by_reference" with an arithmetic mean, or unit "decibel".',
        ),
        (
            {"unit": "ratio", "baseline_mean": "geometric"},
            'values whose mean is that of no change when nothing changes, got unit "ratio" by order "average_first" with a '
            "baseline mean that is geometric (a geometric mean lies below the mean of power); set baseline_mean "
            '"arithmetic" or leave it out, or use unit "decibel".',
        ),
    ],
)
def test_what_may_not_be_held_against_chance(choice, text):
    from tfstats.normalization import chance_problem

    assert chance_problem(tfs.Baseline(**choice)) == f"test against chance: expected {text}"


# -- normalized_trials ----------------------------------------------------------------------------


def test_arguments_of_normalized_trials():
    with refused(
        "normalized_trials: expected the power of one subject, got list; give a TrialPower.",
        "normalized_trials: expected a Baseline, got str; make one with Baseline(...).",
    ):
        tfs.normalized_trials([power_of()], "decibel")
    with refused(
        'normalized_trials, order: expected one of "trial_by_reference", "trial_first", got "average_first", which is '
        'about averages; set Baseline(order="trial_first") or use condition_maps.'
    ):
        tfs.normalized_trials(power_of(), tfs.Baseline())
    with refused(
        'normalized_trials, by: expected the trial column with the conditions for reference "own", got None; '
        'name it, or use reference "pooled".'
    ):
        tfs.normalized_trials(power_of(), tfs.Baseline(order="trial_by_reference", reference="own"))


def test_trials_without_a_label_under_a_reference_of_their_own():
    with refused(
        "subject S1, trials: expected a condition for every trial, got 4 trials without; "
        'leave them out with select, or use reference "pooled".'
    ):
        tfs.normalized_trials(
            power_of(labels=("recalled", None)), tfs.Baseline(order="trial_by_reference", reference="own"), by="memory"
        )


def test_missing_columns_labels_and_groups():
    baseline = tfs.Baseline(order="trial_by_reference", reference="named", reference_condition="rest", within="run")
    with refused(
        'subject S1, trials: expected a trial column among "memory", got "run"; use the name in the trial table.'
    ):
        tfs.normalized_trials(power_of(), baseline, by="memory")
    trials = pd.DataFrame({"memory": ["recalled", "rest"] * 4, "run": ["1"] * 7 + [None]})
    with refused(
        'subject S1, baseline, within: expected a value of "run" for every trial, got 1 trials without; '
        "complete the trial table or leave these trials out."
    ):
        tfs.normalized_trials(power_of(trials=trials), baseline, by="memory")
    trials["run"] = ["1"] * 6 + ["2"] * 2
    trials["memory"] = ["recalled", "rest"] * 3 + ["recalled"] * 2
    with refused(
        'subject S1, baseline: expected trials of condition "rest" with run "2" as reference, got none (conditions there: '
        '"recalled", "rest"); use the spelling of the trial table or another reference.'
    ):
        tfs.normalized_trials(power_of(trials=trials), baseline, by="memory")


def test_parts_of_relative_trials():
    trials = tfs.normalized_trials(power_of(), tfs.Baseline(order="trial_first"))
    with refused(
        "select, trials: expected one bool for each of the 8 trials, got shape (2,); give one a trial.",
        'select, channels: expected channels among "Fz", "Pz", got "Oz"; use the spelling of the data.',
        "select, times: expected a window that holds at least one point of the axis -0.6 to 0.9 s, got 2 to 3 s; "
        "choose a window inside the data.",
    ):
        trials.select(trials=[True, False], channels=["Oz"], times=(2, 3))
    with refused("select, trials: expected positions from 0 to 7, or a bool a trial, got [9]; count trials from 0."):
        trials.select(trials=[9])
    with refused(
        "select, trials: expected labels that some trial has together, got memory 'lost'; choose other labels."
    ):
        trials.select(trials={"memory": "lost"})


def test_relative_trials_that_do_not_fit():
    trials = tfs.normalized_trials(power_of(), tfs.Baseline(order="trial_first"))
    with refused(
        "relative trials, channels: expected as many as axis 1 of the values has, got 1 for values of shape (8, 2, 2, 16); "
        "order the values as (trials, channels, frequencies, times)."
    ):
        tfs.RelativeTrials(
            trials.values,
            frequencies=trials.frequencies,
            times=trials.times,
            channels=["Fz"],
            trials=trials.trials,
            subject="S1",
            unit="decibel",
        )


# -- baseline windows in data ---------------------------------------------------------------------


def test_a_window_outside_the_times():
    for window in ((-2, -1), (-0.9, -0.2), (0.5, 1.5)):
        with refused(
            f"subject S1, baseline window: expected a window inside the times -0.6 to 0.9 s, got {window[0]:g} to "
            f"{window[1]:g} s; choose a window inside the data."
        ):
            tfs.condition_maps([power_of()], "memory", tfs.Baseline(window))


def test_a_window_between_two_samples():
    with refused(
        "subject S1, baseline window: expected a window that holds at least one point of the axis -0.6 to 0.9 s, "
        "got -0.36 to -0.34 s; choose a window inside the data."
    ):
        tfs.normalized_trials(power_of(), tfs.Baseline((-0.36, -0.34), order="trial_first"))


def test_z_scores_over_a_single_sample():
    with refused(
        'subject S1, baseline window: expected at least two samples for unit "z_score", got one; '
        "widen the window or take another unit."
    ):
        tfs.condition_maps([power_of()], "memory", tfs.Baseline((-0.3, -0.3), "z_score"))


@pytest.mark.parametrize("order", ["average_first", "trial_first", "trial_by_reference"])
def test_a_window_without_a_finite_sample_at_any_frequency(order):
    values = np.ones((8, 2, 2, TIMES.size))
    values[..., 1:5] = np.nan
    text = (
        "subject {}, baseline window: expected finite power from -0.5 to -0.2 s in {} at one frequency at least, got none "
        "at any frequency; choose a window where power is known (wavelets leave the ends of a trial empty)."
    )
    powers = [power_of("S1", values=values), power_of("S2", values=values)]
    with refused(*(text.format(name, 'the baseline of condition "missed"') for name in ("S1", "S2"))):
        tfs.condition_maps(powers, "memory", tfs.Baseline(order=order))
    if order != "average_first":
        with refused(text.format("S1", "the baseline")):
            tfs.normalized_trials(powers[0], tfs.Baseline(order=order))


def test_a_constant_baseline_under_z_scores():
    with refused(
        "subject S1, baseline window: expected finite power that varies from -0.5 to -0.2 s in the baseline of condition "
        '"missed" at one frequency at least, got none at any frequency; choose a window where power is known (wavelets '
        "leave the ends of a trial empty)."
    ):
        tfs.condition_maps([power_of(values=np.ones((8, 2, 2, TIMES.size)))], "memory", tfs.Baseline(unit="z_score"))


# -- condition_maps -------------------------------------------------------------------------------


def test_all_wrong_arguments_of_condition_maps_at_once():
    with refused(
        'by: expected a trial column or several, each once, got []; write "memory" or ["load", "memory"].',
        "condition_maps, baseline: expected a Baseline, got NoneType; make one with Baseline(...).",
        'condition_maps, conditions: expected a list of conditions, got the single text "recalled"; write ["recalled"].',
        'condition_maps, missing_channels: expected one of "keep_common", "leave_gaps", "refuse", '
        "got 'ignore'; choose one of them.",
        "condition_maps, progress: expected False or a function, got 'yes'; give one of the two.",
        'condition_maps, trial_counts: expected one of "as_recorded", "equal", "jackknife", got \'all\'; '
        "choose one of them.",
    ):
        tfs.condition_maps(
            [], [], None, conditions="recalled", trial_counts="all", missing_channels="ignore", progress="yes"
        )


def test_no_subject_and_something_else_than_power():
    with refused("condition_maps, powers: expected at least one subject, got none; check the pattern of the files."):
        tfs.condition_maps([], "memory", tfs.Baseline())
    with refused("condition_maps, powers: expected TrialPower, got ndarray; read it with read_power."):
        tfs.condition_maps([np.ones(3)], "memory", tfs.Baseline())


def test_the_problems_of_all_subjects_at_once():
    powers = [
        power_of("S1"),
        power_of("S2", labels=("recalled", "lost")),
        power_of("S3", channels=("Fz",)),
        power_of("S1"),
        power_of("S4", frequencies=(4.0, 9.0), times=TIMES[:-1]),
        power_of("S5", channels=("Fz", "Pz", "Oz")),
        power_of("S6", trials=pd.DataFrame({"memori": ["recalled", "missed"]})),
    ]
    people = pd.DataFrame({"participant_id": ["S1", "S2", "S3", "S4", "S5", "S5", "S7"]})
    with refused(
        "subject S1: expected each subject once, got it again; join the files of a subject or rename one.",
        "subject S4, frequencies: expected those of subject S1 (2 from 4 to 8 Hz), got 2 from 4 to 9 Hz; bring all "
        "subjects to the same axis or leave the subject out.",
        "subject S4, times: expected those of subject S1 (16 from -0.6 to 0.9 s), got 15 from -0.6 to 0.8 s; bring all "
        "subjects to the same axis or leave the subject out.",
        'subject S6, trials: expected a trial column among "memori", got "memory"; did you mean "memori"? use the name '
        "in the trial table.",
        'subject S2, conditions: expected trials of "missed", got none (4 of "lost", 4 of "recalled"); leave the '
        "subject out, or the condition.",
        'subject S3, channels: expected "Pz" as in the other subjects, got none of that name among its 1; leave the '
        'subject out, or set missing = "keep_common" under [channels].',
        'subject S5, channels: expected the channels of the other subjects, got "Oz" besides; leave them out, or set '
        'missing = "keep_common" under [channels].',
        'participants: expected one row a subject, got several for "S5"; keep one row of each.',
        'participants: expected a row for each of the 6 subjects, got none for "S6"; add the rows.',
        'participants: expected power for each row, got none for "S7"; add the power or take the rows out.',
    ):
        tfs.condition_maps(powers, "memory", tfs.Baseline(), conditions=["recalled", "missed"], participants=people)


def test_no_channel_that_all_have_and_no_label_anywhere():
    with refused("channels: expected at least one channel that all subjects have, got none; check their names."):
        tfs.condition_maps(
            [power_of("S1", channels=("Fz",)), power_of("S2", channels=("Pz",))],
            "memory",
            tfs.Baseline(),
            missing_channels="keep_common",
        )
    with refused('condition_maps, by: expected condition labels in "memory", got none; name another trial column.'):
        tfs.condition_maps([power_of(labels=(None,))], "memory", tfs.Baseline())


def test_z_scores_of_unequal_counts():
    with refused(
        'subject S1, trial counts: expected equal counts for unit "z_score" by "average_first" with reference "own", whose '
        'SD falls with the count, got missed 4, recalled 8; use reference "pooled", another unit, or trial_counts '
        '"equal".'
    ):
        tfs.condition_maps(
            [power_of(labels=("recalled", "missed", "recalled"))],
            "memory",
            tfs.Baseline(unit="z_score", reference="own"),
        )


def test_files_that_cannot_be_read_are_listed_with_what_is_wrong_in_the_others(tmp_path):
    for name in ("1", "2", "3"):
        labels = ("recalled", "lost") if name == "3" else ("recalled", "missed")
        tfs.write_power(tmp_path / f"S{name}.npz", power_of(name, labels=labels))
    (tmp_path / "S2.npz").write_bytes((tmp_path / "S2.npz").read_bytes()[:100])
    people = pd.DataFrame({"participant_id": ["1", "2", "3"]})
    with pytest.raises(tfs.InputError) as caught:
        tfs.condition_maps(
            tfs.PowerFiles(tmp_path / "S{subject}.npz"),
            "memory",
            tfs.Baseline(),
            conditions=["recalled", "missed"],
            participants=people,
        )
    unreadable, missing = caught.value.problems
    assert "S2.npz" in unreadable
    assert missing == (
        'subject 3, conditions: expected trials of "missed", got none (4 of "lost", 4 of "recalled"); leave the subject '
        "out, or the condition."
    )


# -- ConditionMaps --------------------------------------------------------------------------------


def test_all_mistakes_of_maps_at_once():
    with refused(
        'maps, subjects: expected each subject once, got "S1" more than once; rename or drop the repeated ones.',
        "maps, conditions: expected at least one condition, got none; give the conditions.",
        'maps, channels: expected a list of channels, got the single text "Fz"; write ["Fz"].',
        "maps, values: expected five axes (subjects, conditions, channels, frequencies, times), got shape (2, 3); "
        "add axes of length one.",
        "maps, unit: expected the name of a unit, got ''; write \"decibel\" for instance.",
        "maps, baseline: expected a Baseline or None, got str; make one with Baseline(...).",
    ):
        maps_of(np.zeros((2, 3)), subjects=["S1", "S1"], conditions=[], channels="Fz", unit="", baseline="pooled")


def test_each_axis_that_does_not_fit_is_named():
    order = "order the values as (subjects, conditions, channels, frequencies, times) and give each its label."
    with refused(
        f"maps, subjects: expected as many as axis 0 of the values has, 2, got 1; {order}",
        f"maps, times: expected as many as axis 4 of the values has, 3, got 2; {order}",
    ):
        maps_of(subjects=["S1"], times=[0.0, 0.1])


def test_values_that_are_no_maps():
    with refused("maps, values: expected finite numbers or NaN, got 1 infinite; set what cannot be estimated to NaN."):
        maps_of(np.where(np.arange(24).reshape(2, 2, 1, 2, 3) == 3, np.inf, 0.0))
    with refused("maps, values: expected real numbers, got type complex128; convert them."):
        maps_of(np.zeros((2, 2, 1, 2, 3), dtype=complex))
    with refused(
        "maps, values: expected an array (subjects, conditions, channels, frequencies, times), got rows of unequal length; "
        "fill gaps with NaN."
    ):
        maps_of([[1.0], [1.0, 2.0]])


def test_trial_counts_that_do_not_fit():
    with refused(
        "maps, trial_counts: expected shape (2, 2), subjects x conditions, got shape (2,); give one count a map."
    ):
        maps_of(trial_counts=[3, 4])
    with refused(
        "maps, trial_counts: expected whole numbers of at least 0, got [3.5, 4.0, 5.0, 6.0] ...; give the number of trials."
    ):
        maps_of(trial_counts=[[3.5, 4], [5, 6]])
    with refused(
        'maps, trial_counts: expected a row for each subject and a column for each condition, got none for "missed"; '
        "add them."
    ):
        maps_of(trial_counts=pd.DataFrame({"recalled": [1, 2]}, index=["S1", "S2"]))


def test_participants_that_do_not_fit():
    with refused("participants: expected a DataFrame with one row a subject, got dict; read the table with pandas."):
        maps_of(participants={})
    with refused(
        'participants: expected a column "participant_id", got "age", "name"; rename the column that holds the subjects.'
    ):
        maps_of(participants=pd.DataFrame({"name": ["S1", "S2"], "age": [1, 2]}))


def test_wavelet_cycles_that_do_not_fit():
    with refused(
        "maps, wavelet_cycles: expected one positive number, or one for each of the 2 frequencies, got shape (3,), smallest "
        "3; give the cycles of the wavelets."
    ):
        maps_of(wavelet_cycles=[3, 4, 5])


def test_parts_of_maps():
    with refused(
        'select, subjects: expected subjects among "S1", "S2", got "S3"; use the spelling of the data.',
        'select, conditions: expected conditions among "missed", "recalled", got "lost"; use the spelling of the data.',
        "select, frequencies: expected a start not after its stop, in Hz, got 8 to 4; exchange the two edges.",
    ):
        maps_of().select(subjects=["S3"], conditions=["lost"], frequencies=(8, 4))


def test_means_over_axes():
    with refused(
        'mean_across, axis: expected one of "channels", "frequencies", "times", got \'subjects\'; choose one of them.',
        'mean_across, of: expected one of "ratios", "units", got \'power\'; choose one of them.',
    ):
        maps_of().mean_across("subjects", of="power")
    with refused(
        "mean_across, channels: expected a mapping of group name to members, got ['Fz']; "
        'write {"frontal": ["F3", "Fz"]} for instance.'
    ):
        maps_of().mean_across("channels", ["Fz"])
    with refused(
        'mean_across, channels, group "a": expected at least one channel, got none; name its channels.',
        'mean_across, channels, group "b": expected channels among "Fz", got "Oz"; use the spelling of the data.',
    ):
        maps_of().mean_across("channels", {"a": [], "b": ["Oz"]})
    with refused(
        "mean_across, frequencies: expected groups in ascending order with different centres, got high at 8, low at 4; "
        "sort them, or average them one by one."
    ):
        maps_of().mean_across("frequencies", {"high": (8, 8), "low": (4, 4)})


def test_map_files(tmp_path):
    with refused('save, maps.npy: expected a file name that ends in ".npz", got ".npy"; change its ending.'):
        maps_of().save(tmp_path / "maps.npy")
    with refused(f"load, maps.npz: expected a file, got nothing at {tmp_path / 'maps.npz'}; check the path."):
        tfs.ConditionMaps.load(tmp_path / "maps.npz")
    maps_of().save(tmp_path / "maps.npz")
    whole = (tmp_path / "maps.npz").read_bytes()
    (tmp_path / "cut.npz").write_bytes(whole[: len(whole) // 2])
    with refused(
        "load, cut.npz: expected a whole file written by ConditionMaps.save, got one that cannot be read (BadZipFile); "
        "save the maps again."
    ):
        tfs.ConditionMaps.load(tmp_path / "cut.npz")
    np.savez(tmp_path / "other.npz", values=np.zeros(3))
    with refused(
        "load, other.npz: expected a whole file written by ConditionMaps.save, got one that cannot be read (KeyError); "
        "save the maps again."
    ):
        tfs.ConditionMaps.load(tmp_path / "other.npz")
    np.savez(tmp_path / "pickled.npz", about=np.array([{}], dtype=object))
    with refused(
        "load, pickled.npz: expected a whole file written by ConditionMaps.save, got one that cannot be read (ValueError); "
        "save the maps again."
    ):
        tfs.ConditionMaps.load(tmp_path / "pickled.npz")
    np.savez(tmp_path / "later.npz", about=np.array('{"kind": "tfstats condition maps 9"}'))
    with refused(
        'load, later.npz: expected maps of kind "tfstats condition maps 1", got another kind; '
        "read it with the version that wrote it."
    ):
        tfs.ConditionMaps.load(tmp_path / "later.npz")


# -- simulated power ------------------------------------------------------------------------------


def test_planted_effects():
    with refused(
        'planted effect, edges: expected one of "box", "smooth", got \'round\'; choose one of them.',
        "planted effect, band: expected a start not after its stop, got 8 to 4; exchange them.",
        "planted effect, spread: expected a standard deviation of at least 0, got -1; give it in dB.",
    ):
        PlantedEffect("recalled", (8, 4), (0, 1), ("Fz",), 1.0, spread=-1, edges="round")


def test_study_designs():
    with refused(
        'study design, subjects: expected each subject once, got "S1" more than once; rename or drop the repeated ones.',
        'study design, trials of "recalled": expected at least one, the smaller number first, got 5 to 3; '
        "give (least, most).",
        'planted effect, condition: expected one of "recalled", got "missed"; choose one.',
        'planted effect, channels: expected channels among "Fz", got "Pz"; choose others.',
        "study design, wavelet_cycles: expected a number above 0, got 0; choose another.",
        "study design, shared: expected a number of at least 0 and below 1, got 1.5; choose another.",
    ):
        StudyDesign(
            subjects=("S1", "S1"),
            channels=("Fz",),
            frequencies=(4.0, 8.0),
            times=(0.0, 0.1),
            trial_counts={"recalled": (5, 3)},
            effects=(PlantedEffect("missed", (4, 8), (0, 1), ("Pz",), 1.0),),
            wavelet_cycles=0,
            shared=1.5,
        )
    with refused('simulated subject: expected a subject of the design, got "S99"; choose one of design.subjects.'):
        simulate_subject(lamp_sequences(), "S99")
