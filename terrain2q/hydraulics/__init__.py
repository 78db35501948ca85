"""Section hydraulics: arrays in, arrays out. Knows no files, no GIS and no screen."""
