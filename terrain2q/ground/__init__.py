"""The terrain and what is drawn on it: rasters, cut lines, streams and land cover become profiles."""
