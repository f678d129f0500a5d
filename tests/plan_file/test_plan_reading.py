"""What a plan file says is what the plan holds: every table and key, defaults, merging, the registry of designs, the hash."""

import inspect
import tomllib

import pytest

import tfstats as tfs
from tfstats.contrasts import DESIGNS
from tfstats.corrections import CORRECTIONS
from tfstats.plan_file import AnalysisPlan

# The complete example of the documentation.
COMPLETE = """
[study]
name = "lamp sequences"            # alpha = 0.05, permutations = 10000, seed = 0
[input]
files = "power/S{subject}_run{run}.mat"
axes = ["channel", "frequency", "time", "trial"]     # inferred where the lengths leave no doubt, refused otherwise
time_unit = "ms"                   # power_unit, contents, wavelet_cycles, scaling
trial_table = "behaviour/S{subject}.tsv"
[input.names]
power = "dat.pow"                  # dots go into structs and groups
[input.recode.memory]
"1" = "recalled"
"0" = "missed"
[input.keep]
artefact = 0
reaction_time = { at_most = 2.0 }  # at_least, one_of; no expressions
[participants]
file = "participants.tsv"          # column, subject (how the id is written: "sub-{subject}")
[subjects]
exclude = []                       # incomplete = "refuse" | "leave_out", fewest_trials
[conditions]
columns = ["memory"]
[channels]
electrodes = "electrodes.tsv"      # missing = "refuse" | "keep_common" | "leave_gaps"
[channels.groups]
frontal = ["F3", "Fz", "F4"]
[baseline]
window = [-0.5, -0.2]              # every field of Baseline, trial_counts
[test]                             # for all contrasts
times = [0.0, 1.5]
correction = { kind = "cluster_mass", forming_p = 0.01 }
[[contrast]]
name = "recalled against missed"
design = "paired"                  # the function's name, and its arguments as keys
first = "recalled"
second = "missed"
[[band]]
name = "theta"
frequencies = [4, 8]
[[window]]
name = "early"
times = [0.2, 0.6]
[[band_test]]
name = "theta exceeds chance"
design = "against_zero"
condition = "recalled"
"""

SMALL = """
[study]
name = "small"
[input]
files = "power/S{subject}.npz"
[conditions]
columns = ["memory"]
[baseline]
window = [-0.5, -0.2]
[[contrast]]
name = "recalled against missed"
design = "paired"
first = "recalled"
second = "missed"
"""


@pytest.fixture
def read(tmp_path):
    def reader(text):
        path = tmp_path / "plan.toml"
        path.write_text(text, encoding="utf-8")
        return AnalysisPlan.read(path)

    return reader


def test_complete_example(read, tmp_path):
    plan = read(COMPLETE)
    assert plan.study.name == "lamp sequences"
    assert plan.input.files == "power/S{subject}_run{run}.mat"
    assert plan.input.axes == ["channel", "frequency", "time", "trial"]
    assert plan.input.time_unit == "ms"
    assert plan.input.trial_table == "behaviour/S{subject}.tsv"
    assert plan.input.names == {"power": "dat.pow"}
    assert plan.input.recode == {"memory": {"1": "recalled", "0": "missed"}}
    assert plan.input.keep == {"artefact": 0, "reaction_time": {"at_most": 2.0}}
    assert plan.participants.file == "participants.tsv"
    assert plan.subjects.exclude == []
    assert plan.conditions.columns == ["memory"]
    assert plan.channels.electrodes == "electrodes.tsv"
    assert plan.channels.groups == {"frontal": ["F3", "Fz", "F4"]}
    assert plan.baseline == tfs.Baseline((-0.5, -0.2))
    (contrast,) = plan.contrasts
    assert (contrast.name, contrast.design) == ("recalled against missed", "paired")
    assert contrast.arguments == {"first": "recalled", "second": "missed"}
    assert contrast.test.times == (0.0, 1.5)
    assert contrast.correction == tfs.ClusterMass(0.01)
    assert plan.bands == {"theta": (4.0, 8.0)}
    assert plan.windows == {"early": (0.2, 0.6)}
    (band_test,) = plan.band_tests
    assert (band_test.name, band_test.design, band_test.arguments) == (
        "theta exceeds chance", "against_zero", {"condition": "recalled"},
    )  # fmt: skip
    assert plan.folder == tmp_path
    assert plan.place("participants.tsv") == tmp_path / "participants.tsv"
    assert plan.text == COMPLETE


def test_every_other_key(read):
    """All keys that the complete example leaves out."""
    plan = read(
        COMPLETE.replace("[input]", 'alpha = 0.01\npermutations = 500\nseed = 7\n[input]')
        .replace(
            'time_unit = "ms"',
            'time_unit = "ms"\npower_unit = "uV^2/Hz"\ncontents = "amplitude"\nwavelet_cycles = [3, 5.0]\n'
            'scaling = "density"\nfrequencies = [4.0, 8.0]\ntimes = [-500.0, 0.0, 500.0]\nchannels = ["Fz"]\n',
        )
        .replace('file = "participants.tsv"', 'file = "p.csv"\ncolumn = "id"\nsubject = "sub-{subject}"')
        .replace("exclude = []", 'exclude = ["07", 8]\nincomplete = "leave_out"\nfewest_trials = 12')
        .replace('columns = ["memory"]', 'columns = ["load", "memory"]\nconditions = ["2/recalled", 1, 2.0, true]')
        .replace(
            'electrodes = "electrodes.tsv"',
            'electrodes = "e.tsv"\nmissing = "leave_gaps"\nadjacency = "distance"\nfarthest = 40\nregions = "regions.tsv"',
        )
        .replace(
            "window = [-0.5, -0.2]",
            'window = [-0.5, -0.2]\nunit = "percent_change"\nreference = "named"\norder = "trial_by_reference"\n'
            'reference_condition = "rest"\nwithin = "run"\nbaseline_mean = "arithmetic"\ntrial_counts = "as_recorded"\n',
        )
        .replace(
            "times = [0.0, 1.5]",
            'times = [0.0, 1.5]\nfrequencies = [4, 30]\nchannels = ["Fz"]\nmean_across = ["channels", "times"]\n'
            'every_nth_time = 2\nalternative = "greater"\nfewest_subjects = 5\nrobust = "rank"\npermutations = 300\n',
        )
    )
    assert (plan.study.alpha, plan.study.permutations, plan.study.seed) == (0.01, 500, 7)
    assert (plan.input.power_unit, plan.input.contents, plan.input.scaling) == ("uV^2/Hz", "amplitude", "density")
    assert (plan.input.wavelet_cycles, plan.input.frequencies) == ([3, 5.0], [4.0, 8.0])
    assert (plan.input.times, plan.input.channels) == ([-500.0, 0.0, 500.0], ["Fz"])
    assert (plan.participants.file, plan.participants.column, plan.participants.subject) == ("p.csv", "id", "sub-{subject}")
    assert (plan.subjects.exclude, plan.subjects.incomplete, plan.subjects.fewest_trials) == (["07", 8], "leave_out", 12)
    assert plan.conditions.conditions == ["2/recalled", 1, 2.0, True]
    channels = plan.channels
    assert (channels.missing, channels.adjacency, channels.farthest, channels.regions) == (
        "leave_gaps", "distance", 40.0, "regions.tsv",
    )  # fmt: skip
    assert plan.baseline == tfs.Baseline(
        (-0.5, -0.2), "percent_change", "named", "trial_by_reference", reference_condition="rest", within="run",
        baseline_mean="arithmetic",
    )  # fmt: skip
    assert plan.trial_counts == "as_recorded"
    test = plan.contrasts[0].test
    assert (test.frequencies, test.channels, test.mean_across) == ((4.0, 30.0), ["Fz"], ["channels", "times"])
    assert (test.every_nth_time, test.alternative, test.fewest_subjects) == (2, "greater", 5)
    assert (test.robust, test.permutations) == ("rank", 300)


def test_defaults(read):
    plan = read(SMALL)
    assert (plan.study.alpha, plan.study.permutations, plan.study.seed) == (0.05, 10_000, 0)
    assert plan.participants is None
    assert (plan.subjects.exclude, plan.subjects.incomplete, plan.subjects.fewest_trials) == ([], "refuse", None)
    assert plan.conditions.conditions is None
    assert (plan.channels.electrodes, plan.channels.missing, plan.channels.adjacency) == (None, "refuse", None)
    assert plan.channels.groups == {}
    assert plan.baseline == tfs.Baseline((-0.5, -0.2), "decibel", "pooled", "average_first")
    assert plan.contrasts[0].correction == tfs.ClusterMass(0.01)
    assert plan.contrasts[0].test.times is None
    assert (plan.bands, plan.windows, plan.band_tests) == ({}, {}, ())


def test_own_test_goes_on_top_of_the_common_one(read):
    plan = read(
        SMALL.replace("[[contrast]]", '[test]\ntimes = [0.0, 1.0]\nchannels = ["Fz"]\nalternative = "less"\n[[contrast]]')
        + 'test = { times = [0.2, 0.4], correction = { kind = "maximum" } }\n'
        + '[[contrast]]\nname = "recalled"\ndesign = "against_zero"\ncondition = "recalled"\n'
        + "[contrast.test]\nfrequencies = [8, 12]\n"
    )
    first, second = plan.contrasts
    assert first.test.times == (0.2, 0.4)
    assert (first.test.channels, first.test.alternative) == (["Fz"], "less")
    assert first.correction == tfs.MaxStatistic()
    assert second.test.times == (0.0, 1.0)
    assert second.test.frequencies == (8.0, 12.0)
    assert second.correction == tfs.ClusterMass(0.01)


@pytest.mark.parametrize("kind", sorted(CORRECTIONS))
def test_every_correction_of_the_registry_with_every_setting(read, kind):
    made = CORRECTIONS[kind]()
    settings = "".join(
        f", {name} = {value!r}".replace("'", '"')
        for name in inspect.signature(CORRECTIONS[kind]).parameters
        if (value := getattr(made, name)) is not None
    )
    plan = read(SMALL.replace("[[contrast]]", f'[test]\ncorrection = {{ kind = "{kind}"{settings} }}\n[[contrast]]'))
    assert plan.contrasts[0].correction == made


ARGUMENTS = {
    "paired": 'first = "a"\nsecond = "b"',
    "against_zero": 'condition = "a"',
    "weighted": "weights = { a = 1, b = -0.5, c = -0.5 }",
    "trend": 'levels = { "2" = 2, "4" = 4 }',
    "interaction": 'first = ["a", "b"]\nsecond = ["c", "d"]',
    "repeated_measures": 'factors = { load = ["2", "4"], memory = ["x", "y"] }\neffect = "load:memory"\nscheme = "labels"',
    "between_groups": 'column = "group"\nfirst = "x"\nsecond = "y"\ncombine = { a = 1, b = -1 }\nnuisance = ["age"]',
    "several_groups": 'column = "group"\ngroups = ["x", "y", "z"]\ncondition = "a"',
    "slope": 'covariate = "age"\ncondition = "a"\nrank = true',
    "trialwise": 'column = "memory"\nfirst = "a"\nsecond = "b"\nlabels = "assigned"\nblocks = "run"',
    "trialwise_slope": 'column = "load"\nnuisance = ["trial"]',
    "trialwise_change": "",
}


def test_arguments_are_given_for_every_design():
    assert set(ARGUMENTS) == set(DESIGNS)


@pytest.mark.parametrize("design", sorted(DESIGNS))
def test_every_design_of_the_registry_with_its_arguments_as_keys(read, design):
    text = ARGUMENTS[design]
    entry = f'[[contrast]]\nname = "it"\ndesign = "{design}"\n'
    parameters = [p.name for p in list(inspect.signature(DESIGNS[design].function).parameters.values())[1:]]
    if design == "weighted":
        text = text.replace("weights", parameters[0])
    if design == "trend":
        text = text.replace("levels", parameters[0])
    plan = read(SMALL[: SMALL.index("[[contrast]]")] + entry + text + "\n")
    assert plan.contrasts[0].arguments == tomllib.loads(text)
    # An argument with a typing error is found out, whatever the design.
    with pytest.raises(tfs.InputError, match=f'expected an argument of {design} among .*, got "no_such_argument"'):
        read(SMALL[: SMALL.index("[[contrast]]")] + entry + text + "\nno_such_argument = 1\n")


@pytest.mark.parametrize("design", sorted(DESIGNS))
def test_what_a_design_needs_is_asked_for(read, design):
    parameters = list(inspect.signature(DESIGNS[design].function).parameters.values())[1:]
    needed = [p.name for p in parameters if p.default is inspect.Parameter.empty and p.name != "baseline_window"]
    text = SMALL[: SMALL.index("[[contrast]]")] + f'[[contrast]]\nname = "it"\ndesign = "{design}"\n'
    if not needed:
        assert read(text).contrasts[0].arguments == {}
        return
    with pytest.raises(tfs.InputError) as caught:
        read(text)
    assert [f'the key "{name}", which {design} needs' in said for name, said in zip(needed, caught.value.problems)] == (
        [True] * len(needed)
    )
    assert len(caught.value.problems) == len(needed)


def test_subject_of_a_trialwise_contrast(read):
    plan = read(
        SMALL[: SMALL.index("[[contrast]]")]
        + '[[contrast]]\nname = "one"\ndesign = "trialwise_change"\nsubject = 3\ntest = { times = [0, 1] }\n'
    )
    assert plan.contrasts[0].subject == "3"
    assert plan.contrasts[0].arguments == {}


def test_band_against_band(read):
    plan = read(
        SMALL
        + '[[band]]\nname = "theta"\nfrequencies = [4, 8]\n[[band]]\nname = "alpha"\nfrequencies = [8, 13]\n'
        + '[[band]]\nname = "theta - alpha"\nfrequencies = ["theta", "alpha"]\n'
        + '[[window]]\nname = "early"\ntimes = [0, 0.5]\n'
        + '[[band_test]]\nname = "t"\ndesign = "against_zero"\ncondition = "recalled"\n'
    )
    assert plan.bands == {"theta": (4.0, 8.0), "alpha": (8.0, 13.0), "theta - alpha": ("theta", "alpha")}


def test_hash_is_of_what_is_said_not_of_how_it_is_written(read):
    plain = read(SMALL).hash
    assert len(plain) == 64
    spaced = SMALL.replace(" = ", "=").replace("\n[", "\n\n# a comment\n[").replace("[-0.5, -0.2]", "[ -0.5,\n  -0.2 ]")
    assert read(spaced).hash == plain
    assert read(SMALL.replace("\n", "\r\n")).hash == plain
    order = SMALL.replace('first = "recalled"\nsecond = "missed"', 'second = "missed"\nfirst = "recalled"')
    assert read(order).hash == plain
    for change in (("small", "smaller"), ("-0.5", "-0.4"), ('"paired"\n', '"paired"\ntest = { times = [0, 1] }\n')):
        assert read(SMALL.replace(*change)).hash != plain


def test_byte_order_mark_and_carriage_returns(tmp_path):
    path = tmp_path / "plan.toml"
    path.write_bytes(b"\xef\xbb\xbf" + SMALL.replace("\n", "\r\n").encode("utf-8"))
    assert AnalysisPlan.read(path).study.name == "small"


def test_backslashes_of_another_machine(read, tmp_path):
    plan = read(SMALL.replace('"power/S{subject}.npz"', r"'power\S{subject}.npz'"))
    assert plan.place(plan.input.files) == tmp_path / "power" / "S{subject}.npz"


def test_where_says_line_and_key(read):
    plan = read(SMALL)
    assert plan.where("baseline", "window") == "plan.toml, line 9, baseline, window"
    assert plan.where("baseline", "unit") == "plan.toml, line 8, baseline, unit"
    assert plan.where("contrast", 0, "first") == 'plan.toml, line 13, contrast "recalled against missed", first'
    assert plan.where("participants") == "plan.toml, participants"


def test_data_part_stands_without_the_rest(read, tmp_path):
    with pytest.raises(tfs.InputError):
        read(SMALL.replace('"paired"', '"pared"'))
    part = AnalysisPlan.data_part(tmp_path / "plan.toml")
    assert part.baseline == tfs.Baseline((-0.5, -0.2))
    assert part.contrasts == ()
    with pytest.raises(tfs.InputError):
        read(SMALL.replace("-0.5, -0.2", "-0.2, -0.5"))
    assert AnalysisPlan.data_part(tmp_path / "plan.toml") is None
