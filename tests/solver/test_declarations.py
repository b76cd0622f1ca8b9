"""Every declared kind: it round-trips, its fields are documented, and what is wrong is refused with a cure."""

from __future__ import annotations

import dataclasses
from typing import Any, cast

import numpy as np
import pytest

from murmesh.plugin.manual import FAMILIES, table_of_kinds
from murmesh.solver.case.boundary import Adjacent, Boundary, Impedance, Pressure, Rigid, Sheet, Vibrating
from murmesh.solver.case.catalogue import Treatment
from murmesh.solver.case.expression import parse
from murmesh.solver.case.fields import Declared, from_tree, to_tree
from murmesh.solver.case.load import (
    Coherent,
    CrossSpectrum,
    Incoherent,
    LoadCase,
    Monopole,
    SurfaceVelocity,
)
from murmesh.solver.case.medium import Air, GivenFluid
from murmesh.solver.case.motion import Autospectrum, Motion, Scan, Shape, Uniform
from murmesh.solver.case.porous import Fluid
from murmesh.solver.case.spectrum import Constant, Lines, PowerLaw, Spectrum, Table
from murmesh.solver.case.wall import Absorption, Given, WallLaw
from murmesh.solver.errors import FieldError, RangeError

MEMBERS = [(family, cls, name) for family, cls in FAMILIES.items() for name in cls.registry]
F = np.array([60.0, 120.0, 500.0])
AIR = Fluid(1.2, 340.0)


def _member(cls: type[Declared], name: str) -> Any:
    return cls.member(name)


@pytest.mark.parametrize(("family", "cls", "name"), MEMBERS)
def test_round_trip(family: str, cls: type[Declared], name: str) -> None:
    example = _member(cls, name).example()
    tree = to_tree(example)
    again = from_tree(cls, tree)
    assert type(again) is type(example)
    assert repr(to_tree(again)) == repr(tree)


@pytest.mark.parametrize(("family", "cls", "name"), MEMBERS)
def test_every_field_has_help(family: str, cls: type[Declared], name: str) -> None:
    member = _member(cls, name)
    assert member.__doc__
    assert "(" not in member.__doc__.splitlines()[0][:1]
    for field in dataclasses.fields(member):
        assert field.metadata.get("help"), field.name
    assert name in table_of_kinds(family)


@pytest.mark.parametrize(("family", "cls", "name"), MEMBERS)
def test_unknown_key_names_the_nearest(family: str, cls: type[Declared], name: str) -> None:
    tree = to_tree(_member(cls, name).example()) | {"zzz": 1.0}
    with pytest.raises(FieldError, match="unknown key 'zzz'"):
        from_tree(cls, tree, "somewhere")


@pytest.mark.parametrize("name", Boundary.registry)
def test_boundaries_answer_for_every_frequency(name: str) -> None:
    boundary = cast(Boundary, _member(Boundary, name).example())
    near = Adjacent(AIR, np.full(3, AIR.rho_c, dtype=complex))
    for side in boundary.sides:
        admittance = side.admittance(F, near)
        assert admittance is None or (admittance.shape == F.shape and np.all(admittance.real >= 0))
        assert side.drive(F, near).shape == F.shape
    assert isinstance(boundary.warnings(F, near), tuple)


@pytest.mark.parametrize("name", WallLaw.registry)
def test_wall_laws_are_passive(name: str) -> None:
    law = cast(WallLaw, _member(WallLaw, name).example())
    assert np.all(law.admittance(F, AIR).real >= 0)
    assert np.allclose(law.admittance(F, AIR) * law.impedance(F, AIR), 1)


@pytest.mark.parametrize("name", Motion.registry)
def test_motions_say_which_way_is_positive(name: str) -> None:
    motion = cast(Any, _member(Motion, name).example())
    into = motion.with_(positive="into_air").outward(F)
    out = motion.with_(positive="out_of_fluid").outward(F)
    assert into.shape[0] == 3
    assert np.allclose(into, -out)
    acceleration = motion.with_(measure="acceleration").outward(F)
    assert np.allclose(acceleration * (2j * np.pi * F[:, None]), motion.outward(F))


def test_peak_rms_and_psd() -> None:
    peak = Uniform(1.0 + 0j).outward(F)
    assert np.allclose(Uniform(1.0 + 0j, amplitude="rms").outward(F), peak * np.sqrt(2))
    assert np.allclose(Autospectrum(1.0 + 0j, form="rms").outward(F), peak * np.sqrt(2))
    assert np.allclose(Autospectrum(4.0 + 0j, form="psd").outward(F), peak * 2 * np.sqrt(2))
    assert np.allclose(Autospectrum(1.0 + 0j, form="peak").outward(F), peak)


def test_near_misses_are_named() -> None:
    with pytest.raises(FieldError, match=r"surfaces/roof: .*'impedence' is not known; did you mean 'impedance'"):
        from_tree(Boundary, {"kind": "impedence"}, "surfaces/roof")
    with pytest.raises(FieldError, match="unknown key 'temprature'; did you mean 'temperature'"):
        from_tree(Air, {"temprature": 3.0})
    with pytest.raises(FieldError, match="the key 'kind' is missing"):
        from_tree(Boundary, {})
    with pytest.raises(FieldError, match=r"'density' \[kg/m3\] is missing"):
        from_tree(GivenFluid, {"speed": 340.0})


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: GivenFluid(-1.0, 340.0), "must be above zero; check the value and its unit"),
        (lambda: Air(200.0), r"air.temperature = 200.0 degC is outside -40 .. 80 degC"),
        (lambda: Given(1.0 + 0j, "rhoc"), "did you mean 'rho_c'"),
        (lambda: Constant(complex(np.nan, 0)), "must be finite"),
        (lambda: Absorption(1.5), "outside 0 .. 1"),
        (lambda: Table(np.array([2.0, 1.0]), np.zeros(2, complex)), "must increase strictly"),
        (lambda: Lines(np.array([1.0]), np.zeros(2, complex)), "as many values as frequencies"),
        (lambda: Shape("sin(q)", 1.0 + 0j), "name 'q' is not known"),
        (lambda: Scan(np.zeros((2, 3)), np.ones(1), np.zeros((1, 2), complex)), r"must be \(m, 3\) with m >= 3"),
        (lambda: Scan(np.zeros((3, 3)), np.ones(1), np.zeros((2, 3), complex)), "transpose the table"),
        (lambda: Sheet(Pressure(), Rigid()), "a sheet's side cannot be of kind 'pressure'"),
        (lambda: Sheet(Impedance(Given(1 + 0j)), Rigid(), Given(1 + 0j)), "has hard sides, not 'impedance'"),
        (lambda: Sheet(front_region="a", front_direction=(0.0, 0.0, 1.0)), "front is said twice"),
        (lambda: Treatment("nothing", 1.0, 1.0), "changes nothing"),
        (lambda: Treatment("face", 1.0, 1.0, wall=Given(2.0), frame="bonded"), "'bonded' needs a stack .* 'given'"),
        (lambda: LoadCase("idle", ()), "has no load"),
        (lambda: from_tree(Air, {"temperature": "warm"}), "expected float, got 'warm'"),
        (lambda: from_tree(Boundary, 3), "expected a table of Boundary fields"),
        (lambda: from_tree(Monopole, {"label": "a", "position": [1, 2], "volume_velocity": 1.0}), "expected 3 values"),
        (lambda: from_tree(Monopole, {"label": "a", "position": 1, "volume_velocity": 1.0}), "expected a list"),
        (lambda: from_tree(Constant, {"value": "loud"}), r"a number or a table \{re, im\}"),
        (lambda: from_tree(Table, {"frequencies": "low", "values": [1]}), "expected an array of numbers"),
    ],
)
def test_what_is_refused(make: Any, words: str) -> None:
    with pytest.raises(FieldError, match=words):
        make()


def test_complex_tables_are_numbers() -> None:
    assert from_tree(Constant, {"value": {"re": 1.0, "im": -2.0}}).value == 1 - 2j
    assert from_tree(Given, {"value": {"re": 1.0, "im": -2.0}}).value == 1 - 2j
    made = from_tree(Given, {"value": {"kind": "constant", "value": 2.0}})
    assert isinstance(made.value, Spectrum)


# ---------------------------------------------------------------------------------------------------------------------
# spectra


def test_tables_are_linear_and_never_extrapolated() -> None:
    table = Table(np.array([100.0, 200.0]), np.array([1.0 + 1j, 3.0 - 1j]))
    assert table.at(np.array([150.0]))[0] == pytest.approx(2.0 + 0j)
    with pytest.raises(RangeError, match=r"holds 100 .. 200 Hz, but 250 Hz is asked; .* extrapolate = true"):
        table.at(np.array([150.0, 250.0]))
    assert table.with_(extrapolate=True).at(np.array([250.0]))[0] == 3.0 - 1j


def test_power_law_and_lines() -> None:
    assert PowerLaw(1.0 + 0j, 95.0, -6.0206).at(np.array([190.0]))[0] == pytest.approx(0.5, rel=1e-4)
    assert list(Lines(np.array([95.0]), np.array([2.0 + 0j])).at(np.array([94.0, 95.0]))) == [0, 2]


# ---------------------------------------------------------------------------------------------------------------------
# expressions


def test_expressions() -> None:
    x, y, z = np.array([0.5]), np.array([2.0]), np.array([3.0])
    assert parse("sin(pi*x) + y**2/4 - -z")(x, y, z)[0] == pytest.approx(1 + 1 + 3)
    assert parse("(x < 1) * 2 + maximum(y, z)")(x, y, z)[0] == 5.0
    assert parse("1")(x, y, z)[0] == 1.0


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("__import__('os')", "function '__import__' is not known"),
        ("x.real", "Attribute is not allowed"),
        ("open('f')", "function 'open' is not known"),
        ("[1, 2]", "List is not allowed"),
        ("lambda: 1", "Lambda is not allowed"),
        ("x if y else z", "IfExp is not allowed"),
        ("sin(x, out=y)", "Call is not allowed"),
        ("'text'", "Constant is not allowed"),
        ("True", "Constant is not allowed"),
        ("x +", "cannot be read"),
        ("w", "name 'w' is not known"),
        ("x" * 600, "longer than 500"),
    ],
)
def test_expressions_run_no_code(text: str, words: str) -> None:
    with pytest.raises(FieldError, match=words):
        parse(text)


def test_infinite_expressions_are_refused() -> None:
    with pytest.raises(FieldError, match="not finite everywhere"):
        parse("1/x")(np.zeros(1), np.zeros(1), np.zeros(1))


# ---------------------------------------------------------------------------------------------------------------------
# combinations


def test_combinations() -> None:
    assert np.all(Coherent().matrix(F, 2) == 1)
    assert np.all(Incoherent().matrix(F, 2) == np.eye(2))
    cross = CrossSpectrum.example()
    for rule in (Coherent(), Incoherent(), cross):
        g = rule.factors(F, 2)
        assert np.allclose(g @ np.conj(np.swapaxes(g, 1, 2)), rule.matrix(F, 2))


@pytest.mark.parametrize(
    ("values", "words"),
    [
        (np.ones((2, 2), complex), "has shape"),
        (np.array([[[1, 1j], [1j, 1]]]), "not Hermitian"),
        (np.array([[[1, 2], [2, 1]]], dtype=complex), "negative eigenvalue"),
    ],
)
def test_cross_spectra_are_checked(values: Any, words: str) -> None:
    with pytest.raises(FieldError, match=words):
        CrossSpectrum(np.array([10.0])[: len(values)], values)


def test_cross_spectrum_range_and_size() -> None:
    cross = CrossSpectrum.example()
    with pytest.raises(RangeError, match="narrow the sweep"):
        cross.matrix(np.array([2000.0]), 2)
    with pytest.raises(FieldError, match="for 2 loads, the load case has 3"):
        cross.matrix(F, 3)


def test_scans_are_not_extrapolated() -> None:
    with pytest.raises(RangeError, match="a scan is never extrapolated"):
        Scan.example().outward(np.array([5000.0]))


def test_load_cases_are_checked() -> None:
    silent = SurfaceVelocity("roof", Autospectrum(1e-8 + 0j, form="psd"))
    with pytest.raises(FieldError, match="without phase, which cannot be combined coherently"):
        LoadCase("drive", (silent,))
    with pytest.raises(FieldError, match="density per hertz"):
        LoadCase("drive", (silent,), spectrum="tones", combination=Incoherent())
    with pytest.raises(FieldError, match="'roof' is loaded twice"):
        LoadCase("drive", (silent, silent), combination=Incoherent())
    with pytest.raises(FieldError, match="real values >= 0"):
        Autospectrum(1j, form="psd").outward(F)


def test_vibrating_is_hard() -> None:
    assert Vibrating().hard and Vibrating().moves and not Rigid().moves
