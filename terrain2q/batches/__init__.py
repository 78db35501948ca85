"""Many sections in batches: planned along the raster, answered together, kept when interrupted."""
