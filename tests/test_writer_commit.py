import os
import subprocess
import sys
from pathlib import Path

import pytest

from geofractal import interrupt
from geofractal.errors import OutputError
from geofractal.writer.commit import publish

resource = pytest.importorskip("resource")


def names(folder):
    return sorted(path.name for path in folder.iterdir())


def put(target, text):
    with publish(target) as part:
        part.write_text(text)


def dead_pid():
    with subprocess.Popen([sys.executable, "-c", ""]) as child:
        pass
    return child.pid


def test_a_file_is_published_whole(tmp_path):
    put(tmp_path / "record.json", "new")
    assert (tmp_path / "record.json").read_text() == "new"


def test_nothing_else_is_left_in_the_folder(tmp_path):
    put(tmp_path / "record.json", "new")
    assert names(tmp_path) == ["record.json"]


def test_a_missing_folder_is_made(tmp_path):
    put(tmp_path / "a" / "b" / "record.json", "new")
    assert (tmp_path / "a" / "b" / "record.json").read_text() == "new"


def test_the_temporary_file_stands_beside_the_target_and_keeps_its_ending(tmp_path):
    with publish(tmp_path / "shore.gpkg") as part:
        part.write_text("")
        assert part == tmp_path / f".shore.gpkg.{os.getpid()}.part.gpkg"


def test_a_failure_leaves_the_earlier_output_as_it_was(tmp_path):
    target = tmp_path / "record.json"
    put(target, "old")
    with pytest.raises(ValueError, match="half way"), publish(target) as part:  # noqa: PT012 - the failure is inside
        part.write_text("half")
        raise ValueError("half way")
    assert (target.read_text(), names(tmp_path)) == ("old", ["record.json"])


def test_the_earlier_output_stands_until_the_new_one_is_whole(tmp_path):
    target = tmp_path / "record.json"
    put(target, "old")
    with publish(target) as part:
        part.write_text("new")
        assert target.read_text() == "old"


def test_side_files_of_databases_and_indexes_under_construction_are_removed(tmp_path):
    with publish(tmp_path / "x.gpkg") as part:
        for suffix in ("", "-wal", "-shm", "-journal", ".tmp_rtree_shore.db"):
            part.with_name(part.name + suffix).write_text("")
    assert names(tmp_path) == ["x.gpkg"]


def test_temporary_files_of_a_dead_run_are_removed(tmp_path):
    stale = tmp_path / f".x.gpkg.{dead_pid()}.part.gpkg"
    stale.write_text("")
    put(tmp_path / "x.gpkg", "new")
    assert not stale.exists()


def test_temporary_files_of_a_run_that_goes_on_are_kept(tmp_path):
    live = tmp_path / f".x.gpkg.{os.getppid()}.part.gpkg"
    live.write_text("")
    put(tmp_path / "x.gpkg", "new")
    assert live.exists()


def test_temporary_files_of_an_earlier_process_with_our_number_are_removed(tmp_path):
    stale = tmp_path / f".x.gpkg.{os.getpid()}.part.gpkg-journal"
    stale.write_text("another's")
    with publish(tmp_path / "x.gpkg") as part:
        assert not stale.exists()
        part.write_text("new")


def test_temporary_files_of_other_targets_are_let_alone(tmp_path):
    other = tmp_path / f".y.gpkg.{dead_pid()}.part.gpkg"
    other.write_text("")
    put(tmp_path / "x.gpkg", "new")
    assert other.exists()


def test_an_interrupt_knows_the_temporary_file(tmp_path):
    with publish(tmp_path / "x.gpkg") as part:
        part.write_text("")
        assert any(str(part).startswith(known) for known in interrupt._state.temporary)
    assert not any(str(part).startswith(known) for known in interrupt._state.temporary)


def test_a_shapefile_is_renamed_last_of_its_parts(tmp_path, monkeypatch):
    order = []
    replace = Path.replace
    monkeypatch.setattr(Path, "replace", lambda self, to: (order.append(to.suffix), replace(self, to))[1])
    with publish(tmp_path / "x.shp") as part:
        for suffix in (".shp", ".shx", ".dbf", ".prj", ".cpg"):
            part.with_suffix(suffix).write_text("")
    assert order == [".shx", ".dbf", ".prj", ".cpg", ".shp"]


def test_parts_of_an_earlier_shapefile_that_the_new_one_lacks_are_removed(tmp_path):
    for suffix in (".shp", ".shx", ".dbf", ".prj", ".qix", ".sbn"):
        (tmp_path / f"x{suffix}").write_text("old")
    with publish(tmp_path / "x.shp") as part:
        for suffix in (".shp", ".shx", ".dbf"):
            part.with_suffix(suffix).write_text("new")
    assert {path.name: path.read_text() for path in tmp_path.iterdir()} == dict.fromkeys(
        ("x.shp", "x.shx", "x.dbf"), "new"
    )


@pytest.mark.parametrize("suffix", ["-wal", "-journal"])
def test_an_output_that_another_program_edits_is_refused(tmp_path, suffix):
    (tmp_path / "x.gpkg").write_text("old")
    (tmp_path / f"x.gpkg{suffix}").write_text("changes")
    with pytest.raises(OutputError, match=r"another program is editing the earlier output .*close it there"):
        put(tmp_path / "x.gpkg", "new")
    assert (tmp_path / "x.gpkg").read_text() == "old"


def test_a_folder_that_cannot_be_written_to_is_named(tmp_path):
    folder = tmp_path / "locked"
    if os.geteuid() == 0:
        folder = Path("/sys/kernel")  # closed to the superuser too
        if not folder.is_dir():
            pytest.skip("no folder here is closed to the superuser")
    else:
        folder.mkdir(mode=0o555)
    with pytest.raises(
        OutputError, match=rf"no permission to write in {folder}; choose another output folder"
    ):
        put(folder / "record.json", "new")


def test_a_full_disk_is_said_and_leaves_the_earlier_output(tmp_path):
    target = tmp_path / "record.json"
    put(target, "old")
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (10_000, hard))
    try:
        with pytest.raises(OutputError, match="the disk is full or a file may not grow further"):
            put(target, "x" * 20_000)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert (target.read_text(), names(tmp_path)) == ("old", ["record.json"])


def test_a_block_that_writes_nothing_is_an_error(tmp_path):
    with pytest.raises(OutputError, match=r"x.json: cannot be written"), publish(tmp_path / "x.json"):
        pass
