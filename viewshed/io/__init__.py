"""Everything that touches raster and vector files."""
