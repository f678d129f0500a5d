"""What each array of someone's file is taken for."""

from __future__ import annotations

import numpy as np
import pytest

from tfstats.power_files import looked_into
from tfstats.power_files.file_contents import label_counts

RNG = np.random.default_rng(6)


def written(folder, **arrays):
    np.savez(folder / "S1.npz", **arrays)
    return folder / "S1.npz"


def test_names_and_values_tell_times_from_frequencies(tmp_path):
    # Both are positive, even and ascending: only the names are left.
    path = written(
        tmp_path, tfr=RNG.exponential(size=(3, 6, 9, 5)), freqs=np.arange(2.0, 14.0, 2.0), seconds=np.arange(1.0, 10.0),
        time_axis=np.arange(0.1, 1.0, 0.1), elec=["Fz", "Cz", "Pz"],
    )  # fmt: skip
    found = looked_into(path)
    assert found.names == {"power": "tfr", "times": "time_axis", "frequencies": "freqs", "channels": "elec"}
    assert found.axes == ("channel", "frequency", "time", "trial") and found.lengths["trial"] == 5


@pytest.mark.parametrize(
    ("times", "unit"),
    [(np.arange(-200.0, 500.0, 4.0), "ms"), (np.arange(-0.2, 0.5, 0.004), "s"), (np.arange(-2.0, 60.0, 0.25), "s")],
)
def test_time_units(tmp_path, times, unit):
    path = written(
        tmp_path,
        power=RNG.exponential(size=(4, 2, 3, times.size)),
        frequencies=[4, 8, 16],
        times=times,
        channels=["a", "b"],
    )
    found = looked_into(path)
    assert found.time_unit == unit and found.axes == ("trial", "channel", "frequency", "time")


def test_descending_frequencies_and_codes(tmp_path):
    path = written(
        tmp_path, power=RNG.exponential(size=(8, 2, 3, 4)), hz=[30.0, 10.0, 4.0], t=[-0.1, 0.0, 0.1, 0.2], names=["a", "b"],
        hit=np.arange(8) % 2 == 1, code=[1.0, 2, 3, 1, 2, 3, 1, 2], number=np.arange(8), matrix=np.ones((8, 2)),
    )  # fmt: skip
    found = looked_into(path)
    assert found.names["frequencies"] == "hz" and set(found.trial_columns) == {"hit", "code", "number"}
    assert found.labels_of("hit") == {"0": 4, "1": 4} and found.labels_of("code") == {"1": 3, "2": 3, "3": 2}
    assert found.labels_of("number") is None
    assert (
        found.array("hz").meaning == "frequencies (30 to 4 Hz)"
        and found.array("hit").meaning == "trial column (0: 4, 1: 4)"
    )


@pytest.mark.parametrize(
    ("values", "contents", "words"),
    [
        (RNG.exponential(size=(40, 2, 3, 5)), "linear_power", None),
        (10 * np.log10(RNG.exponential(size=(40, 2, 3, 5))), "decibel", "are negative, so these are not linear power"),
        (60 + 10 * np.log10(RNG.exponential(size=(40, 2, 3, 5))), "decibel", "spread like decibels"),
        (RNG.normal(size=(40, 2, 3, 5)) + 1j, "complex", "squared modulus"),
        (
            np.where(np.arange(5) == 2, 0.0, RNG.exponential(size=(40, 2, 3, 5))),
            "linear_power",
            "240 of 1200 values looked at are exactly 0",
        ),
    ],
)  # fmt: skip
def test_contents(tmp_path, values, contents, words):
    path = written(
        tmp_path, power=values, frequencies=[4, 8, 16], times=[-0.2, -0.1, 0.0, 0.1, 0.2], channels=["a", "b"]
    )
    found = looked_into(path)
    assert found.contents == contents
    assert found.remarks == () if words is None else words in found.remarks[0]


def test_the_rows_of_a_table_tell_the_trials(tmp_path):
    path = written(tmp_path, power=RNG.exponential(size=(6, 4, 3, 6)), frequencies=[4, 8, 16], channels=list("abcd"))
    assert looked_into(path).axes is None
    assert len(looked_into(path).candidates) == 2
    path = written(tmp_path, power=RNG.exponential(size=(6, 4, 3, 7)), frequencies=[4, 8, 16], channels=list("abcd"))
    assert looked_into(path, [7]).axes == ("time", "channel", "frequency", "trial")


def test_a_file_without_power(tmp_path):
    found = looked_into(written(tmp_path, x=np.ones(3), text="hello"))
    assert found.names == {} and found.remarks == ("No array of three or four axes was found that could be power.",)


def test_labels_with_their_counts():
    assert label_counts(["a", "b", "a", "b", "n/a"]) == {"a": 2, "b": 2}
    assert (
        label_counts(["a", "a", "b"]) is None
        and label_counts(np.arange(20)) is None
        and label_counts(["a"] * 5) is None
    )
    assert label_counts(np.array([0.0, 1.0, np.nan, 1.0, 0.0])) == {"0": 2, "1": 2}
