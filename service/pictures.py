"""Pictures of one field of a mode or of the mean, as PNG, on whatever grid the run was declared with.

Drawn without a display and without any state shared between pictures.
"""

from __future__ import annotations

import io
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Colormap, Normalize
from matplotlib.figure import Figure

from service.colours import diverging, sequential
from streaming.declaration import Grid, NoGrid, RectilinearGrid, ScatteredPoints, UniformGrid

Values = npt.NDArray[np.floating]
Array = npt.NDArray[np.float64]

DOTS_PER_INCH = 120
MAX_WIDTH_INCHES, MAX_HEIGHT_INCHES = 9.0, 7.0  # 1080 by 840 pixels: a wall page's tile, some 100 kB of PNG
MIN_HEIGHT_INCHES = 2.6
MAX_RATIO = 12.0  # of width to height, or the reverse, that is drawn true to scale; beyond, a strip would show nothing
MAX_CELLS_PER_AXIS = 1500  # more than the picture has pixels
MAX_DOTS = 100_000  # drawing dots takes some microseconds each
MAX_TITLE_LETTERS = 90  # what fits above the picture
SLAB_FRACTION = 0.04  # of scattered points in space: those nearest the middle plane are shown
AXES = "xyz"


@dataclass(frozen=True)
class _Ink:
    """How values become colours: the colours, and the values that get the first and the last of them."""

    colours: Colormap
    low: float
    high: float
    unit: str

    @property
    def norm(self) -> Normalize:
        return Normalize(self.low, self.high)


def mode_png(values: Values, grid: Grid, title: str, unit: str, positions: npt.ArrayLike | None = None) -> bytes:
    """Draw one field of a mode: the scale is centred on zero, and zero has the neutral colour.

    Parameters
    ----------
    values : of the grid's shape, or (n_points,)
    grid : as declared; ``positions`` (n_points, 1 to 3) are needed when its kind is points
    unit : of the values, shown beside the scale

    Raises
    ------
    ValueError
        if the values do not fit the grid, or positions are missing
    """
    top = _largest(np.abs(values))
    return _draw(values, grid, title, _Ink(diverging(), -top, top, unit), positions)


def mean_png(values: Values, grid: Grid, title: str, unit: str, positions: npt.ArrayLike | None = None) -> bytes:
    """Draw one field of the mean, from its smallest to its largest value; see `mode_png`."""
    low, high = -_largest(-values, 0.0), _largest(values, 0.0)
    if not low < high:
        low, high = low - 0.5, high + 0.5
    return _draw(values, grid, title, _Ink(sequential(), low, high, unit), positions)


def _largest(values: Values, empty: float = 1.0) -> float:
    """Largest finite value; ``empty`` when there is none, and 1 for all zeros if that is the default."""
    finite = values[np.isfinite(values)]
    top = float(finite.max()) if finite.size else empty
    return top if top != 0.0 else empty


def _draw(values: Values, grid: Grid, title: str, ink: _Ink, positions: npt.ArrayLike | None) -> bytes:
    if isinstance(grid, UniformGrid | RectilinearGrid):
        figure = _on_axes(np.asarray(values).reshape(grid.shape), _axes_of(grid), ink)
    elif isinstance(grid, ScatteredPoints):
        figure = _on_points(np.asarray(values).reshape(-1), _checked_positions(values, positions), ink)
    elif isinstance(grid, NoGrid):
        figure = _line(np.asarray(values).reshape(-1), np.arange(values.size, dtype=float), "point", ink)
    short = title if len(title) <= MAX_TITLE_LETTERS else title[: MAX_TITLE_LETTERS - 1] + "…"
    figure.suptitle(short, fontsize=11, x=0.02, ha="left", parse_math=False)
    buffer = io.BytesIO()
    FigureCanvasAgg(figure)
    figure.savefig(buffer, format="png", dpi=DOTS_PER_INCH, metadata={"Software": None})
    return buffer.getvalue()


# -- grids --------------------------------------------------------------------------------------------------


def _axes_of(grid: UniformGrid | RectilinearGrid) -> list[Array]:
    """Where the points lie on each axis of the grid, a length."""
    if isinstance(grid, RectilinearGrid):
        return [np.asarray(axis, dtype=float) for axis in grid.axes]
    origin = grid.origin or [0.0] * len(grid.shape)
    return [o + h * np.arange(n, dtype=np.float64) for o, h, n in zip(origin, grid.spacing, grid.shape, strict=True)]


def _on_axes(values: Values, axes: list[Array], ink: _Ink) -> Figure:
    """Line in one dimension, image in two, the three middle planes in space; the last axis is x."""
    names = AXES[: len(axes)][::-1]
    if len(axes) == 1:
        return _line(values, axes[0], names[0], ink)
    planes = [(0, 1)] if len(axes) == 2 else [(1, 2), (0, 2), (0, 1)]
    figure, panels = _panels([_extent(axes[j]) / _extent(axes[i]) for i, j in planes])
    for panel, (i, j) in zip(panels, planes, strict=True):
        _image(panel, _middle_plane(values, i, j), axes[i], axes[j], ink)
        panel.set(xlabel=names[j], ylabel=names[i])
    if len(axes) == 3:
        for panel, k in zip(panels, range(3), strict=True):
            panel.set_title(f"{names[k]} = {axes[k][len(axes[k]) // 2]:.4g}", fontsize=9, loc="left")
    _scale_bar(figure, panels, ink)
    return figure


def _middle_plane(values: Values, i: int, j: int) -> Values:
    """The plane of axes (i, j) through the middle of the others."""
    return values[tuple(slice(None) if k in (i, j) else n // 2 for k, n in enumerate(values.shape))]


def _image(panel: Axes, plane: Values, rows: Array, columns: Array, ink: _Ink) -> None:
    """Cells around the points, thinned to what a picture can show."""
    down, right = (-(-len(axis) // MAX_CELLS_PER_AXIS) for axis in (rows, columns))
    edges = _edges(columns[::right]), _edges(rows[::down])
    panel.pcolormesh(*edges, plane[::down, ::right], cmap=ink.colours, norm=ink.norm, rasterized=True)
    if 1 / MAX_RATIO < _extent(rows) / _extent(columns) < MAX_RATIO:
        panel.set_aspect("equal")


def _edges(centres: Array) -> Array:
    """Borders half-way between the points, and as far beyond the outermost ones."""
    if len(centres) == 1:
        return np.array([centres[0] - 0.5, centres[0] + 0.5])
    middle = (centres[1:] + centres[:-1]) / 2
    return np.concatenate([[2 * centres[0] - middle[0]], middle, [2 * centres[-1] - middle[-1]]])


def _extent(axis: Array) -> float:
    edges = _edges(axis)
    return float(edges[-1] - edges[0])


# -- points and lines ----------------------------------------------------------------------------------------


def _checked_positions(values: Values, positions: npt.ArrayLike | None) -> Array:
    if positions is None:
        raise ValueError("scattered points can be drawn only with their positions")
    places = np.asarray(positions, dtype=float)
    places = places.reshape(len(places), -1)
    if len(places) != values.size or not 1 <= places.shape[1] <= 3:
        raise ValueError(f"positions of shape {places.shape} do not fit {values.size} values")
    return places


def _on_points(values: Values, places: Array, ink: _Ink) -> Figure:
    """Line for points on a line, dots in a plane, dots near the three middle planes in space."""
    n_axes = places.shape[1]
    if n_axes == 1:
        order = np.argsort(places[:, 0], kind="stable")
        return _line(values[order], places[order, 0], "x", ink)
    planes = [(0, 1)] if n_axes == 2 else [(0, 1), (0, 2), (1, 2)]
    spans = np.maximum(np.ptp(places, axis=0), 1e-300)
    figure, panels = _panels([float(spans[i] / spans[j]) for i, j in planes])
    for panel, (i, j) in zip(panels, planes, strict=True):
        shown = _shown_points(places, ({0, 1, 2} - {i, j}).pop() if n_axes == 3 else None)
        size = float(np.clip(6e4 / len(planes) ** 2 / max(1, len(shown)), 0.3, 60.0))
        _dots(panel, places[shown, i], places[shown, j], values[shown], size, ink)
        panel.set(xlabel=AXES[i], ylabel=AXES[j])
        if 1 / MAX_RATIO < spans[j] / spans[i] < MAX_RATIO:
            panel.set_aspect("equal")
    _scale_bar(figure, panels, ink)
    return figure


def _dots(panel: Axes, across: Array, up: Array, values: Values, size: float, ink: _Ink) -> None:
    """Dots with a thin rim, so that those of the neutral colour stay visible; ``size`` in square points."""
    panel.scatter(
        across,
        up,
        s=size,
        c=values,
        cmap=ink.colours,
        norm=ink.norm,
        edgecolors="#777777",
        linewidths=min(0.3, size / 50),
    )


def _shown_points(places: Array, across: int | None) -> npt.NDArray[np.intp]:
    """Points near the middle plane of axis ``across``, or all; thinned evenly."""
    if across is None:
        shown = np.arange(len(places))
    else:
        away = np.abs(places[:, across] - np.median(places[:, across]))
        shown = np.flatnonzero(away <= np.quantile(away, SLAB_FRACTION))
    return shown[:: -(-len(shown) // MAX_DOTS)]


def _line(values: Values, places: Array, name: str, ink: _Ink) -> Figure:
    """Values over one axis, with the zero line where it lies in view."""
    thin = -(-len(values) // MAX_DOTS)
    figure, (panel,) = _panels([3.0])
    panel.axhline(0.0, color="#888888", linewidth=0.8)
    marker = "o" if len(values) <= 60 else ""
    panel.plot(places[::thin], values[::thin], color="#1f4e8c", linewidth=1.4, marker=marker, markersize=3.5)
    margin = 0.05 * (ink.high - ink.low)
    panel.set_ylim(ink.low - margin, ink.high + margin)
    panel.set_xlabel(name)
    panel.set_ylabel(ink.unit, parse_math=False)
    return figure


# -- the sheet -----------------------------------------------------------------------------------------------


def _panels(width_over_height: list[float]) -> tuple[Figure, list[Axes]]:
    """A figure with panels of these shapes side by side, as high as the widest sheet makes them."""
    shares = [float(np.clip(ratio, 1 / MAX_RATIO, MAX_RATIO)) for ratio in width_over_height]
    height = float(np.clip(0.8 * MAX_WIDTH_INCHES / sum(shares) + 0.9, MIN_HEIGHT_INCHES, MAX_HEIGHT_INCHES))
    figure = Figure(figsize=(MAX_WIDTH_INCHES, height), layout="compressed", facecolor="white")
    panels = list(figure.subplots(1, len(shares), width_ratios=shares, squeeze=False)[0])
    for panel in panels:
        panel.tick_params(labelsize=9)
    return figure, panels


def _scale_bar(figure: Figure, panels: Sequence[Axes], ink: _Ink) -> None:
    bar = figure.colorbar(ScalarMappable(ink.norm, ink.colours), ax=list(panels), fraction=0.04, pad=0.02)
    bar.ax.tick_params(labelsize=9)
    bar.set_label(ink.unit, parse_math=False)
