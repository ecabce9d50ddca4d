"""What Downwarp shows in a QGIS window: the map tool that draws transects and the profile panel."""
