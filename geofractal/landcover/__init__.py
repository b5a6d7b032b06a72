"""Class maps in memory: grids with true cell sizes, strips of cells, patches.

Shared by every estimator of land cover and filled by the raster reader. Nothing here opens a file.
"""
