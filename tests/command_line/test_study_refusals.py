"""The exact text of what a study is refused for: subject, file and plan line, all together, and nothing left behind."""

import numpy as np
import pytest

from tests.command_line.tiny_study import TIMES, TinyStudy, tfstats_command

PLACE = "(plan.toml, line 5, input, files)."
NAMED = 'plan.toml, line 18, contrast "recalled against missed"'
EVERYONE = "subjects 01, 02, 03, 04, 05, 06"


@pytest.fixture
def study(tmp_path):
    return TinyStudy(tmp_path / "study")


def negative_and_zero(study):
    study.spoil("02", lambda values: np.where(np.arange(values.size).reshape(values.shape) == 0, -1.0, values))
    study.spoil("03", lambda values: np.where(np.arange(values.size).reshape(values.shape) == 0, 0.0, values))


def decibels(study):
    def made(values):
        values = np.full(values.shape, 3.0)
        values[0, 1, 0, :2] = -2.5, -7.0
        return values

    study.spoil("04", made)


def nothing_known(study):
    study.spoil("02", lambda values: values * np.nan)


def other_axes(study):
    study.write("03", frequencies=(4.0, 8.0, 13.0))
    study.write("04", times=TIMES[:-1])


def missing_condition(study):
    study.write("03", memory=["recalled"] * 6)


def missing_channel(study):
    study.write("03", channels=("Fz",))


def subject_twice(study):
    study.participants("participant_id\n" + "".join(f"{name}\n" for name in [*study.names, "03"]))


def window_outside(study):
    study.edit(("[-0.4, -0.2]", "[-4, -2]"))


def window_without_a_sample(study):
    def made(values):
        values[..., :4] = np.nan
        return values

    for name in study.names:
        study.spoil(name, made)


def rows_and_files_apart(study):
    study.file("02").unlink()
    study.participants("participant_id\n" + "".join(f"{name}\n" for name in study.names if name != "05"))


def one_subject(study):
    study.participants("participant_id\n01\n")
    for name in study.names[1:]:
        study.file(name).unlink()


def too_few_subjects(study):
    study.participants("participant_id\n01\n02\n03\n04\n")
    for name in study.names[4:]:
        study.file(name).unlink()


def constant(study):
    for name in study.names:
        study.spoil(name, np.ones_like)


def trial_table_of_another_length(study):
    study.edit(("[participants]", 'trial_table = "trials/S{subject}.tsv"\n[participants]'))
    (study.folder / "trials").mkdir()
    for name in study.names:
        rows = 7 if name == "02" else 8
        (study.folder / "trials" / f"S{name}.tsv").write_text("load\n" + "2\n" * rows, encoding="utf-8")


def no_trial_table(study):
    trial_table_of_another_length(study)
    (study.folder / "trials" / "S02.tsv").unlink()


def truncated(study):
    study.file("02").write_bytes(study.file("02").read_bytes()[:500])


def no_power_file(study):
    study.file("02").write_bytes(b"these are notes")


def pickled(study):
    study.spoil("02", lambda values: values.astype(object))


def no_files(study):
    study.edit(('"power/S', '"powr/S'))


def no_tables(study):
    study.edit(("[channels]\n", '[channels]\nelectrodes = "electrodes.tsv"\n'))
    (study.folder / "participants.tsv").unlink()


def unknown_labels(study):
    study.edit(
        ('second = "missed"', 'second = "misd"'),
        add='[[band]]\nname = "theta"\nfrequencies = [4, 8]\n[[window]]\nname = "early"\ntimes = [0, 0.4]\n'
        '[[band_test]]\nname = "t"\ndesign = "against_zero"\ncondition = "recaled"\n',
    )


def nothing_in_band_and_window(study):
    study.edit(
        add='[[band]]\nname = "gamma"\nfrequencies = [40, 80]\n[[window]]\nname = "late"\ntimes = [3, 4]\n'
        '[[band_test]]\nname = "t"\ndesign = "against_zero"\ncondition = "recalled"\n'
    )


def nothing_in_the_tested_part(study):
    study.edit(("times = [0.0, 0.4]", 'times = [7, 8]\nchannels = ["Qz"]'))


def unknown_column(study):
    study.edit(('columns = ["memory"]', 'columns = ["memori"]'))


def unknown_subjects(study):
    study.edit(add='[subjects]\nexclude = ["99", 1]\n')


def everybody_excluded(study):
    study.edit(add='[subjects]\nexclude = ["01", "02", "03", "04", "05", "06"]\n')


def too_few_trials(study):
    study.write("03", memory=["recalled"] * 6 + ["missed"])
    study.edit(add="[subjects]\nfewest_trials = 2\n")


def group_without_its_channel(study):
    study.edit(
        ('adjacency = "none"', 'groups = { frontal = ["Fz", "F8"] }'),
        add='[[band]]\nname = "theta"\nfrequencies = [4, 8]\n[[window]]\nname = "early"\ntimes = [0, 0.4]\n'
        '[[band_test]]\nname = "t"\ndesign = "against_zero"\ncondition = "recalled"\n',
    )


def one_trial_design_without_subject(study):
    study.edit(
        ('design = "paired"', 'design = "trialwise_change"'), ('first = "recalled"\nsecond = "missed"\n', ""),
    )  # fmt: skip


CASES = {
    negative_and_zero: (
        "subject 02, {power}/S02.npz, values: expected linear power above 0, got 1 negative values (smallest -1, first in "
        'trial 0, channel Fz), as decibels have them; set contents = "decibel" if these are decibels, or give power that '
        "has not been made relative (plan.toml, line 4, input, contents).",
        "subject 03, {power}/S03.npz, values: expected linear power above 0, got 1 values of exactly 0 (first in trial 0, "
        f"channel Fz); set what is not known to NaN {PLACE}",
    ),
    decibels: (
        "subject 04, {power}/S04.npz, values: expected linear power above 0, got 2 negative values (smallest -7, first in "
        'trial 0, channel Pz), as decibels have them; set contents = "decibel" if these are decibels, or give power that '
        "has not been made relative (plan.toml, line 4, input, contents).",
    ),
    nothing_known: (
        "subject 02, {power}/S02.npz, values: expected power that is known somewhere, got NaN everywhere; check how the "
        f"power was made {PLACE}",
    ),
    other_axes: (
        "subject 03, {power}/S03.npz, frequencies: expected those of subject 01 (3 from 4 to 12 Hz), got 3 from 4 to 13 Hz; "
        f"bring all subjects to the same axis or leave the subject out {PLACE}",
        "subject 04, {power}/S04.npz, times: expected those of subject 01 (11 from -0.5 to 0.5 s), got 10 from -0.5 to 0.4 "
        f"s; bring all subjects to the same axis or leave the subject out {PLACE}",
    ),
    missing_condition: (
        'subject 03, {power}/S03.npz, conditions: expected trials of "missed", got none (6 of "recalled"); leave the subject '
        "out, or the condition (plan.toml, line 8, conditions).",
    ),
    missing_channel: (
        'subject 03, {power}/S03.npz, channels: expected "Pz" as in the other subjects, got none of that name among its 1; '
        'leave the subject out, or set missing = "keep_common" under [channels] (plan.toml, line 11, channels, missing).',
    ),
    subject_twice: (
        'participants, {folder}/participants.tsv, participant_id: expected each subject once, got "03" more than once; keep '
        "one row of each (plan.toml, line 7, participants, file).",
    ),
    window_outside: (
        f"{EVERYONE}, baseline window: expected a window inside the times -0.5 to 0.5 s, got -4 to -2 s; choose a window "
        "inside the data (plan.toml, line 14, baseline, window).",
    ),
    window_without_a_sample: (
        f'{EVERYONE}, baseline window: expected finite power from -0.4 to -0.2 s in the baseline of condition "recalled" at '
        "one frequency at least, got none at any frequency; choose a window where power is known (wavelets leave the ends "
        "of a trial empty) (plan.toml, line 14, baseline, window).",
    ),
    rows_and_files_apart: (
        'participants: expected a power file for each row, as power/S{{subject}}.npz says, got none for "02"; add the files, '
        "or put the subjects under exclude in [subjects] (plan.toml, line 7, participants, file).",
        'participants: expected a row for each power file, got none for "05"; add the rows, or put the subjects under '
        "exclude in [subjects] (plan.toml, line 7, participants, file).",
    ),
    one_subject: (
        f"{NAMED}: paired: expected at least two subjects, got 1; for one subject compare trials with trialwise or "
        "trialwise_change.",
    ),
    too_few_subjects: (
        f"{NAMED}: paired, recalled - missed: expected enough subjects for a p of 0.05, got 4, whose smallest p is 0.125 "
        "(two-sided); at least 6 subjects are needed.",
    ),
    constant: (
        f"{NAMED}: paired, recalled - missed: expected compared values that vary, got the same value in every subject at "
        "every point; check that the conditions are not the same data.",
    ),
    trial_table_of_another_length: (
        "subject 02, trial_table {folder}/trials/S02.tsv: expected one row for each of the 8 trials of {power}/S02.npz, got "
        "7 rows; mend the table, or correct trial_table or axes under [input] (plan.toml, line 6, input, trial_table).",
    ),
    no_trial_table: (
        "subject 02, {power}/S02.npz, trial_table {folder}/trials/S02.tsv: expected a table, got nothing there; check the "
        "path (plan.toml, line 6, input, trial_table).",
    ),
    truncated: (
        "subject 02, {power}/S02.npz: expected a whole .npz file, got one that cannot be read (BadZipFile); copy or write "
        f"the file again {PLACE}",
    ),
    no_power_file: (
        "subject 02, {power}/S02.npz: expected a whole .npz file, got one that cannot be read; copy or write the file again "
        f"{PLACE}",
    ),
    pickled: (
        "subject 02, {power}/S02.npz, power: expected numbers or text, got pickled Python objects, which are never loaded; "
        "save it as numbers or text, for instance numpy.savez(file, power=numpy.array(values, dtype=str)) "
        f"{PLACE}",
    ),
    no_files: (
        "input, files {folder}/powr/S{{subject}}.npz: expected files that fit the pattern, got no such folder; correct files "
        f"under [input] {PLACE}",
    ),
    no_tables: (
        "participants, {folder}/participants.tsv: expected a table, got nothing there; check the path (plan.toml, line 7, "
        "participants, file).",
        "electrodes, {folder}/electrodes.tsv: expected a table, got nothing there; check the path (plan.toml, line 12, "
        "channels, electrodes).",
    ),
    unknown_labels: (
        f'{NAMED}: paired: expected conditions among "missed", "recalled", got "misd"; use the spelling of the data.',
        'plan.toml, line 29, band_test "t": against_zero: expected conditions among "missed", "recalled", got "recaled"; use '
        "the spelling of the data.",
    ),
    nothing_in_band_and_window: (
        'band "gamma": expected a window that holds at least one point of the axis 4 to 12 Hz, got 40 to 80 Hz; choose a '
        'window inside the data (plan.toml, line 23, band "gamma").',
    ),
    nothing_in_the_tested_part: (
        'plan.toml, line 19, contrast "recalled against missed": select, channels: expected channels among "Fz", "Pz", got '
        '"Qz"; use the spelling of the data.',
        'plan.toml, line 19, contrast "recalled against missed": select, times: expected a window that holds at least one '
        "point of the axis -0.5 to 0.5 s, got 7 to 8 s; choose a window inside the data.",
    ),
    unknown_column: (
        f'{EVERYONE}, trials: expected a trial column among "memory", got "memori"; did you mean "memory"? use the name in '
        "the trial table (plan.toml, line 8, conditions).",
    ),
    unknown_subjects: (
        'subjects, exclude: expected subjects among "01", "02", "03", "04", "05", "06", got "1", "99"; use the names in the '
        "files (plan.toml, line 24, subjects, exclude).",
    ),
    everybody_excluded: (
        "subjects: expected at least one subject, got none; exclude fewer (plan.toml, line 24, subjects, exclude).",
    ),
    too_few_trials: (
        'subject 03, {power}/S03.npz, subjects, fewest_trials: expected enough trials in every condition, got 1 of "missed" '
        '(at least 2 each); exclude the subject, or set incomplete = "leave_out" (plan.toml, line 24, subjects, '
        "fewest_trials).",
    ),
    group_without_its_channel: (
        'mean_across, channels, group "frontal": expected channels among "Fz", "Pz", got "F8"; use the spelling of the data '
        "(plan.toml, line 12, channels, groups).",
    ),
    one_trial_design_without_subject: (
        f'{NAMED}: expected the subject whose trials are compared, got 6 subjects; add subject = "01".',
    ),
}  # fmt: skip


def expected_text(study, sentences):
    power, folder = study.folder / "power", study.folder
    head = "tfstats: refused" if len(sentences) == 1 else f"tfstats: refused, {len(sentences)} problems"
    return f"{head}:\n" + "".join(f"  - {said.format(power=power, folder=folder)}\n" for said in sentences)


@pytest.mark.parametrize("spoil", CASES, ids=lambda spoil: spoil.__name__)
def test_refused_with_exact_text_and_nothing_left(study, spoil):
    spoil(study)
    before = study.inside()
    done = tfstats_command("run", study.plan, "--out", study.folder / "results", "--quiet")
    assert done.err == expected_text(study, CASES[spoil])
    assert (done.code, done.out) == (2, "")
    assert study.inside() == before
    # `check` finds the same without testing anything.
    found = tfstats_command("check", study.plan)
    assert "refused" in found.err
    assert found.err[found.err.index("tfstats: refused") :] == expected_text(study, CASES[spoil])
    assert (found.code, found.out) == (2, "")
    assert study.inside() == before


def test_mistakes_of_plan_tables_and_files_together(study):
    """One list, whatever is wrong where."""
    negative_and_zero(study)
    missing_channel(study)
    study.participants("participant_id\tage\n01\t3\n")
    done = tfstats_command("check", study.plan)
    for part in ('none for "02", "03", "04", "05", "06"', "negative values", '"Pz" as in the other subjects'):
        assert part in done.err
    assert done.code == 2


def test_subject_written_in_two_ways(study):
    """The texts "01" and "1" are two names; the participants table tells that one of them is too many."""
    study.edit(('"power/S{subject}.npz"', '"power/{part}{subject}.npz"'))
    (study.folder / "power" / "S1.npz").write_bytes(study.file("01").read_bytes())
    done = tfstats_command("check", study.plan)
    assert done.code == 2
    assert 'got none for "1"' in done.err
