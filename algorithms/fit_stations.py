"""Fit plate to stations: the same fit from a point layer or a table with distances."""

from __future__ import annotations

from ..plugin.bridge import keys
from ..plugin.bridge.algorithm import DownwarpAlgorithm
from ..plugin.bridge.fit_algorithm import add_fit_outputs, check_fit, run_fit
from ..plugin.bridge.progress import progress_of
from ..plugin.bridge.stations import field_names, has_places, station_items
from ..plugin.core.errors import DownwarpError


class FitStations(DownwarpAlgorithm):
    """Fits a plate to stations that are already there."""

    keys = (
        keys.STATION_FIELDS + keys.SETTING + keys.PLATE_SEARCH + keys.BREAK + keys.BREAK_SEARCH + keys.ZONES
        + keys.LOAD + keys.FORCES_AND_REGIONAL + keys.DENSITIES + keys.CONSTANTS + keys.WINDOW + keys.WEIGHTS
        + keys.WORKERS
    )  # fmt: skip

    def add_outputs(self) -> None:
        add_fit_outputs(self)

    def check(self, values) -> None:
        check_fit(values)
        resolution = values.number("RESOLUTION_KM")
        if resolution is not None and resolution <= 0:
            raise DownwarpError("RESOLUTION_KM is {resolution:g}; it takes a number above 0.", resolution=resolution)

    def resolve(self, values, parameters, context) -> None:
        self._source = keys.required_source(self, parameters, "INPUT", context)
        self._names = field_names(values, self._source)

    def carry_out(self, parameters, context, feedback):
        values = self.values(parameters, context)
        resolution = values.scaled("RESOLUTION_KM", 1e3) or 0.0
        items = station_items(self._source, self._names, resolution, progress_of(feedback, 0.0, 0.0))
        crs, located = self._source.sourceCrs(), has_places(self._source)
        return run_fit(self, values, parameters, context, feedback, items, len(items), crs, located)
