"""Downwarp: flexure of the lithosphere along transects, for QGIS Processing."""


def classFactory(iface):  # noqa: N802 - the name QGIS looks for
    """Return the plugin; QGIS calls this when it loads the folder."""
    from .plugin.plugin import DownwarpPlugin

    return DownwarpPlugin(iface)
