"""Shape figures across scales for shorelines, rivers, land cover and basins."""
