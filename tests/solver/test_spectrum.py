"""Quantities over frequency: their edges, and what they refuse."""

from __future__ import annotations

import numpy as np
import pytest

from murmesh.solver.case.spectrum import Constant, Lines, PowerLaw, Spectrum, Table, as_spectrum
from murmesh.solver.errors import FieldError, RangeError

F = np.array([95.0, 142.5, 190.0])


@pytest.mark.parametrize("name", Spectrum.registry)
def test_values_are_complex_and_of_the_shape_of_f(name: str) -> None:
    spectrum = Spectrum.member(name).example()  # type: ignore[attr-defined]
    assert spectrum.at(F).shape == F.shape
    assert spectrum.at(F).dtype == np.complex128
    assert spectrum.at(F[:0]).shape == (0,)


def test_numbers_become_constants_and_spectra_stay() -> None:
    assert np.all(as_spectrum(2 - 1j).at(F) == 2 - 1j)
    held = Constant(1.0 + 0j)
    assert as_spectrum(held) is held


def test_a_table_may_be_asked_at_its_own_ends() -> None:
    table = Table(np.array([95.0, 190.0]), np.array([1j, 2.0]))
    assert table.at(np.array([95.0, 190.0])) == pytest.approx(np.array([1j, 2.0]))
    # rounding of a swept frequency is no excuse to fail
    assert table.at(np.array([95.0 * (1 - 1e-9), 190.0 * (1 + 1e-9)])) == pytest.approx(np.array([1j, 2.0]))


@pytest.mark.parametrize("asked", [94.9, 190.1])
def test_tables_end_where_they_end(asked: float) -> None:
    table = Table(np.array([95.0, 190.0]), np.array([1j, 2.0]))
    with pytest.raises(RangeError, match=rf"holds 95 .. 190 Hz, but {asked:g} Hz is asked; .*not extrapolated: narrow the"):
        table.at(np.array([120.0, asked]))
    assert table.with_(extrapolate=True).at(np.array([asked]))[0] in (1j, 2.0)


def test_one_row_is_a_table_of_one_frequency() -> None:
    one = Table(np.array([100.0]), np.array([3.0 + 0j]))
    assert one.at(np.array([100.0]))[0] == 3.0
    with pytest.raises(RangeError, match=r"holds 100 \.\. 100 Hz"):
        one.at(np.array([101.0]))


@pytest.mark.parametrize("cls", [Table, Lines])
@pytest.mark.parametrize(
    ("frequencies", "values", "words"),
    [
        ([], [], "at least one: got"),
        ([1.0, 2.0], [1.0], r"as many values as frequencies.*\(2,\) and \(1,\)"),
        ([1.0, 1.0], [1.0, 2.0], "remove duplicates"),
        ([-1.0, 1.0], [1.0, 2.0], "must be above zero"),
        ([1.0, 2.0], [1.0, np.nan], "must be finite"),
    ],
)
def test_tables_are_checked(cls: type[Table | Lines], frequencies: list[float], values: list[float], words: str) -> None:
    with pytest.raises(FieldError, match=words):
        cls(np.array(frequencies), np.array(values, dtype=np.complex128))


def test_lines_are_met_within_one_millionth() -> None:
    lines = Lines(np.array([95.0, 190.0]), np.array([1 + 1j, 2.0]))
    asked = np.array([95.0 * (1 + 5e-7), 95.0 * (1 + 5e-6), 142.5, 190.0])
    assert list(lines.at(asked)) == [1 + 1j, 0, 0, 2.0]


def test_power_law_keeps_the_phase_and_meets_its_slope() -> None:
    law = PowerLaw(3e-3j, 95.0, -6.0)
    there, octave, below = law.at(np.array([95.0, 190.0, 47.5]))
    assert there == 3e-3j
    assert 20 * np.log10(abs(octave / there)) == pytest.approx(-6.0)
    assert 20 * np.log10(abs(below / there)) == pytest.approx(6.0)
    assert np.angle(octave) == pytest.approx(np.pi / 2)
