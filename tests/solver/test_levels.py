"""Weightings (IEC 61672-1), bands (IEC 61260-1), sums and references (ISO 1683), against published values."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from murmesh.solver import levels
from murmesh.solver.errors import FieldError
from reading import read_csv_reference, read_json_reference


def test_weightings_e01() -> None:
    table = read_csv_reference("E01_IEC61672_weightings.csv")
    assert np.abs(levels.A_weighting(table["exact_Hz"]) - table["A_analytic"]).max() < 1e-6
    assert np.abs(levels.A_weighting(table["exact_Hz"]) - table["A_table"]).max() < 0.05
    assert np.abs(levels.C_weighting(table["exact_Hz"]) - table["C_table"]).max() < 0.051
    # the tolerance means something: nominal frequencies are off by more
    assert np.abs(levels.A_weighting(table["nominal_Hz"]) - table["A_table"]).max() > 0.05


def test_bands_e02() -> None:
    table = read_csv_reference("E02_IEC61260_bands.csv")
    for per_octave, make in ((3, levels.third_octaves), (1, levels.octaves)):
        rows = table["b"] == per_octave
        mids = table["exact_mid_Hz"][rows]
        bands = make(float(mids[0]), float(mids[-1]))
        assert [float(band.nominal) for band in bands] == list(table["nominal_Hz"][rows])
        for key, column in (("mid", "exact_mid_Hz"), ("lower", "lower_edge_Hz")):
            assert np.allclose([getattr(b, key) for b in bands], table[column][rows], rtol=1e-9)


def test_sums_e03() -> None:
    for case in read_json_reference("E03_levels_reference_and_sums.json")["sums"][:2]:
        assert levels.sum_levels(case["levels"]) == pytest.approx(case["total"], abs=1e-9)


def test_octaves_from_thirds_e03() -> None:
    """Tones at the mid-bands of third octaves, gathered into octaves and A-weighted at their own frequencies."""
    case = read_json_reference("E03_levels_reference_and_sums.json")["sums"][2]
    bands = levels.third_octaves(50.5, 310.0)
    f = np.array([band.mid for band in bands])
    given = np.array([case["thirds_63_125_250"][band.nominal] for band in bands])
    square = levels.P0**2 * 10 ** (given / 10)
    octaves = levels.octaves(63.1, 251.0)
    energy, _ = levels.band_energy(f, square, octaves, "tones")
    for band, found in zip(octaves, levels.level(energy), strict=True):
        assert found == pytest.approx(case["octaves"][band.nominal], abs=1e-9)
    total = levels.band_energy(f, square, [levels.Band("all", 125, 40, 400)], "tones", "A")[0][0]
    assert float(levels.level(total)) == pytest.approx(case["LA_from_thirds"], abs=0.05)


def test_references_e03() -> None:
    iso = read_json_reference("E03_levels_reference_and_sums.json")["ISO1683_2015"]
    assert iso["p0_Pa"] == levels.P0
    assert iso["W0_W"] == levels.W0
    assert float(levels.power_level(1e-3)) == pytest.approx(90.0)


def test_halving_the_step_keeps_the_band_level_of_a_density() -> None:
    def energy(step: float) -> float:
        f = np.arange(80.0, 200.1, step)
        density = 1e-6 / (1 + ((f - 130) / 15) ** 2)
        return float(levels.band_energy(f, density, levels.third_octaves(125, 125), "density", "A")[0][0])

    assert 10 * abs(np.log10(energy(2.0) / energy(1.0))) < 0.01
    f = np.arange(80.0, 200.1, 1.0)
    tones = [levels.band_energy(g, np.full(len(g), 1e-6), levels.third_octaves(125, 125), "tones")[0][0] for g in (f, f[::2])]
    assert tones[0] / tones[1] == pytest.approx(2.0, rel=0.1)  # a sum of tones does depend on it


def test_constant_density_fills_the_band() -> None:
    band = levels.third_octaves(125, 125)[0]
    energy, covered = levels.band_energy(np.array([50.0, 300.0]), np.ones(2), [band], "density")
    assert energy[0] == pytest.approx(band.upper - band.lower)
    assert covered[0] == 1.0


def test_partial_coverage_is_said() -> None:
    band = levels.third_octaves(125, 125)[0]
    _, covered = levels.band_energy(np.array([50.0, band.mid]), np.ones(2), [band], "density")
    assert covered[0] == pytest.approx((band.mid - band.lower) / (band.upper - band.lower))


def test_silence_has_no_level() -> None:
    assert float(levels.level(0.0)) == -np.inf


@pytest.mark.parametrize("call", [lambda: levels.weighting("B", [1.0]), lambda: levels.weighting("a", [1.0])])
def test_unknown_weighting(call: object) -> None:
    with pytest.raises(FieldError, match="no frequency weighting is called"):
        call()  # type: ignore[operator]


def test_unknown_spectrum() -> None:
    with pytest.raises(FieldError, match="'noise' is not known"):
        levels.band_energy(np.ones(1), np.ones(1), [], "noise")


def test_schroeder_frequency() -> None:
    assert levels.schroeder_frequency(0.4, 4.0) == pytest.approx(632.46, abs=0.01)


def test_silences_add_up_to_silence() -> None:
    assert levels.sum_levels([]) == levels.sum_levels([-np.inf, -np.inf]) == -np.inf
    assert levels.sum_levels([60.0, -np.inf]) == pytest.approx(60.0)


@pytest.mark.parametrize("weighting", ["A", "C", "Z"])
def test_the_whole_sweep_is_the_sum_of_its_bands(weighting: str) -> None:
    f = np.array([50.0, 95.0, 190.0, 342.0, 500.0])
    square = np.array([1e-4, 1e-2, 1e-3, 1e-3, 1e-4])
    for spectrum in ("tones", "density"):
        bands = levels.third_octaves(50.0, 500.0)
        parts, _ = levels.band_energy(f, square, bands, spectrum, weighting)
        # tones: the last one is counted; densities: no band and no edge is counted twice
        assert levels.overall_energy(f, square, spectrum, weighting) == pytest.approx(float(parts.sum()), rel=1e-12)


def test_a_tone_belongs_to_one_band() -> None:
    bands = levels.third_octaves(100.0, 200.0)
    edge = np.array([bands[1].lower])
    energy, _ = levels.band_energy(edge, np.ones(1), bands, "tones")
    assert list(energy[:2]) == [0.0, 1.0]
    assert all(a.upper == pytest.approx(b.lower, rel=1e-12) for a, b in itertools.pairwise(bands))
