"""The same job from Python, from TOML and from JSON; every unknown key is answered with the nearest known one."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from murmesh.plugin.job import Job, Rule, is_glob
from murmesh.plugin.job_text import job_of, toml_text
from murmesh.solver.case.boundary import Boundary, Impedance, Port, Pressure, Rigid, Vibrating
from murmesh.solver.case.catalogue import Treatment
from murmesh.solver.case.fields import Declared, to_tree
from murmesh.solver.case.load import CrossSpectrum, Incoherent, Load, LoadCase, SurfaceVelocity
from murmesh.solver.case.medium import Air, Damping, LossFactor, Medium, ReverberationTime
from murmesh.solver.case.model import Measured
from murmesh.solver.case.motion import Autospectrum, Motion, Scan, Uniform
from murmesh.solver.case.spectrum import Lines, PowerLaw, Spectrum, Table
from murmesh.solver.case.wall import Absorption, Given, WallLaw
from murmesh.solver.errors import CaseError, FieldError, FormatError

BASE = """
[regions.air]
medium = {kind = "air"}
[sweep]
start = 50
stop = 100
step = 10
"""


def same(a: object, b: object) -> bool:
    """Whether two declared objects hold the same names and numbers."""
    left, right = to_tree(a), to_tree(b)
    return _equal(left, right)


def _equal(a: Any, b: Any) -> bool:
    if isinstance(a, dict) and isinstance(b, dict):
        return set(a) == set(b) and all(_equal(a[key], b[key]) for key in a)
    if isinstance(a, list) and isinstance(b, list):
        return len(a) == len(b) and all(_equal(x, y) for x, y in zip(a, b, strict=True))
    if isinstance(a, np.ndarray) or isinstance(b, np.ndarray):
        return np.asarray(a).dtype == np.asarray(b).dtype and np.array_equal(a, b)
    return bool(a == b)


def job_in(folder: Path, text: str) -> Job:
    (folder / "job.toml").write_text(BASE + text, encoding="utf-8")
    return Job.from_toml(folder / "job.toml")


def motion_of(job: Job, surface: str, load_case: int = 0) -> Motion:
    for load in job.all_load_cases[load_case].loads:
        if isinstance(load, SurfaceVelocity) and load.surface == surface:
            return load.motion
    raise AssertionError(surface)


# -- the same job three ways -------------------------------------------------------------------------------------------


def full_job() -> Job:
    return (
        Job(title='umlaut "ü"\n', default_boundary="rigid")
        .with_mesh("cab.step", unit="mm", size_from="frequency")
        .region("cabin_air", Air(23.0), ReverberationTime(Table(np.array([50.0, 500.0]), np.array([0.2 + 0j, 0.1]))))
        .surface("door_*", Vibrating(), acceleration=Autospectrum(1e-4, "psd", "acceleration"))
        .surface("roof", Impedance(Given(3 - 1j)), where=Rule(((0, 0, 1), (1, 1, 2)), (0.0, 0.0, 1.0), 20.0))
        .surface("inlet", Port(), wave=1.0)
        .surface("open end", Pressure(), pressure=PowerLaw(1 + 1j, 100.0, -6.0))
        .with_loads(combination=Incoherent())
        .source("shaker", (0.1, 0.2, 0.3), 1e-3j)
        .load_case(LoadCase("scanned", (SurfaceVelocity("floor", Scan.example()),), "tones"))
        .load_case(LoadCase("crossed", (SurfaceVelocity("a", Uniform(1)), SurfaceVelocity("b", Uniform(1))),
                            combination=CrossSpectrum.example()))
        .receiver("ear", (0.5, 0, 1), 0.05, Measured(np.array([50.0]), np.array([70.0])))
        .treatment(Treatment.example())
        .with_sweep(40, 500, 20, extra=[95.0], order=5, field_frequencies=[95.0])
    )  # fmt: skip


def test_toml_and_json_bring_back_the_same_job(tmp_path: Path) -> None:
    job = full_job()
    job.to_toml(tmp_path / "job.toml")
    assert same(Job.from_toml(tmp_path / "job.toml"), job)
    assert same(Job.from_json(job.to_json()), job)


def test_json_is_one_line() -> None:
    assert "\n" not in full_job().to_json()


@pytest.mark.parametrize("family", [Boundary, Medium, Damping, WallLaw, Motion, Spectrum, Load])
def test_every_kind_survives_the_text(family: type[Declared]) -> None:
    for member in family.registry.values():
        held = member.example()  # type: ignore[attr-defined]
        job = Job()
        if isinstance(held, Boundary):
            job = job.surface("s", held)
        elif isinstance(held, Medium):
            job = job.region("r", held)
        elif isinstance(held, Damping):
            job = job.region("r", Air(), held)
        elif isinstance(held, WallLaw):
            job = job.surface("s", Impedance(held))
        elif isinstance(held, Spectrum):
            job = job.surface("s", Pressure(), pressure=held)
        elif isinstance(held, Motion):
            case = LoadCase("c", (SurfaceVelocity("s", held),), combination=Incoherent())
            job = job.load_case(case)
        else:
            assert isinstance(held, Load)
            job = job.load(held)
        assert same(Job.from_json(job.to_json()), job), member
        import tomllib

        assert same(job_of(tomllib.loads(toml_text(job))), job), member


def test_python_and_toml_say_the_same(tmp_path: Path) -> None:
    said = job_in(
        tmp_path,
        """
        [surfaces.roof]
        kind = "vibrating_treated"
        wall = {kind = "absorption", coefficient = 0.3}
        frame = "face"
        velocity = {re = 1e-3, im = 2e-3}
        where = {inside = [[0, 0, 1], [1, 1, 2]], facing = [0, 0, 1]}
        [surfaces.floor]
        kind = "vibrating"
        acceleration = {kind = "power_law", value = 1.0, reference = 100.0, db_per_octave = -6}
        [[receivers]]
        name = "ear"
        position = [0, 0, 1]
        """,
    )
    from murmesh.solver.case.boundary import VibratingTreated

    rule = Rule(((0.0, 0.0, 1.0), (1.0, 1.0, 2.0)), (0.0, 0.0, 1.0))
    meant = (
        Job()
        .region("air", Air())
        .surface("roof", VibratingTreated(Absorption(0.3), "face"), velocity=1e-3 + 2e-3j, where=rule)
        .surface("floor", Vibrating(), acceleration=PowerLaw(1 + 0j, 100.0, -6.0))
        .receiver("ear", (0, 0, 1))
        .with_sweep(50, 100, 10)
    )
    assert same(said, meant)


def test_methods_return_copies() -> None:
    job = Job()
    job.surface("a", Rigid()).receiver("b", (0, 0, 0))
    assert job.surfaces == () and job.receivers == ()


def test_globs_are_told_from_names() -> None:
    assert is_glob("door_*") and is_glob("door_?") and is_glob("door_[ab]") and not is_glob("door left")


# -- keys --------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[surfces.a]\nkind = 'rigid'", r"job\.toml: job: unknown key 'surfces'; did you mean 'surfaces'"),
        ("[surfaces.a]\nkind = 'rigd'", r"surfaces/a/boundary: Boundary kind 'rigd' is not known; did you mean 'rigid'"),
        ("[surfaces.a]\nkind = 'vibrating'\nvelocty = 1", r"surfaces/a: unknown key 'velocty'; did you mean 'velocity'"),
        ("[surfaces.a]\nkind = 'impedance'\nwal = 1", r"surfaces/a: unknown key 'wal'; did you mean 'wall'"),
        ("[surfaces.a]\nvelocity = 1", r"surfaces/a/boundary: the key 'kind' is missing"),
        ("[surfaces.a]\nkind='rigid'\nwhere={insid=1}", r"surfaces/a/where: unknown key 'insid'; did you mean 'inside'"),
        ("[surfaces.a]\nkind='rigid'\nwhere={}", r"a rule says nothing"),
        ("[surfaces.a]\nkind='rigid'\nwhere={facing=[0,0,0]}", r"facing = \[0, 0, 0\] is no direction"),
        ("[surfaces.'a*']\nkind='rigid'\nwhere={facing=[0,0,1]}", r"surface 'a\*' has a rule, so it needs a plain name"),
        ("[mesh]\nfile='a.msh'\nsiz=1", r"mesh: unknown key 'siz'; did you mean 'size'"),
        ("[mesh]\nfile='a.msh'\nunit='metre'", r"mesh/unit 'metre' is not known"),
        ("[mesh]\nfile='a.msh'\nsize=1\nsize_from='frequency'", r"the element size is said twice"),
        ("[[receivers]]\nname='e'\nposition=[0,0]", r"receivers/e/position: expected 3 values, got 2"),
        ("[[receivers]]\nname='e'\nplace=[0,0,0]", r"receivers/e: unknown key 'place'"),
        ("receivers = 3", r"unknown key|expected a list of tables, written \[\[receivers\]\]"),
        ("[loads]\nspectrm='tones'", r"loads: unknown key 'spectrm'; did you mean 'spectrum'"),
        ("[loads]\nspectrum='tone'", r"spectrum = 'tone' is not a choice; did you mean 'tones'"),
        ("[[load_cases]]\nname='x'\nloads=[{kind='monopol'}]", r"load_cases/x/loads/0: Load kind 'monopol'.*'monopole'"),
        ("[[catalogue]]\nname='f'\nmass=1", r"catalogue/f: unknown key 'mass'; did you mean 'mass_per_area'"),
        ("[[load_cases]]\nname='x'\nloads=[{kind='surface_velocity', surface='a', motion={kind='unifrm', value=1}}]",
         r"Motion kind 'unifrm' is not known; did you mean 'uniform'"),
    ],
)  # fmt: skip
def test_unknown_keys_name_the_nearest(tmp_path: Path, text: str, words: str) -> None:
    with pytest.raises(CaseError, match=words):
        job_in(tmp_path, text)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("sweep = 3", r"sweep: expected a table"),
        ("[sweep]\nstart=1\nstop=2", r"'step' \[Hz\] is missing or no number"),
        ("[sweep]\nstart=1\nstop=2\nstep=1\nfrequencies=[1.0]", r"frequencies and start, stop, step are both given"),
        ("[sweep]\nstrat=1", r"sweep: unknown key 'strat'; did you mean 'start'"),
        ("[sweep]\nfrequencies=[2.0, 1.0]", r"must increase strictly"),
        ("[regions]\nair = 3", r"regions/air: expected a table"),
        ("[regions.air]\ndamping={kind='none'}", r"regions/air: 'medium' is missing"),
        ("title = \n", r"is not a TOML file: .*line 1"),
    ],
)
def test_what_is_wrong_is_named(tmp_path: Path, text: str, words: str) -> None:
    (tmp_path / "job.toml").write_text(text)
    with pytest.raises(CaseError, match=words):
        Job.from_toml(tmp_path / "job.toml")


def test_missing_job_file(tmp_path: Path) -> None:
    with pytest.raises(FormatError, match="there is no job file"):
        Job.from_toml(tmp_path / "none.toml")


def test_a_broken_stored_job() -> None:
    with pytest.raises(FormatError, match="the stored job is not JSON"):
        Job.from_json("{")


def test_a_name_described_twice() -> None:
    with pytest.raises(FieldError, match="surfaces: 'a' is described twice"):
        Job().surface("a", Rigid()).surface("a", Vibrating())


def test_a_measure_against_its_key() -> None:
    with pytest.raises(FieldError, match="measure 'velocity' was given as acceleration; use velocity ="):
        Job().surface("a", Vibrating(), acceleration=Uniform(1.0))


# -- files -------------------------------------------------------------------------------------------------------------


PANELS = "frequency,door_left_re [mm/s],door_left_im [mm/s],door_right_re [mm/s],door_right_im [mm/s],roof [(mm/s)2/Hz]\n"


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "panels.csv").write_text(PANELS + "40,1,2,3,4,9\n120,1,2,3,4,9\n")
    (tmp_path / "alpha.csv").write_text("frequency,value\n40,0.1\n120,0.3\n")
    (tmp_path / "tube.csv").write_text("frequency,re [Pa.s/m],im [Pa.s/m]\n40,400,900\n120,500,800\n")
    (tmp_path / "ear.csv").write_text("frequency,level [dB]\n63,70\n80,71\n")
    return tmp_path


def test_velocity_from_a_csv(folder: Path) -> None:
    surface = "[surfaces.door]\nkind='vibrating'\nvelocity={csv='panels.csv', column='door_left', amplitude='rms'}"
    motion = motion_of(job_in(folder, surface), "door")
    # rms to peak, mm/s to m/s, into the air to out of the fluid
    np.testing.assert_allclose(motion.outward(np.array([80.0])), -np.sqrt(2) * (1 + 2j) * 1e-3 * np.ones((1, 1)))


def test_a_column_per_surface_of_a_glob(folder: Path) -> None:
    text = "[surfaces.'door_*']\nkind='vibrating'\nvelocity={csv='panels.csv', column='{surface}', amplitude='peak'}"
    job = job_in(folder, text)
    assert [load.name for load in job.all_load_cases[0].loads] == ["door_left", "door_right"]
    np.testing.assert_allclose(motion_of(job, "door_right").given(np.array([80.0])), [[3e-3 + 4e-3j]])


def test_panels_of_a_load_case(folder: Path) -> None:
    (folder / "two.csv").write_text("frequency,a_re,a_im,b_re,b_im\n50,1,2,3,4\n100,1,2,3,4\n")
    panels = "panels={csv='two.csv', unit='m/s', amplitude='peak', lines=true}"
    job = job_in(folder, f"[[load_cases]]\nname='tones'\nspectrum='tones'\n{panels}")
    assert [load.name for load in job.load_cases[0].loads] == ["a", "b"]
    motion = motion_of(job, "b")
    assert isinstance(motion, Uniform) and isinstance(motion.value, Lines)
    np.testing.assert_allclose(motion.given(np.array([75.0, 100.0])).ravel(), [0, 3 + 4j])


def test_autospectrum_from_a_csv(folder: Path) -> None:
    text = "[loads]\ncombination={kind='incoherent'}\n[surfaces.roof]\nkind='vibrating'\n"
    job = job_in(folder, text + "velocity={csv='panels.csv', column='roof', form='psd'}")
    motion = motion_of(job, "roof")
    assert isinstance(motion, Autospectrum)
    np.testing.assert_allclose(motion.given(np.array([80.0])), [[3e-3 * np.sqrt(2)]])


def test_acceleration_is_known_by_its_unit(folder: Path) -> None:
    (folder / "acc.csv").write_text("frequency,re [g],im [g]\n40,1,0\n120,1,0\n")
    load = "{kind='surface_velocity', surface='a', motion={csv='acc.csv', amplitude='peak'}}"
    motion = motion_of(job_in(folder, f"[loads]\nloads=[{load}]"), "a")
    assert motion.measure == "acceleration"
    np.testing.assert_allclose(motion.given(np.array([50.0])), [[9.80665]])


def test_impedance_tube_data(folder: Path) -> None:
    text = "[surfaces.a]\nkind='impedance'\nwall={kind='given', csv='tube.csv', time_sign='-'}"
    wall = job_in(folder, text).surfaces[0].boundary.wall  # type: ignore[attr-defined]
    assert wall.unit == "Pa.s/m"
    np.testing.assert_allclose(wall.impedance(np.array([40.0]), Air().reference), [400 - 900j])


def test_files_wherever_a_spectrum_stands(folder: Path) -> None:
    text = "[surfaces.a]\nkind='impedance'\nwall={kind='absorption', coefficient={csv='alpha.csv', extrapolate=true}}\n"
    text += "[surfaces.b]\nkind='pressure'\npressure={csv='alpha.csv', unit='kPa'}"
    job = job_in(folder, text)
    law = job.surfaces[0].boundary.wall.coefficient  # type: ignore[attr-defined]
    np.testing.assert_allclose(law.at(np.array([80.0, 500.0])), [0.2, 0.3])
    pressure = job.loads.loads[0].pressure  # type: ignore[attr-defined]
    np.testing.assert_allclose(pressure.at(np.array([80.0])), 200.0)


def test_measured_levels(folder: Path) -> None:
    job = job_in(folder, "[[receivers]]\nname='ear'\nposition=[0,0,0]\nmeasured='ear.csv'")
    measured = job.receivers[0].measured
    assert measured is not None and list(measured.levels) == [70, 71]


def test_scan_from_a_csv(folder: Path) -> None:
    rows = "".join(f"{x},{y},0,{f},1,0\n" for f in (40, 120) for x in (0, 1) for y in (0, 1))
    (folder / "scan.csv").write_text("x,y,z,frequency,re,im\n" + rows)
    text = "[surfaces.a]\nkind='vibrating'\nvelocity={kind='scan', csv='scan.csv', unit='mm/s', amplitude='peak'}"
    motion = motion_of(job_in(folder, text), "a")
    assert isinstance(motion, Scan) and motion.points.shape == (4, 3)
    np.testing.assert_allclose(motion.values, 1e-3)


def test_cross_spectrum_from_hdf5(folder: Path) -> None:
    import h5py

    held = CrossSpectrum.example()
    with h5py.File(folder / "cross.h5", "w") as file:
        file["frequencies"], file["values"] = held.frequencies, held.values
    text = "[loads]\ncombination={kind='cross_spectrum', hdf5='cross.h5'}"
    combination = job_in(folder, text).loads.combination
    assert same(combination, held)


@pytest.mark.parametrize(
    ("velocity", "words"),
    [
        ("{csv='panels.csv', column='door_left'}", r"surfaces/a/velocity: say what 'panels\.csv' holds: amplitude ="),
        ("{csv='alpha.csv', amplitude='peak'}", r"'alpha\.csv': the unit is not said"),
        ("{csv='alpha.csv', amplitude='peak', unit='Pa'}", r"the unit Pa is one of pressure, not of velocity"),
        ("{csv='alpha.csv', amplitude='peak', unit='g'}", r"the unit g is one of acceleration, but measure = 'velocity'"),
        ("{csv='alpha.csv', form='psd', unit='m/s'}", r"the unit m/s and form = 'psd' contradict"),
        ("{csv='panels.csv', column='roof', amplitude='peak'}", r"the unit \(mm/s\)2/Hz and form = '' contradict"),
        ("{csv='alpha.csv', amplitude='peak', colum='a'}", r"unknown key 'colum'; did you mean 'column'"),
        ("{csv='none.csv', amplitude='peak'}", r"surfaces/a/velocity: there is no file '.*none\.csv'"),
        ("{csv='panels.csv', column='{surface}', amplitude='peak'}", r"'panels\.csv' has no column for 'a'"),
        ("{kind='scan', csv='alpha.csv', unit='m/s'}", r"no column for the coordinate x"),
        ("{hdf5='x.h5', amplitude='peak'}", r"a spectrum is read from csv; hdf5 is for"),
        ("{csv='alpha.csv', amplitude='peak', unit='m/s', measure='acceleration'}", r"contradicts the key; use acceleration"),
    ],
)
def test_files_that_say_too_little_or_too_much(folder: Path, velocity: str, words: str) -> None:
    with pytest.raises(CaseError, match=words):
        job_in(folder, f"[surfaces.a]\nkind='vibrating'\nvelocity={velocity}")


def test_a_unit_against_the_header(folder: Path) -> None:
    text = "[surfaces.a]\nkind='impedance'\nwall={kind='given', csv='tube.csv', unit='rho_c'}"
    with pytest.raises(FieldError, match=r"'tube\.csv' is in Pa\.s/m, but unit = 'rho_c' is stated"):
        job_in(folder, text)


def test_a_kind_without_a_spectrum_takes_no_file(folder: Path) -> None:
    with pytest.raises(FieldError, match="kind 'resonator' takes no file"):
        job_in(folder, "[surfaces.a]\nkind='impedance'\nwall={kind='resonator', csv='alpha.csv'}")


def test_panels_without_a_file(folder: Path) -> None:
    with pytest.raises(FieldError, match="panels: 'csv' is missing"):
        job_in(folder, "[loads]\npanels={amplitude='peak'}")


# -- element size ------------------------------------------------------------------------------------------------------


def test_element_size_takes_the_slowest_medium_and_the_highest_frequency() -> None:
    from murmesh.plugin.mesh_source import element_size
    from murmesh.solver.case.medium import GivenFluid

    job = Job().region("a", GivenFluid(1.2, 343.0)).region("b", GivenFluid(1.8, 268.0), LossFactor(0.01))
    job = job.with_sweep(50, 400, 50, order=3, accuracy=0.2)
    assert job.element_size() == pytest.approx(element_size(400.0, 268.0, 3, 0.2))


def test_cad_is_meshed_for_the_sweep(gmsh_model: None, tmp_path: Path) -> None:
    import gmsh

    gmsh.model.occ.addBox(0, 0, 0, 1500, 1200, 1000)
    gmsh.model.occ.synchronize()
    gmsh.write(str(tmp_path / "cab.step"))
    sizes = {}
    for top in (200, 400):
        job = Job().with_mesh("cab.step").region("air", Air()).with_sweep(50, top, 50, order=3)
        sizes[top] = len(job.read_mesh(tmp_path).tets)
    assert sizes[400] > 3 * sizes[200]


def test_a_job_that_lacks_what_is_asked() -> None:
    with pytest.raises(CaseError, match=r"the job has no sweep; give start, stop and step"):
        Job().element_size()
    with pytest.raises(CaseError, match="the element size needs the speed of sound"):
        Job().with_sweep(50, 100, 10).element_size()
    with pytest.raises(CaseError, match="the job names no mesh"):
        Job().read_mesh()
