"""What a run is: fields, grid, time, rank and the criterion for settled modes.

The same frozen models serve the engine (``SnapshotStream``) and the HTTP interface. Unknown members are
refused, so that a misspelt option is an error and not a silent default.
"""

from __future__ import annotations

from itertools import pairwise
from typing import Annotated, Literal

import numpy as np
import numpy.typing as npt
from pydantic import BaseModel, ConfigDict, Field, StringConstraints, model_validator

# Bounds on what a declaration can make the engine allocate.
MAX_POINTS = 10**10
MAX_FIELDS = 64
MAX_RANK = 512  # the small space costs O(R^3) per block and 64 (R+16)^2 numbers in the ledger
MAX_BLOCK_LENGTH = 4096
MAX_LABELS = 64
MAX_PARTS = 65536  # ranks of the largest jobs; each costs a line in the registry and a file in every batch

Name = Annotated[str, StringConstraints(min_length=1, max_length=120, pattern=r"^[^\x00-\x1f\x7f]+$")]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
Finite = Annotated[float, Field(allow_inf_nan=False)]
Count = Annotated[int, Field(ge=1)]


class Model(BaseModel):
    """Frozen, and strict about members it does not know."""

    model_config = ConfigDict(frozen=True, extra="forbid")


class FieldSpec(Model):
    """One physical quantity given at every point. The name becomes a variable name in the files written."""

    name: Annotated[str, StringConstraints(pattern=r"^[A-Za-z][A-Za-z0-9_]{0,39}$")]
    unit: str = Field(default="1", max_length=40, description="unit symbol, for example m/s")


class UniformGrid(Model):
    """Points on a regular lattice, last axis fastest. ``shape`` counts points, ``spacing`` is a length."""

    kind: Literal["uniform"]
    shape: list[Count] = Field(min_length=1, max_length=3)
    spacing: list[Positive] = Field(min_length=1, max_length=3)
    origin: list[Finite] | None = Field(default=None, max_length=3)

    @model_validator(mode="after")
    def _same_length(self) -> UniformGrid:
        if len(self.spacing) != len(self.shape) or (self.origin and len(self.origin) != len(self.shape)):
            raise ValueError(f"shape {self.shape} needs one spacing (and one origin, if given) per axis")
        return self

    @property
    def n_points(self) -> int:
        return int(np.prod([int(n) for n in self.shape], dtype=object))


class RectilinearGrid(Model):
    """Points on the product of axes, last axis fastest; each axis strictly increasing."""

    kind: Literal["rectilinear"]
    axes: list[Annotated[list[Finite], Field(min_length=1, max_length=10**6)]] = Field(min_length=1, max_length=3)

    @model_validator(mode="after")
    def _increasing(self) -> RectilinearGrid:
        for k, axis in enumerate(self.axes):
            if any(b <= a for a, b in pairwise(axis)):
                raise ValueError(f"axis {k} must be strictly increasing")
        return self

    @property
    def shape(self) -> list[int]:
        return [len(axis) for axis in self.axes]

    @property
    def n_points(self) -> int:
        return int(np.prod(self.shape, dtype=object))


class ScatteredPoints(Model):
    """Points anywhere; their positions are given beside the declaration."""

    kind: Literal["points"]


class NoGrid(Model):
    """Nothing is known of where the points are."""

    kind: Literal["none"] = "none"


Grid = Annotated[UniformGrid | RectilinearGrid | ScatteredPoints | NoGrid, Field(discriminator="kind")]


class TimeAxis(Model):
    """Unit of time, and the step between snapshots when they come evenly and without times of their own."""

    unit: str = Field(default="s", max_length=40)
    step: Positive | None = None


class Reference(Model):
    """Length and speed that make frequencies a Strouhal number, St = f length / speed."""

    length: Positive
    speed: Positive


class Part(Model):
    """Points [start, stop) that one rank or device posts, in all fields."""

    start: int = Field(ge=0)
    stop: int = Field(ge=1)

    @property
    def n_points(self) -> int:
        return self.stop - self.start


class Criterion(Model):
    """When the modes count as settled.

    ``max_angle_deg`` is the largest tolerated misalignment angle between each wanted mode group and what an
    endless record of the same flow would give, at the stated ``confidence``. ``min_duration`` is in the time
    unit of the run; no statistic can see a state that the flow has not visited, so set it from what you know
    of the slowest state. ``hold`` is how many looks in a row must agree; looks are geometrically spaced.
    ``startup`` says whether a start-up transient is looked for and left out of modes and statistics, or the whole
    record is kept.
    """

    n_modes: int = Field(default=6, ge=1, le=MAX_RANK)
    max_angle_deg: float = Field(default=10.0, gt=0.0, le=45.0)
    confidence: float = Field(default=0.95, ge=0.5, le=0.999)
    max_energy_halfwidth: float | None = Field(
        default=None, gt=0.0, le=1.0, description="largest tolerated half-width of a group's energy, relative"
    )
    min_duration: Positive | None = None
    hold: int = Field(default=2, ge=1, le=10)
    startup: Literal["find", "keep"] = "find"


class RunDeclaration(Model):
    """A run as its owner declares it. Rows are ordered field by field, then point by point."""

    name: Name
    campaign: Name | None = None
    labels: dict[Name, str | bool | int | float] = Field(default_factory=dict, max_length=MAX_LABELS)
    n_points: int = Field(ge=1, le=MAX_POINTS)
    fields: list[FieldSpec] = Field(min_length=1, max_length=MAX_FIELDS)
    dtype: Literal["float32", "float64"] = "float32"
    grid: Grid = Field(default_factory=NoGrid)
    time: TimeAxis = Field(default_factory=TimeAxis)
    reference: Reference | None = None
    scaling: Literal["none", "unit-variance"] = "none"
    retained_rank: int = Field(default=40, ge=2, le=MAX_RANK)
    block_length: int | None = Field(default=None, ge=2, le=MAX_BLOCK_LENGTH)
    parts: list[Part] | None = Field(
        default=None, min_length=1, max_length=MAX_PARTS, description="who posts which points; null, one posts all"
    )
    gaps: Literal["refuse"] = "refuse"
    criterion: Criterion = Field(default_factory=Criterion)

    @model_validator(mode="after")
    def _consistent(self) -> RunDeclaration:
        names = [field.name for field in self.fields]
        if len(set(names)) != len(names):
            raise ValueError(f"field names must differ, got {names}")
        if isinstance(self.grid, UniformGrid | RectilinearGrid) and self.grid.n_points != self.n_points:
            raise ValueError(
                f"grid of shape {self.grid.shape} has {self.grid.n_points} points, n_points is {self.n_points}"
            )
        if self.criterion.n_modes >= self.rank:
            raise ValueError(
                f"criterion.n_modes {self.criterion.n_modes} must be below the rank {self.rank} (the smaller of "
                "retained_rank and the number of rows), so that the last wanted mode can be told from the next"
            )
        return self

    @model_validator(mode="after")
    def _covered_by_parts(self) -> RunDeclaration:
        expected = 0
        for k, part in enumerate(self.parts or ()):
            if part.start != expected or part.stop <= part.start:
                raise ValueError(
                    f"part {k} is [{part.start}, {part.stop}), it must start at {expected} and hold at least one "
                    "point: parts follow one another without gap or overlap"
                )
            expected = part.stop
        if self.parts and expected != self.n_points:
            raise ValueError(f"the parts end at {expected}, n_points is {self.n_points}; they must cover all points")
        return self

    @property
    def n_rows(self) -> int:
        """m, rows of a snapshot: fields times points."""
        return self.n_points * len(self.fields)

    @property
    def rank(self) -> int:
        """R, directions kept: ``retained_rank``, or all rows when there are fewer."""
        return min(self.retained_rank, self.n_rows)

    @property
    def length_of_block(self) -> int:
        """L, snapshots per update: ``block_length``, or twice the rank."""
        return self.block_length or 2 * self.rank

    @property
    def real_dtype(self) -> np.dtype[np.floating[npt.NBitBase]]:
        return np.dtype(self.dtype)

    @property
    def grid_shape(self) -> tuple[int, ...]:
        """Shape of one field: the grid's, or (n_points,)."""
        if isinstance(self.grid, UniformGrid | RectilinearGrid):
            return tuple(self.grid.shape)
        return (self.n_points,)
