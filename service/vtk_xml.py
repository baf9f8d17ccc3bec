"""VTK XML files (serial, version 1.0): fields on uniform and rectilinear grids and on points, as base64 appended data.

The format is that of the VTK file format document (VTK User's Guide, "XML file formats"). The length of a file is known
before anything is read, and its arrays are read one after another while it is sent.
"""

from __future__ import annotations

import base64
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any
from xml.sax.saxutils import quoteattr

import numpy as np
import numpy.typing as npt

from service.exporting import Array, Place, Scalar

MEDIA_TYPE = "application/xml"
PIECE_BYTES = 3 * 2**20  # base64 takes three bytes at a time
HEADER_BYTES = 8  # each array starts with its size, as header_type says
_TYPES = {"f4": "Float32", "f8": "Float64", "i8": "Int64"}


@dataclass(frozen=True)
class _Stored:
    """One array of the file: values of ``scalar``, with ``n_components`` for each point."""

    scalar: Scalar
    n_values: int
    n_components: int = 1

    @property
    def n_bytes(self) -> int:
        return self.n_values * self.scalar.dtype.itemsize

    @property
    def encoded_bytes(self) -> int:
        return 4 * -(-(HEADER_BYTES + self.n_bytes) // 3)

    def tag(self, offset: int) -> str:
        kind = _TYPES[self.scalar.dtype.str[1:]]
        components = f' NumberOfComponents="{self.n_components}"' if self.n_components > 1 else ""
        name = quoteattr(self.scalar.name)
        return f'<DataArray type="{kind}" Name={name}{components} format="appended" offset="{offset}"/>'

    def encoded(self) -> Iterator[bytes]:
        """Size and values, little-endian, in base64."""
        values = np.ascontiguousarray(self.scalar.read(), self.scalar.dtype.newbyteorder("<")).reshape(-1)
        raw = self.n_bytes.to_bytes(HEADER_BYTES, "little") + values[:2].tobytes()
        rest = values[2:].tobytes()
        head = len(raw) - len(raw) % 3
        yield base64.b64encode(raw[:head])
        rest = raw[head:] + rest
        for start in range(0, len(rest), PIECE_BYTES):
            yield base64.b64encode(rest[start : start + PIECE_BYTES])


class VtkDocument:
    """One file; ``n_bytes`` long, made of ``parts()``."""

    def __init__(self, place: Place, scalars: Sequence[Scalar]) -> None:
        n_points = place.declaration.n_points
        self._fields = [_Stored(one, n_points) for one in scalars]
        self._geometry = _geometry(place)
        self._head = self._written_head(place).encode()
        self._tail = b"\n</AppendedData>\n</VTKFile>\n"

    @property
    def n_bytes(self) -> int:
        stored = sum(one.encoded_bytes for one in (*self._fields, *self._geometry))
        return len(self._head) + stored + len(self._tail)

    def parts(self) -> Iterator[bytes]:
        yield self._head
        for one in (*self._fields, *self._geometry):
            yield from one.encoded()
        yield self._tail

    def _written_head(self, place: Place) -> str:
        offset, tags = 0, []
        for one in (*self._fields, *self._geometry):
            tags.append(one.tag(offset))
            offset += one.encoded_bytes
        fields, geometry = tags[: len(self._fields)], tags[len(self._fields) :]
        kind = {"vti": "ImageData", "vtr": "RectilinearGrid", "vtp": "PolyData"}[place.suffix]
        return (
            '<?xml version="1.0"?>\n'
            f'<VTKFile type="{kind}" version="1.0" byte_order="LittleEndian" header_type="UInt64">\n'
            f"<{kind}{_extent(place)}>\n<Piece {_piece(place)}>\n<PointData>\n" + "\n".join(fields) + "\n</PointData>\n"
            f"{_shape(place, geometry)}</Piece>\n</{kind}>\n"
            '<AppendedData encoding="base64">\n_'
        )


def _geometry(place: Place) -> list[_Stored]:
    """Arrays that say where the points are; a uniform grid needs none."""
    if place.axes is not None:
        if place.suffix == "vti":
            return []
        return [_fixed(name, axis) for name, axis in zip("xyz", place.axes, strict=True)]
    assert place.positions is not None
    cells = place.triangles
    if cells is None:
        cells = np.arange(len(place.positions), dtype=np.int64)[:, np.newaxis]
    ends = np.arange(1, len(cells) + 1, dtype=np.int64) * cells.shape[1]
    return [_fixed("position", place.positions, 3), _fixed("connectivity", cells), _fixed("offsets", ends)]


def _fixed(name: str, values: npt.NDArray[Any], n_components: int = 1) -> _Stored:
    return _Stored(Scalar(name, values.dtype, lambda: values), values.size, n_components)


def _ends(place: Place) -> str:
    assert place.axes is not None
    return " ".join(f"0 {len(axis) - 1}" for axis in place.axes)


def _extent(place: Place) -> str:
    """Attributes of the data set: extents in points, x first; origin and spacing of a uniform grid."""
    if place.axes is None:
        return ""
    text = f' WholeExtent="{_ends(place)}"'
    if place.suffix == "vti":
        text += f' Origin="{_numbers(axis[0] for axis in place.axes)}"'
        text += f' Spacing="{_numbers(_spacing(axis) for axis in place.axes)}"'
    return text


def _numbers(values: Iterator[float]) -> str:
    return " ".join(f"{float(value)!r}" for value in values)


def _spacing(axis: Array) -> float:
    return float(axis[-1] - axis[0]) / (len(axis) - 1) if len(axis) > 1 else 1.0


def _piece(place: Place) -> str:
    if place.axes is not None:
        return f'Extent="{_ends(place)}"'
    n = place.declaration.n_points
    vertices, polygons = (n, 0) if place.triangles is None else (0, len(place.triangles))
    return (
        f'NumberOfPoints="{n}" NumberOfVerts="{vertices}" NumberOfLines="0" NumberOfStrips="0" '
        f'NumberOfPolys="{polygons}"'
    )


def _shape(place: Place, tags: list[str]) -> str:
    if place.suffix == "vti":
        return ""
    if place.axes is not None:
        return "<Coordinates>\n" + "\n".join(tags) + "\n</Coordinates>\n"
    cells = "Verts" if place.triangles is None else "Polys"
    return f"<Points>\n{tags[0]}\n</Points>\n<{cells}>\n{tags[1]}\n{tags[2]}\n</{cells}>\n"


def collection(files: Sequence[tuple[float, str]]) -> str:
    """A list of files with their times, which viewers open as one series."""
    entries = "".join(f'<DataSet timestep="{time!r}" file={quoteattr(name)}/>\n' for time, name in files)
    return (
        '<?xml version="1.0"?>\n<VTKFile type="Collection" version="1.0" byte_order="LittleEndian">\n'
        f"<Collection>\n{entries}</Collection>\n</VTKFile>\n"
    )
