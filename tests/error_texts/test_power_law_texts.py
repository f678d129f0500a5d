"""The exact text of each refusal by power laws, broadband-adjusted maps, relative maps and trial counts."""

from contextlib import contextmanager

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs

FREQUENCIES = [4.0, 8.0, 16.0, 32.0]
UNKNOWN = (
    'scaling: expected "density" or "amplitude", known for the power, got None (a 1/f signal has exponent 1 by the first and '
    '0 by the second); find out how the wavelets were scaled and state it ("density": unit energy, "amplitude": unit gain at '
    "the centre)."
)


@contextmanager
def refused(*texts):
    with pytest.raises(tfs.InputError) as caught:
        yield
    assert caught.value.problems == texts


def maps_of(**more):
    given = {
        "subjects": ["S1", "S2"],
        "conditions": ["recalled", "missed"],
        "channels": ["Fz"],
        "frequencies": FREQUENCIES,
        "times": [-0.2, -0.1, 0.0, 0.1],
        "unit": "power",
        "scaling": "density",
        "trial_counts": [[4, 6], [5, 7]],
    }
    values = more.pop("values", np.ones((2, 2, 1, 4, 4)))
    return tfs.ConditionMaps(values, **{**given, **more})


def power_of(labels, subject="S1"):
    return tfs.TrialPower(
        np.random.default_rng(0).exponential(size=(len(labels), 1, 2, 8)),
        frequencies=[4, 8],
        times=np.arange(-5, 3) * 0.1,
        channels=["Fz"],
        trials=pd.DataFrame({"memory": labels}),
        subject=subject,
    )


def test_spectra():
    with refused(f"fit_power_law, {UNKNOWN}"):
        tfs.fit_power_law(np.ones(4), FREQUENCIES, scaling=None)
    with refused(
        'fit_power_law, scaling: expected one of "amplitude", "density", got \'unit\'; choose one of them.',
    ):
        tfs.fit_power_law(np.ones(4), FREQUENCIES, scaling="unit")
    with refused(
        "fit_power_law, spectrum: expected finite linear power above 0, or NaN, got 2 values at or below 0 or infinite; "
        "turn decibels back into power, and leave out what is relative to a baseline."
    ):
        tfs.fit_power_law([1.0, -3.0, 0.0, 2.0], FREQUENCIES)
    with refused(
        "fit_power_law, spectrum: expected a last axis of 4, one value a frequency, got shape (4, 2); put the frequencies "
        "last."
    ):
        tfs.fit_power_law(np.ones((4, 2)), FREQUENCIES)
    with refused(
        "fit_power_law, spectrum: expected real numbers (..., frequencies), got type complex128, shape (4,); give linear "
        "power, frequencies last."
    ):
        tfs.fit_power_law(np.ones(4) * 1j, FREQUENCIES)
    with refused(
        "fit_power_law, spectrum: expected an array (..., frequencies), got rows of unequal length; fill gaps with NaN."
    ):
        tfs.fit_power_law([[1.0, 2.0], [1.0]], FREQUENCIES)
    with refused(
        "fit_power_law, wavelet_cycles: expected one positive number, or one for each of the 4 frequencies, got shape (2,), "
        "smallest 3; give the cycles of the wavelets."
    ):
        tfs.fit_power_law(np.ones(4), FREQUENCIES, scaling="amplitude", wavelet_cycles=[3, 4])


def test_all_mistakes_of_a_spectrum_at_once():
    with refused(
        "fit_power_law, frequencies: expected ascending frequencies without repeats, got 8 followed by 4; sort the axis and "
        "the power with it.",
        "fit_power_law, spectrum: expected finite linear power above 0, or NaN, got 1 values at or below 0 or infinite; "
        "turn decibels back into power, and leave out what is relative to a baseline.",
        f"fit_power_law, {UNKNOWN}",
    ):
        tfs.fit_power_law([0.0, 1.0], [8.0, 4.0], scaling=None)


def test_excluded_bands():
    with refused(
        "fit_power_law, frequencies: expected at least 3 outside the excluded bands, got 2 of 4; give more frequencies or "
        "leave out less."
    ):
        tfs.fit_power_law(np.ones(4), FREQUENCIES, exclude=[(8, 16)])
    with refused(
        "fit_power_law, frequencies: expected at least 5 outside the excluded bands, got 4 of 4; give more frequencies or "
        "leave out less."
    ):
        tfs.fit_power_law(np.ones(4), FREQUENCIES, bend=True)
    with refused(
        "fit_power_law, exclude: expected a list of bands (low, high) in Hz, got (8, 13); write [(8, 13)] for instance."
    ):
        tfs.fit_power_law(np.ones(4), FREQUENCIES, exclude=(8, 13))
    with refused(
        "fit_power_law, exclude: expected a low edge not above the high one, in Hz, got 13 to 8; exchange the two edges.",
        "fit_power_law, exclude: expected two numbers, low and high in Hz, got (8,); write both edges.",
    ):
        tfs.fit_power_law(np.ones(4), FREQUENCIES, exclude=[(13, 8), (8,)])


def test_maps_without_a_power_law():
    with refused(
        'power_law_maps, maps: expected averaged linear power (unit "power"), got unit "decibel"; average with '
        'Baseline(unit="none"); a power law is divided out by a baseline.',
        f"power_law_maps, {UNKNOWN}",
        'power_law_maps, window "late": expected a window that holds at least one point of the axis -0.2 to 0.1 s, got 1 to 2 '
        "s; choose a window inside the data.",
    ):
        tfs.power_law_maps(maps_of(unit="decibel", scaling=None), {"early": (-0.2, -0.1), "late": (1, 2)})
    with refused("power_law_maps, windows: expected at least one window, got none; give (start, stop) in s."):
        tfs.power_law_maps(maps_of(), {})
    with refused("power_law_maps, maps: expected ConditionMaps, got ndarray; make them with condition_maps."):
        tfs.power_law_maps(np.ones(3), (0, 1))


def test_maps_that_cannot_be_adjusted():
    with refused(
        'broadband_adjusted, maps: expected maps in unit "decibel", got unit "power"; use a Baseline with unit "decibel".',
        "broadband_adjusted, maps: expected the maps of conditions, got differences of conditions; adjust the maps first and "
        "make the contrast of them afterwards.",
        "broadband_adjusted, frequencies: expected at least 3 outside the excluded bands, got 2 of 4; give more frequencies "
        "or leave out less.",
    ):
        tfs.broadband_adjusted(maps_of(of_differences=True), exclude=[(4, 8)])
    with refused("broadband_adjusted, maps: expected ConditionMaps, got list; make them with condition_maps."):
        tfs.broadband_adjusted([])


def test_averages_that_cannot_be_made_relative():
    with refused(
        "relative_maps, maps: expected ConditionMaps, got int; make them with ConditionMaps(...).",
        "relative_maps, baseline: expected a Baseline, got NoneType; make one with Baseline(...).",
    ):
        tfs.relative_maps(3, None)
    with refused(
        'relative_maps, maps: expected averaged linear power (unit "power"), got unit "decibel"; give power, unit "power".',
        'relative_maps, baseline: expected order "average_first" and no trial column within which references are made, since '
        'the trials are averaged already, got order "trial_first"; use condition_maps with the single trials.',
        'relative_maps, trial_counts: expected the number of trials behind each map for reference "pooled", in which each '
        'trial weighs the same, got None; give the maps their trial_counts, or use reference "own" or "named".',
    ):
        tfs.relative_maps(maps_of(unit="decibel", trial_counts=None), tfs.Baseline(order="trial_first"))
    with refused(
        'relative_maps, baseline: expected unit "decibel", "percent_change", "ratio" or "z_score", got "none"; choose a unit, '
        "or use the maps as they are."
    ):
        tfs.relative_maps(maps_of(), tfs.Baseline(unit="none"))
    with refused(
        'relative_maps, baseline: expected order "average_first" and no trial column within which references are made, since '
        'the trials are averaged already, got within "run"; use condition_maps with the single trials.',
        'relative_maps, reference_condition: expected one of "missed", "recalled", got "rest"; use the spelling of the maps or '
        "another reference.",
    ):
        tfs.relative_maps(maps_of(), tfs.Baseline(reference="named", reference_condition="rest", within="run"))
    with refused(
        'relative_maps, conditions: expected conditions among "missed", "recalled", got "lost"; use the spelling of the data.'
    ):
        tfs.relative_maps(maps_of(), tfs.Baseline((-0.2, -0.1)), conditions=["lost"])
    with refused(
        "maps, baseline window: expected a window inside the times -0.2 to 0.1 s, got -0.5 to -0.2 s; choose a window inside "
        "the data."
    ):
        tfs.relative_maps(maps_of(), tfs.Baseline())
    named = tfs.Baseline((-0.2, -0.1), reference="named", reference_condition="recalled")
    with refused(
        "relative_maps, conditions: expected at least one besides the reference condition, got none; name the conditions "
        "wanted."
    ):
        tfs.relative_maps(maps_of().select(conditions=["recalled"]), named)


def test_averages_without_a_baseline():
    values = np.ones((2, 2, 1, 4, 4))
    values[1, :, :, :, :2] = np.nan
    text = (
        "subject S2, baseline window: expected finite power from -0.2 to -0.1 s in the baseline of condition {} at one "
        "frequency at least, got none at any frequency; choose a window where power is known (wavelets leave the ends of a "
        "trial empty)."
    )
    with refused(text.format('"recalled"'), text.format('"missed"')):
        tfs.relative_maps(maps_of(values=values), tfs.Baseline((-0.2, -0.1)))
    with refused(
        'subject S1, trial counts: expected equal counts for unit "z_score" by "average_first" with reference "own", whose SD '
        'falls with the count, got recalled 4, missed 6; use reference "pooled", another unit, or trial_counts "equal".',
        'subject S2, trial counts: expected equal counts for unit "z_score" by "average_first" with reference "own", whose SD '
        'falls with the count, got recalled 5, missed 7; use reference "pooled", another unit, or trial_counts "equal".',
    ):
        varied = np.random.default_rng(0).exponential(size=(2, 2, 1, 4, 4))
        tfs.relative_maps(maps_of(values=varied), tfs.Baseline((-0.2, -0.1), "z_score", "own"))


def test_trial_counts():
    power = power_of(["recalled", "missed", "missed"])
    expected = (
        'condition_maps, trial_counts: expected unit "decibel" by "average_first" with an arithmetic baseline mean for '
        '"jackknife" (the bias that it removes is that of the logarithm of a mean), got unit {} by {} with a baseline mean '
        'that is {}; use trial_counts "equal" or "as_recorded".'
    )
    with refused(expected.format('"ratio"', '"average_first"', "arithmetic")):
        tfs.condition_maps([power], "memory", tfs.Baseline(unit="ratio"), trial_counts="jackknife")
    with refused(expected.format('"decibel"', '"trial_first"', "geometric")):
        tfs.condition_maps([power], "memory", tfs.Baseline(order="trial_first"), trial_counts="jackknife")
    with refused(expected.format('"decibel"', '"average_first"', "geometric")):
        tfs.condition_maps([power], "memory", tfs.Baseline(baseline_mean="geometric"), trial_counts="jackknife")
    with refused(
        'subject S1, trial counts: expected at least two trials of each condition for trial_counts "jackknife", got missed 2, '
        'recalled 1; leave the subject out or use trial_counts "equal".'
    ):
        tfs.condition_maps([power], "memory", tfs.Baseline(), trial_counts="jackknife")
    with refused(
        "condition_maps, seed: expected a whole number of at least 0, got -1; give a whole number.",
        "condition_maps, subsamples: expected a whole number of at least 1, got 0; give a whole number.",
    ):
        tfs.condition_maps([power], "memory", tfs.Baseline(), trial_counts="equal", seed=-1, subsamples=0)
    with refused(
        f"condition_maps, seed: expected a whole number below 2^64, got {2**64}; give a smaller one.",
    ):
        tfs.condition_maps([power], "memory", tfs.Baseline(), trial_counts="equal", seed=2**64)
