"""Averages kept between runs: who is read again, and that the bits are the same."""

from __future__ import annotations

import shutil

import numpy as np
import pytest

import tfstats as tfs
from tfstats.analysis import run_analysis
from tfstats.plan_file.study_stages import study_maps, study_opened
from tfstats.power_files import PowerFiles, SubjectCache

SUBJECTS = ("01", "02", "03", "04", "05", "06", "07")


def maps_with(folder, cache):
    plan = tfs.AnalysisPlan.read(folder / "plan.toml")
    return study_maps(plan, study_opened(plan), None, cache)


def cached(folder):
    """Maps of the study with a cache, the subjects whose files were read, and the cache."""
    read = []
    whole = PowerFiles.of

    def noted(self, subject):
        read.append(str(subject))
        return whole(self, subject)

    cache = SubjectCache(folder / "plan.cache")
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(PowerFiles, "of", noted)
        maps = maps_with(folder, cache)
    return maps, read, cache


def assert_same(first, second):
    assert first.values.tobytes() == second.values.tobytes()
    assert (first.history, first.cautions, first.subjects) == (second.history, second.cautions, second.subjects)
    assert first.trial_counts.equals(second.trial_counts)


def test_the_second_time_nobody_is_read(study):
    plain = maps_with(study, None)
    first, read, _ = cached(study)
    assert read == list(SUBJECTS)
    second, read, cache = cached(study)
    assert read == [] and cache.found == list(SUBJECTS) and cache.notices == []
    assert_same(plain, first)
    assert_same(plain, second)


def test_a_subject_added_later_is_read_alone(study):
    aside = study.parent / "aside"
    aside.mkdir()
    shutil.move(study / "power" / "S04.npz", aside)
    table = (study / "participants.tsv").read_text(encoding="utf-8")
    (study / "participants.tsv").write_text(
        "".join(line for line in table.splitlines(True) if "04" not in line), encoding="utf-8"
    )
    cached(study)
    shutil.move(aside / "S04.npz", study / "power")
    (study / "participants.tsv").write_text(table, encoding="utf-8")
    maps, read, _ = cached(study)
    assert read == ["04"]
    assert_same(maps, maps_with(study, None))


def test_a_file_that_changed_is_read_again_even_if_size_and_time_stay(study):
    import os

    cached(study)
    path = study / "behaviour" / "S02.tsv"
    before = path.stat()
    swapped = (
        path.read_text(encoding="utf-8")
        .replace("recalled", "RECALLED")
        .replace("missed", "recalled")
        .replace("RECALLED", "missed")
    )
    path.write_text(swapped + " " * (before.st_size - len(swapped)), encoding="utf-8")
    os.utime(path, ns=(before.st_atime_ns, before.st_mtime_ns))
    # Size differs by nothing, time was put back: what is left is the content.
    if path.stat().st_size != before.st_size:
        pytest.fail("the two texts were meant to be equally long")
    from tfstats.foundations import file_identity

    file_identity._hash_of.cache_clear()  # another run is another process
    maps, read, _ = cached(study)
    assert read == ["02"]
    assert_same(maps, maps_with(study, None))


@pytest.mark.parametrize(
    ("before", "after"),
    [
        ("window = [-0.5, -0.2]", "window = [-0.4, -0.2]"),
        ("window = [-0.5, -0.2]", 'window = [-0.5, -0.2]\nunit = "ratio"'),
        ("window = [-0.5, -0.2]", 'window = [-0.5, -0.2]\ntrial_counts = "jackknife"'),
        ('conditions = ["recalled", "missed"]', ""),
        ("[participants]", "[input.keep]\nnumber = { at_most = 9 }\n[participants]"),
    ],
)
def test_other_settings_are_other_entries(study, respelled, before, after):
    cached(study)
    respelled(before, after)
    maps, read, _ = cached(study)
    assert read == list(SUBJECTS)
    assert_same(maps, maps_with(study, None))
    assert cached(study)[1] == []


def test_trial_counts_and_their_seed_are_settings(study):
    powers = PowerFiles(
        study / "power" / "S{subject}.npz",
        trial_table=study / "behaviour" / "S{subject}.tsv",
        keep={"number": {"at_most": 10}},
    )
    for settings in (
        {},
        {"trial_counts": "jackknife"},
        {"trial_counts": "equal"},
        {"trial_counts": "equal", "seed": 1},
    ):
        cache = SubjectCache(study / "own")
        first = tfs.condition_maps(powers, "memory", tfs.Baseline((-0.5, -0.2)), cache=cache, **settings)
        assert cache.found == []
        second = tfs.condition_maps(powers, "memory", tfs.Baseline((-0.5, -0.2)), cache=cache, **settings)
        assert cache.found == list(SUBJECTS)
        assert_same(first, second)
        assert_same(first, tfs.condition_maps(powers, "memory", tfs.Baseline((-0.5, -0.2)), **settings))


def test_what_does_not_touch_the_averages_touches_no_entry(study, respelled):
    cached(study)
    respelled("permutations = 64", "permutations = 128\nalpha = 0.1")
    respelled("frequencies = [4, 8]", "frequencies = [6, 10]")
    assert cached(study)[1] == []


@pytest.mark.parametrize("harm", ["cut", "byte", "text", "other"])
def test_damaged_entries_are_ignored_with_a_notice(study, harm):
    plain, _, _ = cached(study)
    path = next((study / "plan.cache").glob("03_*.npz"))
    content = bytearray(path.read_bytes())
    if harm == "cut":
        content = content[: len(content) // 2]
    elif harm == "byte":
        content[len(content) // 2] ^= 0xFF
    elif harm == "text":
        content = bytearray(b"not an archive")
    path.write_bytes(bytes(content))
    if harm == "other":
        np.savez(path, something=np.ones(3))
    maps, read, cache = cached(study)
    assert read == ["03"] and len(cache.notices) == 1
    assert cache.notices[0].startswith(f"subject 03: the cache entry {path.name} cannot be read (")
    assert cache.notices[0].endswith("); the subject's files were read instead.")
    assert_same(maps, plain)
    assert cached(study)[1] == []  # and was written again


def test_an_entry_without_its_parts_is_ignored(study):
    plain, _, _ = cached(study)
    path = next((study / "plan.cache").glob("05_*.npz"))
    with np.load(path) as stored:
        parts = {name: stored[name] for name in stored.files if name != "average.values"}
    np.savez(path, **parts)
    maps, read, cache = cached(study)
    assert read == ["05"] and "05" not in cache.found
    assert cache.notices == ["subject 05: the cache entry lacks parts; the subject's files were read instead."]
    assert_same(maps, plain)


def test_a_folder_that_cannot_be_made_costs_a_notice(study):
    (study / "plan.cache").write_text("in the way", encoding="utf-8")
    maps, read, cache = cached(study)
    assert read == list(SUBJECTS)
    assert cache.notices == ["the cache plan.cache cannot be written (File exists); nothing was kept."]
    assert_same(maps, maps_with(study, None))


def test_subjects_with_a_mistake_are_not_kept(study):
    (study / "power" / "S06.npz").write_bytes(b"broken")
    cache = SubjectCache(study / "plan.cache")
    with pytest.raises(tfs.InputError):
        maps_with(study, cache)
    kept = sorted(path.name[:2] for path in (study / "plan.cache").glob("*.npz"))
    assert "06" not in kept


def test_runs_say_who_came_from_the_cache(study, monkeypatch):
    # Report and figures are tested elsewhere and take their time.
    from tfstats import analysis

    monkeypatch.setattr(analysis, "write_results", lambda results, folder, progress: None)
    monkeypatch.setattr(analysis, "study_review", lambda plan, study, tell: None)
    none = run_analysis(study / "plan.toml", study / "none", threads=1, cache=False)
    assert not (study / "plan.cache").exists()
    first = run_analysis(study / "plan.toml", study / "first", threads=1)
    second = run_analysis(study / "plan.toml", study / "second", threads=1)
    assert none.provenance["subjects_from_cache"] == first.provenance["subjects_from_cache"] == []
    assert second.provenance["subjects_from_cache"] == list(SUBJECTS)
    assert second.provenance["cache_notices"] == [] and second.provenance["options"]["cache"] is True
    for name, result in none.contrasts.items():
        for other in (first, second):
            assert result.p_values.tobytes() == other.contrasts[name].p_values.tobytes()
            assert result.statistic.tobytes() == other.contrasts[name].statistic.tobytes()
