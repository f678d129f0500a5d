"""Participants and electrodes as the BIDS standard writes them, and as spreadsheets do."""

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tfstats.power_files import read_electrodes, read_participants
from tfstats.power_files.trial_columns import read_table


def test_participants(tmp_path):
    path = tmp_path / "participants.tsv"
    path.write_text("participant_id \tage\t group\nsub-01\t 23\tyoung \nsub-02\tn/a\tälter\n", encoding="utf-8")
    table = read_participants(path, subject="sub-{subject}")
    assert list(table.columns) == ["participant_id", "age", "group"]
    assert table["participant_id"].tolist() == ["01", "02"] and table["group"].tolist() == ["young", "älter"]
    assert table["age"].iloc[0] == 23 and np.isnan(table["age"].iloc[1])
    assert read_participants(path)["participant_id"].tolist() == ["sub-01", "sub-02"]


def test_another_column_holds_the_subjects(tmp_path):
    path = tmp_path / "p.csv"
    path.write_text("\ufeffage,code\n23,1\n30,2\n", encoding="utf-8")
    table = read_participants(path, column="code")
    assert table["participant_id"].tolist() == ["1", "2"] and list(table.columns) == ["participant_id", "age"]


def test_electrodes(tmp_path):
    path = tmp_path / "electrodes.tsv"
    path.write_text("name\tx\ty\tz\ttype\nFz\t0\t0.7\t0.71\tcap\nREF\tn/a\tn/a\tn/a\tcap\n", encoding="utf-8")
    table = read_electrodes(path)
    assert list(table.columns) == ["name", "x", "y", "z"] and table["name"].tolist() == ["Fz", "REF"]
    assert table.loc[0, ["x", "y", "z"]].tolist() == [0.0, 0.7, 0.71] and table.loc[1, ["x", "y", "z"]].isna().all()
    with pytest.raises(tfs.InputError, match='a position for every electrode, got none for "REF"'):
        tfs.channel_adjacency(table, rule="distance", farthest=1.0)


def test_cells(tmp_path):
    path = tmp_path / "t.tsv"
    path.write_text(
        "code\tpadded\tnumber\twhole\tmixed\tempty\n1\t01\t1.50\t-3\t1\t\n2\t02\tn/a\t4\tone\tn/a\n", encoding="utf-8"
    )
    table = read_table(path, "t")
    assert table["code"].dtype == np.int64 and table["padded"].tolist() == ["01", "02"]
    assert table["number"].iloc[0] == 1.5 and np.isnan(table["number"].iloc[1])
    assert table["whole"].tolist() == [-3, 4] and table["mixed"].tolist() == ["1", "one"]
    assert table["empty"].isna().all()


def test_quoted_cells_with_separators(tmp_path):
    path = tmp_path / "t.csv"
    path.write_text('memory,note\nrecalled,"late, loud"\nmissed,\n', encoding="utf-8")
    table = read_table(path, "t")
    assert table["note"].tolist()[0] == "late, loud" and pd.isna(table["note"].iloc[1])
