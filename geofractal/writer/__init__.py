"""Copies of the layers with their new columns, tables and the data dictionary; every commit is atomic."""

from geofractal.writer.attach import Addition
from geofractal.writer.commit import publish
from geofractal.writer.dictionary import write_csv, write_data_dictionary, write_field_name_table
from geofractal.writer.layer import SUFFIXES, Written, write_layer
from geofractal.writer.losses import Loss, expected_losses
from geofractal.writer.names import refuse_clashes, short_names
from geofractal.writer.rows import Progress, Results
from geofractal.writer.sources import Fingerprint, check_unchanged, fingerprint, refuse_sources

__all__ = [
    "SUFFIXES",
    "Addition",
    "Fingerprint",
    "Loss",
    "Progress",
    "Results",
    "Written",
    "check_unchanged",
    "expected_losses",
    "fingerprint",
    "publish",
    "refuse_clashes",
    "refuse_sources",
    "short_names",
    "write_csv",
    "write_data_dictionary",
    "write_field_name_table",
    "write_layer",
]
