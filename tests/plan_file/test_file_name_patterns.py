"""What several file names have in common."""

from __future__ import annotations

import pytest

from tfstats.plan_file.file_name_patterns import common_pattern, pattern_with_subject


@pytest.mark.parametrize(
    ("paths", "pattern"),
    [
        (["power/S01.h5", "power/S02.h5", "power/S10.h5"], "power/S{subject}.h5"),
        (["power/S01.h5"], "power/S{subject}.h5"),
        (["S1.mat", "S10.mat"], "S{subject}.mat"),
        (["S01_run1.mat", "S01_run2.mat", "S02_run1.mat"], "S{subject}_run{run}.mat"),
        (["S1_run1.mat", "S1_run2.mat"], "S{subject}_run{run}.mat"),
        (
            ["sub-01/sub-01_run-1.mat", "sub-01/sub-01_run-2.mat", "sub-02/sub-02_run-1.mat"],
            "sub-{subject}/sub-{subject}_run-{run}.mat",
        ),
        (["ses-1/sub-04.h5", "ses-2/sub-04.h5", "ses-1/sub-05.h5"], "ses-{session}/sub-{subject}.h5"),
        (["avg/S1_recalled.npz", "avg/S1_missed.npz", "avg/S2_missed.npz"], "avg/S{subject}_{condition}.npz"),
        (["anna.mat", "bob.mat"], "{subject}.mat"),
        (["anna.mat"], "{subject}.mat"),
        (["power_anna_x2.mat", "power_bob.mat"], "power_{subject}.mat"),
        (["ab12.npz", "cd13.npz"], "{subject}.npz"),
        (["1_7.npy", "1_8.npy", "2_7.npy"], "{subject}_{part}.npy"),
        (["a/x.mat", "bc/d/x.mat"], None),
    ],
)  # fmt: skip
def test_patterns(paths, pattern):
    assert common_pattern(paths) == pattern


def test_what_the_files_say_of_their_subject_decides():
    paths = ["day1_7.h5", "day2_7.h5", "day1_8.h5"]
    assert common_pattern(paths) == "day{subject}_{part}.h5"
    assert common_pattern(paths, ["7", "7", "8"]) == "day{part}_{subject}.h5"


@pytest.mark.parametrize(
    ("paths", "pattern"),
    [
        (["behaviour/S01.tsv", "behaviour/S02.tsv"], "behaviour/S{subject}.tsv"),
        (["01/trials.tsv", "02/trials.tsv"], "{subject}/trials.tsv"),
        (["trials.tsv"], None),
        (["S01_a.tsv", "S02_b.tsv"], None),
    ],
)
def test_patterns_of_tables(paths, pattern):
    assert pattern_with_subject(paths, ["01", "02"]) == pattern
