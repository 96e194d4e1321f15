"""Data files of any dialect and format become the same table; bad ones are told where they are bad."""

from __future__ import annotations

import gzip
from pathlib import Path

import h5py
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal

from gapfit.columns import kind_of_name, split_heading
from gapfit.errors import FileError
from gapfit.tabular import (
    UNITS,
    ColumnRule,
    Table,
    looks_like_magnitude,
    parse_unit,
    read_table,
    resolved_unit,
    take,
    unit_notice,
)

NAMES = ("B", "T_mK", "Vxx_X", "Vxy_X", "I", "Vg")
UNIT_ROW = ("T", "mK", "V", "V", "A", "V")


def written(folder: Path, text: str, encoding: str = "utf-8") -> Path:
    path = folder / "sweep.dat"
    path.write_bytes(text.encode(encoding))
    return path


def read(folder: Path, text: str, encoding: str = "utf-8") -> Table:
    return read_table(written(folder, text, encoding))


def fails(folder: Path, text: str, match: str) -> FileError:
    with pytest.raises(FileError, match=match) as caught:
        read(folder, text)
    return caught.value


# --- any dialect reads back ------------------------------------------------------------------------------

NUMBERS = st.floats(allow_nan=False, allow_infinity=False, width=64, min_value=-1e20, max_value=1e20)


@st.composite
def delimited_files(draw: st.DrawFn) -> tuple[np.ndarray, bytes, bool, bool]:
    """Numbers, the bytes of a file that holds them, and whether it has names and units."""
    width = draw(st.integers(2, len(NAMES)))
    rows = draw(st.lists(st.lists(NUMBERS, min_size=width, max_size=width), min_size=3, max_size=12))
    delimiter, comma = draw(
        st.sampled_from([("\t", False), ("\t", True), (";", False), (";", True), (",", False), ("  ", False)])
    )
    if delimiter != "," and draw(st.booleans()):
        delimiter = f" {delimiter}" if delimiter != "  " else " \t "
    heading = draw(st.sampled_from(["none", "plain", "comment", "units in names", "unit row"]))
    marker = draw(st.sampled_from(["# ", "% ", "// ", "#"]))
    preamble = draw(
        st.sampled_from(["", "# taken at night\n", "Rig number seven was used for all of this\n\n"])
    )
    names = list(NAMES[:width])
    if heading == "units in names":
        names = [f"{name} ({unit})" for name, unit in zip(names, UNIT_ROW, strict=False)]
    lines = [preamble.rstrip("\n")] if preamble else []
    if heading != "none":
        lines += [(marker if heading == "comment" else "") + delimiter.join(names)]
    if heading == "unit row":
        lines += [delimiter.join(UNIT_ROW[:width])]
    text_of = (lambda x: repr(x).replace(".", ",")) if comma else repr
    lines += [delimiter.join(map(text_of, row)) for row in rows]
    ending = draw(st.sampled_from(["\n", "\r\n", "\r"]))
    encoding = draw(st.sampled_from(["utf-8", "utf-8-sig", "utf-16", "utf-16-le", "utf-16-be", "latin-1"]))
    data = (ending.join(lines) + draw(st.sampled_from(["", ending]))).encode(encoding)
    return np.array(rows), gzip.compress(data) if draw(st.booleans()) else data, heading != "none", heading


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(case=delimited_files())
def test_any_dialect_reads_back_bit_for_bit(case, tmp_path):
    rows, data, named, heading = case
    path = tmp_path / "any.txt"
    path.write_bytes(data)
    table = read_table(path)
    width = rows.shape[1]
    assert table.columns == (NAMES[:width] if named else tuple(str(i + 1) for i in range(width)))
    assert_array_equal(np.column_stack([table.values[name] for name in table.columns]), rows)
    if heading in ("units in names", "unit row"):
        assert table.units == UNIT_ROW[:width]
    assert len(table) == len(rows)


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16", "utf-16-le", "utf-16-be", "latin-1"])
def test_unit_with_a_micro_sign_in_every_encoding(tmp_path, encoding):
    table = read(tmp_path, "B (T)\tVxx (µV)\n1.5\t-2\n2.5\t3\n", encoding)
    assert table.columns == ("B", "Vxx")
    assert table.units == ("T", "uV")


def test_space_separated_names_with_units_in_brackets(tmp_path):
    table = read(tmp_path, "B (T)  T (mK)  R (kΩ)\n 1.0   2.0 \t 3.0\n 1.5   2.0    3.5\n")
    assert table.columns == ("B", "T", "R")
    assert table.units == ("T", "mK", "kohm")


def test_commented_heading_with_commas_over_space_separated_numbers(tmp_path):
    assert read(tmp_path, "% B, T, V\n1 2 3\n4 5 6\n").columns == ("B", "T", "V")


def test_quoted_cells_and_decimal_commas(tmp_path):
    table = read(tmp_path, '"B","T","R"\n"1,5","2","3"\n"2,5","2","3"\n')
    assert_array_equal(table.values["B"], [1.5, 2.5])


def test_text_columns_beside_numbers(tmp_path):
    table = read(tmp_path, "time\tB\tR\n2031-02-03 10:00:00\t0,5\t3,2\n2031-02-03 10:00:01\t1\t3\n")
    assert_array_equal(table.texts["time"], ["2031-02-03 10:00:00", "2031-02-03 10:00:01"])
    assert_array_equal(table.values["B"], [0.5, 1.0])


def test_fillings_stay_text_when_asked(tmp_path):
    path = written(tmp_path, "filling,T,R\n1,0.1,3\n1/3,0.2,6\n2,0.1,9\n")
    table = read_table(path, text_columns=("filling",))
    assert_array_equal(table.texts["filling"], ["1", "1/3", "2"])
    assert_array_equal(table.row, [2, 3, 4])


def test_text_column_that_begins_with_text_keeps_its_first_rows(tmp_path):
    path = written(tmp_path, "filling,T,R\n1/3,0.1,3\n1,0.2,6\n2,0.1,9\n3,0.1,9\n")
    assert_array_equal(read_table(path, text_columns=("filling",)).texts["filling"], ["1/3", "1", "2", "3"])


def test_trailing_delimiters_make_no_column(tmp_path):
    for heading in ("B;T;R", "B;T;R;"):
        table = read(tmp_path, f"{heading}\n1;2;3;\n4;5;6;\n")
        assert table.columns == ("B", "T", "R")
        assert table.notices == ()


def test_an_empty_column_is_left_out_with_a_notice(tmp_path):
    table = read(tmp_path, "B,T,spare,R\n1,2,,3\n4,5,,6\n")
    assert table.columns == ("B", "T", "R")
    assert "'spare' is empty" in table.notices[0]


def test_equal_names_are_told_apart(tmp_path):
    table = read(tmp_path, "V,V,B\n1,2,3\n4,5,6\n")
    assert table.columns == ("V", "V (2)", "B")
    assert "more than once" in table.notices[0]


def test_no_heading_gives_numbered_columns_and_says_so(tmp_path):
    table = read(tmp_path, "1 2 3\n4 5 6\n")
    assert table.columns == ("1", "2", "3")
    assert "called 1, 2, 3" in table.notices[0]


def test_exponents_of_other_habits(tmp_path):
    table = read(tmp_path, "B\tV\n1.0D-3\t−2.5\n2E+00\t+.5\n")
    assert_array_equal(table.values["B"], [1e-3, 2.0])
    assert_array_equal(table.values["V"], [-2.5, 0.5])


def test_comments_are_kept(tmp_path):
    table = read(tmp_path, "# current 10 nA\nsample harebell\nB\tV\n1\t2\n# range changed\n3\t4\n")
    assert table.comments == ("current 10 nA", "sample harebell", "range changed")
    assert_array_equal(table.block, [0, 0])


def test_the_fast_and_the_careful_way_agree_over_many_chunks(tmp_path):
    rng = np.random.default_rng(5)
    numbers = rng.standard_normal((45_000, 3))
    lines = [f"{a!r}\t{b!r}\t{c!r}" for a, b, c in numbers.tolist()]
    lines.insert(21_000, "")  # one chunk holds a blank line and is read with care
    table = read(tmp_path, "B\tT\tV\n" + "\n".join(lines) + "\n")
    assert_array_equal(np.column_stack(list(table.values.values())), numbers)
    assert_array_equal(np.unique(table.block, return_counts=True)[1], [21_000, 24_000])
    assert_array_equal(table.row[[0, 20_999, 21_000, 44_999]], [2, 21_001, 21_003, 45_002])


# --- blocks, cut-off files -------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "between",
    ["\n", "\n\n", "B T V\n", "\nB T V\n", ";;\n".replace(";", " "), "Sweep two began\nB T V\n", "#B T V\n"],
)
def test_blocks_of_one_log_file(tmp_path, between):
    heading = "#B T V\n" if between == "#B T V\n" else "B T V\n"
    table = read(tmp_path, f"{heading}1 2 3\n4 5 6\n{between}7 8 9\n")
    assert_array_equal(table.values["B"], [1, 4, 7])
    assert_array_equal(table.block, [0, 0, 1])
    assert table.row[-1] == 4 + between.count("\n")


def test_a_file_with_every_second_line_blank_is_one_block(tmp_path):
    table = read(tmp_path, "B T\n\n" + "\n\n".join(f"{i} {i}" for i in range(8)) + "\n")
    assert set(table.block) == {0}


@pytest.mark.parametrize("last", ["7\t8", "7\t8\t9.0e-", "7\t8\t", "7", "7\t-"])
def test_a_last_row_that_was_cut_off_is_left_out_with_a_notice(tmp_path, last):
    table = read(tmp_path, f"B\tT\tV\n1\t2\t3\n4\t5\t6\n{last}")
    assert_array_equal(table.values["V"], [3, 6])
    assert table.notices == ("row 4 was cut off while the file was written, and is left out",)


def test_a_whole_last_row_without_line_end_is_kept(tmp_path):
    assert len(read(tmp_path, "B\tT\n1\t2\n3\t4")) == 2


def test_a_cut_off_gzip_file_gives_its_whole_rows(tmp_path):
    rng = np.random.default_rng(3)
    numbers = rng.standard_normal((2000, 2))
    text = "B T\n" + "".join(f"{a!r} {b!r}\n" for a, b in numbers.tolist())
    path = tmp_path / "cut.gz"
    path.write_bytes(gzip.compress(text.encode())[:-4000])
    table = read_table(path)
    assert 500 < len(table) < 2000
    # the number in which the file ends may itself be cut short, every earlier one is whole
    assert_array_equal(table.values["T"][:-1], numbers[: len(table) - 1, 1])
    assert "cut off" in table.notices[0]


def test_zero_bytes_at_the_end_are_left_out(tmp_path):
    table = read(tmp_path, "B T\n1 2\n3 4\n" + "\0" * 200)
    assert_array_equal(table.values["T"], [2, 4])
    assert "zero bytes" in table.notices[0]


# --- bad files -------------------------------------------------------------------------------------------


def test_text_in_a_number_column(tmp_path):
    error = fails(tmp_path, "B,T,V\n1,2,3\n4,oops,6\n7,8,9\n", "'oops' where a number is expected")
    assert (error.row, error.column) == (3, "T")
    assert error.file == str(tmp_path / "sweep.dat")


def test_text_in_the_first_row_does_not_pass_for_a_preamble(tmp_path):
    error = fails(tmp_path, "B,T,V\nx,2,3\n4,5,6\n7,8,9\n", "'x' where a number")
    assert (error.row, error.column) == (2, "B")


def test_text_far_down_a_long_file(tmp_path):
    body = [f"{i},{i},{i}" for i in range(50_000)]
    body[43_210] = "1,2,3x"
    error = fails(tmp_path, "B,T,V\n" + "\n".join(body) + "\n", "'3x'")
    assert (error.row, error.column) == (43_212, "V")


@pytest.mark.parametrize("row", ["4,5", "4,5,6,7"])
def test_ragged_rows(tmp_path, row):
    error = fails(tmp_path, f"B,T,V\n1,2,3\n{row}\n7,8,9\n", "where the other rows have 3")
    assert error.row == 3


def test_a_last_row_that_is_too_long_is_no_cut(tmp_path):
    assert fails(tmp_path, "B,T,V\n1,2,3\n4,5,6\n7,8,9,9", "found 4 values").row == 4


def test_heading_of_another_width(tmp_path):
    error = fails(tmp_path, "B,T\n1,2,3\n4,5,6\n", "2 names, but the rows below have 3 values")
    assert error.row == 1


@pytest.mark.parametrize("cell", ["nan", "NaN", "", "--", "#N/A"])
def test_missing_cells_are_refused_or_kept(tmp_path, cell):
    path = written(tmp_path, f"B,T,V\n1,2,3\n4,{cell},6\n7,8,9\n")
    with pytest.raises(FileError, match="missing reading must be left out") as caught:
        read_table(path)
    assert (caught.value.row, caught.value.column) == (3, "T")
    kept = read_table(path, missing="keep")
    assert_array_equal(kept.values["T"], [2, np.nan, 8])
    assert_array_equal(take(kept, ColumnRule("V"), "voltage", "V"), [3, 6, 9])
    with pytest.raises(FileError, match="found NaN"):
        take(kept, ColumnRule("T"), "temperature", "K")


@pytest.mark.parametrize("row", [",,", "nan,nan,nan", " , , "])
def test_rows_that_are_wholly_empty_are_skipped(tmp_path, row):
    assert_array_equal(read(tmp_path, f"B,T,V\n1,2,3\n{row}\n7,8,9\n").values["B"], [1, 7])


@pytest.mark.parametrize("marker", ["9.9E37", "-9.9e+37", "inf"])
def test_overload_markers_are_no_readings(tmp_path, marker):
    table = read(tmp_path, f"B,V\n1,2\n4,{marker}\n7,8\n")
    with pytest.raises(FileError, match="overload marker") as caught:
        take(table, ColumnRule("V"), "voltage", "V")
    assert caught.value.row == 3


@pytest.mark.parametrize(
    ("data", "match"),
    [
        (b"", "file is empty"),
        (b"\n \t\n\n", "file is empty"),
        (b"\xef\xbb\xbf", "file is empty"),
        (b"\0" * 50, "file is empty"),
        (gzip.compress(b""), "file is empty"),
        (b"only words here\nand here\n", "no rows of numbers"),
        (b"# only\n# comments\n", "no rows of numbers"),
        (b"PK\x03\x04 and so on", "spreadsheet or zip"),
        (bytes(range(256)) * 20, "neither text nor HDF5 nor NetCDF"),
        (b"\x1f\x8b" + b"junk" * 10, "compressed file is damaged"),
        (b"\x89HDF\r\n\x1a\n" + b"junk" * 30, "HDF5 file is damaged"),
        (b"CDF\x01" + b"junk" * 30, "NetCDF file is damaged"),
    ],
)
def test_files_that_hold_no_table(tmp_path, data, match):
    path = tmp_path / "bad.dat"
    path.write_bytes(data)
    with pytest.raises(FileError, match=match):
        read_table(path)


def test_absent_file_and_folder(tmp_path):
    with pytest.raises(FileError, match="no such file"):
        read_table(tmp_path / "none.csv")
    with pytest.raises(FileError, match="folder, not a data file"):
        read_table(tmp_path)


def test_decimal_points_in_a_file_of_decimal_commas(tmp_path):
    error = fails(tmp_path, "B;T\n0,1;0,2\n0.3;0,4\n0,5;0,6\n", "decimals have a comma in this file")
    assert (error.row, error.column) == (3, "B")


# --- HDF5 and NetCDF -------------------------------------------------------------------------------------


def test_hdf5_datasets_of_one_level(tmp_path):
    path = tmp_path / "a.h5"
    with h5py.File(path, "w") as file:
        file["B"], file["Vxx"], file["T_mK"] = np.arange(4.0), np.arange(4) - 2, 60.0
        file["Vxx"].attrs["units"] = "uV"
        file.attrs["current"] = "10 nA"
    table = read_table(path)
    assert_array_equal(table.values["T_mK"], [60.0] * 4)
    assert table.unit("Vxx") == "uV"
    assert table.unit("T_mK") == "mK"
    assert table.comments == ("current = 10 nA",)
    assert_array_equal(table.row, [1, 2, 3, 4])


def test_hdf5_groups_become_blocks_with_their_attributes(tmp_path):
    path = tmp_path / "a.h5"
    with h5py.File(path, "w") as file:
        for i, temperature in enumerate((0.1, 0.2)):
            group = file.create_group(f"sweep{i}")
            group["B"], group["R"] = np.arange(3.0), np.full(3, float(i))
            group.attrs["temperature_K"] = temperature
    table = read_table(path)
    assert_array_equal(table.block, [0, 0, 0, 1, 1, 1])
    assert_array_equal(table.values["temperature_K"], [0.1] * 3 + [0.2] * 3)
    assert_array_equal(table.row, [1, 2, 3, 1, 2, 3])


def test_hdf5_compound_dataset(tmp_path):
    path = tmp_path / "a.h5"
    with h5py.File(path, "w") as file:
        file["log"] = np.array([(1.0, 2), (3.0, 4)], dtype=[("B", "f8"), ("n", "i4")])
    assert_array_equal(read_table(path).values["n"], [2, 4])


def test_hdf5_columns_of_unequal_length(tmp_path):
    path = tmp_path / "a.h5"
    with h5py.File(path, "w") as file:
        file["B"], file["V"] = np.arange(4.0), np.arange(3.0)
    with pytest.raises(FileError, match="3 values here but 4 in 'B'") as caught:
        read_table(path)
    assert caught.value.column == "V"


def test_hdf5_groups_of_unlike_content(tmp_path):
    path = tmp_path / "a.h5"
    with h5py.File(path, "w") as file:
        file["one/B"], file["two/V"] = np.arange(4.0), np.arange(4.0)
    with pytest.raises(FileError, match="differing: B, V"):
        read_table(path)


def test_classic_and_new_netcdf_agree(tmp_path):
    import xarray

    data = xarray.Dataset(
        {
            "Vxx": ("B", np.array([1.5, -0.5, 2.0]), {"units": "mV"}),
            "T": ("B", np.full(3, 0.3), {"units": "K"}),
        },
        coords={"B": ("B", np.array([0.0, 0.5, 1.0]), {"units": "T"})},
    )
    data.to_netcdf(tmp_path / "old.nc", engine="scipy")
    data.to_netcdf(tmp_path / "new.nc", engine="h5netcdf")
    old, new = read_table(tmp_path / "old.nc"), read_table(tmp_path / "new.nc")
    for table in (old, new):
        assert_array_equal(take(table, ColumnRule("Vxx"), "voltage", "V"), np.array([1.5, -0.5, 2.0]) * 1e-3)
        assert table.unit("B") == "T"
    assert set(old.columns) == set(new.columns) == {"Vxx", "T", "B"}


def test_netcdf_packed_values_and_fill_values(tmp_path):
    path = tmp_path / "a.nc"
    with h5py.File(path, "w") as file:
        file["B"] = np.arange(3.0)
        file["V"] = np.array([10, -999, 30], dtype="i2")
        file["V"].attrs.update({"scale_factor": 0.1, "add_offset": 1.0, "_FillValue": np.int16(-999)})
    with pytest.raises(FileError, match="NaN") as caught:
        read_table(path)
    assert (caught.value.row, caught.value.column) == (2, "V")
    np.testing.assert_allclose(read_table(path, missing="keep").values["V"], [2.0, np.nan, 4.0])


# --- columns and units -----------------------------------------------------------------------------------


@pytest.fixture
def table(tmp_path) -> Table:
    return read(tmp_path, "B (kG)\tT_mK\tVxx\tnote\n10\t60\t1e-6\tup\n20\t70\t-2e-6\tup\n")


def test_take_converts_to_house_units(table):
    np.testing.assert_allclose(take(table, ColumnRule("B"), "field", "T"), [1, 2], rtol=1e-15)
    np.testing.assert_allclose(take(table, ColumnRule("T_mK"), "temperature", "K"), [0.06, 0.07], rtol=1e-15)
    assert_array_equal(take(table, ColumnRule("Vxx"), ("voltage", "resistance"), "V"), [1e-6, -2e-6])


def test_scale_and_offset_come_before_the_unit(table):
    rule = ColumnRule("T_mK", "mK", scale=2.0, offset=5.0)
    np.testing.assert_allclose(take(table, rule, "temperature", "K"), [0.125, 0.145], rtol=1e-15)


def test_a_scale_may_change_the_dimension(table):
    rule = ColumnRule("T_mK", "V", scale=1e-3)
    np.testing.assert_allclose(take(table, rule, "voltage", "V"), [0.06, 0.07], rtol=1e-15)


def test_column_by_position_and_by_full_heading(table):
    assert table.find(2) == "T_mK"
    assert table.find("B (kG)") == table.find("B(kG)") == "B"


def test_wrong_column_names_the_near_and_all(table):
    with pytest.raises(FileError, match=r"did you mean 'Vxx'.*the columns are B, T_mK, Vxx, note"):
        take(table, ColumnRule("vxx_"), "voltage", "V")
    with pytest.raises(FileError, match="there are 4 columns"):
        take(table, ColumnRule(9), "voltage", "V")


def test_wrong_units(table):
    with pytest.raises(FileError, match="'furlong' cannot be used for a field; allowed are T, mT, G, kG"):
        take(table, ColumnRule("B", "furlong"), "field", "T")
    with pytest.raises(FileError, match="'mV' cannot be used for a temperature"):
        take(table, ColumnRule("T_mK", "mV"), "temperature", "K")


def test_the_files_unit_of_another_dimension_is_an_error(table):
    with pytest.raises(FileError, match=r"in mK \(a temperature\), but the study takes it as a voltage"):
        take(table, ColumnRule("T_mK", "V"), "voltage", "V")
    with pytest.raises(FileError, match="in kG"):
        take(table, ColumnRule("B"), "temperature", "K")


def test_another_unit_of_the_same_dimension_is_a_notice(table):
    rule = ColumnRule("T_mK", "K")
    assert "the file says mK, the study says K; K is used" in (unit_notice(table, rule) or "")
    assert_array_equal(take(table, rule, "temperature", "K"), [60, 70])
    assert unit_notice(table, ColumnRule("T_mK", "mK")) is None
    assert unit_notice(table, ColumnRule("Vxx", "V")) is None


def test_resolved_unit_tells_volts_from_ohms(table):
    assert (
        resolved_unit(table, ColumnRule("Vxx", "ohm"), ("voltage", "resistance"), "V").dimension
        == "resistance"
    )
    assert resolved_unit(table, ColumnRule("Vxx"), ("voltage", "resistance"), "V").dimension == "voltage"


def test_a_text_column_is_refused(table):
    with pytest.raises(FileError, match="'up', but this column must hold numbers") as caught:
        take(table, ColumnRule("note"), "voltage", "V")
    assert (caught.value.row, caught.value.column) == (2, "note")


def test_tables_are_read_only(table):
    with pytest.raises(ValueError, match="read-only"):
        table.values["B"][0] = 1.0


@pytest.mark.parametrize(
    ("text", "name"),
    [
        *[(name, name) for name in UNITS],
        ("µV", "uV"), ("μK", "uK"), ("Ω", "ohm"), ("kΩ", "kohm"), ("MΩ", "Mohm"), ("mΩ", "mohm"),
        ("Ohm", "ohm"), ("[ohms]", "ohm"), ("(T)", "T"), ("Tesla", "T"), ("Kelvin", "K"), ("volts", "V"),
        ("1/cm^2", "cm^-2"),
        ("cm-2", "cm^-2"), ("1/m2", "m^-2"), ("cm⁻²", "cm^-2"), ("ohm/sq", "ohm"), ("Ω/□", "ohm"),
    ],
)  # fmt: skip
def test_spellings_of_units(text, name):
    unit = parse_unit(text)
    assert unit is not None
    assert unit.name == name


@pytest.mark.parametrize("text", ["", "furlong", "mk", "X", "a.u.", "dB"])
def test_no_units(text):
    assert parse_unit(text) is None


@pytest.mark.parametrize(
    ("heading", "expected"),
    [
        ("B (T)", ("B", "T")),
        ("B [T]", ("B", "T")),
        ("B / T", ("B", "T")),
        ("T_mK", ("T_mK", "mK")),
        ("rho_xx_ohm", ("rho_xx_ohm", "ohm")),
        ("V_G", ("V_G", None)),
        ("Vxx_A", ("Vxx_A", None)),
        ("V/I", ("V/I", None)),
        ("Vxx (X)", ("Vxx (X)", None)),
    ],
)
def test_names_and_units_of_headings(heading, expected):
    assert split_heading(heading) == expected


@pytest.mark.parametrize(
    ("name", "kind"),
    [
        ("B", "field"), ("Magnet", "field"), ("Field", "field"), ("T_mK", "temperature"),
        ("Bath", "temperature"),
        ("T", "temperature"), ("temperature_K", "temperature"), ("Vxx_X", "voltage"), ("Uxx_X", "voltage"),
        ("U_xx", "voltage"), ("B_mag", "field"), ("status", None),
        ("V_G", "gate"), ("U_gate", "gate"), ("I_nA", "current"), ("Rxx", "resistance"), ("time", "time"),
    ],
)  # fmt: skip
def test_kinds_of_names(name, kind):
    assert kind_of_name(name) == kind


# --- lock-in magnitudes ----------------------------------------------------------------------------------

POSITIVE = np.array([1e-7, 2e-7, 5e-8])
SIGNED = np.array([1e-7, -2e-7, 5e-8])


@pytest.mark.parametrize(
    "name", ["R", "Vxx_R", "Vxx mag", "magnitude", "Amplitude (V)", "|V|", "lockin1_R", "R1"]
)
def test_names_of_magnitudes(name):
    assert looks_like_magnitude(name, POSITIVE)
    assert not looks_like_magnitude(name, SIGNED)


@pytest.mark.parametrize("name", ["Vxx_X", "Vxx", "rho_xx", "Rxx", "B_mag", "magnet", "R_xx"])
def test_names_of_no_magnitudes(name):
    assert not looks_like_magnitude(name, POSITIVE)


def test_a_resistance_called_r_is_no_magnitude():
    assert not looks_like_magnitude("R", POSITIVE, unit="ohm")
    assert looks_like_magnitude("R", POSITIVE, unit="uV")


def test_a_column_beside_its_own_channels_that_is_never_negative():
    columns = ("B", "Vxx", "Vxx_X", "Vxx_Y")
    assert looks_like_magnitude("Vxx", POSITIVE, columns)
    assert not looks_like_magnitude("Vxx", SIGNED, columns)
    assert not looks_like_magnitude("Vxx_X", POSITIVE, columns)
    assert not looks_like_magnitude("Vxx", POSITIVE, ("B", "Vxx", "Vxy_X", "Vxy_Y"))


# --- nothing but a FileError ever comes out ---------------------------------------------------------------

PIECES = st.sampled_from(
    [
        "1",
        "2.5",
        "-3e-7",
        "1,5",
        "nan",
        "B",
        "T (K)",
        "\t",
        ";",
        ",",
        " ",
        "\n",
        "\r\n",
        "#",
        '"',
        "'",
        "\0",
        "é",
        "/",
        "|",
    ]
)


@settings(max_examples=300, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    data=st.one_of(
        st.binary(max_size=300),
        st.lists(PIECES, max_size=80).map(lambda pieces: "".join(pieces).encode("latin-1")),
        st.binary(max_size=60).map(lambda junk: b"\x89HDF\r\n\x1a\n" + junk),
        st.binary(max_size=60).map(lambda junk: b"CDF\x01" + junk),
        st.binary(max_size=60).map(lambda junk: gzip.compress(b"1 2\n3 4\n")[:-8] + junk),
    )
)
def test_any_bytes_give_a_table_or_a_file_error(data, tmp_path):
    path = tmp_path / "any.bin"
    path.write_bytes(data)
    try:
        table = read_table(path, missing="keep")
    except FileError:
        return
    assert len(table) > 0
    assert all(len(column) == len(table) for column in (*table.values.values(), *table.texts.values()))
    assert np.all(np.diff(table.row) > 0)
