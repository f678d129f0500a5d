"""Long tables of band power: the rows, their values, and the files they are written to."""

from __future__ import annotations

import importlib.util
import sys

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs

BANDS = {"theta": (4, 8), "alpha": (9, 13), "theta - alpha": ("theta", "alpha")}
WINDOWS = {"early": (0.0, 0.1), "late": (0.2, 0.3)}


@pytest.fixture
def maps():
    rng = np.random.default_rng(4)
    return tfs.ConditionMaps(
        rng.normal(size=(2, 3, 3, 4, 5)), subjects=["01", "02"], conditions=["a", "b", "c"], channels=["F3", "F4", "Pz"],
        frequencies=[4, 8, 10, 13], times=[-0.1, 0.0, 0.1, 0.2, 0.3], unit="decibel", trial_counts=[[10, 11, 12], [13, 14, 15]],
        participants=pd.DataFrame({"participant_id": ["01", "02"], "age": [20, 30], "value": [1, 2]}),
    )  # fmt: skip


def test_one_row_a_subject_condition_channel_band_and_window(maps):
    table = tfs.long_table(maps, BANDS, WINDOWS)
    assert list(table.columns) == [
        "subject",
        "condition",
        "channel",
        "band",
        "window",
        "value",
        "unit",
        "trials",
        "age",
        "participant_value",
    ]
    assert len(table) == 2 * 3 * 3 * 3 * 2 and set(table["unit"]) == {"dB"}
    assert not table.duplicated(["subject", "condition", "channel", "band", "window"]).any()
    frequencies = {"theta": [0, 1], "alpha": [2, 3]}
    times = {"early": [1, 2], "late": [3, 4]}

    def plain(subject, condition, channel, band, window):
        if band == "theta - alpha":
            return plain(subject, condition, channel, "theta", window) - plain(
                subject, condition, channel, "alpha", window
            )
        part = maps.values[subject, condition, channel][np.ix_(frequencies[band], times[window])]
        return sum(part.ravel()) / part.size

    for row in table.itertuples():
        place = maps.subjects.index(row.subject), maps.conditions.index(row.condition), maps.channels.index(row.channel)
        assert row.value == pytest.approx(plain(*place, row.band, row.window), abs=1e-12)
        assert row.trials == maps.trial_counts.to_numpy()[place[:2]] and row.age == (20 if row.subject == "01" else 30)


def test_groups_and_ratios(maps):
    table = tfs.long_table(maps, {"theta": (4, 8)}, {"late": (0.2, 0.3)}, {"frontal": ["F3", "F4"]}, of="ratios")
    assert table["channel"].unique().tolist() == ["frontal"] and len(table) == 6
    part = maps.values[1, 2, :2, :2, 3:]
    found = table[(table["subject"] == "02") & (table["condition"] == "c")]["value"].item()
    assert found == pytest.approx(10 * np.log10(np.mean(10 ** (part / 10))))


def test_counts_that_are_not_known_are_missing(maps):
    table = tfs.long_table(maps._changed(trial_counts=None, participants=None), {"theta": (4, 8)}, WINDOWS)
    assert table["trials"].isna().all() and list(table.columns)[-1] == "trials"


def test_the_means_are_those_of_the_band_table(maps):
    bands = tfs.band_table(
        tfs.ConditionMaps(
            np.random.default_rng(0).normal(size=(8, 2, 3, 4, 5)), subjects=range(8), conditions=["a", "b"],
            channels=maps.channels,
            frequencies=maps.frequencies, times=maps.times, unit="decibel",
        ),
        {"a - b": lambda part: tfs.paired(part, "a", "b")}, {"theta": (4, 8)}, WINDOWS, channel_groups={"frontal": ["F3", "F4"]},
        permutations=128,
    )  # fmt: skip
    whole = tfs.ConditionMaps(
        np.random.default_rng(0).normal(size=(8, 2, 3, 4, 5)), subjects=range(8), conditions=["a", "b"],
            channels=maps.channels,
        frequencies=maps.frequencies, times=maps.times, unit="decibel",
    )  # fmt: skip
    table = tfs.long_table(whole, {"theta": (4, 8)}, WINDOWS, {"frontal": ["F3", "F4"]})
    wide = table.pivot_table(index=["subject", "window"], columns="condition", values="value")
    means = (wide["a"] - wide["b"]).groupby("window").mean()
    np.testing.assert_allclose(bands["estimate"], means[["early", "late"]], rtol=1e-9)


@pytest.mark.parametrize(("ending", "separator"), [(".csv", ","), (".tsv", "\t")])
def test_text_files_lose_nothing(tmp_path, maps, ending, separator):
    table = tfs.long_table(maps, BANDS, WINDOWS)
    table.loc[0, "value"] = np.nan
    tfs.write_table(tmp_path / f"bands{ending}", table)
    again = pd.read_csv(tmp_path / f"bands{ending}", sep=separator, dtype={"subject": str}, encoding="utf-8")
    assert again["value"].to_numpy().tobytes() == table["value"].to_numpy().tobytes()
    assert "n/a" in (tmp_path / f"bands{ending}").read_text(encoding="utf-8")
    assert again["subject"].tolist() == table["subject"].tolist()


@pytest.mark.skipif(importlib.util.find_spec("pyarrow") is None, reason="pyarrow is absent")
def test_parquet(tmp_path, maps):
    table = tfs.long_table(maps, BANDS, WINDOWS)
    tfs.write_table(tmp_path / "bands.parquet", table)
    pd.testing.assert_frame_equal(pd.read_parquet(tmp_path / "bands.parquet"), table, check_dtype=False)


def test_refusals(tmp_path, maps, monkeypatch):
    with pytest.raises(tfs.InputError) as caught:
        tfs.long_table(maps, {"theta": (4, 8), "odd": ("theta", "alpa")}, {"gone": (5, 6)}, {"left": ["F33"]})
    assert caught.value.problems == (
        "long_table, band \"odd\": expected two edges in Hz, or two bands among \"theta\", got ('theta', 'alpa'); correct it.",
        'mean_across, channels, group "left": expected channels among "F3", "F4", "Pz", got "F33"; use the spelling of the data.',
        'mean_across, times, group "gone": expected a window that holds at least one point of the axis -0.1 to '
        '0.3 s, got 5 to 6 s; '
        "choose a window inside the data.",
    )
    with pytest.raises(tfs.InputError) as caught:
        tfs.long_table(maps, {}, [])
    assert caught.value.problems == (
        "long_table, bands: expected a mapping of name to edges of bands, got {}; name at least one.",
        "long_table, windows: expected a mapping of name to edges of windows, got []; name at least one.",
    )
    with pytest.raises(tfs.InputError) as caught:
        tfs.write_table(tmp_path / "bands.xlsx", pd.DataFrame())
    assert caught.value.problems == (
        f'write_table, {tmp_path / "bands.xlsx"}: expected a file that ends in one of ".csv", ".parquet", ".tsv", '
        f'got ".xlsx"; change its '
        "ending.",
    )
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    with pytest.raises(tfs.InputError) as caught:
        tfs.write_table(tmp_path / "bands.parquet", pd.DataFrame())
    assert caught.value.problems == (
        f"write_table, {tmp_path / 'bands.parquet'}: expected pyarrow for parquet files, got no pyarrow; run: "
        f"python -m pip install "
        "pyarrow, or write .csv.",
    )
