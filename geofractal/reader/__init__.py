"""Layers in: vector streams, raster strips, and the planes they are measured on."""
