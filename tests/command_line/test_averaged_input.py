"""Input that is averaged already: power by subject and condition, and condition maps from elsewhere."""

from __future__ import annotations

import numpy as np
import pytest

import tfstats as tfs
from tfstats.plan_file.study_stages import built_contrast, study_maps, study_opened

SUBJECTS = ("01", "02", "03", "04", "05", "06", "07")
TIMES = tuple(round(-0.5 + 0.1 * step, 10) for step in range(14))


def opened(folder):
    plan = tfs.AnalysisPlan.read(folder / "plan.toml")
    study = study_opened(plan)
    return plan, study, study_maps(plan, study)


def averages_of(folder):
    """Each subject's two condition averages, as files and a table of trial counts would come from another program."""
    (folder / "averages").mkdir()
    for subject in SUBJECTS:
        power = tfs.read_power(folder / "power" / f"S{subject}.npz").as_array()[:-1]  # 6 recalled, 5 missed
        for condition, values in (("recalled", power[::2]), ("missed", power[1::2])):
            np.savez(
                folder / "averages" / f"S{subject}_{condition}.npz", power=values.mean(axis=0), channels=["F3", "Fz", "F4"],
                frequencies=[4.0, 6.0, 8.0, 10.0], times=TIMES, axes=["channel", "frequency", "time"],
                **{"trials.n": [len(values)]},
            )  # fmt: skip


@pytest.fixture
def averaged(study, respelled):
    averages_of(study)
    respelled('files = "power/S{subject}.npz"', 'files = "averages/S{subject}_{memory}.npz"\nkind = "averaged_power"')
    respelled('trial_table = "behaviour/S{subject}.tsv"', 'trial_counts = "n"\naxes = ["channel", "frequency", "time"]')
    return study


@pytest.mark.parametrize("change", ["", '\nunit = "percent_change"', '\nreference = "own"'])
def test_averages_with_their_counts_are_as_good_as_trials(averaged, respelled, change):
    respelled("window = [-0.5, -0.2]", f"window = [-0.5, -0.2]{change}")
    plan, study, maps = opened(averaged)
    powers = tfs.PowerFiles(
        averaged / "power" / "S{subject}.npz",
        keep={"number": {"at_most": 10}},
        trial_table=averaged / "behaviour" / "S{subject}.tsv",
    )
    expected = tfs.condition_maps(powers, "memory", plan.baseline, conditions=["recalled", "missed"])
    np.testing.assert_allclose(maps.values, expected.values, rtol=1e-9, atol=1e-9)
    assert maps.conditions == ("recalled", "missed") and maps.unit == plan.baseline.unit
    assert maps.trial_counts.to_numpy().tolist() == [[6, 5]] * 7
    assert maps.history[0] == "Power came to this analysis averaged over the trials of each condition."
    assert plan.baseline.describe() in maps.history
    assert built_contrast(plan, study, maps, plan.contrasts[0]).shape[0] == 3
    assert "age" in maps.participants


def test_a_reference_condition_may_be_in_no_contrast(averaged, respelled):
    respelled('conditions = ["recalled", "missed"]', 'conditions = ["recalled"]')
    respelled("window = [-0.5, -0.2]", 'window = [-0.5, -0.2]\nreference = "named"\nreference_condition = "missed"')
    text = (averaged / "plan.toml").read_text(encoding="utf-8")
    start = text.index('[[contrast]]\nname = "recalled against missed"')
    stop = text.index('[[contrast]]\nname = "missed changes"')
    text = text[:start] + text[stop : text.index("[[band]]")].replace('condition = "missed"', 'condition = "recalled"')
    (averaged / "plan.toml").write_text(text, encoding="utf-8")
    _, _, maps = opened(averaged)
    assert maps.conditions == ("recalled",)
    power = np.load(averaged / "averages" / "S02_recalled.npz")["power"]
    base = np.load(averaged / "averages" / "S02_missed.npz")["power"][..., :4].mean(axis=-1)
    np.testing.assert_allclose(maps.values[1, 0], 10 * np.log10(power / base[..., None]))


def test_a_pooled_baseline_of_averages_needs_their_counts(averaged, respelled):
    respelled('trial_counts = "n"\n', "")
    with pytest.raises(tfs.InputError) as caught:
        opened(averaged)
    (text,) = caught.value.problems
    assert text.startswith(
        "plan.toml, line 17, baseline: relative_maps, trial_counts: expected the number of trials behind each map"
    )


def test_refusals_of_averages(averaged, respelled):
    respelled('trial_counts = "n"', 'trial_counts = "count"')
    with pytest.raises(tfs.InputError) as caught:
        opened(averaged)
    assert caught.value.problems[0] == (
        'subject 01, averaged power, trial_counts: expected a trial column among "memory", "n", got "count"; '
        'correct trial_counts '
        "under [input]."
    )
    assert len(caught.value.problems) == 7


def test_several_averages_of_one_condition_are_refused(study, respelled):
    respelled(
        'trial_table = "behaviour/S{subject}.tsv"', 'trial_table = "behaviour/S{subject}.tsv"\nkind = "averaged_power"'
    )
    with pytest.raises(tfs.InputError) as caught:
        opened(study)
    assert caught.value.problems[0] == (
        'subject 01, averaged power: expected one average for each condition, got several for "missed", '
        '"recalled"; name the columns '
        'that tell them apart under [conditions], or write kind = "trials".'
    )


def test_trial_counts_belong_to_averages(study, respelled):
    respelled(
        'trial_table = "behaviour/S{subject}.tsv"', 'trial_table = "behaviour/S{subject}.tsv"\ntrial_counts = "n"'
    )
    with pytest.raises(tfs.InputError) as caught:
        opened(study)
    assert caught.value.problems == (
        'plan.toml, line 7, input, trial_counts: expected kind = "averaged_power" beside it, got "trials"; set it, or remove '
        "trial_counts.",
    )


@pytest.fixture
def with_maps(study, respelled):
    """The study's maps written by name, in a plan that reads them instead of the power."""

    def change(name, maps, baseline='[baseline]\nunit = "none"'):
        maps.save(study / name) if name.endswith(".npz") else tfs.write_maps(study / name, maps)
        respelled(
            'files = "power/S{subject}.npz"\ntrial_table = "behaviour/S{subject}.tsv"',
            f'files = "{name}"\nkind = "condition_maps"',
        )
        respelled('[conditions]\ncolumns = ["memory"]\nconditions = ["recalled", "missed"]\n', "")
        respelled("[baseline]\nwindow = [-0.5, -0.2]", baseline)
        return study

    return change


@pytest.mark.parametrize("name", ["maps.npz", "maps.h5", "maps.mat", "maps.nc"])
def test_maps_in_their_own_unit_are_used_as_they_are(study, with_maps, name):
    if name.endswith(".nc"):
        pytest.importorskip("xarray")
    _, _, expected = opened(study)
    folder = with_maps(name, expected)
    plan, again, maps = opened(folder)
    assert maps.values.tobytes() == expected.values.tobytes() and maps.unit == "decibel"
    assert maps.participants["age"].tolist() == expected.participants["age"].tolist()
    assert again.files()[0] == folder / name and again.powers.subjects == SUBJECTS
    # The file says that the baseline ended at -0.2 s: the test begins after it.
    assert built_contrast(plan, again, maps, plan.contrasts[1]).times[0] == pytest.approx(-0.1)


def test_averaged_power_in_maps_is_made_relative(study, with_maps):
    plan, first, expected = opened(study)
    power = tfs.condition_maps(first.powers, "memory", tfs.Baseline(unit="none"), conditions=["recalled", "missed"])
    folder = with_maps("power.npz", power, "[baseline]\nwindow = [-0.5, -0.2]")
    _, _, maps = opened(folder)
    np.testing.assert_allclose(maps.values, expected.values, rtol=1e-9, atol=1e-9)
    assert maps.unit == "decibel"


def test_groups_of_averaged_power_in_maps(study, with_maps, respelled):
    _, first, _ = opened(study)
    power = tfs.condition_maps(first.powers, "memory", tfs.Baseline(unit="none"), conditions=["recalled", "missed"])
    folder = with_maps("power.npz", power, "[baseline]\nwindow = [-0.5, -0.2]")
    respelled("[channels]", "[channels]\naverage_groups = true")
    respelled("[baseline]", '[channels.groups]\nsides = ["F3", "F4"]\n[baseline]')
    _, _, maps = opened(folder)
    mean = power.values[:, :, [0, 2]].mean(axis=2)
    base = mean[..., :4].mean(axis=(1, 4 - 1))  # equal counts: the pooled baseline is the plain mean
    np.testing.assert_allclose(maps.values[:, :, 0], 10 * np.log10(mean / base[:, None, :, None]))


def test_refusals_of_maps(study, with_maps, respelled):
    _, _, maps = opened(study)
    with_maps("maps.npz", maps, "[baseline]\nwindow = [-0.5, -0.2]")
    with pytest.raises(tfs.InputError) as caught:
        opened(study)
    assert caught.value.problems == (
        'plan.toml, line 13, baseline, unit: expected unit = "none" for maps that are relative already (decibel), got "decibel"; '
        'write [baseline] with unit = "none".',
    )
    respelled('kind = "condition_maps"', 'kind = "condition_maps"\ntime_unit = "ms"')
    respelled("[baseline]", '[conditions]\ncolumns = ["memory"]\n[baseline]')
    with pytest.raises(tfs.InputError) as caught:
        opened(study)
    assert caught.value.problems == (
        'plan.toml, line 4, input: expected nothing but files for a file of condition maps, got "time_unit"; remove them.',
        "plan.toml, line 14, conditions: expected no [conditions] for a file of condition maps, got one; remove "
        "it; contrasts name the "
        "conditions of the maps.",
    )


def test_trials_are_not_in_maps(study, with_maps, respelled):
    _, _, maps = opened(study)
    with_maps("maps.npz", maps)
    respelled(
        'name = "missed changes"\ndesign = "against_zero"\ncondition = "missed"',
        'name = "t"\ndesign = "trialwise_change"\nsubject = "02"',
    )
    plan, again, found = opened(study)
    with pytest.raises(tfs.InputError) as caught:
        built_contrast(plan, again, found, plan.contrasts[1])
    assert caught.value.problems[0].endswith(
        "subject 02, maps.npz: expected power of single trials for this design, got condition maps; choose a "
        "design over subjects, or "
        'give the trials with kind = "trials".'
    )


def test_participants_that_the_maps_lack(study, with_maps):
    _, _, maps = opened(study)
    with_maps("maps.npz", maps.select(subjects=SUBJECTS[:-1])._changed(participants=None))
    with pytest.raises(tfs.InputError) as caught:
        opened(study)
    assert any('"07"' in text for text in caught.value.problems)
