"""Physics, geometry and inference on arrays; knows nothing of QGIS."""
