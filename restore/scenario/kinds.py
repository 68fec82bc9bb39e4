"""The kinds of task that a scenario may name, and what each may say."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import (
    BaseModel,
    ConfigDict,
    Field,
    StrictBool,
    StrictStr,
    field_validator,
    model_validator,
)

from restore.errors import InputError
from restore.files.delimited import Layout
from restore.motion.ages import parse_ages

Age = Annotated[float, Field(ge=0.0, allow_inf_nan=False, strict=True)]
TAKEN = {"findings", "ledger"}


class Part(BaseModel):
    """A part of a scenario: it knows its keys, and no others."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class TablePart(Part):
    """How a table of a task is written."""

    delimiter: StrictStr = ","
    decimal: Literal[".", ","] = "."
    comment: StrictStr = ""
    header: StrictBool = True
    encoding: StrictStr = "utf-8-sig"
    columns: dict[StrictStr, Any] = Field(default_factory=dict)

    @field_validator("columns")
    @classmethod
    def _columns(cls, value: dict[str, Any]) -> dict[str, Any]:
        for ours, theirs in value.items():
            if not isinstance(theirs, str) and type(theirs) is not int:
                raise ValueError(f"{ours} = {theirs!r}: must be the name or the number of a column")
        return value

    @model_validator(mode="after")
    def _fits(self) -> TablePart:
        try:
            self.layout()
        except InputError as exc:
            raise ValueError(str(exc)) from None
        return self

    def layout(self) -> Layout:
        """The layout that this part describes."""
        return Layout(
            delimiter=self.delimiter,
            comment=self.comment,
            header=self.header,
            decimal=self.decimal,
            encoding=self.encoding,
            columns=dict(self.columns),
        )


class Task(Part):
    """What every task says: its name, which is that of its result, its kind and its file."""

    kind: str
    name: Annotated[StrictStr, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9_-]*$")]
    file: StrictStr
    table: TablePart = TablePart()

    @field_validator("name")
    @classmethod
    def _name(cls, value: str) -> str:
        if value.lower() in TAKEN:
            raise ValueError(f"{value}.csv is a file of the run itself; give the task another name")
        return value

    def labels(self) -> dict[str, str]:
        """Labels of plates that the task names, by key."""
        return {}

    def more_files(self) -> dict[str, str]:
        """Files besides `file` that the task names, by key."""
        return {}


def _check_ages(value: Any) -> Any:
    numbers = value if isinstance(value, list) else [value]
    if not isinstance(value, str) and not all(type(number) in {int, float} for number in numbers):
        raise ValueError("must be 'own', '0:120:10', an age or a list of ages, Ma")
    try:
        parse_ages(value)
    except InputError as exc:
        raise ValueError(str(exc).removeprefix(f"ages {value!r}: ")) from None
    return value


class SitesTask(Task):
    """Sites restored to their own ages or to given ones."""

    kind: Literal["sites"]
    ages: Any = "own"
    time_scale: StrictStr | None = None
    draws: Annotated[int, Field(ge=1, strict=True)] | None = None
    seed: Annotated[int, Field(ge=0, strict=True)] = 1

    @field_validator("ages")
    @classmethod
    def _ages(cls, value: Any) -> Any:
        return _check_ages(value)


class _AtAges(Task):
    ages: Any

    @field_validator("ages")
    @classmethod
    def _ages(cls, value: Any) -> Any:
        if value == "own":
            raise ValueError("'own' has no meaning here: give ages in Ma")
        return _check_ages(value)

    def listed(self) -> tuple[float, ...]:
        """The ages, Ma."""
        ages = parse_ages(self.ages)
        assert ages is not None
        return ages


class _Between(_AtAges):
    between: Annotated[list[StrictStr], Field(min_length=2, max_length=2)]

    @field_validator("between")
    @classmethod
    def _pair(cls, value: list[str]) -> list[str]:
        if value[0] == value[1]:
            raise ValueError("must name two different plates")
        return value

    def pair(self) -> tuple[str, str]:
        """The two plates."""
        return self.between[0], self.between[1]

    def labels(self) -> dict[str, str]:
        """Both plates."""
        return dict(zip(("between.0", "between.1"), self.between, strict=True))


class RatesTask(Task):
    """Rates of a plate relative to another at points."""

    kind: Literal["rates"]
    plate: StrictStr
    relative_to: StrictStr
    age_ma: Age = 0.0
    at_on: Literal["plate", "relative-to"] = "plate"

    def labels(self) -> dict[str, str]:
        """The two plates."""
        return {"plate": self.plate, "relative_to": self.relative_to}


class LinesTask(_AtAges):
    """Lines and polygons restored as vectors."""

    kind: Literal["lines"]
    plate_property: StrictStr = "plate"
    edges: Literal["great-circle", "straight"] = "great-circle"


class FlowlinesTask(_Between):
    """Both arms of flowlines from ridge points."""

    kind: Literal["flowlines"]
    share: Annotated[float, Field(ge=0.0, le=1.0, strict=True)] | StrictStr = 0.5
    every_myr: Annotated[float, Field(gt=0.0, allow_inf_nan=False, strict=True)] | None = None

    def more_files(self) -> dict[str, str]:
        """The table of shares, if they change."""
        return {"share": self.share} if isinstance(self.share, str) else {}


class IsochronsTask(_Between):
    """Isochrons on both plates from a ridge line."""

    kind: Literal["isochrons"]
    share: Annotated[float, Field(ge=0.0, le=1.0, strict=True)] | StrictStr = 0.5

    def more_files(self) -> dict[str, str]:
        """The table of shares, if they change."""
        return {"share": self.share} if isinstance(self.share, str) else {}


class TrailsTask(_AtAges):
    """Trails of hotspots, which stand in the scenario's frame, on a plate."""

    kind: Literal["trails"]
    plate: StrictStr
    shown: Literal["crust", "passage"] = "crust"
    paths: StrictStr | None = None

    def labels(self) -> dict[str, str]:
        """The plate."""
        return {"plate": self.plate}

    def more_files(self) -> dict[str, str]:
        """The table of the hotspots' own paths, if they move."""
        return {} if self.paths is None else {"paths": self.paths}


class MarginTask(_Between):
    """Rates normal and parallel to a margin."""

    kind: Literal["margin"]
    left: StrictStr | None = None
    every_km: Annotated[float, Field(gt=0.0, allow_inf_nan=False, strict=True)] = 50.0


class WhenTask(Task):
    """When the sites of a table crossed a latitude, came near a point, were nearest to it."""

    kind: Literal["when"]
    during: Annotated[list[Age], Field(min_length=2, max_length=2)]
    latitude: Annotated[float, Field(ge=-90.0, le=90.0, strict=True)] | None = None
    near: Annotated[list[float], Field(min_length=2, max_length=2)] | None = None
    within_km: Annotated[float, Field(gt=0.0, allow_inf_nan=False, strict=True)] | None = None

    @model_validator(mode="after")
    def _one_question(self) -> WhenTask:
        if (self.latitude is None) == (self.near is None):
            raise ValueError("a task 'when' asks one thing: latitude or near")
        if not self.during[0] < self.during[1]:
            raise ValueError("during names two ages, the younger one first")
        return self


TASKS: dict[str, type[Task]] = {
    "sites": SitesTask,
    "lines": LinesTask,
    "flowlines": FlowlinesTask,
    "isochrons": IsochronsTask,
    "trails": TrailsTask,
    "rates": RatesTask,
    "margin": MarginTask,
    "when": WhenTask,
}
