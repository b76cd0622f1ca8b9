"""Tables are read as they were meant: units, parts, signs and separators said; what is unclear is refused with its place."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest

from murmesh.plugin.tables import UNITS, quantity_names, read_arrays, read_column, read_csv, read_levels, read_scan
from murmesh.solver.errors import FieldError, FormatError


@pytest.fixture
def table(tmp_path: Path) -> Path:
    return tmp_path / "table.csv"


@pytest.mark.parametrize(
    "text",
    [
        "frequency,re,im\n50,1,2\n100,3,-4\n",
        "# measured\nFrequency [Hz];re;im\n50;1,0;2,0\n\n100;3,0;-4,0\n",
        "f\treal\timag\n50\t1\t2\n100\t3\t-4\n",
        "frequency [kHz],im,re\n0.05,2,1\n0.1,-4,3\n",
        "\ufefffreq,magnitude,phase_deg\n50,2.23606797749979,63.43494882292201\n100,5,-53.13010235415598\n",
        "hz,mag,phase_rad\n50,2.23606797749979,1.1071487177940904\n100,5,-0.9272952180016122\n",
    ],
)
def test_a_complex_quantity_in_every_writing(table: Path, text: str) -> None:
    table.write_text(text, encoding="utf-8")
    column = read_column(table)
    np.testing.assert_allclose(column.frequencies, [50, 100])
    np.testing.assert_allclose(column.values, [1 + 2j, 3 - 4j])
    assert not column.real and column.unit == "" and column.measures == ""


def test_a_column_or_a_pair_per_panel(table: Path) -> None:
    table.write_text(
        "frequency,roof_re [mm/s],roof_im [mm/s],door.magnitude [m/s],door.phase_deg [deg],floor [(mm/s)2/Hz],core\n"
        "50,1,2,3,90,4,5\n100,1,2,3,90,4,5\n"
    )
    assert quantity_names(table) == ("roof", "door", "floor", "core")
    np.testing.assert_allclose(read_column(table, "roof").values, (1 + 2j) * 1e-3)
    np.testing.assert_allclose(read_column(table, "door").values, 3j, atol=1e-15)
    floor = read_column(table, "floor")
    assert floor.real and floor.measures == "velocity psd"
    np.testing.assert_allclose(floor.values, 4e-6)
    np.testing.assert_allclose(read_column(table, "core").values, 5)


def test_a_panel_whose_name_ends_like_a_part(table: Path) -> None:
    table.write_text("frequency,left_re,right_re,right_im\n50,1,2,3\n100,1,2,3\n")
    assert set(quantity_names(table)) == {"left_re", "right"}
    assert read_column(table, "left_re").real and not read_column(table, "right").real


def test_time_sign_minus_is_conjugated(table: Path) -> None:
    table.write_text("frequency,re,im\n50,1,2\n")
    assert read_column(table, time_sign="-").values[0] == 1 - 2j
    with pytest.raises(FieldError, match=r"time_sign '\*' is not a choice"):
        read_column(table, time_sign="*")


@pytest.mark.parametrize("unit", sorted(UNITS))
def test_units(table: Path, unit: str) -> None:
    table.write_text("frequency,value\n50,2\n")
    column = read_column(table, unit=unit)
    assert column.values[0] == 2 * UNITS[unit][0] and column.measures == UNITS[unit][1]


@pytest.mark.parametrize(
    ("text", "kwargs", "error", "words"),
    [
        ("frequency,roof_re [mm/s],roof_im [m/s]\n50,1,2\n", {}, FieldError, r"contradict \(m/s, mm/s\); say one"),
        ("frequency,re [mm/s],im [mm/s]\n50,1,2\n", {"unit": "m/s"}, FieldError, r"contradict"),
        ("frequency,re,im\n50,1,2\n", {"unit": "mm/"}, FieldError, r"unit 'mm/' is not known; did you mean 'mm/s'"),
        ("frequency,a [furlong]\n50,1\n", {}, FormatError, r"column 'a \[furlong\]' has an unknown unit"),
        ("frequency,a,b\n50,1,2\n", {}, FieldError, r"has several quantities: say which"),
        ("frequency,roof,b\n50,1,2\n", {"column": "rof"}, FieldError, r"no quantity 'rof'; did you mean 'roof'"),
        ("frequency,a_re,a_magnitude\n50,1,2\n", {}, FormatError, r"expected re and im, magnitude and phase_deg"),
        ("frequency,a\n50,x\n", {}, FormatError, r"line 2, column 'a': 'x' is not a number"),
        ("frequency,a\n# comment\n50,1\n\n60\n", {}, FormatError, r"line 5: 1 fields, the header has 2"),
        ("frequency,a\n50,nan\n", {}, FormatError, r"line 2: a field is not finite"),
        ("frequency,a,a\n50,1,2\n", {}, FormatError, r"two columns of the same name"),
        ("frequency,a\n", {}, FormatError, r"no header with rows below it"),
        ("time,a\n50,1\n", {}, FormatError, r"no column for the frequency; name one 'frequency'"),
        ("frequency,a\n60,1\n50,1\n", {}, FormatError, r"must rise strictly from above 0"),
        ("frequency,a\n0,1\n50,1\n", {}, FormatError, r"must rise strictly from above 0"),
    ],
)
def test_what_is_unclear_is_refused(
    table: Path, text: str, kwargs: dict[str, str], error: type[Exception], words: str
) -> None:
    table.write_text(text)
    with pytest.raises(error, match=words):
        read_column(table, **kwargs)


def test_missing_and_binary_files(tmp_path: Path) -> None:
    with pytest.raises(FormatError, match="paths are taken from the folder of the job file"):
        read_csv(tmp_path / "none.csv")
    (tmp_path / "binary.csv").write_bytes(b"\xff\xfe\x00\x01")
    with pytest.raises(FormatError, match="not a text file in UTF-8"):
        read_csv(tmp_path / "binary.csv")


def test_levels(table: Path) -> None:
    table.write_text("frequency,level [dB]\n50,71.5\n63,70\n")
    frequencies, levels = read_levels(table)
    np.testing.assert_array_equal(frequencies, [50, 63])
    np.testing.assert_array_equal(levels, [71.5, 70])
    table.write_text("frequency,re [Pa],im [Pa]\n50,1,2\n")
    with pytest.raises(FieldError, match="one column of levels in dB re 20 uPa"):
        read_levels(table)


SCAN = "x [mm],y [mm],z [mm],frequency,re [mm/s],im [mm/s]\n" + "".join(
    f"{x},{y},0,{f},{x + f},{y}\n" for f in (100, 50) for x in (0, 500) for y in (0, 400)
)


def test_scan_from_csv_in_any_order(table: Path) -> None:
    table.write_text(SCAN)
    points, frequencies, values, unit = read_scan(table)
    assert unit == "mm/s" and points.shape == (4, 3) and values.shape == (2, 4)
    np.testing.assert_array_equal(frequencies, [50, 100])
    x, y = points[:, 0] * 1e3, points[:, 1] * 1e3
    np.testing.assert_allclose(values, 1e-3 * (x[None] + frequencies[:, None] + 1j * y[None]))
    np.testing.assert_allclose(read_scan(table, time_sign="-")[2], values.conj())


def test_scan_with_a_hole_names_it(table: Path) -> None:
    table.write_text(SCAN.replace("500,400,0,50,550,400\n", ""))
    with pytest.raises(FormatError, match=r"point \(0\.5, 0\.4, 0\) m has 0 rows at 50 Hz, expected one"):
        read_scan(table)


@pytest.mark.parametrize("split", [False, True])
def test_scan_from_hdf5(tmp_path: Path, split: bool) -> None:
    values = np.array([[1 + 1j, 2, 3], [4, 5, 6j]])
    with h5py.File(tmp_path / "scan.h5", "w") as file:
        file["points"] = np.eye(3) * 1e3
        file["points"].attrs["unit"] = "mm"
        file["frequencies"] = [50.0, 100.0]
        if split:
            file["values_re"], file["values_im"] = values.real, values.imag
            file["values_re"].attrs["unit"] = "g"
        else:
            file["values"] = values
            file["values"].attrs["unit"] = "g"
    points, frequencies, read, unit = read_scan(tmp_path / "scan.h5")
    np.testing.assert_allclose(points, np.eye(3))
    np.testing.assert_allclose(read, values * 9.80665)
    assert unit == "g" and list(frequencies) == [50, 100]


def test_hdf5_without_its_datasets(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "scan.h5", "w") as file:
        file["points"] = np.eye(3)
    with pytest.raises(FormatError, match=r"no dataset 'frequencies'; expected points, frequencies, values\. It has: points"):
        read_scan(tmp_path / "scan.h5")
    (tmp_path / "text.h5").write_text("no")
    with pytest.raises(FormatError, match="not a readable HDF5 file"):
        read_arrays(tmp_path / "text.h5", ("points",))


def test_hdf5_with_an_unknown_unit(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "scan.h5", "w") as file:
        file["points"], file["frequencies"], file["values"] = np.eye(3), [50.0], np.ones((1, 3), complex)
        file["values"].attrs["unit"] = "knots"
    with pytest.raises(FieldError, match="unit 'knots' is not known"):
        read_scan(tmp_path / "scan.h5")
