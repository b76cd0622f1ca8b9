"""The case and its HDF5 file: what goes in comes back, and a file that is wrong says where."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from cases import AIR, case_of, lossy, monopole
from meshes import box
from murmesh.solver.case.boundary import Boundary, Impedance, Port, Pressure, Sheet, Vibrating
from murmesh.solver.case.catalogue import Treatment
from murmesh.solver.case.hdf5 import VERSION, read_case, write_case
from murmesh.solver.case.load import IncomingWave, SurfacePressure, SurfaceVelocity
from murmesh.solver.case.model import Case, Measured, Mesh, Receiver, Region, Surface, Sweep
from murmesh.solver.case.motion import Uniform
from murmesh.solver.case.wall import Layers
from murmesh.solver.errors import CaseError, FieldError, FormatError


def _case(**changes: Any) -> Case:
    kinds: dict[str, Boundary] = {"x0": Vibrating(), "x1": Impedance(Layers.example()), "y0": Pressure(), "z0": Port()}
    loads = [
        SurfaceVelocity("x0", Uniform(1e-3 + 0j)),
        monopole((0.3, 0.4, 0.5)),
        SurfacePressure("y0", 1.0 + 0j),
        IncomingWave("z0", 1.0 + 0j),
    ]
    case = case_of(
        box(2, 2, 2), kinds, loads, [50.0, 60.0], {"ear": (0.5, 0.5, 0.5)}, damping=lossy(0.02),
        field_frequencies=np.array([60.0]),
    )  # fmt: skip
    measured = Measured(np.array([50.0]), np.array([70.0]))
    far = Receiver("far/away", (0, 0, 1), 0.05, measured)
    full = case.with_(title="Würfel & more", catalogue=(Treatment.example(),), receivers=(*case.receivers, far))
    return full.with_(**changes)


def test_round_trip(tmp_path: Path) -> None:
    case = _case()
    write_case(case, tmp_path / "case.h5")
    again = read_case(tmp_path / "case.h5")
    assert again.checksum == case.checksum
    assert again.receivers[1].name == "far/away"
    assert again.title == "Würfel & more"
    assert np.array_equal(again.mesh.tets, case.mesh.tets)
    assert list(tmp_path.iterdir()) == [tmp_path / "case.h5"]  # nothing left beside it


def test_checksum_sees_every_change() -> None:
    case = _case()
    assert case.with_(title="other").checksum != case.checksum
    nodes = case.mesh.nodes.copy()
    nodes[0, 0] += 1e-12
    assert case.with_(mesh=case.mesh.with_(nodes=nodes)).checksum != case.checksum


def test_conventions_stand_in_the_file(tmp_path: Path) -> None:
    write_case(_case(), tmp_path / "case.h5")
    with h5py.File(tmp_path / "case.h5") as file:
        assert file.attrs["format"] == "murmesh case"
        assert file.attrs["convention_time_factor"] == "exp(+i omega t)"
        assert file["surfaces/x1/boundary/wall"].attrs["kind"] == "layers"
        assert file["surfaces/x1"].attrs["index"] == 1


def test_a_file_written_by_hand(tmp_path: Path) -> None:
    """The least another program must write."""
    mesh = box(1, 1, 1)
    with h5py.File(tmp_path / "hand.h5", "w") as file:
        file.attrs["format"], file.attrs["version"] = "murmesh case", 1
        group = file.create_group("mesh")
        group["nodes"], group["tets"] = mesh.nodes, mesh.tets.astype(np.int32)
        group["tet_region"] = np.zeros(len(mesh.tets), dtype=np.int32)
        group["triangles"], group["triangle_surface"] = mesh.surfaces["x0"], np.zeros(2, dtype=int)
        for path in ("regions", "surfaces"):
            file.create_group(path).attrs["list"] = True
        air = file.create_group("regions/air")
        air.attrs["name"] = "air"
        air.create_group("medium").attrs["kind"] = "air"
        roof = file.create_group("surfaces/roof")
        roof.attrs["name"] = "roof"
        roof.create_group("boundary").attrs["kind"] = "rigid"
        file.create_group("sweep")["frequencies"] = [100.0, 200.0]
    case = read_case(tmp_path / "hand.h5")
    assert case.surfaces[0].name == "roof"
    assert case.mesh.tets.dtype == np.int64


def test_texts_of_fixed_length_are_read(tmp_path: Path) -> None:
    """Programs in C or Fortran write texts as fixed-length strings."""
    path = tmp_path / "case.h5"
    write_case(_case(), path)
    with h5py.File(path, "r+") as file:
        file.attrs["format"] = np.bytes_(b"murmesh case")
        file["regions/air/medium"].attrs["kind"] = np.bytes_(b"fluid")
    assert read_case(path).checksum == _case().checksum


def _broken(path: Path, change: Any) -> Path:
    write_case(_case(), path)
    with h5py.File(path, "r+") as file:
        change(file)
    return path


def _delete(file: h5py.File) -> None:
    del file["mesh/nodes"]


def _newer(file: h5py.File) -> None:
    file.attrs["version"] = VERSION + 1


def _foreign(file: h5py.File) -> None:
    file.attrs["format"] = "something else"


def _unknown(file: h5py.File) -> None:
    file["surfaces/x1/boundary"].attrs["colour"] = "red"


def _kind(file: h5py.File) -> None:
    file["regions/air/medium"].attrs["kind"] = "flud"


def _index(file: h5py.File) -> None:
    file["mesh/tet_region"][0] = 7


@pytest.mark.parametrize(
    ("change", "error", "words"),
    [
        (_delete, FieldError, r"/?mesh: 'nodes' \[m\] is missing"),
        (_newer, FormatError, "this murmesh reads up to 1; update it"),
        (_foreign, FormatError, "is not a murmesh case: its attribute 'format' is 'something else'"),
        (_unknown, FieldError, "surfaces/x1/boundary: unknown key 'colour'"),
        (_kind, FieldError, "regions/air/medium: .*'flud' is not known; did you mean 'fluid'"),
        (_index, CaseError, "mesh/tet_region holds 7, but there are only 1 regions"),
    ],
)
def test_wrong_files(tmp_path: Path, change: Any, error: type[Exception], words: str) -> None:
    with pytest.raises(error, match=words):
        read_case(_broken(tmp_path / "case.h5", change))


def test_truncated_missing_and_foreign_files(tmp_path: Path) -> None:
    path = tmp_path / "case.h5"
    with pytest.raises(FormatError, match="there is no file"):
        read_case(path)
    write_case(_case(), path)
    path.write_bytes(path.read_bytes()[:-4000])
    with pytest.raises(FormatError, match=r"truncated or foreign|cannot be read"):
        read_case(path)
    path.write_text("not HDF5")
    with pytest.raises(FormatError, match="truncated or foreign"):
        read_case(path)


def test_writing_into_nowhere(tmp_path: Path) -> None:
    with pytest.raises(FormatError, match=r"the folder .* does not exist"):
        write_case(_case(), tmp_path / "none" / "case.h5")


def test_a_failed_write_leaves_the_old_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "case.h5"
    write_case(_case(), path)
    before = path.read_bytes()
    monkeypatch.setattr("murmesh.solver.case.hdf5._write_tree", lambda *_: (_ for _ in ()).throw(OSError("disk full")))
    with pytest.raises(OSError, match="disk full"):
        write_case(_case(title="new"), path)
    assert path.read_bytes() == before
    assert list(tmp_path.iterdir()) == [path]


def _with_load(load: Any) -> Case:
    case = _case()
    return case.with_(load_cases=(case.load_cases[0].with_(loads=(load,)),))


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: _with_load(SurfaceVelocity("x9", Uniform(1.0))), "no surface is called 'x9'; did you mean 'x"),
        (
            lambda: _with_load(SurfaceVelocity("z1", Uniform(1.0))),
            "kind 'rigid' cannot carry a surface_velocity; make it",
        ),
        (lambda: _with_load(SurfacePressure("x0", 1.0)), "make it pressure"),
        (lambda: _with_load(IncomingWave("x0", 1.0)), "make it port"),
        (lambda: _case(regions=(Region("air", AIR), Region("air", AIR))), "the name 'air' is used twice"),
        (lambda: _case(regions=(Region("", AIR),)), "an entry has no name"),
        (lambda: _case(surfaces=_case().surfaces[:2]), "mesh/triangle_surface holds 5, but there are only 2 surfaces"),
        (lambda: _case(load_cases=(), surfaces=_sheet()), "front_region 'aiir' is not a region; did you mean 'air'"),
        (lambda: _case().surface("roof"), "no surface is called 'roof'"),
        (lambda: _case().load_case("idle"), "no load case is called 'idle'"),
        (lambda: _case(load_cases=()).load_case(), "nothing drives the air"),
    ],
)
def test_contradictions(make: Any, words: str) -> None:
    with pytest.raises(CaseError, match=words):
        make()


def _sheet() -> tuple[Surface, ...]:
    return (*_case().surfaces[:5], Surface("z1", Sheet(front_region="aiir")))


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Sweep(np.array([2.0, 1.0])), "must increase strictly"),
        (lambda: Sweep(np.empty(0)), "has no frequency"),
        (lambda: Sweep(np.array([1.0]), field_frequencies=np.array([2.0])), "not a line of the sweep"),
        (lambda: Sweep(np.array([1.0]), order=9), "outside 0 .. 8"),
        (lambda: Sweep.grid(100.0, 50.0, 1.0), "give 0 < start <= stop"),
        (lambda: Mesh(np.zeros((3, 2)), *(np.zeros((1, 4), int), np.zeros(1, int)) * 2), r"nodes must be \(n, 3\)"),
        (lambda: _mesh(np.zeros((1, 5), int)), r"tets must be \(n, 4\) or \(n, 10\)"),
        (lambda: _mesh(np.full((1, 4), 9)), "names node 9, but there are only 4"),
        (lambda: _mesh(np.zeros((0, 4), int)), "mesh/tets is empty"),
        (lambda: _mesh(np.zeros((2, 4), int)), "2 rows but its index has 1"),
        (lambda: Measured(np.array([1.0]), np.array([1.0, 2.0])), "1 frequencies, 2 levels"),
    ],
)
def test_wrong_parts(make: Any, words: str) -> None:
    with pytest.raises(FieldError, match=words):
        make()


def _mesh(tets: Any) -> Mesh:
    index = np.zeros(min(len(tets), 1), dtype=int)
    return Mesh(np.zeros((4, 3)), tets, index, np.zeros((0, 3), int), np.zeros(0, int))


def test_sweep_grid() -> None:
    sweep = Sweep.grid(40.0, 50.0, 2.0, (95.0, 42.0))
    assert list(sweep.frequencies) == [40, 42, 44, 46, 48, 50, 95]
    assert _case().panels == ("x0",)
