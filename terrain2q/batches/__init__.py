"""Many sections in batches: planned along the raster, answered one by one or together, kept when interrupted."""
