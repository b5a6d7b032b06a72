"""Copies of the layers with their new columns, tables and the data dictionary; every commit is atomic."""
