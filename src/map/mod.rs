//! Maps: how content moves from one raster's pixels to another's.
