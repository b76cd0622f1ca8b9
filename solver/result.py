"""What a sweep found, and its HDF5 file.

The file holds a copy of the case it came from (with its checksum), so that it stands alone: pictures, rankings and
exports need nothing else. All pressures are complex peak amplitudes, e^{+iwt}.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import astuple, dataclass, fields
from functools import cached_property
from pathlib import Path
from typing import cast

import h5py
import numpy as np
import numpy.typing as npt

from murmesh.solver.assembly import evaluate
from murmesh.solver.case.hdf5 import check_header, open_hdf5, read_case_group, write_atomically, write_case_group
from murmesh.solver.case.load import IncidentField, LoadCase
from murmesh.solver.case.medium import damped
from murmesh.solver.case.model import HIGHEST_ORDER, Case
from murmesh.solver.engine import Engine, Line
from murmesh.solver.errors import FormatError, MurmeshError, ResultError, nearest
from murmesh.solver.exterior import Exterior, Outside
from murmesh.solver.power import radiated_labels
from murmesh.solver.receiver_points import Samples, locate_receivers
from murmesh.solver.reduced import Certificate, Check
from murmesh.solver.space import Space, discretise
from murmesh.solver.system import Projected, build_system

Floats = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Ints = npt.NDArray[np.int64]
NOTHING: Complex = np.empty((0, 0, 0), dtype=np.complex128)
NO_FORMS: Complex = np.empty((0, 0, 0, 0), dtype=np.complex128)
FORMAT = "murmesh result"
VERSION = 2


@dataclass(frozen=True, eq=False)
class Model:
    """The reduced model of a sweep: W (n, K) in single precision for fields, and the projected sum in double."""

    basis: npt.NDArray[np.float32]
    projected: Projected


@dataclass(frozen=True, eq=False)
class LoadCaseResult:
    """One load case over the sweep.

    contributions (nf, samples, loads) [Pa]; supplied (nf, loads) and absorbed (nf, labels) [W per line]; residual (nf,),
    nan on lines of a reduced model; closure (nf,); fields (k, unknowns, r) at the field frequencies: r solutions whose
    mean squares add (none where the result holds a model, which gives the field of any line); mesh_error (nf, samples, r)
    [Pa]: what elements of the next order would add to the r pressures, (0, 0, 0) where it was not asked for; radiated
    (nf, surfaces, loads, loads) [W per line]: the form of the power through every surface that radiates, in the order of
    their labels, (0, 0, 0, 0) where there is none or a load comes from outside.
    """

    name: str
    loads: tuple[str, ...]
    contributions: Complex
    supplied: Floats
    absorbed: Floats
    residual: Floats
    closure: Floats
    fields: Complex
    mesh_error: Complex
    radiated: Complex


@dataclass(frozen=True, eq=False)
class Result:
    """A solved case."""

    case: Case
    orders: npt.NDArray[np.int8]
    frequencies: Floats
    sample_receiver: Ints
    sample_weight: Floats
    power_labels: tuple[str, ...]
    load_cases: tuple[LoadCaseResult, ...]
    provenance: dict[str, str]
    model: Model | None = None
    certificate: Certificate | None = None

    @classmethod
    def of(
        cls,
        space: Space,
        samples: Samples,
        labels: tuple[str, ...],
        lines: list[Line],
        provenance: dict[str, str],
        model: Model | None = None,
        certificate: Certificate | None = None,
    ) -> Result:
        """Stack the lines of a sweep."""
        case, gathered = space.case, []
        for i, load_case in enumerate(case.load_cases):
            rows = [line.responses[i] for line in lines]
            fields = [row.field for row in rows if row.field.size] if model is None else []
            gathered.append(
                LoadCaseResult(
                    load_case.name,
                    tuple(load.name for load in load_case.loads),
                    np.stack([row.contributions for row in rows]),
                    np.stack([row.supplied for row in rows]),
                    np.stack([row.absorbed for row in rows]),
                    np.array([line.residual for line in lines]),
                    np.array([row.closure for row in rows]),
                    np.stack(fields) if fields else NOTHING,
                    np.stack([row.mesh_error for row in rows]) if all(row.mesh_error.size for row in rows) else NOTHING,
                    np.stack([row.radiated for row in rows]) if all(row.radiated.size for row in rows) else NO_FORMS,
                )
            )
        frequencies = np.array([line.frequency for line in lines])
        head = case, space.dofs.orders.astype(np.int8), frequencies, samples.receiver, samples.weight, labels
        return cls(*head, tuple(gathered), provenance, model, certificate)

    @property
    def order(self) -> int:
        """The highest order of an element."""
        return int(self.orders.max())

    def load_case(self, name: str = "") -> LoadCaseResult:
        """The load case called `name`; the first one if no name is given."""
        for held in self.load_cases:
            if name in ("", held.name):
                return held
        raise ResultError(f"the result has no load case '{name}'; {nearest(name, [h.name for h in self.load_cases])}")

    def receiver(self, name: str) -> int:
        """Index of the receiver called `name`."""
        names = [receiver.name for receiver in self.case.receivers]
        if name not in names:
            raise ResultError(f"the result has no receiver '{name}'; {nearest(name, names)}")
        return names.index(name)

    def samples(self, receiver: str) -> Ints:
        """Indices of the sample points of a receiver."""
        return np.flatnonzero(self.sample_receiver == self.receiver(receiver))

    def combination(self, load_case: str = "") -> Complex:
        """G (nf, loads, loads) of a load case."""
        held = self.case.load_case(load_case or self.load_cases[0].name)
        return held.combination.matrix(self.frequencies, len(held.loads))

    def mean_square(self, receiver: str, load_case: str = "") -> Floats:
        """(1/2) sum_ij G_ij p_i conj(p_j), averaged over the receiver's samples: (nf,) [Pa2], per hertz for a density."""
        return np.asarray(self.shares(receiver, load_case).sum(axis=1))

    def mesh_bar(self, receiver: str, load_case: str = "") -> Floats | None:
        """20 lg(1 + |eta| / |p|) [dB] of a receiver's level, root mean squares over its samples, (nf,); None where the
        sweep was solved without an error bar."""
        held = self.load_case(load_case)
        if not held.mesh_error.size:
            return None
        size, error = (self._weighted(receiver, p) for p in (self._pressures(held), held.mesh_error))
        return np.asarray(20 * np.log10(1 + np.sqrt(error / np.maximum(size, 1e-300))))

    def corrected(self, receiver: str, load_case: str = "") -> Floats | None:
        """The mean square (nf,) with the mesh error added to the pressures: the solution of the next order, or close to it."""
        held = self.load_case(load_case)
        if not held.mesh_error.size:
            return None
        square = 0.5 * self._weighted(receiver, self._pressures(held) + held.mesh_error)
        return np.asarray(square / self.bandwidth(load_case))

    @property
    def mesh_error_db(self) -> float | None:
        """Root mean square change of level [dB] by the mesh error, over lines with sound, receivers and load cases; None
        without an error bar."""
        changes = [
            self._corrections(receiver.name, held.name)
            for held in self.load_cases
            for receiver in self.case.receivers
            if held.mesh_error.size
        ]
        return float(np.sqrt(np.mean(np.concatenate(changes) ** 2))) if changes else None

    def _corrections(self, receiver: str, load_case: str) -> Floats:
        """Changes of level [dB] by the mesh error on the lines with sound."""
        square, corrected = self.mean_square(receiver, load_case), self.corrected(receiver, load_case)
        if corrected is None:
            return np.zeros(0)
        heard = (square > 0) & (corrected > 0)
        return np.asarray(10 * np.log10(corrected[heard] / square[heard]))

    def _pressures(self, held: LoadCaseResult) -> Complex:
        """The r pressures (nf, samples, r) whose mean squares add."""
        mix = self.case.load_case(held.name).combination.factors(self.frequencies, len(held.loads))
        return np.asarray(np.einsum("fsl,flr->fsr", held.contributions, mix))

    def _weighted(self, receiver: str, pressures: Complex) -> Floats:
        """sum over the receiver's samples and the r columns of w |p|^2, (nf,)."""
        index = self.samples(receiver)
        return np.asarray(np.einsum("s,fsr->f", self.sample_weight[index], np.abs(pressures[:, index]) ** 2))

    def shares(self, receiver: str, load_case: str = "") -> Floats:
        """Mean square that belongs to each load, (1/2) Re sum_j G_ij p_i conj(p_j): (nf, loads), summing to the total."""
        held, index = self.load_case(load_case), self.samples(receiver)
        p, g = held.contributions[:, index], self.combination(load_case)
        pairs = np.real(p * np.einsum("fij,fsj->fsi", g, p.conj()))
        return np.asarray(0.5 * np.einsum("s,fsi->fi", self.sample_weight[index], pairs) / self.bandwidth(load_case))

    def pair_squares(self, receiver: str, load_case: str = "") -> Floats:
        """Re of the terms (1/2) G_ij p_i conj(p_j), averaged over samples: (nf, loads, loads)."""
        held, index = self.load_case(load_case), self.samples(receiver)
        p, g = held.contributions[:, index], self.combination(load_case)
        mean = np.einsum("s,fsi,fsj->fij", self.sample_weight[index], p, p.conj())
        return np.asarray(0.5 * np.real(g * mean) / self.bandwidth(load_case))

    def bandwidth(self, load_case: str = "") -> float:
        """What mean squares of a load case are divided by: the bandwidth [Hz] of a density, 1 for tones."""
        case = self.load_case_of(load_case)
        return case.bandwidth if case.spectrum == "density" else 1.0

    def load_case_of(self, load_case: str = "") -> LoadCase:
        """The declaration behind a load case's result."""
        return self.case.load_case(load_case or self.load_cases[0].name)

    @cached_property
    def space(self) -> Space:
        """The discretised case, rebuilt on first use (for maps and cuts)."""
        return discretise(self.case, orders=self.orders.astype(np.int64))

    @property
    def field_frequencies(self) -> Floats:
        """The lines named for maps; every line where none is named and a model gives them all."""
        wanted = self.case.sweep.field_frequencies
        if self.model is not None and not len(wanted):
            return self.frequencies
        return self.frequencies[[np.any(np.isclose(f, wanted, rtol=1e-9)) for f in self.frequencies]]

    def field(self, frequency: float, load_case: str = "") -> Complex:
        """The mesh's own part (n_dofs, r) of `unknowns`."""
        found = self.unknowns(frequency, load_case)
        return found[: self.space.dofs.n_dofs] if self.radiates else found

    @property
    def radiates(self) -> bool:
        """Whether some surface carries infinite elements, whose unknowns stand behind those of the mesh."""
        return any(surface.boundary.radiates for surface in self.case.surfaces)

    def outside(self, frequency: float, load_case: str = "") -> tuple[Outside, ...]:
        """The field beyond every surface that radiates, as `unknowns` at the frequency give it; fields that come from outside
        are kept apart from what the model adds to them."""
        f, u = np.array([frequency]), self.unknowns(frequency, load_case)
        declared = self.load_case_of(load_case)
        mix = declared.combination.factors(f, len(declared.loads))[0]
        arriving = [(load, mix[i]) for i, load in enumerate(declared.loads) if isinstance(load, IncidentField)]
        out = []
        for outer in self.space.envelopes:
            region = self.case.regions[outer.region]
            rho, c = (complex(value[0]) for value in damped(region.medium, region.damping, f))
            exterior = Exterior(outer.envelope, self.space.size)
            own = Outside(outer.name, exterior, u, frequency, rho, c)
            out.append(own.with_arriving(arriving) if arriving else own)
        return tuple(out)

    def unknowns(self, frequency: float, load_case: str = "") -> Complex:
        """Unknowns (n, r) of the field at any frequency of the sweep's band from the model; without a model, of the field
        kept nearest to it.

        Raises: ResultError outside the band; without a model, where none is kept within 0.1 %.
        """
        if self.model is not None:
            return self._modelled(self.model, frequency, load_case)
        lines = self.field_frequencies
        if not len(lines) or np.abs(lines - frequency).min() > 1e-3 * frequency:
            kept = ", ".join(f"{f:g}" for f in lines) or "none"
            raise ResultError(f"no field is kept at {frequency:g} Hz (kept: {kept} Hz); add it to field_frequencies")
        return np.asarray(self.load_case(load_case).fields[int(np.abs(lines - frequency).argmin())])

    def _modelled(self, model: Model, frequency: float, load_case: str) -> Complex:
        low, high = self.frequencies[0], self.frequencies[-1]
        if not low * (1 - 1e-9) <= frequency <= high * (1 + 1e-9):
            raise ResultError(
                f"a field is asked at {frequency:g} Hz, but the sweep covers {low:g} .. {high:g} Hz; solve a wider sweep"
            )
        number = [held.name for held in self.load_cases].index(self.load_case(load_case).name)
        line = self.model_line(float(np.clip(frequency, low, high)))
        return np.asarray(model.basis @ line.responses[number].field)

    def model_line(self, frequency: float) -> Line:
        """A line of the band, evaluated from the model without the solver; ResultError where there is no model."""
        if self.engine is None:
            raise ResultError("the result holds no reduced model, only solved lines; solve it with the method 'reduced'")
        return self.engine.line(self.engine.system.values(np.array([frequency]))[0])

    @cached_property
    def engine(self) -> Engine | None:
        """The reduced model, ready for any line of the band; None where there is none."""
        if self.model is None:
            return None
        system = build_system(self.space, locate_receivers(self.case, self.space.geometry))
        if len(self.model.basis) != system.size or len(self.model.projected.matrices) != len(system.terms):
            raise FormatError("the reduced model belongs to another mesh or other laws; solve the case again")
        return Engine.of(system.on(self.model.projected))

    def pressure_at(self, points: Floats, frequency: float, load_case: str = "", *, outside: bool = True) -> Complex:
        """Pressure (k, r) [Pa] at points (k, 3): from the elements themselves inside the mesh, from the surface that radiates
        outside of it (slower, and only where `outside`); nan elsewhere."""
        tet, bary = self.space.geometry.locate(points)
        inside = tet >= 0
        field = self.field(frequency, load_case)
        values = np.full((len(points), field.shape[1]), complex(np.nan, np.nan))
        values[inside] = evaluate(self.space.geometry, self.space.dofs, tet[inside], bary[inside]) @ field
        for outer in self.outside(frequency, load_case) if outside and self.radiates else ():
            beyond = np.flatnonzero(~inside)
            beyond = beyond[outer.exterior.beyond(points[beyond])]
            values[beyond] = outer.pressure(points[beyond])
        return values

    def imbalance(self, load_case: str = "") -> Floats:
        """(input - taken) / input over the sweep, (nf,); 0 where nothing is put in."""
        held = self.load_case(load_case)
        supplied, taken = held.supplied.sum(axis=1), held.absorbed.sum(axis=1)
        scale = np.maximum(np.abs(held.supplied).sum(axis=1), 1e-300)
        return np.asarray((supplied - taken) / scale)


# ---------------------------------------------------------------------------------------------------------------------
# the file


def write_result(result: Result, path: str | Path) -> None:
    """Write `result` to `path` atomically."""
    write_atomically(Path(path), lambda file: _write(result, file))


def read_result(path: str | Path) -> Result:
    """The result in `path`; FormatError for a file that is truncated, foreign, newer or inconsistent."""
    with open_hdf5(path) as file:
        try:
            return _read(file)
        except MurmeshError as error:
            raise type(error)(f"{path}: {error}") from None
        except (KeyError, OSError, RuntimeError, ValueError, TypeError, AttributeError) as error:
            raise FormatError(f"{path}: the result is incomplete ({error}); solve the case again") from None


_ARRAYS = ("contributions", "supplied", "absorbed", "residual", "closure", "fields", "mesh_error")


def _write(result: Result, file: h5py.File) -> None:
    file.attrs["format"], file.attrs["version"] = FORMAT, VERSION
    file.attrs["provenance"] = json.dumps(result.provenance)
    file.attrs["power_labels"] = json.dumps(result.power_labels)
    write_case_group(result.case, file.create_group("case"))
    file["orders"] = result.orders
    file["frequencies"] = result.frequencies
    file["sample_receiver"] = result.sample_receiver
    file["sample_weight"] = result.sample_weight
    for index, held in enumerate(result.load_cases):
        group = file.create_group(f"load_cases/{index:04d}")
        group.attrs["name"], group.attrs["loads"] = held.name, json.dumps(held.loads)
        for name in _ARRAYS:
            group.create_dataset(name, data=getattr(held, name))
        group.create_dataset("radiated", data=held.radiated)
    if result.model is not None:
        _write_model(result.model, file.create_group("model"))
    if result.certificate is not None:
        _write_certificate(result.certificate, file.create_group("certificate"))


def _write_model(model: Model, group: h5py.Group) -> None:
    group["basis"] = model.basis
    group["matrices"], group["receivers"] = model.projected.matrices, model.projected.receivers
    group["fixed"] = model.projected.fixed
    for i, terms in enumerate(model.projected.loads):
        for j, vectors in enumerate(terms):
            group[f"loads/{i:04d}/{j:04d}"] = vectors


def _read_model(group: h5py.Group) -> Model:
    loads = tuple(tuple(group["loads"][i][j][()] for j in sorted(group["loads"][i])) for i in sorted(group.get("loads", ())))
    projected = Projected(group["matrices"][()], loads, group["receivers"][()], group["fixed"][()].astype(bool))
    return Model(group["basis"][()], projected)


def _write_certificate(certificate: Certificate, group: h5py.Group) -> None:
    group.attrs["tolerance"], group.attrs["certified"] = certificate.tolerance, certificate.certified
    group.attrs["size"] = certificate.size
    group["estimate"] = certificate.estimate
    group["checks"] = np.array([[float(v) for v in astuple(check)] for check in certificate.checks]).reshape(-1, 5)
    group["checks"].attrs["columns"] = json.dumps([field.name for field in fields(Check)])


def _read_certificate(group: h5py.Group) -> Certificate:
    checks = tuple(Check.of(row) for row in group["checks"][()])
    head = float(group.attrs["tolerance"]), bool(group.attrs["certified"])
    return Certificate(*head, checks, group["estimate"][()], int(group.attrs["size"]))


def _read(file: h5py.File) -> Result:
    check_header(file, FORMAT, VERSION)
    case = read_case_group(cast(h5py.Group, file["case"]))
    stored = str(file["case"].attrs.get("checksum", ""))
    provenance = json.loads(file.attrs["provenance"])
    if case.checksum != provenance.get("case_checksum") or stored != case.checksum:
        raise FormatError("the case inside the result is not the one that was solved (its checksum differs); solve it again")
    text: Callable[[str], tuple[str, ...]] = lambda value: tuple(json.loads(value))  # noqa: E731
    held = []
    for key in sorted(file["load_cases"]) if "load_cases" in file else ():
        group = file["load_cases"][key]
        arrays = [group[name][()] for name in _ARRAYS]
        arrays.append(group["radiated"][()] if "radiated" in group else NO_FORMS)  # files of before have none
        held.append(LoadCaseResult(str(group.attrs["name"]), text(group.attrs["loads"]), *arrays))
    result = Result(
        case,
        file["orders"][()],
        file["frequencies"][()],
        file["sample_receiver"][()],
        file["sample_weight"][()],
        text(file.attrs["power_labels"]),
        tuple(held),
        provenance,
        _read_model(file["model"]) if "model" in file else None,
        _read_certificate(file["certificate"]) if "certificate" in file else None,
    )
    _check(result)
    return result


def _check(result: Result) -> None:
    """Raise FormatError where arrays do not belong to the case or to each other."""
    case = result.case
    if not np.array_equal(result.frequencies, case.sweep.frequencies):
        raise FormatError("frequencies are not those of the case's sweep; solve it again")
    if [(held.name, held.loads) for held in result.load_cases] != [
        (load_case.name, tuple(load.name for load in load_case.loads)) for load_case in case.load_cases
    ]:
        raise FormatError("load_cases are not those of the case; solve it again")
    if result.orders.shape != (len(case.mesh.tets),) or not np.all((result.orders >= 1) & (result.orders <= HIGHEST_ORDER)):
        raise FormatError(
            f"orders has shape {result.orders.shape}; expected one order 1..{HIGHEST_ORDER} for each of the "
            f"{len(case.mesh.tets)} tetrahedra; solve the case again"
        )
    if result.model is not None:
        _check_model(result.model, len(result.sample_receiver), case)
    if result.certificate is not None and result.certificate.estimate.shape != result.frequencies.shape:
        raise FormatError(f"certificate/estimate has shape {result.certificate.estimate.shape}; solve the case again")
    lines, samples, labels = len(result.frequencies), len(result.sample_receiver), len(result.power_labels)
    for index, held in enumerate(result.load_cases):
        loads = len(held.loads)
        shapes = (lines, samples, loads), (lines, loads), (lines, labels), (lines,), (lines,)
        for name, shape in zip(_ARRAYS, shapes, strict=False):
            if np.shape(getattr(held, name)) != shape:
                raise FormatError(
                    f"load_cases/{index:04d}/{name} has shape {np.shape(getattr(held, name))}, expected {shape}; "
                    "solve the case again"
                )
        surfaces = len(radiated_labels(result.power_labels))
        if held.radiated.size and held.radiated.shape != (lines, surfaces, loads, loads):
            raise FormatError(
                f"load_cases/{index:04d}/radiated has shape {held.radiated.shape}, expected "
                f"{(lines, surfaces, loads, loads)}; solve the case again"
            )
        kept = 0 if result.model is not None else len(result.field_frequencies)
        if held.fields.ndim != 3 or len(held.fields) != kept:
            raise FormatError(
                f"load_cases/{index:04d}/fields has shape {held.fields.shape}, expected one block for each of the "
                f"{kept} field frequencies; solve the case again"
            )


def _check_model(model: Model, samples: int, case: Case) -> None:
    """Raise FormatError where the parts of a reduced model do not fit together."""
    held = model.projected
    size = len(held.fixed)
    outside = any(surface.boundary.radiates for surface in case.surfaces)  # a receiver out there has many rows
    fits = (
        model.basis.ndim == 2
        and model.basis.shape[1] == size
        and held.matrices.shape[1:] == (size, size)
        and held.receivers.shape[1:] == (size,)
        and (len(held.receivers) >= samples if outside else len(held.receivers) == samples)
        and len(held.loads) == len(case.load_cases)
        and all(vectors.shape[:1] == (size,) for terms in held.loads for vectors in terms)
    )
    if not fits:
        raise FormatError(
            f"the reduced model does not fit together (basis {model.basis.shape}, matrices {held.matrices.shape}, receivers "
            f"{held.receivers.shape}, {len(held.loads)} load cases); solve the case again"
        )
