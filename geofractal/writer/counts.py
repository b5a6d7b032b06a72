"""Rows that a written file really holds, read back from it."""

from __future__ import annotations

from pathlib import Path

_FEATURE = b'{ "type": "Feature"'


def count_rows(path: Path, layer: str, layout: str) -> int:
    """Return the number of rows that can be read from a file of our own writing; -1 if it is cut off."""
    if layout in {"geojson", "geojson-lines"}:
        with path.open("rb") as lines:
            return sum(line.startswith(_FEATURE) and line.rstrip(b",\n").endswith(b"}") for line in lines)
    if layout == "geoparquet":
        import pyarrow.parquet as pq

        return int(pq.read_metadata(path).num_rows)
    if layout == "shapefile" and not _whole_table(path.with_suffix(".dbf")):
        return -1
    return _read_through(path, layer, layout)


def _read_through(path: Path, layer: str, layout: str) -> int:
    import pyogrio.raw

    named = layer if layout == "geopackage" else None
    try:
        with pyogrio.raw.open_arrow(path, layer=named, columns=[], batch_size=5_000, use_pyarrow=True) as (
            _,
            rows,
        ):
            return sum(batch.num_rows for batch in rows)
    except (RuntimeError, OSError):  # pyarrow raises OSError where GDAL's stream breaks off
        return -1


def _whole_table(dbf: Path) -> bool:
    """Tell whether a .dbf is as long as its header says (dBASE III: rows at byte 4, then two lengths)."""
    with dbf.open("rb") as file:
        header = file.read(12)
    rows, start, row = (int.from_bytes(header[a:b], "little") for a, b in ((4, 8), (8, 10), (10, 12)))
    return dbf.stat().st_size >= start + rows * row
