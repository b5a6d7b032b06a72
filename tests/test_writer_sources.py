import hashlib
import os
import sqlite3

import pytest

from geofractal.errors import OutputError, SourceChangedError, SourceError
from geofractal.writer.sources import check_unchanged, fingerprint, refuse_sources


@pytest.fixture
def source(tmp_path):
    path = tmp_path / "shore.gpkg"
    path.write_bytes(b"some layers")
    return path


REFUSED = "would overwrite the source .*choose another output folder"


def test_a_target_with_the_path_of_a_source_is_refused(source):
    with pytest.raises(OutputError, match=REFUSED):
        refuse_sources([source], [source])


def test_a_target_with_a_roundabout_path_to_a_source_is_refused(source):
    with pytest.raises(OutputError, match=REFUSED):
        refuse_sources([source.parent / "." / ".." / source.parent.name / source.name], [source])


def test_a_symbolic_link_to_a_source_is_refused(source, tmp_path):
    link = tmp_path / "out.gpkg"
    link.symlink_to(source)
    with pytest.raises(OutputError, match=REFUSED):
        refuse_sources([link], [source])


def test_a_hard_link_to_a_source_is_refused(source, tmp_path):
    link = tmp_path / "out.gpkg"
    os.link(source, link)
    with pytest.raises(OutputError, match=REFUSED):
        refuse_sources([link], [source])


def test_a_link_to_the_folder_of_a_source_is_refused(source, tmp_path):
    (tmp_path / "out").symlink_to(tmp_path)
    with pytest.raises(OutputError, match=REFUSED):
        refuse_sources([tmp_path / "out" / source.name], [source])


def test_a_target_whose_name_differs_by_case_alone_is_refused(source):
    with pytest.raises(OutputError, match=REFUSED):
        refuse_sources([source.with_name("SHORE.GPKG")], [source])


def test_a_target_whose_name_differs_by_the_form_of_its_accents_alone_is_refused(tmp_path):
    with pytest.raises(OutputError, match=REFUSED):
        refuse_sources([tmp_path / "ku\u0308ste.gpkg"], [tmp_path / "k\u00fcste.gpkg"])


def test_a_shapefile_whose_table_is_a_source_is_refused(tmp_path):
    for suffix in (".shp", ".shx", ".dbf"):
        (tmp_path / f"a{suffix}").write_bytes(b"x")
    os.link(tmp_path / "a.dbf", tmp_path / "b.dbf")
    with pytest.raises(OutputError, match=REFUSED):
        refuse_sources([tmp_path / "b.shp"], [tmp_path / "a.shp"])


def test_another_file_beside_a_source_is_allowed(source):
    refuse_sources([source.with_name("shore_out.gpkg")], [source])


def test_the_sum_of_one_file_is_its_own(source):
    found = fingerprint(source)
    assert found == (11, source.stat().st_mtime_ns, hashlib.sha256(b"some layers").hexdigest())


def test_a_shapefile_counts_with_its_parts_as_sha256sum_lists_them(tmp_path):
    for suffix in (".shp", ".dbf", ".CPG", ".txt"):
        (tmp_path / f"a{suffix}").write_bytes(suffix.encode())
    listed = "".join(
        f"{hashlib.sha256(suffix.encode()).hexdigest()}  a{suffix}\n" for suffix in (".CPG", ".dbf", ".shp")
    )
    found = fingerprint(tmp_path / "a.shp")
    assert (found.size, found.sha256) == (12, hashlib.sha256(listed.encode()).hexdigest())


def test_changes_beside_a_database_change_its_fingerprint(tmp_path):
    path = tmp_path / "a.gpkg"
    database = sqlite3.connect(path)
    database.execute("PRAGMA journal_mode = WAL")
    database.execute("CREATE TABLE a (b)")
    before = fingerprint(path)
    database.execute("CREATE TABLE c (d)")
    assert fingerprint(path).sha256 != before.sha256
    database.close()


def test_a_missing_source_is_named(tmp_path):
    with pytest.raises(SourceError, match=r"a.gpkg: cannot be read"):
        fingerprint(tmp_path / "a.gpkg")


def test_a_source_that_changed_is_an_error(source):
    before = fingerprint(source)
    source.write_bytes(b"same length")
    with pytest.raises(SourceChangedError, match="changed while it was read"):
        check_unchanged(source, before)


def test_a_new_date_alone_is_no_change(source):
    before = fingerprint(source)
    os.utime(source, (1, 1))
    check_unchanged(source, before)
