import pyarrow as pa
import pytest
import shapely
from writer_cases import as_wkb, lines, make

from geofractal.reader.vector import layer_info, stream


def rows(path, **options):
    info = layer_info(path)
    return [
        (batch.wkb.to_pylist(), batch.attributes.to_pydict())
        for batch in stream(info, columns=None, **options)
    ]


@pytest.mark.parametrize("gaps", [{2}, {0}, {4}, {0, 1, 4}, {0, 1, 2, 3, 4}], ids=str)
def test_rows_without_geometry_leave_the_others_as_they_are(tmp_path, gaps):
    shapes = [None if i in gaps else line for i, line in enumerate(lines(5))]
    make(tmp_path / "a.fgb", shapes, {"n": pa.array(range(5))}, kind="LineString")
    assert rows(tmp_path / "a.fgb") == [(as_wkb(shapes).to_pylist(), {"n": [0, 1, 2, 3, 4]})]


def test_empty_geometries_read_as_missing_ones(tmp_path):
    shapes = [*lines(2), shapely.LineString()]
    make(tmp_path / "a.fgb", shapes, {"n": pa.array(range(3))}, kind="LineString")
    assert rows(tmp_path / "a.fgb")[0][0] == [*as_wkb(shapes[:2]).to_pylist(), None]


def test_batches_keep_their_size(tmp_path):
    shapes = [None, *lines(24)]
    make(tmp_path / "a.fgb", shapes, {"n": pa.array(range(25))}, kind="LineString")
    assert [len(wkb) for wkb, _ in rows(tmp_path / "a.fgb", rows_per_batch=10)] == [10, 10, 5]
