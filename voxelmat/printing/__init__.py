"""From a part to droplets: raster, halftone, stack on disk, and the checks of what was written."""
