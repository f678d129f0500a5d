"""The tables of a plan file as models: which keys each takes, and of what kind."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field

__all__ = [
    "BandEntry",
    "BandTestEntry",
    "ChannelsTable",
    "ConditionsTable",
    "ContrastEntry",
    "FamilyEntry",
    "InputTable",
    "ParticipantsTable",
    "PlanTables",
    "StudyTable",
    "SubjectsTable",
    "TestTable",
    "WindowEntry",
]

MOST_PERMUTATIONS = 10**9

# TOML has lists only; a pair is a list of two.
Window = Annotated[tuple[float, float], Field(strict=False)]
NamesOfTwo = Annotated[tuple[str, str], Field(strict=False)]


class Table(BaseModel):
    """Unknown keys are mistakes (a misspelt option must not be silently ignored), and so are numbers written as text."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, allow_inf_nan=False)


class StudyTable(Table):
    """[study]"""

    name: str = Field(min_length=1)
    alpha: float = Field(default=0.05, gt=0, lt=1)
    permutations: int = Field(default=10_000, ge=2, le=MOST_PERMUTATIONS)
    seed: int = Field(default=0, ge=0, lt=2**64)


class InputTable(Table):
    """[input]: what `PowerFiles` checks in full stays with it."""

    files: str = Field(min_length=1)
    kind: Literal["trials", "averaged_power", "condition_maps"] = "trials"
    trial_counts: str | None = None
    axes: list[str] | None = None
    contents: str = "linear_power"
    time_unit: str = "s"
    power_unit: str | None = None
    scaling: str | None = None
    wavelet_cycles: float | list[float] | None = None
    trial_table: str | None = None
    names: dict[str, Any] | None = None
    recode: dict[str, dict[str, Any]] | None = None
    keep: dict[str, Any] | None = None
    frequencies: list[float] | None = None
    times: list[float] | None = None
    channels: list[str] | None = None


class ParticipantsTable(Table):
    """[participants]"""

    file: str = Field(min_length=1)
    column: str = "participant_id"
    subject: str = "{subject}"


class SubjectsTable(Table):
    """[subjects]"""

    exclude: list[str | int] = []
    incomplete: Literal["refuse", "leave_out"] = "refuse"
    fewest_trials: int | None = Field(default=None, ge=1)


class ConditionsTable(Table):
    """[conditions]: `conditions` left out means all labels, sorted."""

    columns: list[str] = Field(min_length=1)
    conditions: list[str | int | float | bool] | None = Field(default=None, min_length=1)


class ChannelsTable(Table):
    """[channels]"""

    electrodes: str | None = None
    missing: Literal["refuse", "keep_common", "leave_gaps"] = "refuse"
    adjacency: Literal["sphere", "distance", "pairs", "none"] | None = None
    farthest: float | None = Field(default=None, gt=0)
    pairs: str | None = None
    regions: str | None = None
    groups: dict[str, list[str]] = {}
    average_groups: bool = False


class TestTable(Table):
    """[test], and the test = {...} of a contrast."""

    __test__ = False  # not a test class, whatever pytest makes of the name

    times: Window | None = None
    frequencies: Window | None = None
    channels: list[str] | None = Field(default=None, min_length=1)
    mean_across: list[Literal["channels", "frequencies", "times"]] | None = None
    every_nth_time: int | None = Field(default=None, ge=1)
    correction: dict[str, Any] | None = None
    alternative: Literal["two-sided", "greater", "less"] | None = None
    fewest_subjects: int | None = Field(default=None, ge=2)
    robust: Literal["trimmed", "rank"] | None = None
    permutations: int | None = Field(default=None, ge=2, le=MOST_PERMUTATIONS)
    until_resolved: bool = False
    tail_approximation: bool = False


class ContrastEntry(BaseModel):
    """[[contrast]]: further keys are the arguments of the design."""

    model_config = ConfigDict(extra="allow", frozen=True, strict=True)

    name: str = Field(min_length=1)
    design: str
    subject: str | int | None = None
    test: TestTable = TestTable()


class BandTestEntry(BaseModel):
    """[[band_test]]: a contrast that the band table runs."""

    model_config = ConfigDict(extra="allow", frozen=True, strict=True)

    name: str = Field(min_length=1)
    design: str


class BandEntry(Table):
    """[[band]]: edges in Hz, or the names of two bands whose difference it is."""

    name: str = Field(min_length=1)
    frequencies: Window | NamesOfTwo


class WindowEntry(Table):
    """[[window]]"""

    name: str = Field(min_length=1)
    times: Window


class FamilyEntry(Table):
    """[[family]]: contrasts that are corrected for each other."""

    name: str = Field(min_length=1)
    contrasts: list[str] = Field(min_length=2)


class PlanTables(Table):
    """The whole file."""

    study: StudyTable
    input: InputTable
    participants: ParticipantsTable | None = None
    subjects: SubjectsTable = SubjectsTable()
    conditions: ConditionsTable | None = None
    channels: ChannelsTable = ChannelsTable()
    baseline: dict[str, Any]
    test: TestTable = TestTable()
    contrast: list[ContrastEntry] = []
    band: list[BandEntry] = []
    window: list[WindowEntry] = []
    band_test: list[BandTestEntry] = []
    family: list[FamilyEntry] = []
