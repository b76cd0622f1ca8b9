"""Temporal VTKHDF (.vtkhdf): all kept lines in one file, the mesh once; the "time" of a step is its frequency in hertz.

Layout: VTK file format documentation, "VTKHDF", unstructured grids with a Steps group. Fields are stored as 32-bit
floats (relative accuracy 6e-8), coordinates as 64-bit ones.
"""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np

from murmesh.plugin.export import EXPORTS
from murmesh.plugin.export.arrays import header, point_arrays
from murmesh.plugin.export.vtk_cells import Cells, volume_cells
from murmesh.plugin.fields import kept_line
from murmesh.plugin.files import written
from murmesh.solver.result import Result


@EXPORTS.member("vtkhdf", ".vtkhdf", "field at all kept frequencies in one file for VTK readers, the mesh once")
def write(result: Result, path: Path, *, load_case: str = "", flat: bool = False) -> Path:
    """Write every kept field as a step whose time value is its frequency [Hz].

    Cells as in the .vtu export (`flat` for linear ones). Raises ResultError if no field is kept.
    """
    kept_line(result, None, load_case)
    cells = volume_cells(result.space, flat)
    with written(path) as scratch, h5py.File(scratch, "w") as file:
        root = file.create_group("VTKHDF", track_order=True)
        root.attrs["Version"] = np.array([2, 0])
        root.attrs["Type"] = np.bytes_("UnstructuredGrid")
        _write_mesh(root, cells)
        for name, text in header(result, load_case).items():
            root.attrs[name] = text
        _write_steps(root, result, cells, load_case)
    return Path(path)


def _write_mesh(root: h5py.Group, cells: Cells) -> None:
    root["NumberOfPoints"] = np.array([len(cells.cloud.points)])
    root["NumberOfCells"] = np.array([len(cells.nodes)])
    root["NumberOfConnectivityIds"] = np.array([cells.nodes.size])
    root.create_dataset("Points", data=cells.cloud.points, compression="gzip", shuffle=True)
    root.create_dataset("Connectivity", data=cells.nodes.ravel(), compression="gzip", shuffle=True)
    root["Offsets"] = cells.offsets
    root["Types"] = np.full(len(cells.nodes), cells.kind, dtype=np.uint8)


def _write_steps(root: h5py.Group, result: Result, cells: Cells, load_case: str) -> None:
    lines = result.field_frequencies
    count, points = len(lines), len(cells.cloud.points)
    steps = root.create_group("Steps")
    steps.attrs["NSteps"] = count
    steps["Values"] = lines
    # every step uses the one mesh at the beginning of the datasets
    for name in ("PartOffsets", "PointOffsets"):
        steps[name] = np.zeros(count, dtype=np.int64)
    for name in ("CellOffsets", "ConnectivityIdOffsets"):
        steps[name] = np.zeros((count, 1), dtype=np.int64)
    steps["NumberOfParts"] = np.ones(count, dtype=np.int64)
    data, offsets = root.create_group("PointData"), steps.create_group("PointDataOffsets")
    for index, line in enumerate(lines):
        for name, values in point_arrays(result, cells.cloud, float(line), load_case).items():
            if name not in data:
                chunk = (min(points, 1 << 18),)
                data.create_dataset(name, (count * points,), np.float32, chunks=chunk, compression="gzip", shuffle=True)
                offsets[name] = np.arange(count, dtype=np.int64) * points
            data[name][index * points : (index + 1) * points] = values
