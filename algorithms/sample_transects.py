"""Sample transects: stations only."""

from __future__ import annotations

from ..plugin.bridge import keys, rows
from ..plugin.bridge.outputs import add_sinks, place
from ..plugin.bridge.transect_algorithm import TransectAlgorithm


class SampleTransects(TransectAlgorithm):
    """Samples relief and bent surface along lines, without a plate."""

    keys = keys.LINES + keys.RELIEF + keys.OBSERVED + keys.STATIONS

    def add_outputs(self) -> None:
        add_sinks(self, ("STATIONS",), required=("STATIONS",))

    def carry_out(self, parameters, context, feedback):
        return self.each(
            parameters, context, feedback, ("STATIONS",), lambda profile, progress: profile, self._write
        )

    @staticmethod
    def _write(sinks, profile, track) -> None:
        stations = rows.as_rows(profile.name, rows.sampled_columns(profile))
        for row, x, y, z in zip(stations, track.x.tolist(), track.y.tolist(), profile.relief.tolist()):
            sinks.add("STATIONS", row, place(x, y, z))
