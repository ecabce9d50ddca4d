"""QGIS to arrays and back: rasters, lines, fields, sinks, progress."""
