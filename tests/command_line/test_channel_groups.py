"""[channels] average_groups: channel groups averaged in power before the ratio, for maps and bands alike."""

from __future__ import annotations

import numpy as np
import pytest

import tfstats as tfs
from tfstats.plan_file.study_stages import built_contrast, study_bands, study_maps, study_opened, test_settings

GROUPS = '[channels.groups]\nsides = ["F3", "F4"]\nmiddle = ["Fz"]\n[baseline]'


def opened(folder):
    plan = tfs.AnalysisPlan.read(folder / "plan.toml")
    study = study_opened(plan)
    return plan, study, study_maps(plan, study)


def test_groups_are_rows_of_the_band_table_and_channels_stay_by_default(study, respelled):
    respelled("[baseline]", GROUPS)
    plan, _, maps = opened(study)
    assert maps.channels == ("F3", "Fz", "F4")
    assert study_bands(plan, maps)["channels"].tolist() == ["sides", "middle"]
    assert not any("Power was averaged over channels" in line for line in maps.history)


def test_power_is_averaged_before_the_ratio(study, respelled):
    respelled("[baseline]", GROUPS)
    respelled("[channels]", "[channels]\naverage_groups = true")
    plan, opened_study, maps = opened(study)
    assert maps.channels == ("sides", "middle")
    assert (
        "Power was averaged over channels (sides: F3, F4; middle: Fz), each channel weighing the same." in maps.history
    )
    with np.load(study / "power" / "S03.npz") as pack:
        power = pack["power"]
    window = slice(0, 4)  # -0.5 to -0.2 s
    recalled = np.arange(12) % 2 == 0
    sides = power[:, [0, 2]].mean(axis=1)
    ratio = sides[recalled].mean(axis=0) / sides.mean(axis=0)[:, window].mean(axis=-1)[:, None]
    np.testing.assert_allclose(maps.values[2, 0, 0], 10 * np.log10(ratio), rtol=1e-12, atol=1e-12)
    bands = study_bands(plan, maps)
    assert bands["channels"].tolist() == ["sides", "middle"]
    call = plan.contrasts[0]
    contrast = built_contrast(plan, opened_study, maps, call)
    assert contrast.channels == ("sides", "middle")
    assert test_settings(plan, opened_study, call, contrast)["adjacency"] is None


def test_single_trials_of_groups(study, respelled):
    respelled("[baseline]", GROUPS)
    respelled("[channels]", "[channels]\naverage_groups = true")
    plan, opened_study, _ = opened(study)
    assert [power.channels for power in opened_study.powers] == [("sides", "middle")] * 7
    np.testing.assert_allclose(
        opened_study.powers.of("02").as_array()[:, 1], tfs.read_power(study / "power" / "S02.npz").as_array()[:, 1]
    )


@pytest.mark.parametrize(
    ("before", "after", "text"),
    [
        (
            "[channels]", "[channels]\naverage_groups = true",
            "plan.toml, line 13, channels, average_groups: expected channel groups to average, got none; add "
            "[channels.groups], or "
            "remove average_groups.",
        ),
        (
            "[baseline]", 'average_groups = true\nregions = "regions.tsv"\n' + GROUPS,
            "plan.toml, line 16, channels, average_groups: expected either groups or regions, got both; remove "
            "average_groups, or "
            "regions.",
        ),
    ],
)  # fmt: skip
def test_refusals(study, respelled, before, after, text):
    respelled(before, after)
    with pytest.raises(tfs.InputError) as caught:
        tfs.AnalysisPlan.read(study / "plan.toml")
    assert caught.value.problems == (text,)


def test_a_channel_that_is_not_there_is_named(study, respelled):
    respelled("[baseline]", GROUPS.replace('"Fz"', '"FZ"'))
    respelled("[channels]", "[channels]\naverage_groups = true")
    with pytest.raises(tfs.InputError) as caught:
        opened(study)
    assert len(caught.value.problems) >= 1 and all("FZ" in text for text in caught.value.problems)


def test_means_over_axes_and_time_steps_of_the_plan(study, respelled):
    respelled("[baseline]", GROUPS)
    respelled("[channels]", "[channels]\naverage_groups = true")
    respelled(
        '[[contrast]]\nname = "missed changes"',
        '[test]\ntimes = [0.0, 0.6]\nfrequencies = [6, 10]\nmean_across = ["frequencies"]\nevery_nth_time = 2\n'
        '[[contrast]]\nname = "missed changes"',
    )
    plan, opened_study, maps = opened(study)
    contrast = built_contrast(plan, opened_study, maps, plan.contrasts[0])
    assert contrast.shape == (2, 1, 4)
    np.testing.assert_allclose(contrast.times, [0.0, 0.2, 0.4, 0.6], atol=1e-12)
    part = maps.values[:, 0, :, 1:, 5:12:2].mean(axis=2) - maps.values[:, 1, :, 1:, 5:12:2].mean(axis=2)
    np.testing.assert_allclose(contrast.values[:, :, 0].mean(axis=0), part.mean(axis=0), atol=1e-9)
