import csv
from dataclasses import replace

import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st
from writer_cases import COLUMNS, lines, make

from geofractal.errors import OutputError
from geofractal.writer import refuse_clashes, short_names, write_data_dictionary
from geofractal.writer.names import fitted


def test_short_names_are_those_of_the_columns():
    assert short_names(COLUMNS, []) == ("div_dim", "div_rungs", "div_note", "shore_clsd")


def test_short_names_that_are_taken_are_numbered_within_ten_bytes():
    assert short_names(COLUMNS, ["DIV_DIM", "shore_clsd"]) == (
        "div_dim_1",
        "div_rungs",
        "div_note",
        "shore_cl_1",
    )


def test_names_are_cut_between_characters():
    assert fitted(["Größe_der_Fläche", "日本語の名前"], most_bytes=10) == ("Größe_de", "日本語")


def test_a_name_that_fits_keeps_itself_before_a_longer_one_is_cut_to_it():
    assert fitted(["a_long_name_x", "a_long_nam"], most_bytes=10) == ("a_long_n_1", "a_long_nam")


@given(st.lists(st.text(max_size=14), max_size=30), st.sampled_from([10, None]))
def test_fitted_names_are_short_enough_and_differ_by_more_than_case(names, most):
    found = fitted(names, most_bytes=most)
    assert len(found) == len(names)
    assert len({name.casefold() for name in found}) == len(names)
    assert most is None or all(len(name.encode()) <= most for name in found)


@pytest.mark.parametrize("name", ["divider_dim", "Divider_Dim"])
def test_a_new_column_with_a_name_in_use_is_refused_with_a_way_out(tmp_path, name):
    info = make(tmp_path / "a.gpkg", lines(1), {name: pa.array([1])})
    with pytest.raises(OutputError, match=r"already has a column named 'divider_dim'.*prefix: new"):
        refuse_clashes(info, COLUMNS)


def test_a_new_column_named_like_the_stored_feature_id_is_refused(tmp_path):
    info = make(tmp_path / "a.gpkg", lines(1), {"a": pa.array([1])})
    with pytest.raises(OutputError, match="already has a column named 'FID'"):
        refuse_clashes(info, [replace(COLUMNS[0], name="FID")])


def test_two_new_columns_of_one_name_are_refused(tmp_path):
    info = make(tmp_path / "a.gpkg", lines(1), {"a": pa.array([1])})
    with pytest.raises(OutputError, match="already has a column named 'divider_dim'"):
        refuse_clashes(info, [COLUMNS[0], COLUMNS[0]])


def test_the_dictionary_as_csv_holds_every_column_of_every_layer(tmp_path):
    table, _ = write_data_dictionary(tmp_path, {"shore": COLUMNS, "rivers": COLUMNS[:1]})
    with table.open(encoding="utf-8", newline="") as file:
        rows = list(csv.reader(file))
    assert rows[0] == ["layer", "name", "short_name", "type", "unit", "meaning", "formula", "source"]
    assert rows[1] == [
        "shore",
        "divider_dim",
        "div_dim",
        "number",
        "",
        "dimension of the line",
        "1 - slope",
        "a book",
    ]
    assert [row[0] for row in rows[1:]] == ["shore"] * 4 + ["rivers"]


def test_the_dictionary_as_markdown_keeps_its_table_whole_whatever_the_text(tmp_path):
    odd = replace(COLUMNS[0], meaning="a | b\nc")
    _, page = write_data_dictionary(tmp_path, {"shore": [odd]})
    row = page.read_text(encoding="utf-8").splitlines()[-1]
    assert row == r"| divider_dim | div_dim | number |  | a \| b c | 1 - slope | a book |"


def test_the_dictionary_is_the_same_bytes_each_time(tmp_path):
    first = [path.read_bytes() for path in write_data_dictionary(tmp_path / "a", {"shore": COLUMNS})]
    second = [path.read_bytes() for path in write_data_dictionary(tmp_path / "b", {"shore": COLUMNS})]
    assert first == second
