"""AnalysisPlan: a plan file, read and checked."""

from __future__ import annotations

import hashlib
import inspect
import json
import tomllib
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import UTC, datetime
from os import PathLike
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from tfstats.contrasts import DESIGNS
from tfstats.corrections import CORRECTIONS, ClusterMass, Correction
from tfstats.foundations.checks import closest
from tfstats.foundations.errors import InputError, Problems, listed, refusal
from tfstats.foundations.safe_writing import file_names
from tfstats.normalization import Baseline
from tfstats.plan_file.line_numbers import KeyPath, lines_of_keys
from tfstats.plan_file.messages import place_text, refusals_of
from tfstats.plan_file.tables import (
    BandTestEntry,
    ChannelsTable,
    ConditionsTable,
    ContrastEntry,
    InputTable,
    ParticipantsTable,
    PlanTables,
    StudyTable,
    SubjectsTable,
    TestTable,
)

__all__ = ["AnalysisPlan", "DesignCall"]

DATA_TABLES = ("input", "participants", "subjects", "conditions", "channels", "baseline")


@dataclass(frozen=True)
class DesignCall:
    """One contrast of the plan: its design with the arguments as keys, and how it is tested."""

    name: str
    design: str
    arguments: dict[str, Any]
    test: TestTable
    correction: Correction
    subject: str | None = None


@dataclass(frozen=True)
class AnalysisPlan:
    """What is to be analysed, and how: one TOML file, fixed before the data are seen.

    Examples
    --------
    >>> import tempfile, pathlib, tfstats as tfs
    >>> text = '''
    ... [study]
    ... name = "lamp sequences"
    ... [input]
    ... files = "power/S{subject}.h5"
    ... [conditions]
    ... columns = ["memory"]
    ... [baseline]
    ... window = [-0.5, -0.2]
    ... [[contrast]]
    ... name = "recalled against missed"
    ... design = "paired"
    ... first = "recalled"
    ... second = "missed"
    ... '''
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = pathlib.Path(folder) / "plan.toml"
    ...     _ = path.write_text(text, encoding="utf-8")
    ...     plan = tfs.AnalysisPlan.read(path)
    >>> plan.contrasts[0].arguments
    {'first': 'recalled', 'second': 'missed'}
    """

    path: Path
    text: str = field(repr=False)
    hash: str
    study: StudyTable
    input: InputTable
    participants: ParticipantsTable | None
    subjects: SubjectsTable
    conditions: ConditionsTable | None
    channels: ChannelsTable
    baseline: Baseline
    trial_counts: str
    contrasts: tuple[DesignCall, ...]
    bands: dict[str, tuple[float, float] | tuple[str, str]]
    windows: dict[str, tuple[float, float]]
    band_tests: tuple[DesignCall, ...]
    hashed_at: str = field(compare=False, default="")
    """When the plan was read and hashed, in UTC: what it set, it set no later."""

    @property
    def folder(self) -> Path:
        """Where relative paths of the plan start."""
        return self.path.parent

    def place(self, relative: str) -> Path:
        """A path of the plan as it is on this machine."""
        return self.folder / relative

    @classmethod
    def read(cls, path: str | PathLike[str]) -> AnalysisPlan:
        """Read and check a plan file.

        Raises
        ------
        InputError
            No such file, no TOML, and all mistakes of the plan together, each with line, key and remedy.
        """
        path = Path(path)
        text = _text_of(path)
        return _checked(path, text, _parsed(text, path.name)).plan()

    @classmethod
    def data_part(cls, path: str | PathLike[str]) -> AnalysisPlan | None:
        """Only what says where the data lie and how they are read; None where that part is wrong itself.

        With it the data can be checked although a contrast, say, has a mistake.
        """
        path = Path(path)
        try:
            text = _text_of(path)
            found = _parsed(text, path.name)
            data = {key: found[key] for key in DATA_TABLES if key in found}
            return _checked(path, text, {"study": {"name": "data"}, **data}).plan(compares=False)
        except InputError:
            return None


def _text_of(path: Path) -> str:
    if not path.is_file():
        raise refusal(str(path), "a plan file", "a folder" if path.is_dir() else "nothing of that name", "check the path")
    try:
        # Some editors begin a file in UTF-8 with a mark of its byte order.
        return path.read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as error:
        raise refusal(str(path), "text in UTF-8", f"a byte that is not ({error.reason})", "save it as UTF-8") from error


def _parsed(text: str, name: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise refusal(name, "a file in TOML", f"{error}", "mend that place; texts stand in double quotes") from error


def _checked(path: Path, text: str, data: dict[str, Any]) -> _Checked:
    lines = lines_of_keys(text)
    try:
        tables = PlanTables.model_validate(data)
    except ValidationError as error:
        raise InputError(refusals_of(error, PlanTables, path.name, data, lines)) from None
    return _Checked(path, text, data, lines, tables)


class _Checked:
    """What tables alone cannot know: designs and their arguments, names that belong together, objects."""

    def __init__(
        self, path: Path, text: str, data: dict[str, Any], lines: dict[KeyPath, int], tables: PlanTables
    ) -> None:
        self.path, self.text, self.data, self.lines, self.tables = path, text, data, lines, tables
        self.problems = Problems()

    def where(self, *key: str | int) -> str:
        return place_text(self.path.name, key, self.data, self.lines)

    def plan(self, *, compares: bool = True) -> AnalysisPlan:
        """The plan, or all that is wrong with it; without `compares` it need not compare anything."""
        tables = self.tables
        baseline = self._baseline()
        contrasts = tuple(self._contrast(number, entry) for number, entry in enumerate(tables.contrast))
        band_tests = tuple(self._band_test(number, entry) for number, entry in enumerate(tables.band_test))
        self._names()
        if compares:
            self._something_to_do()
        self._belonging()
        self.problems.raise_if_any()
        assert baseline is not None
        return AnalysisPlan(
            path=self.path,
            text=self.text,
            hash=hashlib.sha256(json.dumps(self.data, sort_keys=True, default=str).encode("utf-8")).hexdigest(),
            study=tables.study,
            input=tables.input,
            participants=tables.participants,
            subjects=tables.subjects,
            conditions=tables.conditions,
            channels=tables.channels,
            baseline=baseline,
            trial_counts=str(tables.baseline.get("trial_counts", "as_recorded")),
            contrasts=contrasts,
            bands={entry.name: entry.frequencies for entry in tables.band},
            windows={entry.name: entry.times for entry in tables.window},
            band_tests=band_tests,
            hashed_at=datetime.now(UTC).isoformat(timespec="seconds"),
        )

    def _baseline(self) -> Baseline | None:
        given = {key: value for key, value in self.tables.baseline.items() if key != "trial_counts"}
        known = list(inspect.signature(Baseline).parameters)
        for key in given:
            if key not in known:
                self.problems.add(
                    self.where("baseline", key),
                    f"a key among {listed([*known, 'trial_counts'])}",
                    f'"{key}"',
                    f"{closest(key, known)}correct or remove it",
                )
        if "window" not in given and given.get("unit") != "none":
            self.problems.add(
                self.where("baseline"), 'the key "window"', "none", "add window = [start, stop] in s, before the event"
            )
        if isinstance(given.get("window"), list):
            given["window"] = tuple(given["window"])
        with self._at(self.where("baseline")):
            return Baseline(**{key: value for key, value in given.items() if key in known})
        return None

    @contextmanager
    def _at(self, place: str) -> Iterator[None]:
        """Take over the problems of settings, with their place in the plan in front."""
        try:
            yield
        except InputError as error:
            self.problems.found.extend(f"{place}: {text}" for text in error.problems)
        except TypeError as error:
            self.problems.add(place, "values of the right kind", str(error), "correct them")

    def _contrast(self, number: int, entry: ContrastEntry) -> DesignCall:
        test = _merged(self.tables.test, entry.test)
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
                self.where("contrast", number), "no mean_across for a design over trials", f"{test.mean_across}",
                "choose frequencies and times instead",
            )  # fmt: skip
        subject = None if entry.subject is None else str(entry.subject)
        return DesignCall(entry.name, entry.design, arguments, test, correction, subject)

    def _band_test(self, number: int, entry: BandTestEntry) -> DesignCall:
        arguments = self._arguments(("band_test", number), entry.design, dict(entry.model_extra or {}))
        if entry.design in DESIGNS and DESIGNS[entry.design].takes != "maps":
            self.problems.add(
                self.where("band_test", number, "design"), "a design over subjects", f'"{entry.design}"',
                "the band table compares subjects",
            )  # fmt: skip
        return DesignCall(entry.name, entry.design, arguments, TestTable(), ClusterMass())

    def _correction(self, number: int, entry: ContrastEntry, test: TestTable) -> Correction:
        given = dict(test.correction or {"kind": ClusterMass.kind})
        own = entry.test.correction is not None
        place = self.where(*(("contrast", number, "test") if own else ("test", "correction")))
        kind = given.pop("kind", None)
        if kind not in CORRECTIONS:
            self.problems.add(
                place, f"a correction with kind among {listed(CORRECTIONS)}", repr(kind),
                f'{closest(str(kind), CORRECTIONS)}write {{ kind = "cluster_mass", forming_p = 0.01 }}',
            )  # fmt: skip
            return ClusterMass()
        known = list(inspect.signature(CORRECTIONS[kind]).parameters)
        unknown = [key for key in given if key not in known]
        if unknown:
            self.problems.add(
                place, f"keys among {listed(['kind', *known])}", listed(unknown), "correct or remove them"
            )
            return ClusterMass()
        with self._at(place):
            return CORRECTIONS[kind](**given)
        return ClusterMass()

    def _arguments(self, key: tuple[str, int], design: str, given: dict[str, Any]) -> dict[str, Any]:
        if design not in DESIGNS:
            self.problems.add(
                self.where(*key, "design"), f"a design among {listed(DESIGNS)}", f'"{design}"',
                f"{closest(design, DESIGNS)}choose one of them",
            )  # fmt: skip
            return given
        # The first parameter is the data; the rest are keys of the plan.
        parameters = list(inspect.signature(DESIGNS[design].function).parameters.values())[1:]
        known = [parameter.name for parameter in parameters]
        for name in given:
            if name not in known:
                self.problems.add(
                    self.where(*key, name), f"an argument of {design} among {listed(known)}", f'"{name}"',
                    f"{closest(name, known)}correct or remove it",
                )  # fmt: skip
        for parameter in parameters:
            if parameter.default is inspect.Parameter.empty and parameter.name not in given:
                if design == "trialwise_change" and parameter.name == "baseline_window":
                    continue
                self.problems.add(
                    self.where(*key), f'the key "{parameter.name}", which {design} needs', "none",
                    f"add {parameter.name} = ...",
                )  # fmt: skip
        return given

    def _names(self) -> None:
        tables = self.tables
        for key, entries in (
            ("contrast", tables.contrast),
            ("band", tables.band),
            ("window", tables.window),
            ("band_test", tables.band_test),
        ):
            names = [entry.name for entry in entries]  # type: ignore[attr-defined]
            twice = [name for name in dict.fromkeys(names) if names.count(name) > 1]
            if twice:
                self.problems.add(
                    self.where(key, names.index(twice[0])),
                    "each name once",
                    f"{listed(twice)} more than once",
                    "rename one",
                )
        with self.problems.gathering():
            file_names([entry.name for entry in tables.contrast], f"{self.path.name}, contrast names")

    def _something_to_do(self) -> None:
        tables = self.tables
        if not tables.contrast and not tables.band_test:
            self.problems.add(
                self.path.name, "at least one [[contrast]] or [[band_test]]", "none", "add what is to be compared"
            )
        if tables.band_test and not (tables.band and tables.window):
            self.problems.add(
                self.where("band_test", 0), "bands and windows for the band table", "none of either or both",
                "add [[band]] and [[window]]",
            )  # fmt: skip
        if (tables.band or tables.window) and not tables.band_test:
            self.problems.add(
                self.path.name, "a [[band_test]] for the bands and windows", "none",
                "add the comparison that the band table runs, or remove them",
            )  # fmt: skip

    def _belonging(self) -> None:
        tables = self.tables
        over_subjects = [
            *tables.band_test,
            *(
                entry
                for entry in tables.contrast
                if DESIGNS.get(entry.design) and DESIGNS[entry.design].takes == "maps"
            ),
        ]
        if over_subjects and tables.conditions is None:
            self.problems.add(
                self.path.name, "a table [conditions] with the trial columns that define them", "none",
                'add [conditions] with columns = ["memory"] for instance',
            )  # fmt: skip
        plain = [entry.name for entry in tables.band if not isinstance(entry.frequencies[0], str)]
        for number, band in enumerate(tables.band):
            unknown = [name for name in band.frequencies if isinstance(name, str) and name not in plain]
            if unknown:
                self.problems.add(
                    self.where("band", number, "frequencies"), f"bands among {listed(plain)}", listed(unknown),
                    f"{closest(str(unknown[0]), plain)}name two bands that have edges",
                )  # fmt: skip
        channels = tables.channels
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
        for key, rule in (("pairs", "pairs"), ("farthest", "distance")):
            if getattr(channels, key) is not None and channels.adjacency != rule:
                self.problems.add(
                    self.where("channels", key), f'adjacency = "{rule}" beside it',
                    "none" if channels.adjacency is None else f'"{channels.adjacency}"', f"set it, or remove {key}",
                )  # fmt: skip


def _merged(common: TestTable, own: TestTable) -> TestTable:
    """The test of a contrast: [test] with what the contrast sets itself on top."""
    return common.model_copy(update={name: getattr(own, name) for name in own.model_fields_set})
