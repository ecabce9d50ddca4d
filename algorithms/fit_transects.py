"""Fit plate along transects: line and DEM to everything."""

from __future__ import annotations

from ..plugin.bridge import keys
from ..plugin.bridge.fit_algorithm import add_fit_outputs, check_fit, run_fit
from ..plugin.bridge.options import fit_options
from ..plugin.bridge.transect_algorithm import TransectAlgorithm


class FitTransects(TransectAlgorithm):
    """Samples relief and bent surface along lines and fits a plate to each."""

    keys = (
        keys.LINES + keys.RELIEF + keys.OBSERVED + keys.PICKS + keys.SETTING + keys.PLATE_SEARCH + keys.BREAK
        + keys.BREAK_SEARCH + keys.ZONES + keys.LOAD + keys.LOAD_AREA + keys.LOAD_SHAPE + keys.STRIP_WARNING
        + keys.FORCES_AND_REGIONAL + keys.DENSITIES + keys.CONSTANTS + keys.STATIONS + keys.WINDOW + keys.EXCLUDE
        + keys.WEIGHTS + keys.WORKERS
    )  # fmt: skip

    def add_outputs(self) -> None:
        add_fit_outputs(self)

    def check(self, values) -> None:
        super().check(values)
        check_fit(values)

    def resolve(self, values, parameters, context) -> None:
        super().resolve(values, parameters, context)
        self._options = fit_options(values)

    def options_for(self, feature):
        return self._options

    def carry_out(self, parameters, context, feedback):
        values = self.values(parameters, context)
        count, crs = self._source.featureCount(), self._source.sourceCrs()
        return run_fit(self, values, parameters, context, feedback, self.items(), count, crs, located=True)
