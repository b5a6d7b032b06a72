"""The data dictionary of a run's new columns, and the table of a Shapefile's shortened names."""

from __future__ import annotations

import csv
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path

from geofractal.measure import Column
from geofractal.writer.commit import publish

_HEADER = ("layer", "name", "short_name", "type", "unit", "meaning", "formula", "source")


def write_data_dictionary(folder: Path, columns: Mapping[str, Sequence[Column]]) -> tuple[Path, Path]:
    """Write ``data_dictionary.csv`` and ``data_dictionary.md`` and return their paths.

    Parameters
    ----------
    folder : where to write them
    columns : the new columns of each layer, by the layer's name in the batch

    Raises
    ------
    OutputError
        A file cannot be written.
    """
    table, page = folder / "data_dictionary.csv", folder / "data_dictionary.md"
    write_csv(table, _HEADER, ((layer, *_row(c)) for layer, held in columns.items() for c in held))
    text = "# Data dictionary\n\nColumns added to each layer; a value that deserves no figure is null.\n"
    for layer, held in columns.items():
        text += f"\n## {_cell(layer)}\n\n| {' | '.join(_HEADER[1:]).replace('_', ' ')} |\n"
        text += "|" + "---|" * (len(_HEADER) - 1) + "\n"
        text += "".join(f"| {' | '.join(map(_cell, _row(column)))} |\n" for column in held)
    with publish(page) as part:
        part.write_text(text, encoding="utf-8", newline="\n")
    return table, page


def write_field_name_table(target: Path, names: Iterable[tuple[str, str]], columns: Sequence[Column]) -> Path:
    """Write ``<stem>.fields.csv`` beside a Shapefile: each field's name in it and in the source.

    Parameters
    ----------
    target : the Shapefile
    names : (full name, name in the Shapefile) of every field, in order
    columns : the new columns among them, for their unit and meaning

    Raises
    ------
    OutputError
        The file cannot be written.
    """
    known = {column.name: column for column in columns}
    path = target.with_suffix(".fields.csv")
    rows = (
        (short, full, known[full].unit if full in known else "", known[full].meaning if full in known else "")
        for full, short in names
    )
    write_csv(path, ("short_name", "name", "unit", "meaning"), rows)
    return path


def write_csv(path: Path, header: Sequence[str], rows: Iterable[Sequence[object]]) -> None:
    """Publish a table as UTF-8 CSV with a header and one kind of line end.

    Raises
    ------
    OutputError
        The file cannot be written.
    """
    with publish(path) as part, part.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(header)
        writer.writerows(rows)


def _row(column: Column) -> tuple[str, ...]:
    return (
        column.name,
        column.short,
        column.kind,
        column.unit,
        column.meaning,
        column.formula,
        column.source,
    )


def _cell(text: str) -> str:
    return text.replace("\\", "\\\\").replace("|", "\\|").replace("\n", " ")
