"""Groups: every row in one bucket, every group whole, whatever the batches."""

from __future__ import annotations

import pickle
import zlib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pyarrow as pa
import pytest
import shapely
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from geofractal.errors import LayerError, OutputError
from geofractal.reader.groups import NO_KEY, bucket_rows, group_lines
from geofractal.reader.layers import Batch, LayerInfo

INFO = LayerInfo(
    path=Path("rivers.gpkg"),
    layer="rivers",
    driver="geopackage",
    geometry="lines",
    has_z=False,
    has_m=False,
    crs=None,
    features=0,
    fid_column="fid",
    fields=(("river", "string"),),
    bounds=None,
    encoding=None,
    rows_per_batch=2,
)


def reach(i: int) -> bytes:
    return shapely.to_wkb(shapely.LineString([(i, 0), (i, 1), (i + 1, 1)]))


def batches(keys, wkb=None, size=100, type_=None, *, fids=True):
    wkb = [reach(i) for i in range(len(keys))] if wkb is None else wkb
    for at in range(0, len(keys), size):
        part = slice(at, at + size)
        river = pa.array(keys[part], type_)
        rows = 7 * np.arange(at, at + len(river))
        yield Batch(
            at, pa.array(wkb[part], pa.binary()), rows if fids else None, pa.record_batch({"river": river})
        )


def bucketed(tmp_path, keys, *, wanted=None, info=INFO, **how):
    rows = (
        (b, None if wanted is None else wanted[b.first_row : b.first_row + len(b)])
        for b in batches(keys, **how)
    )
    return bucket_rows(rows, "river", replace(info, features=len(keys)), tmp_path / "groups.spool")


def test_reaches_of_a_river_become_one_feature_in_row_order(tmp_path):
    (bucket,) = bucketed(tmp_path, ["Ax", "Bel", "Ax", None, "Ax"])
    groups = group_lines(bucket.read())
    assert groups.keys == ("Ax", "Bel")
    assert groups.rows.tolist() == [0, 1, 2, 3, 4]
    assert groups.fids.tolist() == [0, 7, 14, 21, 28]
    assert groups.feature.tolist() == [0, 1, 0, -1, 0]
    assert groups.notes.tolist() == [None, None, None, NO_KEY, None]
    assert groups.lines.feature_offsets.tolist() == [0, 3, 4]
    assert groups.lines.xy[::3, 0].tolist() == [0, 2, 4, 1]


@pytest.mark.parametrize(
    ("keys", "type_", "names"),
    [
        (["a", "", "  ", "a"], pa.string(), ("a",)),
        ([12, None, 3, 12], pa.int32(), ("12", "3")),
        ([1.5, float("nan"), 1.5, None], pa.float64(), ("1.5",)),
        ([True, False, None, True], pa.bool_(), ("false", "true")),
        (["a", "A", "ä", "a"], pa.large_string(), ("A", "a", "ä")),
    ],
)
def test_keys_are_text_and_blanks_are_none(tmp_path, keys, type_, names):
    (bucket,) = bucketed(tmp_path, keys, type_=type_)
    assert group_lines(bucket.read()).keys == names


def test_a_column_that_cannot_name_groups_is_refused(tmp_path):
    with pytest.raises(LayerError, match="column 'river' of type list<item: int64> cannot name groups"):
        bucketed(tmp_path, [[1], [2]])


def test_rows_not_wanted_belong_to_no_group(tmp_path):
    (bucket,) = bucketed(tmp_path, ["Ax", "Ax", "Ax"], wanted=np.array([True, False, True]), fids=False)
    groups = group_lines(bucket.read())
    assert (groups.wanted.tolist(), groups.feature.tolist()) == ([True, False, True], [0, -1, 0])
    assert groups.fids is None


def test_a_group_with_a_row_that_cannot_be_read_is_left_out_whole(tmp_path):
    point = shapely.to_wkb(shapely.Point(1, 1))
    (bucket,) = bucketed(
        tmp_path, ["Ax", "Ax", "Bel", "Ax", None], wkb=[reach(0), None, reach(2), point, None]
    )
    groups = group_lines(bucket.read())
    assert groups.feature.tolist() == [-1, -1, 0, -1, -1]
    assert groups.notes.tolist() == [
        "a row of the group has missing geometry",
        "missing geometry",
        None,
        "points where lines are wanted",
        NO_KEY,
    ]
    assert (groups.keys, groups.lines.xy[:, 0].tolist()) == (("Bel",), [2, 2, 3])


def test_rows_of_no_length_take_nothing_from_their_group(tmp_path):
    still = shapely.to_wkb(shapely.LineString([(5, 5), (5, 5)]))
    (bucket,) = bucketed(tmp_path, ["Ax", "Ax", "Bel"], wkb=[reach(0), still, still])
    groups = group_lines(bucket.read())
    assert (groups.feature.tolist(), groups.notes.tolist()) == ([0, 0, -1], [None, None, "zero length"])


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(keys=st.lists(st.sampled_from([None, *"abcdefgh"]), min_size=1, max_size=60), size=st.integers(1, 70))
def test_every_row_is_in_one_bucket_and_batches_do_not_matter(tmp_path, keys, size):
    whole = [bucket.read() for bucket in bucketed(tmp_path, keys)]
    cut = [pickle.loads(pickle.dumps(bucket)).read() for bucket in bucketed(tmp_path, keys, size=size)]  # noqa: S301 - ours
    assert all(a.equals(b) for a, b in zip(whole, cut, strict=True))
    rows = [row for bucket in whole for row in bucket["row"].to_pylist()]
    assert sorted(rows) == list(range(len(keys)))
    found = {key: [] for key in keys}
    for bucket in whole:
        for row, key in zip(bucket["row"].to_pylist(), bucket["key"].to_pylist(), strict=True):
            found[key].append(row)
        if None not in keys:
            assert bucket["key"].to_pylist() == sorted(bucket["key"].to_pylist())
    for key in set(keys) - {None}:
        assert found[key] == [i for i, k in enumerate(keys) if k == key]
        assert sum(key in bucket["key"].to_pylist() for bucket in whole) == 1


def test_buckets_are_the_same_on_every_machine(tmp_path):
    """The bucket is the CRC-32 of the key's UTF-8 bytes (ISO 3309) modulo the number of buckets."""
    keys = [f"river {i}" for i in range(40)]
    read = [bucket.read()["key"].to_pylist() for bucket in bucketed(tmp_path, keys)]
    expected = [sorted(k for k in keys if zlib.crc32(k.encode()) % 5 == i) for i in range(5)]
    assert read == [names for names in expected if names]


def test_a_spool_that_cannot_be_written_says_so(tmp_path):
    with pytest.raises(OutputError, match=r"groups cannot be spooled: .*make room"):
        bucketed(tmp_path / "gone", ["a"])


def test_no_rows(tmp_path):
    assert bucketed(tmp_path, []) == ()
