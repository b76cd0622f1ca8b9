"""Treatments through what-ifs and full solutions, against published values and one-dimensional fields in closed form.

The panel under treatment is an end of a duct, bare in the baseline: every treatment of the catalogue is predicted from the
tables of that one baseline and solved again as `treated_case`. Sources: headers of the files in tests/references.
"""

from __future__ import annotations

import ast
import re
from collections.abc import Iterable, Mapping, Sequence

import numpy as np
import pytest
from exact_duct import Complex, End, Floats, closed, field, foam, gap, thin

from cases import AIR, case_of
from meshes import box, grid, shell
from murmesh.solver import choice
from murmesh.solver.case.boundary import Boundary, Port, Radiating, Vibrating, VibratingTreated
from murmesh.solver.case.catalogue import Limits, Treatment
from murmesh.solver.case.load import IncomingWave, Load, SurfaceVelocity
from murmesh.solver.case.medium import GivenFluid, LossFactor, NoDamping
from murmesh.solver.case.model import Region
from murmesh.solver.case.motion import Uniform
from murmesh.solver.case.porous import DelanyBazley, JohnsonChampouxAllard, Miki
from murmesh.solver.case.spectrum import Table
from murmesh.solver.case.wall import (
    Absorption,
    AirGap,
    Given,
    Layers,
    LimpMass,
    MassSpringDamper,
    PerforatedFacing,
    PorousLayer,
    Resonator,
    Screen,
    WallLaw,
)
from murmesh.solver.choice import choose
from murmesh.solver.errors import CaseError
from murmesh.solver.levels import A_weighting
from murmesh.solver.result import Result
from murmesh.solver.sweep import solve
from murmesh.solver.treatment import Goal, treated_case, verified
from murmesh.solver.whatif import WhatIf
from reading import FOLDER, read_csv_reference

SIDE = 0.05
AIR_D = GivenFluid(density=1.205, speed=343.0)
"""The air of the references D01, D04 and D06."""
LINES = read_csv_reference("D04_mpp_maa_fig5.csv")["f"]


# --- a duct, its what-ifs and its full solutions ---------------------------------------------------------------------


def _duct(
    length: float,
    lines: Sequence[float] | Floats,
    catalogue: Iterable[Treatment],
    drives: Mapping[str, complex],
    places: Sequence[float],
    *,
    kinds: Mapping[str, Boundary] | None = None,
    loads: Sequence[Load] = (),
    air: GivenFluid = AIR,
    eta: float = 0.0,
    order: int = 6,
    method: str = "auto",
) -> WhatIf:
    """What-ifs of a duct along x whose driven ends move along their outward normals [m/s]; receivers on the axis."""
    moving = [SurfaceVelocity(name, Uniform(complex(v), positive="out_of_fluid")) for name, v in drives.items()]
    case = case_of(
        box(max(4, round(2.5 * length * max(lines) / air.speed)), 1, 1, (length, SIDE, SIDE)),
        {name: Vibrating() for name in drives} | dict(kinds or {}), [*moving, *loads], set(lines),
        {str(i): (x, SIDE / 2, SIDE / 2) for i, x in enumerate(places)}, medium=air,
        damping=LossFactor(eta) if eta else NoDamping(), order=order, error_bar=False, method=method,
    )  # fmt: skip
    return WhatIf.build(solve(case.with_(catalogue=tuple(catalogue))))


def _on(panel: str, **walls: WallLaw) -> list[Treatment]:
    """A catalogue of walls that may go on one end."""
    return [Treatment(name, 1.0, 1.0, wall=wall, panels=(panel,)) for name, wall in walls.items()]


def _numbers(whatif: WhatIf, *chosen: str) -> list[int]:
    """Where the options of some treatments, each of which may go on one panel, stand."""
    return [[option.treatment for option in whatif.options].index(name) for name in chosen]


def _full(whatif: WhatIf, *chosen: str) -> Result:
    return solve(treated_case(whatif.case, [whatif.options[i] for i in _numbers(whatif, *chosen)]))


def _predicted(whatif: WhatIf, *chosen: str) -> Complex:
    """p (nf, receivers) with some treatments in place, from the tables of the baseline."""
    return whatif.pressures([whatif.changes[i] for i in _numbers(whatif, *chosen)])[:, :, 0]


def _both_ways(whatif: WhatIf, *chosen: str) -> tuple[Complex, Complex]:
    """p (nf, receivers) as predicted, and as solved again."""
    solved = _full(whatif, *chosen).load_cases[0].contributions.sum(axis=2)
    return _predicted(whatif, *chosen), np.asarray(solved)


def _decibels(found: Complex, exact: Complex) -> float:
    """The largest difference of level [dB]."""
    return float(np.abs(20 * np.log10(np.abs(found / exact))).max())


# --- published values by the closed forms of `exact_duct` --------------------------------------------------------------


def _maa(f: Floats) -> Complex:
    """Z of the micro-perforated plate of D04, on the lines of D04, from its table."""
    table = read_csv_reference("D04_mpp_maa_fig5.csv")
    assert np.array_equal(f, table["f"])
    return np.asarray(AIR_D.density * AIR_D.speed * (table["r"] + 1j * table["x_plate"]))


MAA = PerforatedFacing(0.2e-3, 0.2e-3, np.pi / 4 * (0.2 / 2.5) ** 2)
STACKS = {
    "porous": Layers((PorousLayer(Miki(12000.0), 0.05),)),
    "porous_gap": Layers((PorousLayer(Miki(15000.0), 0.04), AirGap(0.06))),
    "screen_gap": Layers((Screen(600.0), AirGap(0.08))),
    "micro_perforated": Layers((MAA, AirGap(0.06))),
    "faced": Layers((MAA, PorousLayer(Miki(9000.0), 0.03), AirGap(0.03))),
    "foil": Layers((LimpMass(0.35), PorousLayer(Miki(15000.0), 0.05))),
    "everything": Layers(
        (MAA, AirGap(0.01), LimpMass(0.2), PorousLayer(Miki(20000.0), 0.02), Screen(250.0), PorousLayer(Miki(8000.0), 0.03))
    ),
}


def _in_closed_form(name: str, bonded: bool) -> tuple[Complex, Complex]:
    """Y and u (nf,) of the stacks above on the lines of D04."""
    f, air = LINES, AIR_D
    frame = air.density if bonded else 0.0

    def porous(sigma: float, depth: float) -> Complex:
        return foam(f, air, sigma, depth, bonded)

    layers = {
        "porous": lambda: [porous(12000.0, 0.05)],
        "porous_gap": lambda: [porous(15000.0, 0.04), gap(f, air, 0.06)],
        "screen_gap": lambda: [thin(f, 600.0, frame), gap(f, air, 0.08)],
        "micro_perforated": lambda: [thin(f, _maa(f), frame), gap(f, air, 0.06)],
        "faced": lambda: [thin(f, _maa(f), frame), porous(9000.0, 0.03), gap(f, air, 0.03)],
        "foil": lambda: [thin(f, 2j * np.pi * f * 0.35, 0.0), porous(15000.0, 0.05)],
        "everything": lambda: [
            thin(f, _maa(f), frame), gap(f, air, 0.01), thin(f, 2j * np.pi * f * 0.2, 0.0), porous(20000.0, 0.02),
            thin(f, 250.0, frame), porous(8000.0, 0.03),
        ],
    }  # fmt: skip
    return closed(layers[name]())


def test_the_closed_forms_are_the_published_ones() -> None:
    """A07, K01, D01 (Miki) and A08b, by the equations above."""
    table = read_csv_reference("A07_moving_treated_wall.csv")
    for re_, im, f, x, p_re, p_im in zip(*table.values(), strict=True):
        face = (1 / (AIR.density * AIR.speed * complex(re_, im)), 0.002 * np.exp(0.7j))
        assert field(x, np.array([f]), AIR, 1.2, (0, 0), face)[0] == pytest.approx(complex(p_re, p_im), rel=1e-9)
    table = read_csv_reference("K01_frequency_sweep_miki_duct.csv")
    end = (closed([foam(table["f"], AIR, 9000.0, 0.06)])[0], 0)
    found = field(0.37, table["f"], AIR, 2.4, (0, -0.01), end)
    assert np.allclose(found, table["p_re"] + 1j * table["p_im"], rtol=1e-9)
    table = read_csv_reference("D01_delany_bazley_miki_50mm.csv")
    f, miki = table["f"], table["model"] == "miki"
    zeta = 1 / (AIR_D.density * AIR_D.speed * closed([foam(f, AIR_D, 20000.0, 0.05)])[0])
    assert np.allclose(zeta[miki], (table["zs_re"] + 1j * table["zs_im"])[miki], rtol=1e-9)
    table = read_csv_reference("A08b_layer_frame_moves_with_wall.csv")
    for bonded, column in ((True, "moving"), (False, "rest")):
        y, u = closed([foam(table["f_Hz"], AIR, 20000.0, 0.05, bonded)])
        exact = table[f"{column}_re"] + 1j * table[f"{column}_im"]
        assert np.allclose(field(0.0, table["f_Hz"], AIR, 1.15, (0, 0), (y, u * 0.002)), exact, rtol=1e-6)


# --- published values ------------------------------------------------------------------------------------------------


def test_a_face_on_a_moving_wall_a07() -> None:
    """Locally reacting faces, at three places and three lines, one of them at a resonance of the bare duct."""
    table = read_csv_reference("A07_moving_treated_wall.csv")
    places, given = sorted(set(table["x_m"])), {"soft": 2.0 - 3.0j, "stiff": 0.8 - 6.0j}
    faces = _on("x1", **{name: Given(zeta, unit="rho_c") for name, zeta in given.items()})
    whatif = _duct(1.2, sorted(set(table["f_Hz"])), faces, {"x1": 0.002 * np.exp(0.7j)}, places)
    for name, zeta in given.items():
        rows = (table["zeta_re"] == zeta.real) & (table["zeta_im"] == zeta.imag)
        exact = (table["p_re_Pa"] + 1j * table["p_im_Pa"])[rows].reshape(len(whatif.frequencies), len(places))
        assert np.array_equal(table["f_Hz"][rows], np.repeat(whatif.frequencies, len(places)))
        for found in _both_ways(whatif, name):
            assert np.abs(found / exact - 1).max() < 1e-4


FORMS = {"auto": "moving", "face": "face", "bonded": "moving", "at_rest": "rest"}


def test_three_forms_of_a_layer_on_a_moving_wall_a08_a08b() -> None:
    """Locally reacting face, bonded frame (the default of a layer), and frame at rest, which is the two-fluid field of A08."""
    table = read_csv_reference("A08b_layer_frame_moves_with_wall.csv")
    two_fluids = read_csv_reference("A08_bulk_layer_on_moving_wall.csv")
    layer = Layers((PorousLayer(Miki(20000.0), 0.05),))
    forms = [Treatment(frame, 1.0, 1.0, wall=layer, frame=frame, panels=("x1",)) for frame in FORMS]
    whatif = _duct(1.15, table["f_Hz"], forms, {"x1": 0.002}, [0.0])
    for frame, column in FORMS.items():
        exact = table[f"{column}_re"] + 1j * table[f"{column}_im"]
        for found in _both_ways(whatif, frame):
            assert np.abs(found[:, 0] / exact - 1).max() < 1e-4, frame
    exact = two_fluids["p_x0_re"] + 1j * two_fluids["p_x0_im"]
    assert np.abs(_predicted(whatif, "at_rest")[:, 0] / exact - 1).max() < 1e-4


def test_every_line_of_k01() -> None:
    """881 lines of a layer whose impedance changes with frequency, from the reduced baseline of a lossless duct."""
    table = read_csv_reference("K01_frequency_sweep_miki_duct.csv")
    layer = Layers((PorousLayer(Miki(9000.0), 0.06),))
    whatif = _duct(2.4, table["f"], _on("x1", foam=layer), {"x0": -0.01}, [0.37], method="reduced")
    for found, off in zip(_both_ways(whatif, "foam"), (0.01, 1e-4), strict=True):
        levels = 10 * np.log10(0.5 * np.abs(found[:, 0]) ** 2 / 4e-10)
        assert np.abs(levels - table["Lp_rms_dB"]).max() < off


NEAR, FAR = 0.125, 0.16
"""Two microphones in front of the sample [m], as in C05."""
TUBE = (1e-4, 1e-5)
"""What a tube may be off, predicted (tables are in single precision) and solved again; small spacings multiply it."""


def _tube(lines: Floats, air: GivenFluid, **walls: WallLaw) -> WhatIf:
    """An impedance tube: a piston, two microphones, and samples for its bare end."""
    return _duct(0.31, lines, _on("x1", **walls), {"x0": -0.01}, [0.31 - FAR, 0.31 - NEAR], air=air, order=7)


def _measured(p: Complex, f: Floats, air: GivenFluid) -> Complex:
    """zeta (nf,) from two microphones (ISO 10534-2)."""
    k, spacing = 2 * np.pi * f / air.speed, FAR - NEAR
    transfer = p[:, 1] / p[:, 0]
    reflection = (transfer - np.exp(-1j * k * spacing)) / (np.exp(1j * k * spacing) - transfer) * np.exp(2j * k * FAR)
    return np.asarray((1 + reflection) / (1 - reflection))


def _alpha(zeta: Complex) -> Floats:
    return np.asarray(1 - np.abs((zeta - 1) / (zeta + 1)) ** 2)


def test_absorption_of_one_parameter_laws_d01() -> None:
    table = read_csv_reference("D01_delany_bazley_miki_50mm.csv")
    laws = {"miki": Miki(20000.0), "delany_bazley": DelanyBazley(20000.0)}
    whatif = _tube(np.unique(table["f"]), AIR_D, **{name: Layers((PorousLayer(law, 0.05),)) for name, law in laws.items()})
    for name in laws:
        rows = table["model"] == name
        for found, off in zip(_both_ways(whatif, name), TUBE, strict=True):
            zeta = _measured(found, whatif.frequencies, AIR_D)
            assert np.abs(zeta / (table["zs_re"] + 1j * table["zs_im"])[rows] - 1).max() < off
            assert np.abs(_alpha(zeta) - table["alpha0"][rows]).max() < off


def test_absorption_of_five_parameter_specimens_d03() -> None:
    """The reference takes 101325 Pa and uses c = 343 m/s only to write zeta, so the tube holds air of that pressure."""
    table = read_csv_reference("D03_jca_allard_specimens.csv")
    header = (FOLDER / "D03_jca_allard_specimens.csv").read_text().splitlines()[0]
    specimens = ast.literal_eval(re.search(r"\{.*?\}", header).group())  # type: ignore[union-attr]
    air = GivenFluid(1.205, float(np.sqrt(1.4 * 101325.0 / 1.205)))
    walls = {name: Layers((PorousLayer(JohnsonChampouxAllard(*law), d),)) for name, (*law, d) in specimens.items()}
    whatif = _tube(np.unique(table["f"]), air, **walls)
    for name in walls:
        rows = table["specimen"] == name
        for found, off in zip(_both_ways(whatif, name), TUBE, strict=True):
            zeta = _measured(found, whatif.frequencies, air) * air.speed / 343.0
            assert np.abs(zeta / (table["zs_re"] + 1j * table["zs_im"])[rows] - 1).max() < off
            assert np.abs(_alpha(zeta) - table["alpha0"][rows]).max() < off


def test_absorption_of_a_micro_perforated_plate_d04() -> None:
    whatif = _tube(LINES, AIR_D, plate=STACKS["micro_perforated"])
    for found, off in zip(_both_ways(whatif, "plate"), (1e-5, 1e-6), strict=True):
        alpha = _alpha(_measured(found, LINES, AIR_D))
        assert np.abs(alpha - read_csv_reference("D04_mpp_maa_fig5.csv")["alpha"]).max() < off


@pytest.mark.parametrize("mass", [2.7, 7.8, 10.0, 25.0])
def test_transmission_of_a_limp_wall_d06(mass: float) -> None:
    """A foil in front of what takes a plane wave completely: what the end absorbs of an incoming wave is what passes the foil.

    `wall` has R = rho c behind a mass at every line; `foil_F` is a foil, a screen of rho c and a gap of a quarter wave at F.
    Predicted: pressure behind the foil, p rho c/(rho c + i w m); solved again: power that the end absorbs.
    """
    table = read_csv_reference("D06_mass_law.csv")
    rows, rho_c, wave = table["m"] == mass, AIR_D.density * AIR_D.speed, 2.0
    f, loss = table["f"][rows], table["TL0"][rows]
    foils = {f"foil_{x:g}": Layers((LimpMass(mass), Screen(rho_c), AirGap(AIR_D.speed / (4 * x)))) for x in f.tolist()}
    whatif = _duct(
        0.5, f, _on("x1", wall=Resonator(rho_c, mass, 0.0), **foils), {}, [0.5], kinds={"x0": Port()},
        loads=[IncomingWave("x0", wave + 0j)], air=AIR_D,
    )  # fmt: skip
    passed, incident = rho_c / (rho_c + 2j * np.pi * f * mass), 0.5 * wave**2 / rho_c * SIDE**2
    for name in ("wall", *foils):
        at = slice(None) if name == "wall" else np.array([f"foil_{x:g}" == name for x in f.tolist()])
        predicted = -20 * np.log10(np.abs(_predicted(whatif, name)[:, 0] * passed / wave))
        assert np.abs(predicted - loss)[at].max() < 1e-4
    full = _full(whatif, "wall")
    power = full.load_cases[0].absorbed[:, full.power_labels.index("surface/x1")]
    assert np.abs(-10 * np.log10(power / incident) - loss).max() < 1e-4


# --- stacks and laws in closed form ----------------------------------------------------------------------------------

LENGTH, PLACES = 0.61, (0.0, 0.22, 0.55)
SOLVED_AGAIN = ("porous", "everything")


def _exact(left: End, right: End, eta: float = 0.0) -> Complex:
    """p (nf, places) on the lines of D04."""
    return np.column_stack([field(x, LINES, AIR_D, LENGTH, left, right, eta) for x in PLACES])


def test_gains_of_stacks_on_a_rigid_end() -> None:
    """Gains at every line and place of seven stacks; the baseline has no losses at all."""
    whatif = _duct(LENGTH, LINES, _on("x1", **STACKS), {"x0": -0.01}, PLACES, air=AIR_D)
    bare = _exact((0, -0.01), (0, 0))
    for name in STACKS:
        gain = bare / _exact((0, -0.01), (_in_closed_form(name, False)[0], 0))
        ways = _both_ways(whatif, name) if name in SOLVED_AGAIN else (_predicted(whatif, name),)
        for found in ways:
            assert _decibels(_predicted(whatif) / found, gain) < 0.01, name
        assert np.ptp(20 * np.log10(np.abs(gain))) > 10.0


@pytest.mark.parametrize("frame", ["face", "bonded", "at_rest"])
def test_stacks_on_a_moving_end(frame: str) -> None:
    """Seven stacks that move with their panel in the three forms, and slow it down by 3 dB, while the other end drives too."""
    treatments = [Treatment(n, 1.0, 1.0, wall=w, frame=frame, velocity_cut=3.0, panels=("x1",)) for n, w in STACKS.items()]
    whatif = _duct(LENGTH, LINES, treatments, {"x1": 0.003j, "x0": 0.001}, PLACES, air=AIR_D, eta=0.02)
    for name in STACKS:
        y, u = _in_closed_form(name, frame == "bonded")
        moves = (1.0 if frame == "face" else u) * 0.003j * 10 ** (-3 / 20)
        exact = _exact((0, 0.001), (y, moves), 0.02)
        for found in _both_ways(whatif, name) if name in SOLVED_AGAIN else (_predicted(whatif, name),):
            assert np.abs(found / exact - 1).max() < 1e-4, name


def test_laws_without_layers() -> None:
    """Resonator, mass on a spring, absorption coefficient, table of an admittance; alone on the end that stands still."""
    w, rho_c = 2 * np.pi * LINES, AIR_D.density * AIR_D.speed
    table = Table(np.array([200.0, 2500.0]), np.array([0.5 + 0.2j, 0.9 - 0.3j]))
    slope = (LINES - 200.0) / 2300.0
    laws: dict[str, tuple[WallLaw, Complex]] = {
        "resonator": (Resonator(300.0, 0.4, 4e6), 300.0 + 0.4j * w + 4e6 / (1j * w)),
        "spring": (MassSpringDamper(2.0, 300.0, 0.1), 2j * w + 2.0 * (600 * np.pi) ** 2 * (1 + 0.1j) / (1j * w)),
        "absorber": (Absorption(0.64), np.full(len(w), rho_c * (1 + 0.6) / (1 - 0.6), complex)),
        "table": (Given(table, form="admittance"), rho_c / (0.5 + 0.2j + slope * (0.4 - 0.5j))),
    }
    whatif = _duct(LENGTH, LINES, _on("x1", **{n: law for n, (law, _) in laws.items()}), {"x0": -0.01}, PLACES, air=AIR_D)
    bare = _exact((0, -0.01), (0, 0))
    for name, (_, z) in laws.items():
        gain = bare / _exact((0, -0.01), (1 / z, 0))
        assert _decibels(_predicted(whatif) / _predicted(whatif, name), gain) < 0.01, name


def test_treatments_of_both_ends_at_once() -> None:
    """A bonded layer that slows its moving end by 4 dB, and everything on the other: lines, and band energies in dB(A)."""
    both = [
        Treatment("foam", 1.0, 1.0, wall=STACKS["porous"], velocity_cut=4.0, panels=("x0",)),
        Treatment("stack", 1.0, 1.0, wall=STACKS["everything"], panels=("x1",)),
    ]
    whatif = _duct(LENGTH, LINES, both, {"x0": -0.01}, PLACES, air=AIR_D, eta=0.01)
    (y0, u), (y1, _) = _in_closed_form("porous", True), _in_closed_form("everything", False)
    exact = _exact((y0, -0.01 * 10 ** (-4 / 20) * u), (y1, 0), 0.01)
    predicted, solved = _both_ways(whatif, "foam", "stack")
    assert _decibels(predicted, exact) < 0.005 and _decibels(solved, exact) < 1e-4
    weight = 10 ** (A_weighting(LINES) / 10) * ((LINES >= 315) & (LINES <= 1000))
    energies = [float(weight @ (np.abs(p[:, 1:]) ** 2).sum(axis=1)) for p in (_exact((0, -0.01), (0, 0), 0.01), exact)]
    goal, gain = Goal(("1", "2"), band=(315.0, 1000.0)), 10 * np.log10(energies[0] / energies[1])
    chosen = _numbers(whatif, "foam", "stack")
    assert gain > 3.0 and whatif.gain(chosen, goal) == pytest.approx(gain, abs=1e-3)
    again = verified(solve(whatif.case), [whatif.options[i] for i in chosen], goal, whatif.gain(chosen, goal))
    assert again.gain == pytest.approx(gain, abs=1e-3)


@pytest.mark.parametrize("enumerated", [0, 400])
def test_choices_within_budgets_are_those_of_the_closed_form(enumerated: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """Five stacks for one end, four for the other: the best set within eight masses, by brute force over exact fields."""
    monkeypatch.setattr(choice, "ENUMERATED", enumerated)
    names = {"x0": tuple(STACKS)[:5], "x1": tuple(STACKS)[2:6]}
    masses = {"porous": 1.1, "porous_gap": 1.7, "screen_gap": 0.9, "micro_perforated": 2.9, "faced": 3.6, "foil": 4.4}
    catalogue = [
        Treatment(f"{name} {panel}", masses[name], 10.0, wall=STACKS[name], panels=(panel,))
        for panel, held in names.items()
        for name in held
    ]
    whatif = _duct(LENGTH, LINES, catalogue, {"x0": -0.01}, PLACES, air=AIR_D, eta=0.01)
    goal = Goal(("1", "2"), weighting="Z")

    def energy(left: str, right: str) -> float:
        y0, u0 = _in_closed_form(left, True) if left else (0, 1.0)
        y1 = _in_closed_form(right, False)[0] if right else 0
        return float((np.abs(_exact((y0, -0.01 * u0), (y1, 0), 0.01)[:, 1:]) ** 2).sum())

    sets = {(a, b): energy(a, b) for a in ("", *names["x0"]) for b in ("", *names["x1"])}
    weight = {pair: sum(masses[name] for name in pair if name) * SIDE**2 for pair in sets}
    best_of = set()
    for limit in np.linspace(0.8, 8.0, 8) * SIDE**2:
        best = min((pair for pair in sets if weight[pair] <= limit), key=lambda pair: sets[pair])
        found = choose(whatif.options, Limits(mass=limit), lambda c: whatif.energy(whatif.mean_squares(c), goal)).candidates[0]
        chosen = {option.treatment for option in (whatif.options[i] for i in found.chosen)}
        assert chosen == {f"{name} {panel}" for name, panel in zip(best, ("x0", "x1"), strict=True) if name}
        assert found.gain == pytest.approx(10 * np.log10(sets["", ""] / sets[best]), abs=1e-3)
        best_of.add(best)
    assert len(best_of) > 3


# --- what a panel may be: radiating cases, cuts of its own, what it carries already, several fluids -------------------


def test_a_treated_pulsating_sphere_in_the_open() -> None:
    """Insertion loss 20 lg|1 + z_r/Z| of a face on a pulsating sphere, z_r = i rho c ka/(1 + i ka) (Pierce, Acoustics, ch. 4).

    On infinite elements, with receivers in the meshed air and outside it; the coarse geometry is worth 0.015 dB.
    """
    radius, f = 0.25, np.linspace(100.0, 500.0, 21)
    case = case_of(
        shell(2, (radius, 0.3)), {"inner": Vibrating(), "outer": Radiating()}, [SurfaceVelocity("inner", Uniform(0.01))], f,
        {"near": (0.0, 0.0, 0.28), "far": (0.0, 0.6, 0.8)}, order=4, error_bar=False, method="reduced",
    )  # fmt: skip
    whatif = WhatIf.build(solve(case.with_(catalogue=tuple(_on("inner", face=Given(0.8 - 1.5j, unit="rho_c"))))))
    ka = 2 * np.pi * f / AIR.speed * radius
    exact = -20 * np.log10(np.abs(1 + 1j * ka / (1 + 1j * ka) / (0.8 - 1.5j)))
    bare = _predicted(whatif)
    for found in _both_ways(whatif, "face"):
        change = 20 * np.log10(np.abs(found / bare))
        assert np.abs(change - exact[:, None]).max() < 0.05
    assert np.ptp(exact) > 2.0 and exact.max() > 0  # it makes some lines louder


def test_a_treatment_replaces_what_the_panel_carries() -> None:
    """The moving end carries dense wool, and its load a cut of 6 dB, in the baseline; either goes with the new treatment."""
    f, wool = np.linspace(200.0, 900.0, 15), Layers((PorousLayer(Miki(40000.0), 0.1),))
    mat = Treatment("mat", 1.0, 1.0, velocity_cut=2.0, panels=("x1",))
    bare = _duct(
        1.15, f, [*_on("x1", foam=Layers((PorousLayer(Miki(9000.0), 0.06),))), mat], {"x1": 0.002}, [0.37],
        kinds={"x1": VibratingTreated(wool, "at_rest")},
    )  # fmt: skip
    [held] = bare.case.load_cases
    loads = tuple(load.with_(cut=6.0) for load in held.loads)
    whatif = WhatIf.build(solve(bare.case.with_(load_cases=(held.with_(loads=loads),))))
    (y, u), (y_wool, u_wool) = closed([foam(f, AIR, 9000.0, 0.06, True)]), closed([foam(f, AIR, 40000.0, 0.1)])
    for name, end in {"foam": (y, 0.002 * u), "mat": (y_wool, 0.002 * u_wool * 10 ** (-2 / 20))}.items():
        for found in _both_ways(whatif, name):
            assert np.abs(found[:, 0] / field(0.37, f, AIR, 1.15, (0, 0), end) - 1).max() < 1e-4, name


def test_what_cannot_be_predicted_by_a_factor_is_refused() -> None:
    """Nothing of the motion comes through three metres of wool at rest; a mat goes on it all the same."""
    f, wool = np.linspace(700.0, 900.0, 5), Layers((PorousLayer(Miki(60000.0), 3.0),))
    catalogue = [*_on("x1", foam=STACKS["porous"]), Treatment("mat", 1.0, 1.0, velocity_cut=2.0, panels=("x1",))]
    whatif = _duct(1.15, f, catalogue, {"x1": 0.002}, [0.37], kinds={"x1": VibratingTreated(wool, "at_rest")})
    with pytest.raises(CaseError, match="'foam' is to replace what 'x1' carries, but that lets nothing of its motion through"):
        whatif.change(whatif.case.catalogue[0], "x1")
    assert np.allclose(np.abs(whatif.change(whatif.case.catalogue[1], "x1").factors[0]), 10 ** (-2 / 20))


def test_a_panel_over_two_fluids() -> None:
    """A bonded layer moves differently in front of light and of heavy gas: refused with the cure. A face does not."""
    mesh = grid(np.linspace(0, 1.2, 7), [0, 0.1], [0, 0.1])
    layer = STACKS["porous"]
    forms = tuple(Treatment(frame, 1.0, 1.0, wall=layer, frame=frame, panels=("z0",)) for frame in ("face", "bonded"))
    case = case_of(
        mesh, {"z0": Vibrating()}, [SurfaceVelocity("z0", Uniform(0.001))], np.linspace(100.0, 300.0, 9),
        {"r": (0.3, 0.05, 0.05), "s": (0.9, 0.05, 0.05)}, order=4, error_bar=False,
        regions=(Region("light", GivenFluid(1.2, 343.0)), Region("heavy", GivenFluid(6.0, 150.0))),
        tet_region=(mesh.centroids[:, 0] > 0.6).astype(np.int64),
    )  # fmt: skip
    whatif = WhatIf.build(solve(case.with_(catalogue=forms)))
    face = whatif.pressures([whatif.change(forms[0], "z0")])[:, :, 0]
    full = solve(treated_case(whatif.case, [whatif.options[0]])).load_cases[0].contributions.sum(axis=2)
    assert _decibels(face, full) < 0.05
    with pytest.raises(CaseError, match="'z0' touches several fluids, and 'bonded' would move differently in them; give its"):
        whatif.change(forms[1], "z0")
