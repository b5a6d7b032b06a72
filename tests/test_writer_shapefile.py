import csv

import pyarrow as pa
import pyogrio
import pytest
import shapely
from writer_cases import COLUMNS, Answers, lines, make, read_rows

from geofractal.errors import OutputError
from geofractal.measure import Column
from geofractal.writer import write_layer


def copied(tmp_path, geometries, columns, *, new=COLUMNS, source="a.fgb", **options):
    info = make(tmp_path / source, geometries, columns, **options)
    written = write_layer(info, Answers(info.features, columns=new), new, tmp_path / "b.shp", "shapefile")
    return written, [str(loss) for loss in written.losses]


def dbf_fields(path):
    """Return the names in a .dbf: dBASE III has 32-byte records from byte 32, first the name."""
    header = path.read_bytes()
    length = int.from_bytes(header[8:10], "little")
    return [header[i : i + 11].split(b"\0")[0].decode() for i in range(32, length - 1, 32)]


def test_the_files_of_a_shapefile_and_its_table_of_names_are_published(tmp_path):
    written, _ = copied(tmp_path, lines(2), {"n": pa.array([1, 2])})
    assert sorted(p.name for p in tmp_path.glob("b.*")) == [
        "b.cpg",
        "b.dbf",
        "b.fields.csv",
        "b.prj",
        "b.shp",
        "b.shx",
    ]
    assert [path.name for path in written.paths] == ["b.shp", "b.fields.csv"]


def test_text_is_utf_8_and_says_so(tmp_path):
    copied(tmp_path, lines(1), {"name": pa.array(["Åland 日本"])})
    assert (tmp_path / "b.cpg").read_bytes() == b"UTF-8"
    assert "Åland 日本".encode() in (tmp_path / "b.dbf").read_bytes()


def test_names_in_the_table_are_at_most_ten_bytes_and_cut_between_characters(tmp_path):
    copied(tmp_path, lines(1), {"Größe_der_Fläche": pa.array([1]), "Größe_des_Randes": pa.array([2])})
    assert dbf_fields(tmp_path / "b.dbf") == [
        "Größe_de",
        "Größe__1",
        "div_dim",
        "div_rungs",
        "div_note",
        "shore_clsd",
    ]


def test_the_table_of_names_gives_the_full_name_unit_and_meaning_of_each_field(tmp_path):
    new = [Column("length_at_1000m_ruler_km", "len_1000m", "number", "km", "walked length")]
    copied(tmp_path, lines(1), {"a_very_long_name": pa.array([1])}, new=new)
    with (tmp_path / "b.fields.csv").open(encoding="utf-8", newline="") as file:
        assert list(csv.reader(file)) == [
            ["short_name", "name", "unit", "meaning"],
            ["a_very_lon", "a_very_long_name", "", ""],
            ["len_1000m", "length_at_1000m_ruler_km", "km", "walked length"],
        ]


def test_short_names_in_use_are_told(tmp_path):
    _, losses = copied(tmp_path, lines(1), {"div_dim": pa.array([1])})
    assert "column 'divider_dim': is named 'div_dim_1'" in losses


def test_more_than_a_hundred_names_that_begin_alike_are_told_apart(tmp_path):
    copied(tmp_path, lines(1), {f"length_at_{i}m_ruler": pa.array([i]) for i in range(150)})
    found, _ = read_rows(tmp_path / "b.shp")
    assert list(found.values())[:150] == [[i] for i in range(150)]


def test_text_is_cut_between_characters_at_254_bytes_and_that_is_told(tmp_path):
    _, losses = copied(tmp_path, lines(3), {"s": pa.array(["x" * 300, "x" + "é" * 200, "é" * 127])})
    found, _ = read_rows(tmp_path / "b.shp")
    assert found["s"] == ["x" * 254, "x" + "é" * 126, "é" * 127]
    assert "column 's': text is cut to 254 bytes, and empty text becomes missing" in losses


def test_new_texts_are_cut_alike_and_that_is_told(tmp_path):
    _, losses = copied(tmp_path, lines(1), {"n": pa.array([1])})
    assert "column 'divider_note': text is cut to 254 bytes, and empty text becomes missing" in losses


def test_numbers_that_a_field_cannot_hold_become_missing_not_others_and_that_is_told(tmp_path):
    _, losses = copied(tmp_path, lines(4), {"x": pa.array([1e300, -1e23, 9.5e21, 123456.789012345])})
    found, _ = read_rows(tmp_path / "b.shp")
    assert found["x"] == [None, None, 9.5e21, 123456.789012345]
    assert "column 'x': numbers keep 15 decimals, and those of 1e22 and more become missing" in losses


def test_flags_and_whole_numbers_keep_their_type(tmp_path):
    copied(tmp_path, lines(2), {"b": pa.array([True, None]), "i": pa.array([2**53 + 1, None])})
    found, _ = read_rows(tmp_path / "b.shp")
    assert (found["b"], found["i"]) == ([True, None], [2**53 + 1, None])


def test_latin_1_attributes_of_a_source_arrive_as_they_read(tmp_path):
    info = make(tmp_path / "a.shp", lines(1), {"name": pa.array(["Åland"])}, ENCODING="ISO-8859-1")
    write_layer(info, Answers(1), COLUMNS, tmp_path / "b.shp", "shapefile")
    found, _ = read_rows(tmp_path / "b.shp")
    assert found["name"] == ["Åland"]


def test_the_limit_of_two_gigabytes_is_asked_of_gdal(tmp_path, monkeypatch):
    asked = {}
    write = pyogrio.raw.write_arrow

    def spy(*args, **options):
        asked.update(options)
        return write(*args, **options)

    monkeypatch.setattr(pyogrio.raw, "write_arrow", spy)
    copied(tmp_path, lines(1), {"n": pa.array([1])})
    assert asked["2GB_LIMIT"] == "YES"


def test_a_layer_beyond_the_limit_is_refused_with_a_way_out(tmp_path, monkeypatch):
    info = make(tmp_path / "a.fgb", lines(3), {"n": pa.array([1, 2, 3])})

    def full(_, path, **__):
        with path.open("wb") as file:
            file.truncate(2_147_000_000)  # a hole, which takes no room
        raise pyogrio.errors.DataLayerError("No such file or directory")

    monkeypatch.setattr(pyogrio.raw, "write_arrow", full)
    with pytest.raises(
        OutputError, match=r"whose \.shp holds 2 GB at most: choose another format, such as geopackage"
    ):
        write_layer(info, Answers(3), COLUMNS, tmp_path / "b.shp", "shapefile")


def test_a_table_that_was_cut_off_is_found_out(tmp_path, monkeypatch):
    write = pyogrio.raw.write_arrow
    info = make(tmp_path / "a.fgb", lines(3), {"n": pa.array([1, 2, 3])})

    def cut(reader, path, **options):
        write(reader, path, **options)
        table = path.with_suffix(".dbf")
        table.write_bytes(table.read_bytes()[:-20])

    monkeypatch.setattr(pyogrio.raw, "write_arrow", cut)
    with pytest.raises(OutputError, match="0 of 3 rows can be read from what was written"):
        write_layer(info, Answers(3), COLUMNS, tmp_path / "b.shp", "shapefile")


def test_empty_geometries_are_told_to_become_missing(tmp_path):
    shapes = [shapely.LineString([(0, 0), (1, 1)]), shapely.LineString()]
    _, losses = copied(tmp_path, shapes, {"n": pa.array([1, 2])}, source="a.gpkg")
    _, wkb = read_rows(tmp_path / "b.shp")
    assert wkb[1] is None
    assert "empty geometries become missing ones" in losses
