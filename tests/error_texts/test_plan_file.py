"""The exact text of each refusal of a plan file."""

import pytest

import tfstats as tfs
from tfstats.plan_file import AnalysisPlan

PLAN = """[study]
name = "tiny"
permutations = 64
[input]
files = "power/S{subject}.npz"
[participants]
file = "participants.tsv"
[conditions]
columns = ["memory"]
conditions = ["recalled", "missed"]
[channels]
adjacency = "none"
[baseline]
window = [-0.4, -0.2]
[test]
times = [0.0, 0.4]
correction = { kind = "cluster_mass", forming_p = 0.05 }
[[contrast]]
name = "recalled against missed"
design = "paired"
first = "recalled"
second = "missed"
"""
CONTRAST = PLAN[PLAN.index("[[contrast]]") :]
CORRECTION = '{ kind = "cluster_mass", forming_p = 0.05 }'
TEST_KEYS = (
    '"alternative", "channels", "correction", "every_nth_time", "fewest_subjects", "frequencies", "mean_across", '
    '"permutations", "robust", "tail_approximation", "times", "until_resolved"'
)
TABLES = (
    '"band", "band_test", "baseline", "channels", "conditions", "contrast", "family", "input", "participants", '
    '"study", "subjects", "test", "window"'
)
KINDS = '"cluster_extent", "cluster_mass", "false_discovery", "maximum", "threshold_free"'
NAMED = 'contrast "recalled against missed"'
BANDS = '[[band]]\nname = "theta"\nfrequencies = [4, 8]\n'
WINDOWS = '[[window]]\nname = "early"\ntimes = [0, 0.4]\n'
BAND_TEST = '[[band_test]]\nname = "t"\ndesign = "against_zero"\ncondition = "recalled"\n'


def changed(*pairs):
    text = PLAN
    for old, new in pairs:
        assert old in text
        text = text.replace(old, new)
    return text


EXACT = {
    "empty": (
        "",
        "plan.toml: expected a table [study], got none; add [study].",
        "plan.toml: expected a table [input], got none; add [input].",
        "plan.toml: expected a table [baseline], got none; add [baseline].",
    ),
    "unknown table": (
        PLAN + "[chanels]\n",
        f'plan.toml, line 23, chanels: expected a key among {TABLES}, got "chanels"; did you mean "channels"? correct or '
        "remove it.",
    ),
    "unknown keys": (
        changed(("permutations", "permutation"), ("first =", "frist ="), ("times", "time"), ("window", "windo")),
        'plan.toml, line 3, study, permutation: expected a key among "alpha", "name", "permutations", "seed", got '
        '"permutation"; did you mean "permutations"? correct or remove it.',
        'plan.toml, line 13, baseline: expected the key "window", got none; add window = [start, stop] in s, before the '
        "event.",
        'plan.toml, line 14, baseline, windo: expected a key among "baseline_mean", "order", "reference", '
        '"reference_condition", "trial_counts", "unit", "window", "within", got "windo"; did you mean "window"? correct or '
        "remove it.",
        f'plan.toml, line 16, test, time: expected a key among {TEST_KEYS}, got "time"; did you mean "times"? correct or '
        "remove it.",
        f'plan.toml, line 18, {NAMED}: expected the key "first", which paired needs, got none; add it.',
        f'plan.toml, line 21, {NAMED}, frist: expected an argument of paired among "first", "second", "test", got "frist"; '
        'did you mean "first"? correct or remove it.',
    ),
    "kinds": (
        changed(('"tiny"', '3\nalpha = "0.05"'), ("= 64", "= 1e3"), ('["memory"]', '"memory"'), ('"paired"', "true")),
        "plan.toml, line 2, study, name: expected a text, got 3; correct the value.",
        'plan.toml, line 3, study, alpha: expected a number, got "0.05"; correct the value.',
        "plan.toml, line 4, study, permutations: expected a whole number, got 1000.0; correct the value.",
        'plan.toml, line 10, conditions, columns: expected a list, got "memory"; write ["memory"].',
        f"plan.toml, line 21, {NAMED}, design: expected a text, got true; correct the value.",
    ),
    "bounds": (
        changed(("= 64", "= 1\nalpha = 1\nseed = 18446744073709551616")),
        "plan.toml, line 3, study, permutations: expected a number of at least 2, got 1; correct the number.",
        "plan.toml, line 4, study, alpha: expected a number below 1, got 1; correct the number.",
        "plan.toml, line 5, study, seed: expected a number below 18446744073709551616, got 18446744073709551616; correct "
        "the number.",
    ),
    "too many": (
        changed(("= 64", "= 99999999999999999999\nalpha = nan")),
        "plan.toml, line 3, study, permutations: expected a number of at most 1000000000, got 99999999999999999999; correct "
        "the number.",
        "plan.toml, line 4, study, alpha: expected a finite number, got nan; correct the value.",
    ),
    "empty lists": (
        changed(('["memory"]', "[]"), ('["recalled", "missed"]', "[]"), ("[-0.4, -0.2]", "[]"), ("[0.0, 0.4]", "[]")),
        "plan.toml, line 9, conditions, columns: expected a list that is not empty, got []; correct the value.",
        "plan.toml, line 10, conditions, conditions: expected a list that is not empty, got []; correct the value.",
        "plan.toml, line 14, baseline, window: expected two numbers, start and stop in s, got []; write [-0.5, -0.2] for "
        "instance.",
        "plan.toml, line 16, test, times: expected a list of two, got []; correct the value.",
    ),
    "options": (
        PLAN + 'test = { alternative = "both", robust = "rnk", mean_across = ["chanels"] }\n',
        f'plan.toml, line 23, {NAMED}, test, mean_across 1: expected one of "channels", "frequencies", "times", got '
        '"chanels"; choose one of them.',
        f'plan.toml, line 23, {NAMED}, test, alternative: expected one of "greater", "less", "two-sided", got "both"; '
        "choose one of them.",
        f'plan.toml, line 23, {NAMED}, test, robust: expected one of "rank", "trimmed", got "rnk"; choose one of them.',
    ),
    "brackets": (
        changed(("[study]", "[[study]]"), ("[[contrast]]", "[contrast]")),
        "plan.toml, line 1, study: expected one table, got 1 in a list; write [study] in single brackets.",
        "plan.toml, line 18, contrast: expected a list of tables, got one table; write [[contrast]] in double brackets.",
    ),
    "baseline": (
        changed(
            ("[-0.4, -0.2]", '[-400, -200]\nunit = "dB"\nreference = 3\ntrial_counts = "even"\nreference_condition = "r"')
        ),
        "plan.toml, line 14, baseline, window: expected seconds within 100 of the event, got -400 to -200, probably "
        "milliseconds; divide both edges by 1000.",
        'plan.toml, line 15, baseline, unit: expected one of "decibel", "none", "percent_change", "ratio", "z_score", got '
        '"dB"; choose one of them.',
        'plan.toml, line 16, baseline, reference: expected one of "named", "own", "pooled", got 3; choose one of them.',
        'plan.toml, line 17, baseline, trial_counts: expected one of "as_recorded", "equal", "jackknife", got "even"; '
        "choose one of them.",
    ),
    "edges the wrong way round": (
        changed(("[-0.4, -0.2]", "[-0.2, -0.4]"), ("[0.0, 0.4]", "[0.4, 0.0]"))
        + BANDS.replace("4, 8", "8, 4")
        + WINDOWS.replace("0, 0.4", "0.4, 0")
        + BAND_TEST,
        "plan.toml, line 14, baseline, window: expected a start not after its stop, in s, got -0.2 to -0.4; exchange the "
        "two edges.",
        "plan.toml, line 16, test, times: expected a lower edge before the upper one, got 0.4 to 0; exchange the two edges.",
        'plan.toml, line 25, band "theta", frequencies: expected a lower edge before the upper one, got 8 to 4; exchange '
        "the two edges.",
        'plan.toml, line 28, window "early", times: expected a lower edge before the upper one, got 0.4 to 0; exchange the '
        "two edges.",
    ),
    "correction, no kind": (
        changed((CORRECTION, "{ forming_p = 0.05 }")),
        f"plan.toml, line 17, test, correction: expected a correction with kind among {KINDS}, got none; write "
        '{ kind = "cluster_mass", forming_p = 0.01 }.',
    ),
    "correction, kind": (
        changed((CORRECTION, '{ kind = "clustermass" }')),
        f'plan.toml, line 17, test, correction: expected a correction with kind among {KINDS}, got "clustermass"; did you '
        'mean "cluster_mass"? write { kind = "cluster_mass", forming_p = 0.01 }.',
    ),
    "correction, key": (
        changed(("forming_p", "forming")),
        'plan.toml, line 17, test, correction: expected keys of cluster_mass among "forming_p", "kind", got "forming"; did '
        'you mean "forming_p"? correct or remove them.',
    ),
    "correction, value": (
        changed(("0.05 }", "5 }")),
        "plan.toml, line 17, test, correction, forming_p: expected a number between 0 and 1, got 5; write 0.05 for five "
        "percent.",
    ),
    "correction, a text": (
        changed((CORRECTION, '"cluster_mass"')),
        'plan.toml, line 17, test, correction: expected a table, got "cluster_mass"; correct the value.',
    ),
    "correction of a contrast": (
        PLAN + 'test = { correction = { kind = "maximum", forming_p = 0.01 } }\n',
        f'plan.toml, line 23, {NAMED}, test, correction: expected keys of maximum among "kind", got "forming_p"; correct or '
        "remove them.",
    ),
    "design": (
        changed(('"paired"', '"pared"')),
        f'plan.toml, line 20, {NAMED}, design: expected a design among "against_zero", "between_groups", "interaction", '
        '"paired", "repeated_measures", "several_groups", "slope", "trend", "trialwise", "trialwise_change", '
        '"trialwise_slope", "weighted", got "pared"; did you mean "paired"? choose one of them.',
    ),
    "no design": (
        changed(('design = "paired"\n', "")),
        f'plan.toml, line 18, {NAMED}: expected the key "design", got none; add it.',
    ),
    "subject of a design over subjects": (
        PLAN + 'subject = "03"\n',
        f'plan.toml, line 23, {NAMED}, subject: expected no subject for a design over subjects, got "03"; remove it.',
    ),
    "averages of a design over trials": (
        changed((CONTRAST, '[[contrast]]\nname = "c"\ndesign = "trialwise_change"\ntest = { mean_across = ["times"] }\n')),
        'plan.toml, line 18, contrast "c": expected no mean_across for a design over trials, got "times"; choose '
        "frequencies and times instead.",
    ),
    "band test over trials": (
        PLAN + BANDS + WINDOWS + '[[band_test]]\nname = "t"\ndesign = "trialwise_change"\n',
        'plan.toml, line 31, band_test "t", design: expected a design over subjects, got "trialwise_change"; the band table '
        "compares subjects.",
    ),
    "names twice": (
        PLAN + CONTRAST,
        f'plan.toml, line 23, {NAMED}: expected each name once, got "recalled against missed" more than once; rename one.',
    ),
    "names that collide as folders": (
        PLAN + CONTRAST.replace("recalled against", "Recalled_against"),
        'plan.toml, line 23, contrast "Recalled_against missed": expected names that stay distinct as folder names, got '
        '"Recalled_against missed", "recalled against missed"; rename one of them.',
    ),
    "nothing to do": (
        changed((CONTRAST, "")),
        "plan.toml: expected at least one [[contrast]] or [[band_test]], got none; add what is to be compared.",
    ),
    "bands without a test": (
        PLAN + BANDS,
        "plan.toml: expected a [[band_test]] for the bands and windows, got none; add the comparison that the band table "
        "runs, or remove them.",
    ),
    "a band test without windows": (
        PLAN + BANDS + BAND_TEST,
        'plan.toml, line 26, band_test "t": expected bands and windows for the band table, got none of either or both; add '
        "[[band]] and [[window]].",
    ),
    "band against an unknown band": (
        PLAN + BANDS + BANDS.replace("theta", "x").replace("[4, 8]", '["theta", "alpa"]') + WINDOWS + BAND_TEST,
        'plan.toml, line 28, band "x", frequencies: expected bands among "theta", got "alpa"; name two bands that have '
        "edges.",
    ),
    "band of one name": (
        PLAN + BANDS.replace("[4, 8]", '["theta"]') + WINDOWS + BAND_TEST,
        'plan.toml, line 25, band "theta", frequencies: expected two edges in Hz, or the names of two bands, got ["theta"]; '
        "write [4, 8] for instance.",
    ),
    "no conditions": (
        changed(('[conditions]\ncolumns = ["memory"]\nconditions = ["recalled", "missed"]\n', "")),
        "plan.toml: expected a table [conditions] with the trial columns that define them, got none; add [conditions] with "
        'columns = ["memory"] for instance.',
    ),
    "sphere without electrodes": (
        changed(('"none"', '"sphere"')),
        'plan.toml, line 12, channels, adjacency: expected an electrode table for the positions, got none; add electrodes = '
        '"electrodes.tsv", or set adjacency = "none".',
    ),
    "pairs without their table": (
        changed(('"none"', '"pairs"\nfarthest = 3')),
        "plan.toml, line 12, channels, adjacency: expected a table of pairs with the columns first and second, got none; add "
        'pairs = "pairs.tsv".',
        'plan.toml, line 13, channels, farthest: expected adjacency = "distance" beside it, got "pairs"; set it, or remove '
        "farthest.",
    ),
    "distance without the distance": (
        changed(('"none"', '"distance"\nelectrodes = "e.tsv"\ngroups = { frontal = [] }')),
        "plan.toml, line 12, channels, adjacency: expected the largest distance of neighbours, got none; add farthest = ... "
        "in the unit of the positions.",
        "plan.toml, line 14, channels, groups, frontal: expected at least one channel, got none; name its channels.",
    ),
    "layout": (
        changed(("[participants]", "[input.keep]\nrt = { at_mst = 3 }\n[input.names]\npwer = 'x'\n[participants]")),
        'plan.toml, line 7, input, keep, rt: expected a label, or some of "at_least", "at_most", "one_of", got "at_mst"; use '
        "these words.",
        'plan.toml, line 8, input, names: expected parts among "axes", "channels", "frequencies", "power", "power_unit", '
        '"scaling", "subject", "times", "trials", "trials.COLUMN", "wavelet_cycles", got "pwer"; did you mean "power"? use '
        "one of them.",
    ),
    "backslash": (
        changed(("power/S", "power\\S")),
        "plan.toml: expected a file in TOML, got Unescaped '\\' in a string (at line 5, column 17); write / between folders, "
        "which Windows takes too.",
    ),
    "key twice": (
        changed(("permutations", "name = 'x'\npermutations")),
        "plan.toml: expected a file in TOML, got Cannot overwrite a value (at line 3, column 11); keep one of the two; "
        "contrasts, bands and windows stand in double brackets, [[contrast]].",
    ),
    "no TOML": (
        "study: tiny\n",
        "plan.toml: expected a file in TOML, got Expected '=' after a key in a key/value pair (at line 1, column 6); mend "
        "that place; texts stand in double quotes.",
    ),
    "brackets without end": (
        "x = " + "[" * 5000,
        "plan.toml: expected a file in TOML, got brackets nested too deeply; write the plan anew.",
    ),
}


@pytest.mark.parametrize("name", EXACT)
def test_exact_text(name, tmp_path):
    text, *expected = EXACT[name]
    path = tmp_path / "plan.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(tfs.InputError) as caught:
        AnalysisPlan.read(path)
    assert list(caught.value.problems) == expected


def test_plan_that_cannot_be_read(tmp_path):
    latin = tmp_path / "plan.toml"
    latin.write_bytes('[study]\nname = "Prüfung"\n'.encode("latin-1"))
    for path, expected in (
        (tmp_path / "none.toml", "expected a plan file, got nothing of that name; check the path."),
        (tmp_path, "expected a plan file, got a folder; check the path."),
        (latin, "expected text in UTF-8, got a byte that is not (invalid start byte); save it as UTF-8."),
    ):
        with pytest.raises(tfs.InputError) as caught:
            AnalysisPlan.read(path)
        assert caught.value.problems == (f"{path}: {expected}",)
