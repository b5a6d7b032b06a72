"""Compiled loops: arrays in, arrays out. No geometry library, no files, no configuration."""
