"""`tfstats demo`: what it writes, and that it finds what it planted and little else."""

from __future__ import annotations

from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tests.command_line.tiny_study import tfstats_command
from tfstats.simulated_power import lamp_sequences, planted_decibels


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> SimpleNamespace:
    folder = tmp_path_factory.mktemp("somewhere") / "demo"
    done = tfstats_command("demo", folder)
    return SimpleNamespace(folder=folder, results=tfs.read_results(folder / "results"), **vars(done))


def planted(result: tfs.ContrastResult) -> np.ndarray:
    """Decibels by which recalled was made to differ from missed, on the tested part of the plane."""
    design = lamp_sequences()
    difference = planted_decibels(design, "recalled") - planted_decibels(design, "missed")
    return difference[..., np.isin(np.round(design.times, 9), np.round(result.times, 9))]


def test_it_ends_well_and_says_where_the_report_is(demo: SimpleNamespace) -> None:
    assert demo.code in (0, None)
    assert f"Report: {demo.folder / 'results' / 'report.html'}" in demo.out
    assert "Traceback" not in demo.err


def test_the_folder_holds_a_whole_study(demo: SimpleNamespace) -> None:
    names = {path.name for path in demo.folder.iterdir()}
    assert {"plan.toml", "participants.tsv", "electrodes.tsv", "power", "results"} <= names
    files = sorted(path.name for path in (demo.folder / "power").iterdir())
    assert files == [f"S{number:02d}.h5" for number in range(1, 21)]
    assert (demo.folder / "results" / "report.html").stat().st_size > 10_000


def test_the_mask_covers_what_was_planted_and_little_else(demo: SimpleNamespace) -> None:
    result = demo.results.contrasts["recalled against missed"]
    difference = planted(result)
    assert difference.shape == result.mask.shape
    strong, nothing = np.abs(difference) >= 0.6, difference == 0.0
    assert np.mean(result.mask[strong]) > 0.8
    assert np.sum(result.mask & nothing) / np.sum(result.mask) < 0.1
    found = result.mask & strong
    assert np.all(np.sign(result.estimate[found]) == np.sign(difference[found]))


@pytest.mark.parametrize(
    ("band", "window", "channels", "decibels"),
    [("theta", "theta window", "frontal", 1.2), ("alpha", "alpha window", "posterior", -1.5)],
)
def test_the_interval_of_the_planted_band_holds_its_size(demo, band, window, channels, decibels) -> None:
    bands = demo.results.bands
    wanted = {"test": "recalled against missed", "band": band, "window": window, "channels": channels}
    row = bands[(bands[list(wanted)] == pd.Series(wanted)).all(axis=1)]
    assert len(row) == 1
    assert row["low"].item() <= decibels <= row["high"].item()
    assert row["p_corrected"].item() <= 0.05


def test_tables_on_disk_say_the_same(demo: SimpleNamespace) -> None:
    result = demo.results.contrasts["recalled against missed"]
    folder = demo.folder / "results"
    clusters = pd.read_csv(folder / "contrasts" / "recalled_against_missed" / "clusters.csv")
    np.testing.assert_allclose(clusters["p"], result.clusters["p"])
    with np.load(folder / "contrasts" / "recalled_against_missed" / "maps.npz", allow_pickle=False) as maps:
        np.testing.assert_array_equal(maps["mask"], result.mask)
        np.testing.assert_array_equal(maps["cluster_labels"], result.cluster_labels)
    values = pd.read_csv(folder / "contrasts" / "recalled_against_missed" / "subject_values.csv")
    assert list(values.columns) == ["subject", "condition", "region", "value", "unit"]
    assert values["subject"].nunique() == 20


def test_show_prints_the_same_findings(demo: SimpleNamespace) -> None:
    shown = tfstats_command("show", demo.folder / "results")
    assert shown.code in (0, None)
    assert shown.out.strip() and shown.out in demo.out
    # One table feeds both: the numbers of the leading cluster stand in what is printed.
    leading = demo.results.contrasts["recalled against missed"].clusters.iloc[0]
    assert f"{leading['estimate']:.2f} [{leading['estimate_low']:.2f}, {leading['estimate_high']:.2f}]" in shown.out


def test_a_second_demo_does_not_write_over_the_first(demo: SimpleNamespace) -> None:
    before = (demo.folder / "plan.toml").read_bytes()
    again = tfstats_command("demo", demo.folder)
    assert again.code == 2
    assert "expected a folder without a plan or power" in again.err
    assert (demo.folder / "plan.toml").read_bytes() == before


def test_the_plan_says_what_was_planted(demo: SimpleNamespace) -> None:
    text = (demo.folder / "plan.toml").read_text(encoding="utf-8")
    difference = planted(demo.results.contrasts["recalled against missed"])
    for size in (difference.max(), -difference.min()):
        assert f"{size:.1f} dB" in text.split("[study]")[0]


def test_quiet_prints_nothing(study: Path) -> None:
    done = tfstats_command("run", study / "plan.toml", "--out", study / "results", "--quiet")
    assert (done.code or 0, done.out, done.err) == (0, "", "")
    assert (study / "results" / "report.html").is_file()
