"""A frequency sweep: a certified reduced model where it can be had, every line solved directly where it cannot.

    reduced   a few factorised lines give a model of all of them (`reduced`); factorised lines keep their exact numbers
    direct    one factorisation per line (`engine`)

Whatever is finished is kept in a journal beside the result, so that an interrupted sweep goes on where it stopped.
"""

from __future__ import annotations

import hashlib
import time
import warnings
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

import numpy as np
import numpy.typing as npt

from murmesh.solver.accuracy import MeshError, calibration_lines, kappa, next_order, scaled, true_errors
from murmesh.solver.assembly import DofMap
from murmesh.solver.bands import plan_bands
from murmesh.solver.case.model import HIGHEST_ORDER, Case
from murmesh.solver.engine import Engine, Line
from murmesh.solver.errors import FallbackWarning, SolveError, ValidityWarning
from murmesh.solver.journal import Journal, light
from murmesh.solver.orders import orders_text
from murmesh.solver.receiver_points import Samples, locate_receivers
from murmesh.solver.reduced import Certificate, Reduction, Step, most_lines, reduce
from murmesh.solver.result import Model, Result
from murmesh.solver.space import Space, discretise
from murmesh.solver.system import System, Values, build_system

__all__ = ["Journal", "Progress", "Report", "solve"]

Floats = npt.NDArray[np.float64]
FEWEST_LINES = 16
"""Lines below which a reduced model costs as much as it saves."""


@dataclass(frozen=True)
class Progress:
    """How far a sweep is: lines done of all lines, how many came from the journal, the line solved last, seconds left at
    the present pace (an upper estimate while a reduced model grows), factorised lines, and what is known of the
    certificate so far."""

    done: int
    total: int
    resumed: int
    frequency: float
    seconds_left: float
    factorised: int
    certificate: str = ""

    @property
    def words(self) -> str:
        """One line for people."""
        parts = [f"{self.done}/{self.total} lines", f"{self.factorised} factorised", f"{self.frequency:g} Hz"]
        parts += [f"{self.resumed} kept from before"] if self.resumed else []
        parts += [self.certificate] if self.certificate else []
        return ", ".join([*parts, f"{self.seconds_left:.0f} s left" if self.done < self.total else "done"])


Report = Callable[[Progress], None]


def solve(
    case: Case,
    journal: Path | None = None,
    *,
    report: Report | None = None,
    order: int = 0,
    orders: npt.NDArray[np.int64] | None = None,
    solver: str = "default",
    method: str = "",
) -> Result:
    """Solve `case` on every line of its sweep; `method` (auto, direct, reduced) replaces that of the sweep.

    `order` is one for all elements, `orders` (t,) one for each; without them the sweep's, or the rule's.

    `journal` is a folder for finished work; it is read first, and removed by `forget` once the result is safe.
    Where the orders are the rule's own and the error bar shows more than the accuracy wanted, every order is raised by one
    and the case is solved once more.
    Raises CaseError, MeshError or SolveError; an interrupt leaves the journal as it is.
    """
    how = _How(report or (lambda progress: None), solver, _method(case, method))
    space = discretise(case, order) if orders is None else discretise(case, orders=orders)
    if order or orders is not None or case.sweep.order:
        return _Sweep.of(space, journal, how).run()
    result = _solve(space, journal, how)
    error = result.mesh_error_db
    if error is None or error <= case.sweep.accuracy:
        return result
    raised = _solve(next_order(space), _below(journal, "raised"), how)
    words = f"by one: the error bar showed {error:.2g} dB rms where {case.sweep.accuracy:g} dB are wanted"
    return replace(raised, provenance={**raised.provenance, "orders_raised": words})


@dataclass(frozen=True)
class _How:
    """Who is told, the linear solver, and the method (direct or reduced)."""

    report: Report
    solver: str
    method: str


def _method(case: Case, method: str) -> str:
    chosen = method or case.sweep.method
    if chosen == "auto":
        return "direct" if len(case.sweep.frequencies) < FEWEST_LINES else "reduced"
    return chosen


def _below(folder: Path | None, name: str) -> Path | None:
    return folder / name if folder else None


def _solve(space: Space, journal: Path | None, how: _How) -> Result:
    """A sweep whose orders are the rule's: direct lines in sub-bands where these pay. A reduced sweep has one band: a
    second model would cost as many factorisations again. One that radiates, too: its further unknowns are no selection."""
    bands = plan_bands(space) if how.method == "direct" and not space.envelopes else ()
    if len(bands) < 2:
        return _Sweep.of(space, journal, how).run()
    lines: list[Line] = []
    for number, band in enumerate(bands):
        dofs = DofMap.build(space.topology, band.orders)
        part = _Sweep.of(replace(space, order=dofs.max_order, dofs=dofs), _below(journal, f"band{number}"), how, band.lines)
        lines += [_padded(line, space.dofs.selection_of(dofs), space.dofs.n_dofs) for line in part.direct()]
    return part.collect(lines, None, None)


def _padded(line: Line, places: npt.NDArray[np.int64], size: int) -> Line:
    """The line with its fields in the numbering of higher orders, whose further functions it does not use."""
    responses = []
    for response in line.responses:
        field = response.field
        if field.size:
            field = np.zeros((size, field.shape[1]), dtype=np.complex128)
            field[places] = response.field
        responses.append(replace(response, field=field))
    return replace(line, responses=tuple(responses))


@dataclass(frozen=True, eq=False)
class _Sweep:
    """One sweep, or one band of it: what is solved, with what, and who is told."""

    engine: Engine
    samples: Samples
    lines: list[Values]
    first: int
    how: _How
    journal: Journal | None
    started: float
    mesh_error: MeshError | None

    @classmethod
    def of(cls, space: Space, journal: Path | None, how: _How, part: slice = slice(None)) -> _Sweep:
        case = space.case
        samples = locate_receivers(case, space.geometry)
        system = build_system(space, samples)
        lines = system.values(case.sweep.frequencies[part])
        _warn_of_active_terms(system, lines)
        what = f"{case.checksum} {_digest(space)} size {system.size} {how.solver}"
        book = Journal.open(journal, what) if journal else None
        judge = MeshError.of(system, samples) if case.sweep.error_bar and space.dofs.orders.min() < HIGHEST_ORDER else None
        engine = Engine.of(system, how.solver)
        return cls(engine, samples, lines, part.start or 0, how, book, time.monotonic(), judge)

    @property
    def case(self) -> Case:
        return self.engine.system.space.case

    def run(self) -> Result:
        """The reduced sweep if it is wanted and certified, the direct one otherwise."""
        if self.how.method == "direct":
            return self.collect(self.direct(), None, None)
        resumed = tuple(self.journal.steps()) if self.journal else ()
        model, certificate, found = self._reduce(resumed)
        exact = {step.index: step.line for step in model.steps}
        if not certificate.certified:
            warnings.warn(f"reduced sweep: {certificate.words}", FallbackWarning, stacklevel=3)
            return self.collect(self.direct(exact), None, certificate)
        lines = self._scaled([exact.get(i, line) for i, line in enumerate(self._modelled(model, found))])
        self._tell(len(lines), len(resumed), lines[-1].frequency, 0.0, len(exact), certificate.words)
        return self.collect(lines, model, certificate)

    # -- reduced

    def _reduce(self, resumed: tuple[Step, ...]) -> tuple[Reduction, Certificate, list[Line]]:
        def keep(number: int, step: Step) -> None:
            if self.journal:
                self.journal.write_step(number, step)

        def report(model: Reduction) -> None:
            made, last = len(model.steps), model.steps[-1].check
            pace = (time.monotonic() - self.started) / max(made - len(resumed), 1)
            left = pace * max(most_lines(len(self.lines)) - made, 0)
            words = f"last line off by {last.deviation:.1e} dB" if np.isfinite(last.deviation) else ""
            self._tell(made, len(resumed), last.frequency, left, made, words)

        return reduce(
            self.engine,
            self.samples,
            self.lines,
            self.case.sweep.tolerance,
            steps=resumed,
            keep=keep,
            report=report,
            lighten=self._light,
        )

    def _modelled(self, model: Reduction, found: list[Line]) -> Iterator[Line]:
        judge = self.mesh_error.on(model.basis) if self.mesh_error else None
        for values, line in zip(self.lines, found, strict=True):
            yield light(judge.judged(values, line) if judge else line, keep_field=False)

    # -- direct

    def direct(self, exact: dict[int, Line] | None = None) -> list[Line]:
        """Every line, those known already left out, with calibrated mesh errors."""
        known, lines = exact or {}, []
        resumed, solved, started = 0, 0, time.monotonic()
        for index, values in enumerate(self.lines):
            line = known.get(index) or (self.journal.line(index, values.frequency) if self.journal else None)
            if line is None:
                line = self._light(values, self.engine.line(values))
                solved += 1
                if self.journal:
                    self.journal.write_line(index, line)
            else:
                resumed += 1
            lines.append(line)
            pace = (time.monotonic() - started) / max(solved, 1)
            self._tell(index + 1, resumed, values.frequency, pace * (len(self.lines) - index - 1), solved + len(known))
        return self._scaled(lines)

    def _light(self, values: Values, line: Line) -> Line:
        """What is kept of an exact line: its mesh error, and its field where it is asked for."""
        wanted = self.case.sweep.field_frequencies
        judged = self.mesh_error.judged(values, line) if self.mesh_error else line
        return light(judged, keep_field=bool(np.any(np.isclose(line.frequency, wanted, rtol=1e-9))))

    def _scaled(self, lines: list[Line]) -> list[Line]:
        """Lines with calibrated mesh errors: a few are solved in the next order."""
        if self.mesh_error is None or not len(self.samples.receiver) or not self.case.load_cases:
            return lines
        factors, exact = {}, {}
        try:
            finer = Engine.of(self.mesh_error.finer, self.how.solver)
            for index in calibration_lines(len(lines)):
                exact[index] = true_errors(finer, lines[index], self.lines[index])
                factors[index] = kappa(tuple(r.mesh_error for r in lines[index].responses), exact[index])
        except SolveError as error:
            warnings.warn(f"the error bar is not calibrated: {error}", FallbackWarning, stacklevel=4)
        return scaled(lines, factors, exact)

    def _tell(self, done: int, resumed: int, f: float, left: float, factorised: int, words: str = "") -> None:
        total = len(self.case.sweep.frequencies)
        self.how.report(Progress(self.first + done, total, resumed, f, left, self.first + factorised, words))

    # -- what was found

    def collect(self, lines: list[Line], model: Reduction | None, certificate: Certificate | None) -> Result:
        space = self.engine.system.space
        held = None
        if model is not None:
            held = Model(model.basis.astype(np.float32), model.projected)
        return Result.of(space, self.samples, self.engine.labels, lines, self._provenance(model), held, certificate)

    def _provenance(self, model: Reduction | None) -> dict[str, str]:
        system = self.engine.system
        return {
            "case_checksum": self.case.checksum,
            "orders": orders_text(system.space.dofs.orders),
            "unknowns": str(system.size),
            "linear_solver": self.engine.solver,
            "method": "direct" if model is None else "reduced",
            "seconds": f"{time.monotonic() - self.started:.1f}",
            "solved": datetime.now(UTC).isoformat(timespec="seconds"),
            **{name: _version(name) for name in ("murmesh", "numpy", "scipy", "h5py", "rslab")},
        }


def _digest(space: Space) -> str:
    """The orders of the elements in a few letters."""
    return hashlib.sha256(space.dofs.orders.tobytes()).hexdigest()[:16]


def _warn_of_active_terms(system: System, lines: list[Values]) -> None:
    """A term takes the power Im(phi) p^H A p / (2 w), so a negative imaginary part creates sound."""
    frequencies = np.array([values.frequency for values in lines])
    phi = np.array([values.phi for values in lines])
    for j, term in enumerate(system.terms):
        active = frequencies[phi[:, j].imag < -1e-9 * np.abs(phi[:, j])]
        if len(active):
            warnings.warn(
                f"{term.label}: its law creates sound from {active[0]:g} to {active[-1]:g} Hz (for a wall, Re Z < 0); "
                "it is used outside its range, or a sign in its data is wrong",
                ValidityWarning,
                stacklevel=5,
            )


def _version(package: str) -> str:
    try:
        return version(package)
    except PackageNotFoundError:
        return "not installed"
