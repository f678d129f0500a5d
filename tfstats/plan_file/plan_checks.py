"""What tables alone cannot know: designs and their arguments, corrections, the baseline, names that belong together."""

from __future__ import annotations

import inspect
import re
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any, TypeVar

from pydantic import ValidationError

from tfstats.averaged_maps.trial_counting import TRIAL_COUNTS as COUNTINGS
from tfstats.contrasts import DESIGNS
from tfstats.corrections import CORRECTIONS, ClusterMass, Correction
from tfstats.foundations.checks import closest
from tfstats.foundations.errors import InputError, Problems, listed
from tfstats.foundations.safe_writing import file_names
from tfstats.normalization import Baseline
from tfstats.plan_file.argument_kinds import expected_kind
from tfstats.plan_file.line_numbers import KeyPath
from tfstats.plan_file.messages import place_text, refusals_of, shown
from tfstats.plan_file.tables import BandTestEntry, ContrastEntry, InputTable, PlanTables, TestTable
from tfstats.power_files.layout import Layout

__all__ = ["DesignCall", "checked_plan"]

TRIAL_COUNTS = "trial_counts"
"""The one key of [baseline] that is no field of Baseline."""

Entry = TypeVar("Entry", ContrastEntry, BandTestEntry)


@dataclass(frozen=True)
class DesignCall:
    """One contrast of the plan: its design with the arguments as keys, and how it is tested."""

    name: str
    design: str
    arguments: dict[str, Any]
    test: TestTable
    correction: Correction
    place: str
    """Where it stands, for refusals: `plan.toml, line 12, contrast "recalled against missed"`."""
    subject: str | None = None


def checked_plan(
    file: str, data: dict[str, Any], lines: dict[KeyPath, int], *, compares: bool = True
) -> tuple[PlanTables, Baseline, tuple[DesignCall, ...], tuple[DesignCall, ...]]:
    """The plan's tables, baseline, contrasts and band tests, or all that is wrong with any of them.

    Without `compares` the plan need not compare anything.
    """
    checks = _Checks(file, data, lines)
    tables: PlanTables | None = None
    try:
        tables = PlanTables.model_validate(data)
    except ValidationError as error:
        checks.problems.found.extend(refusals_of(error, PlanTables, file, data, lines))
    baseline = checks.baseline()
    contrasts = tuple(checks.contrast(number, entry) for number, entry in checks.entries("contrast", ContrastEntry))
    band_tests = tuple(checks.band_test(number, entry) for number, entry in checks.entries("band_test", BandTestEntry))
    checks.names()
    if tables is not None:
        checks.input(tables.input)
        checks.windows(tables)
        checks.belonging(tables)
        if compares:
            checks.something_to_do(tables)
    checks.raise_if_any()
    assert tables is not None and baseline is not None
    return tables, baseline, contrasts, band_tests


class _Checks:
    """Each check notes what it finds; those of single entries also run where other tables are wrong."""

    def __init__(self, file: str, data: dict[str, Any], lines: dict[KeyPath, int]) -> None:
        self.file, self.data, self.lines = file, data, lines
        self.problems = Problems()
        self.common = _sound_part(data.get("test"))

    def where(self, *key: str | int) -> str:
        return place_text(self.file, key, self.data, self.lines)

    @contextmanager
    def _at(self, *key: str | int) -> Iterator[None]:
        """Take over the problems of settings that are made from this part of the plan, with the line of each key."""
        try:
            yield
        except InputError as error:
            self.problems.found.extend(self._placed(text, key) for text in error.problems)
        except TypeError as error:
            self.problems.add(self.where(*key), "values of the right kind", str(error), "correct them")

    def _placed(self, text: str, key: KeyPath) -> str:
        """`plan.toml, line 12, baseline, window: expected ...` from `baseline, window: expected ...`."""
        said, _, rest = text.partition(": ")
        inner = said.split(", ")[1:] if "expected" not in said else []
        # Settings show values as Python writes them.
        rest = re.sub(r"got '([^']*)'", r'got "\1"', rest).replace("(-0.5, -0.2)", "[-0.5, -0.2]")
        return f"{self.where(*key, *inner)}: {rest if inner or said.isidentifier() else text}"

    def raise_if_any(self) -> None:
        """Refuse, in the order of the file."""
        line = re.compile(re.escape(self.file) + r", line (\d+)")

        def position(text: str) -> int:
            found = line.match(text)
            return int(found.group(1)) if found else len(self.lines) + 10**6

        self.problems.found.sort(key=position)
        self.problems.raise_if_any()

    def entries(self, key: str, model: type[Entry]) -> list[tuple[int, Entry]]:
        """Each entry with its number; one that is wrong in part is taken with what is sound."""
        found: list[tuple[int, Entry]] = []
        listing = self.data.get(key)
        for number, raw in enumerate(listing if isinstance(listing, list) else []):
            if not isinstance(raw, dict) or not isinstance(raw.get("design"), str):
                continue
            rest = {name: value for name, value in raw.items() if name not in ("test", "subject")}
            for attempt in (raw, {**rest, "test": _sound_part(raw.get("test"))}, {**rest, "name": f"{key} {number}"}):
                try:
                    found.append((number, model.model_validate(attempt)))
                    break
                except ValidationError:
                    continue
        return found

    def baseline(self) -> Baseline | None:
        table = self.data.get("baseline")
        if not isinstance(table, dict):
            return None
        given = {key: value for key, value in table.items() if key != TRIAL_COUNTS}
        known = list(inspect.signature(Baseline).parameters)
        for key in given:
            if key not in known:
                self.problems.add(
                    self.where("baseline", key),
                    f"a key among {listed([*known, TRIAL_COUNTS])}",
                    f'"{key}"',
                    f"{closest(key, [*known, TRIAL_COUNTS])}correct or remove it",
                )
        counting = table.get(TRIAL_COUNTS, COUNTINGS[0])
        if not isinstance(counting, str) or counting not in COUNTINGS:
            self.problems.add(
                self.where("baseline", TRIAL_COUNTS), f"one of {listed(COUNTINGS)}", shown(counting), "choose one of them"
            )
        if "window" not in given and given.get("unit") != "none":
            self.problems.add(
                self.where("baseline"), 'the key "window"', "none", "add window = [start, stop] in s, before the event"
            )
        with self._at("baseline"):
            return Baseline(**{key: value for key, value in given.items() if key in known})
        return None

    def contrast(self, number: int, entry: ContrastEntry) -> DesignCall:
        test = self.common.model_copy(update={name: getattr(entry.test, name) for name in entry.test.model_fields_set})
        correction = self._correction(number, entry, test)
        arguments = self._arguments(("contrast", number), entry.design, dict(entry.model_extra or {}))
        takes = DESIGNS[entry.design].takes if entry.design in DESIGNS else ""
        if takes == "maps" and entry.subject is not None:
            self.problems.add(
                self.where("contrast", number, "subject"), "no subject for a design over subjects", f'"{entry.subject}"',
                "remove it",
            )  # fmt: skip
        if takes and takes != "maps" and test.mean_across:
            self.problems.add(
                self.where("contrast", number), "no mean_across for a design over trials", listed(test.mean_across),
                "choose frequencies and times instead",
            )  # fmt: skip
        subject = None if entry.subject is None else str(entry.subject)
        place = self.where("contrast", number)
        return DesignCall(entry.name, entry.design, arguments, test, correction, place, subject)

    def band_test(self, number: int, entry: BandTestEntry) -> DesignCall:
        arguments = self._arguments(("band_test", number), entry.design, dict(entry.model_extra or {}))
        if entry.design in DESIGNS and DESIGNS[entry.design].takes != "maps":
            self.problems.add(
                self.where("band_test", number, "design"), "a design over subjects", f'"{entry.design}"',
                "the band table compares subjects",
            )  # fmt: skip
        place = self.where("band_test", number)
        return DesignCall(entry.name, entry.design, arguments, TestTable(), ClusterMass(), place)

    def input(self, table: InputTable) -> None:
        """What `PowerFiles` would refuse about the layout, with its line."""
        with self._at("input"):
            Layout.of(table.model_dump(exclude={"files", "kind", "trial_counts"}, exclude_none=True), "input")

    def _correction(self, number: int, entry: ContrastEntry, test: TestTable) -> Correction:
        given = dict({"kind": ClusterMass.kind} if test.correction is None else test.correction)
        own = entry.test.correction is not None
        key: KeyPath = ("contrast", number, "test", "correction") if own else ("test", "correction")
        place = self.where(*key)
        kind = given.pop("kind", None)
        if not isinstance(kind, str) or kind not in CORRECTIONS:
            self.problems.add(
                place, f"a correction with kind among {listed(CORRECTIONS)}", "none" if kind is None else shown(kind),
                f'{closest(str(kind), CORRECTIONS)}write {{ kind = "cluster_mass", forming_p = 0.01 }}',
            )  # fmt: skip
            return ClusterMass()
        known = list(inspect.signature(CORRECTIONS[kind]).parameters)
        unknown = [key for key in given if key not in known]
        if unknown:
            self.problems.add(
                place, f"keys of {kind} among {listed(['kind', *known])}", listed(unknown),
                f"{closest(unknown[0], known)}correct or remove them",
            )  # fmt: skip
            return ClusterMass()
        with self._at(*key):
            return CORRECTIONS[kind](**given)
        return ClusterMass()

    def _arguments(self, key: tuple[str, int], design: str, given: dict[str, Any]) -> dict[str, Any]:
        if design not in DESIGNS:
            self.problems.add(
                self.where(*key, "design"), f"a design among {listed(DESIGNS, most=20)}", f'"{design}"',
                f"{closest(design, DESIGNS)}choose one of them",
            )  # fmt: skip
            return given
        # The first parameter is the data; the rest are keys of the plan.
        parameters = list(inspect.signature(DESIGNS[design].function).parameters.values())[1:]
        known = [parameter.name for parameter in parameters]
        for name in given:
            if name not in known:
                options = known if key[0] == "band_test" else [*known, "test"]
                self.problems.add(
                    self.where(*key, name), f"an argument of {design} among {listed(options)}", f'"{name}"',
                    f"{closest(name, options)}correct or remove it",
                )  # fmt: skip
        for parameter in parameters:
            wrong = expected_kind(parameter.annotation, given[parameter.name]) if parameter.name in given else None
            if wrong is not None:
                self.problems.add(self.where(*key, parameter.name), wrong[0], shown(given[parameter.name]), wrong[1])
            if parameter.default is inspect.Parameter.empty and parameter.name not in given:
                if design == "trialwise_change" and parameter.name == "baseline_window":
                    continue
                self.problems.add(
                    self.where(*key), f'the key "{parameter.name}", which {design} needs', "none",
                    "add it",
                )  # fmt: skip
        return given

    def names(self) -> None:
        """Each name once; contrasts also as folders."""
        for key in ("contrast", "band", "window", "band_test", "family"):
            names = self._names_of(key)
            twice = [name for name in dict.fromkeys(names) if names.count(name) > 1]
            if twice:
                second = len(names) - 1 - names[::-1].index(twice[0])
                self.problems.add(
                    self.where(key, second), "each name once", f"{listed(twice)} more than once", "rename one"
                )
        contrasts = list(dict.fromkeys(self._names_of("contrast")))
        for number in range(len(contrasts)):
            try:
                file_names(contrasts[: number + 1], "contrast names")
            except InputError as error:
                self.problems.found.extend(
                    text.replace(
                        "contrast names", self.where("contrast", self._names_of("contrast").index(contrasts[number])), 1
                    )
                    for text in error.problems
                )
                break

    def _names_of(self, key: str) -> list[str]:
        listing = self.data.get(key)
        entries = [entry for entry in listing if isinstance(entry, dict)] if isinstance(listing, list) else []
        return [entry["name"] for entry in entries if isinstance(entry.get("name"), str)]

    def windows(self, tables: PlanTables) -> None:
        """Edges in their order."""
        pairs: list[tuple[KeyPath, Any]] = [
            (("test", "times"), tables.test.times),
            (("test", "frequencies"), tables.test.frequencies),
        ]
        for number, entry in enumerate(tables.contrast):
            pairs.append((("contrast", number, "test", "times"), entry.test.times))
            pairs.append((("contrast", number, "test", "frequencies"), entry.test.frequencies))
        pairs += [(("window", number, "times"), entry.times) for number, entry in enumerate(tables.window)]
        pairs += [(("band", number, "frequencies"), entry.frequencies) for number, entry in enumerate(tables.band)]
        for key, edges in pairs:
            if edges is not None and not isinstance(edges[0], str) and edges[0] > edges[1]:
                self.problems.add(
                    self.where(*key), "a lower edge before the upper one", f"{edges[0]:g} to {edges[1]:g}",
                    "exchange the two edges",
                )  # fmt: skip

    def _families(self, tables: PlanTables) -> None:
        names = [entry.name for entry in tables.contrast]
        until = [entry.name for entry in tables.contrast if (entry.test.until_resolved or tables.test.until_resolved)]
        for number, family in enumerate(tables.family):
            unknown = [name for name in family.contrasts if name not in names]
            if unknown:
                self.problems.add(
                    self.where("family", number, "contrasts"), f"contrasts among {listed(names)}", listed(unknown),
                    f"{closest(unknown[0], names)}use their names",
                )  # fmt: skip
            stopping = [name for name in family.contrasts if name in until]
            if stopping:
                self.problems.add(
                    self.where("family", number, "contrasts"), "contrasts of one fixed number of relabellings",
                    f"{listed(stopping)} drawn until resolved", "remove until_resolved from their tests",
                )  # fmt: skip

    def something_to_do(self, tables: PlanTables) -> None:
        """Contrasts, and what the band table needs."""
        if not tables.contrast and not tables.band_test:
            self.problems.add(
                self.file, "at least one [[contrast]] or [[band_test]]", "none", "add what is to be compared"
            )
        if tables.band_test and not (tables.band and tables.window):
            self.problems.add(
                self.where("band_test", 0), "bands and windows for the band table", "none of either or both",
                "add [[band]] and [[window]]",
            )  # fmt: skip
        if (tables.band or tables.window) and not tables.band_test:
            self.problems.add(
                self.file, "a [[band_test]] for the bands and windows", "none",
                "add the comparison that the band table runs, or remove them",
            )  # fmt: skip

    def belonging(self, tables: PlanTables) -> None:
        """Tables that need each other."""
        over_subjects = [entry for entry in tables.contrast if _takes_maps(entry.design)]
        self._kind(tables)
        of_maps = tables.input.kind == "condition_maps"
        if (over_subjects or tables.band_test) and tables.conditions is None and not of_maps:
            self.problems.add(
                self.file, "a table [conditions] with the trial columns that define them", "none",
                'add [conditions] with columns = ["memory"] for instance',
            )  # fmt: skip
        self._bands(tables)
        self._families(tables)
        channels = tables.channels
        if channels.average_groups and not channels.groups:
            self.problems.add(
                self.where("channels", "average_groups"), "channel groups to average", "none",
                "add [channels.groups], or remove average_groups",
            )  # fmt: skip
        if channels.average_groups and channels.regions is not None:
            self.problems.add(
                self.where("channels", "average_groups"), "either groups or regions", "both",
                "remove average_groups, or regions",
            )  # fmt: skip
        if channels.adjacency in ("sphere", "distance") and channels.electrodes is None:
            self.problems.add(
                self.where("channels", "adjacency"), "an electrode table for the positions", "none",
                'add electrodes = "electrodes.tsv", or set adjacency = "none"',
            )  # fmt: skip
        if channels.adjacency == "pairs" and channels.pairs is None:
            self.problems.add(
                self.where("channels", "adjacency"), "a table of pairs with the columns first and second", "none",
                'add pairs = "pairs.tsv"',
            )  # fmt: skip
        if channels.adjacency == "distance" and channels.farthest is None:
            self.problems.add(
                self.where("channels", "adjacency"), "the largest distance of neighbours", "none",
                "add farthest = ... in the unit of the positions",
            )  # fmt: skip
        for key, rule in (("pairs", "pairs"), ("farthest", "distance")):
            if getattr(channels, key) is not None and channels.adjacency != rule:
                self.problems.add(
                    self.where("channels", key), f'adjacency = "{rule}" beside it',
                    "none" if channels.adjacency is None else f'"{channels.adjacency}"', f"set it, or remove {key}",
                )  # fmt: skip
        if tables.subjects.incomplete == "leave_out" and tables.conditions is None:
            self.problems.add(
                self.where("subjects", "incomplete"), "a table [conditions]", "none", "add [conditions], or remove it"
            )
        for group, names in channels.groups.items():
            if not names:
                self.problems.add(
                    self.where("channels", "groups", group), "at least one channel", "none", "name its channels"
                )

    def _kind(self, tables: PlanTables) -> None:
        """What belongs to power of trials only, or to averages only."""
        given, kind = tables.input, tables.input.kind
        if given.trial_counts is not None and kind != "averaged_power":
            self.problems.add(
                self.where("input", "trial_counts"), 'kind = "averaged_power" beside it', f'"{kind}"',
                "set it, or remove trial_counts",
            )  # fmt: skip
        if kind != "condition_maps":
            return
        superfluous = [name for name in given.model_fields_set if name not in ("files", "kind")]
        if superfluous:
            self.problems.add(
                self.where("input"),
                "nothing but files for a file of condition maps",
                listed(superfluous),
                "remove them",
            )
        if tables.conditions is not None:
            self.problems.add(
                self.where("conditions"), "no [conditions] for a file of condition maps", "one",
                "remove it; contrasts name the conditions of the maps",
            )  # fmt: skip

    def _bands(self, tables: PlanTables) -> None:
        plain = [entry.name for entry in tables.band if not isinstance(entry.frequencies[0], str)]
        for number, band in enumerate(tables.band):
            unknown = [name for name in band.frequencies if isinstance(name, str) and name not in plain]
            if unknown:
                self.problems.add(
                    self.where("band", number, "frequencies"), f"bands among {listed(plain)}", listed(unknown),
                    f"{closest(str(unknown[0]), plain)}name two bands that have edges",
                )  # fmt: skip


def _takes_maps(design: str) -> bool:
    return design in DESIGNS and DESIGNS[design].takes == "maps"


def _sound_part(table: object) -> TestTable:
    """A test table with those of its keys that are right by themselves."""
    sound: dict[str, Any] = {}
    for name, value in table.items() if isinstance(table, dict) else ():
        try:
            TestTable.model_validate({name: value})
        except ValidationError:
            continue
        sound[name] = value
    return TestTable.model_validate(sound)
