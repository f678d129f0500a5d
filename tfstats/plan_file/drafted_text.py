"""The text of a drafted plan: TOML with comments, guesses marked, blanks to fill in."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from tfstats.plan_file.blanks import FILL_IN
from tfstats.plan_file.toml_text import toml_key, toml_value
from tfstats.power_files import FileContents
from tfstats.power_files.file_contents import LabelCounts

__all__ = ["Study", "plan_text"]

REJECTION_WORDS = ("artefact", "artifact", "reject", "bad", "good", "valid", "exclude", "outlier")
WIDTH = 110


@dataclass(frozen=True)
class Study:
    """What is known of the study when its plan is drafted."""

    name: str
    first: FileContents
    pattern: str | None
    subjects: tuple[str, ...]
    words: tuple[str, ...]
    """Words of the pattern besides subject."""
    columns: dict[str, LabelCounts | None]
    """Trial columns; with their labels where these are few."""
    trial_table: str | None
    participants: tuple[str, str, str] | None
    """Path, column, how subjects are written."""
    electrodes: tuple[str, tuple[str, ...]] | None
    """Path, channels without a position."""

    @property
    def averaged(self) -> bool:
        """Whether there is no axis of trials: averages that were made before."""
        first = self.first
        return bool(first.axes and "trial" not in first.axes and first.lengths.get("trial") == 1)

    @property
    def input_blanks(self) -> bool:
        """Whether the files cannot be read before something is filled in."""
        found = self.first.names
        return (
            not self.subjects
            or self.first.axes is None
            or any(part not in found for part in ("power", "frequencies", "times", "channels"))
        )

    def layout(self) -> dict[str, Any]:
        """Keys of [input] that say how the files are read; without the defaults."""
        first = self.first
        made: dict[str, Any] = {}
        if first.axes is not None and first.axes != ("trial", "channel", "frequency", "time"):
            made["axes"] = list(first.axes)
        if first.contents != "linear_power":
            made["contents"] = first.contents
        if first.time_unit != "s":
            made["time_unit"] = first.time_unit
        names = {part: name for part, name in first.names.items() if part != name}
        outside = {
            f"trials.{column}": name for column, name in first.trial_columns.items() if name != f"trials.{column}"
        }
        if names or outside:
            made["names"] = {**names, **outside}
        return made


class _Writer:
    def __init__(self) -> None:
        self.lines: list[str] = []
        self.blanks = 0

    def add(self, line: str = "") -> None:
        self.lines.append(line)

    def comment(self, text: str) -> None:
        for line in textwrap.wrap(text, WIDTH):
            self.add(f"# {line}")

    def key(self, name: str, value: Any, comment: str = "") -> None:
        self.add(f"{toml_key(name)} = {toml_value(value)}" + (f"  # {comment}" if comment else ""))

    def blank(self, name: str, what: str) -> None:
        self.blanks += 1
        self.add(f"{toml_key(name)} = {toml_value(f'{FILL_IN}: {what}')}")


def plan_text(study: Study, remarks: Sequence[str]) -> tuple[str, int]:
    """The plan, and the number of its blanks."""
    out = _Writer()
    out.comment(
        f'A first plan, drafted from the files. Lines marked "guess" are to be checked, texts that begin with {FILL_IN} to be '
        "replaced; then: tfstats check plan.toml, tfstats inspect plan.toml, tfstats run plan.toml --out results."
    )
    for remark in remarks:
        out.comment(f"Mind: {remark}")
    out.add()
    out.add("[study]")
    out.key("name", study.name, "guess: the folder's name")
    out.add("# alpha = 0.05, permutations = 10000 and seed = 0 unless stated here")
    out.add()
    _input(out, study)
    _tables(out, study)
    chosen = _conditions(out, study)
    _channels(out, study)
    _baseline(out, study)
    _contrast(out, study, chosen)
    return "\n".join(out.lines) + "\n", out.blanks


def _input(out: _Writer, study: Study) -> None:
    first, layout = study.first, study.layout()
    out.add("[input]")
    if study.pattern is None or not study.subjects:
        out.blank("files", "the path of the power files with {subject} where their names differ")
    else:
        shown = ", ".join(study.subjects[:6]) + (" ..." if len(study.subjects) > 6 else "")
        out.key("files", study.pattern, f"guess: subjects {shown}")
    if study.averaged:
        out.key("kind", "averaged_power", "guess: the power has no axis of trials")
        out.add('# trial_counts = "n"  # the column that holds the number of trials behind each average')
    if first.axes is None:
        options = " or ".join(toml_value(list(one)) for one in first.candidates[:6])
        out.blank("axes", f"the order of the power's axes{f', {options}' if options else ''}")
    elif "axes" in layout:
        out.key("axes", layout["axes"], "guess: told by the lengths")
    if "contents" in layout:
        out.key("contents", layout["contents"], "guess: from the values; see above")
    if "time_unit" in layout:
        out.key("time_unit", "ms", "guess: steps of half a unit or more")
    present = {one.name for one in first.arrays}
    if "wavelet_cycles" not in present:
        out.add(
            "# wavelet_cycles = 7  # if the power was made with Morlet wavelets; the review of the baseline uses it"
        )
    if "power_unit" not in present:
        out.add('# power_unit = "µV²/Hz"')
    if study.trial_table is not None:
        out.key("trial_table", study.trial_table, "guess: one row a trial")
    missing = [part for part in ("power", "frequencies", "times", "channels") if part not in first.names]
    names = layout.get("names", {})
    if missing or names:
        out.add()
        out.add("[input.names]")
        for part, name in names.items():
            if not part.startswith("trials."):
                out.key(part, name, "guess")
        for part in missing:
            unit = {"frequencies": " (Hz)", "times": " (s or ms)"}.get(part, "")
            out.blank(part, f"the name in the file of the {part}{unit}")
        columns = {part.removeprefix("trials."): name for part, name in names.items() if part.startswith("trials.")}
        if columns:
            out.add()
            out.add("[input.names.trials]  # guess: as many values as there are trials")
            for column, name in columns.items():
                out.key(column, name)
    _rules(out, study)
    out.add()


def _rules(out: _Writer, study: Study) -> None:
    """Suggestions for [input.recode] and [input.keep], commented out."""
    for column, labels in study.columns.items():
        rejects = any(word in column.lower() for word in REJECTION_WORDS)
        if labels and set(labels) == {"0", "1"} and not rejects:
            out.add()
            out.add(f"# {column} holds 0 and 1; give the codes names, and use these names in the contrasts:")
            out.add(f"# [input.recode.{toml_key(column)}]")
            out.add('# "1" = "yes"')
            out.add('# "0" = "no"')
        if rejects:
            out.add()
            out.add(f"# {column} may tell which trials are to be left out:")
            out.add("# [input.keep]")
            out.add(f"# {toml_key(column)} = 0")


def _tables(out: _Writer, study: Study) -> None:
    if study.participants is None:
        return
    path, column, form = study.participants
    out.add("[participants]")
    out.key("file", path)
    if column != "participant_id":
        out.key("column", column, "guess: each subject of the files once")
    if form != "{subject}":
        out.key("subject", form, "guess: how the table writes them")
    out.add()


def _conditions(out: _Writer, study: Study) -> tuple[str, LabelCounts] | None:
    """The column that conditions are made of, with its labels."""
    fitting = {
        name: labels
        for name, labels in study.columns.items()
        if labels and not any(word in name.lower() for word in REJECTION_WORDS)
    }
    out.add("[conditions]")
    if not fitting:
        known = ", ".join(study.columns) or "none was found"
        out.blank("columns", f"a list of the trial columns that conditions are made of (columns: {known})")
        out.add()
        return None
    # Runs and sessions are seldom what is compared; words rather than numbers, and two rather than more, often are.
    order = sorted(
        fitting,
        key=lambda name: (
            name in ("run", "session", "block", "part"),
            all(label.replace(".", "").isdigit() for label in fitting[name]) and set(fitting[name]) != {"0", "1"},
            len(fitting[name]),
        ),
    )
    name = order[0]
    labels = fitting[name]
    counted = ", ".join(label if not count else f"{label} ({count} trials)" for label, count in labels.items())
    out.key("columns", [name], f"guess: {counted} in the first file")
    if len(order) > 1:
        out.comment(f"Other columns with few labels: {', '.join(order[1:])}.")
    out.add(f"# conditions = {toml_value(list(labels))}  # left out: all labels, sorted")
    out.add()
    return name, labels


def _channels(out: _Writer, study: Study) -> None:
    if study.electrodes is None:
        out.comment(
            'Without electrode positions clusters do not reach over channels. [channels] takes electrodes = "electrodes.tsv" '
            "(columns name, x, y, z)."
        )
    else:
        path, missing = study.electrodes
        out.add("[channels]")
        out.key("electrodes", path)
        if missing:
            names = ", ".join(missing[:8]) + (" ..." if len(missing) > 8 else "")
            out.comment(f"Channels without a position in that table, to be added there: {names}.")
    out.add('# missing = "keep_common"  # in [channels], when subjects lack channels')
    out.add()


def _baseline(out: _Writer, study: Study) -> None:
    times = study.first.values_of("times")
    scale = 1000.0 if study.first.time_unit == "ms" else 1.0
    said = "" if times is None else f"; times run from {times.min() / scale:g} to {times.max() / scale:g} s"
    if times is not None and times.min() >= 0:
        out.comment("Mind: no time lies before 0; a baseline from elsewhere is a reference condition or a rest block.")
    out.add("[baseline]")
    out.comment("The choice that matters most; tfstats inspect says what it does to these data.")
    out.blank("window", f"[start, stop] in s, before the event{said}")
    out.key("unit", "decibel", "percent_change, ratio, z_score, none")
    out.key("reference", "pooled", "one baseline from all conditions; own, named")
    if len(study.subjects) == 1 and not study.averaged:
        out.key("order", "trial_by_reference", "trial_first; single trials are compared")
    else:
        out.key("order", "average_first", "trial_first, trial_by_reference")
    if study.averaged:
        out.comment("Averages allow no other order than average_first.")
    out.add()


def _contrast(out: _Writer, study: Study, chosen: tuple[str, LabelCounts] | None) -> None:
    out.add("[test]")
    out.add("# times = [0.0, 1.0]  # left out: all times after the baseline window")
    out.key("correction", {"kind": "cluster_mass", "forming_p": 0.01})
    out.add()
    out.add("[[contrast]]")
    if chosen is None:
        out.key("name", "first against second")
        out.key("design", "paired", "guess")
        out.blank("first", "a condition")
        out.blank("second", "the condition that is subtracted from it")
        return
    column, labels = chosen
    # Of codes the 1 is what was done, chosen, remembered.
    first, second = ("1", "0") if set(labels) == {"0", "1"} else list(labels)[:2]
    out.key("name", f"{first} against {second}")
    if len(study.subjects) == 1 and not study.averaged:
        out.key("design", "trialwise", "guess: one subject, whose trials are compared")
        out.key("column", column)
    else:
        out.key("design", "paired", "guess: within subjects")
    out.key("first", first, f"guess: one of {', '.join(labels)}")
    out.key("second", second, "guess: is subtracted from the first")
    out.add()
    out.comment("Bands and windows fixed beforehand, tested as one table of means:")
    for line in (
        "[[band]]", 'name = "theta"', "frequencies = [4, 8]", "[[window]]", 'name = "early"', "times = [0.2, 0.6]",
        "[[band_test]]", f"name = {toml_value(f'{first} against {second}')}", 'design = "paired"',
        f"first = {toml_value(first)}", f"second = {toml_value(second)}",
    ):  # fmt: skip
        out.add(f"# {line}")
