"""The tables of a case file as strict models: type and range of every key.

`description` says what is allowed and the first of `examples` what to write instead; both go into messages.
What depends on other tables is checked in the file named after the table.
"""

from __future__ import annotations

from typing import Annotated, Any

from pydantic import AfterValidator, BaseModel, ConfigDict, Field

LARGEST_SEED = 2**128


class Table(BaseModel):
    """Base of all tables: no conversions, no unknown keys, no inf or nan unless a key allows them."""

    model_config = ConfigDict(strict=True, extra="forbid", allow_inf_nan=False, frozen=True)


def _printable(text: str) -> str:
    if not text.isprintable():
        raise ValueError("control characters")
    return text


def _lines(text: str) -> str:
    if not all(character.isprintable() or character in "\n\t" for character in text):
        raise ValueError("control characters")
    return text


def _unit(text: str) -> str:
    if not text.strip() or not text.isprintable() or len(text) > 64:
        raise ValueError("not a unit")
    return text


def _not_nan(value: float) -> float:
    if value != value:
        raise ValueError("nan")
    return value


UNIT = 'a text of 1 to 64 printable characters, "1" for no unit'
Unit = Annotated[str, AfterValidator(_unit)]
Line = Annotated[str, AfterValidator(_printable), Field(max_length=200)]
Lines = Annotated[str, AfterValidator(_lines), Field(max_length=10_000)]
Positive = Annotated[float, Field(gt=0)]
# The ends of a box may be inf: unbounded on that side. `allow_inf_nan` here overrides the model's.
End = Annotated[float, Field(allow_inf_nan=True), AfterValidator(_not_nan)]


class CaseTable(Table):
    """``[case]``."""

    title: Line | None = Field(default=None, description="a text on one line", examples=["Convection loop"])
    seed: int = Field(default=0, ge=0, le=LARGEST_SEED, description="a whole number from 0 to 2**128", examples=[7])
    accuracy: float | None = Field(default=None, gt=0, lt=1, description="a number between 0 and 1", examples=[0.05])
    caution: Lines = Field(default="", description="a text without control characters", examples=["Screening only."])


class SystemTable(Table):
    """``[system]``; what its own tables hold is checked one by one in `system`."""

    kind: str = Field(description='"map", "noisy-map", "flow" or "noisy-flow"', examples=["flow"])
    state: list[str] = Field(
        min_length=1, description="a list of names, one per state component", examples=[["x", "y", "z"]]
    )
    units: dict[str, Unit] = Field(
        default_factory=dict, description=f"{UNIT}, by state name or in state order", examples=[["m", "m/s"]]
    )
    time_unit: Unit | None = Field(default=None, description=UNIT, examples=["s"])
    parameters: dict[str, Any] | None = Field(default=None, description="a table")
    equations: dict[str, Any] | None = Field(default=None, description="a table")
    noise: dict[str, Any] | None = Field(default=None, description="a table")
    draws: dict[str, Any] | None = Field(default=None, description="a table")


class ParameterTable(Table):
    """An entry of ``[system.parameters]``."""

    value: float = Field(description="a finite number", examples=[10.0])
    unit: Unit = Field(default="1", description=UNIT, examples=["1/s"])
    doc: Lines = Field(default="", description="a text without control characters", examples=["Prandtl number"])


class EventTable(Table):
    """``[events.NAME]``."""

    ball: dict[str, Any] | None = Field(
        default=None,
        description="a table with centre and radius",
        examples=[{"centre": [0.0, 0.0], "radius": 1.0}],
    )
    box: dict[str, Annotated[list[End], Field(min_length=2, max_length=2)]] | None = Field(
        default=None,
        description="a table of [lower, upper] by state name, with numbers (inf for no bound)",
        examples=[{"x": [0.0, 1.0]}],
    )
    when: str | None = Field(default=None, description="a condition in quotes", examples=["z > 40"])
    until: str | None = Field(default=None, description="a condition in quotes", examples=["z < 35"])


class BallTable(Table):
    """``ball = {...}`` of an event."""

    centre: list[float] = Field(description="a list of finite numbers in state order", examples=[[8.0, 8.0, 27.0]])
    radius: Positive = Field(description="a number above 0", examples=[5.0])
    scale: list[Positive] | None = Field(
        default=None, description="a list of numbers above 0 in state order", examples=[[1.0, 1.0, 2.0]]
    )


class ObservableTable(Table):
    """An entry of ``[observables]``."""

    expression: Any = Field(description="an expression in quotes", examples=["x**2"])
    unit: Unit = Field(default="1", description=UNIT, examples=["m"])


class CellsTable(Table):
    """``[cells]``; lists have been turned into tables by state name before."""

    method: str = Field(default="boxes", description='"boxes"', examples=["boxes"])
    lower: dict[str, float] = Field(
        default_factory=dict,
        description="finite numbers, in state order or by state name",
        examples=[[-20.0, -30.0]],
    )
    upper: dict[str, float] = Field(
        default_factory=dict,
        description="finite numbers, in state order or by state name",
        examples=[[20.0, 30.0]],
    )
    counts: dict[str, Annotated[int, Field(ge=1)]] = Field(
        default_factory=dict,
        description="whole numbers above 0, in state order or by state name",
        examples=[[64, 64]],
    )
    count: int | None = Field(
        default=None, ge=1, lt=2**62, description="a whole number from 1 to 2**62 - 1", examples=[10000]
    )
    periodic: list[str] = Field(default_factory=list, description="a list of state names", examples=[["theta"]])


class BurstsTable(Table):
    """``[bursts]``."""

    duration: Positive | None = Field(default=None, description="a number above 0", examples=[0.5])
    steps: int | None = Field(default=None, ge=1, le=10**9, description="a whole number from 1 to 10**9", examples=[4])
    step: Positive | None = Field(default=None, description="a number above 0", examples=[0.01])
    per_cell: int | None = Field(
        default=None, ge=2, le=10**9, description="a whole number from 2 to 10**9", examples=[64]
    )
    reseed: bool | None = Field(default=None, description="true or false", examples=[True])
    sweeps: int | None = Field(default=None, ge=1, le=10**6, description="a whole number from 1 to 10**6", examples=[8])
    seeds: str = Field(default="sobol", description='"uniform" or "sobol"', examples=["sobol"])
    scheme: str | None = Field(default=None, description="a scheme in quotes", examples=["rk4"])


class CrosscheckTable(Table):
    """``[crosscheck]``."""

    starts: int | None = Field(
        default=None, ge=4, le=16_384, description="a whole number from 4 to 16384", examples=[64]
    )
    duration: Positive | None = Field(default=None, description="a number above 0", examples=[10000.0])


class OutputTable(Table):
    """``[output]``."""

    matrix: bool = Field(default=True, description="true or false", examples=[True])
    intervals: int = Field(default=50, ge=2, le=10_000, description="a whole number from 2 to 10000", examples=[50])
