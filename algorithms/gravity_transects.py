"""Gravity along transects: the anomaly of a bent plate beside what was observed, and a joint fit."""

from __future__ import annotations

from contextlib import closing
from functools import partial
from typing import Any

from qgis.core import QgsProcessingOutputNumber, QgsProcessingParameterFileDestination

from ..plugin.bridge import gravity_run, referee_keys
from ..plugin.bridge.algorithm import DownwarpAlgorithm
from ..plugin.bridge.frames import Frame
from ..plugin.bridge.keys import required_source
from ..plugin.bridge.outputs import Outputs, add_sinks
from ..plugin.bridge.plate_stations import plate_fields, plate_items
from ..plugin.bridge.rasters import RasterReader
from ..plugin.bridge.run_report import inputs_of, versions
from ..plugin.bridge.runs import run_each
from ..plugin.bridge.stations import has_places
from ..plugin.core.errors import DownwarpError
from ..plugin.core.wording import say
from ..plugin.report.referee import write_gravity_report
from ..plugin.translation import tr

NEEDED = ("deflection_m", "te_km", "predicted_m", "dem_m", "load_mpa", "infill_kg_m3")


class GravityTransects(DownwarpAlgorithm):
    """Takes stations of a bent plate and gives its gravity, compared with an observed anomaly."""

    keys = (
        referee_keys.INPUT + referee_keys.ANOMALY + referee_keys.GRAVITY_DENSITIES + referee_keys.MODEL_SHAPE
        + referee_keys.JOINT + referee_keys.ELASTIC
    )  # fmt: skip

    def add_outputs(self) -> None:
        add_sinks(self, gravity_run.SINKS, required=("ANOMALIES", "EVIDENCE"))
        self.addParameter(
            QgsProcessingParameterFileDestination("REPORT", tr("Report"), tr("HTML files (*.html)"), None, True, False)
        )
        for name, label in {**gravity_run.NUMBERS, "TRANSECTS_DONE": say("Transects worked on")}.items():
            self.addOutput(QgsProcessingOutputNumber(name, tr(label)))

    def check(self, values) -> None:
        gravity_run.gravity_options(values)

    def resolve(self, values, parameters, context) -> None:
        self._source = required_source(self, parameters, "INPUT", context)
        self._fields = plate_fields(values, self._source, NEEDED)
        self._readings = self._observed(values, parameters, context)

    def _observed(self, values, parameters, context) -> Any:
        if not (values.given("ANOMALY") or values.given("ANOMALY_POINTS")):
            return None
        if not has_places(self._source):
            raise DownwarpError("INPUT has no geometry, which observed gravity needs; it takes a point layer.")
        frame = Frame.of(self._source.sourceCrs(), "INPUT")
        if values.given("ANOMALY"):
            layer = self.parameterAsRasterLayer(parameters, "ANOMALY", context)
            if layer is None:
                raise DownwarpError(
                    "ANOMALY is not a raster that can be read: {value}.", value=parameters.get("ANOMALY")
                )
            reader = RasterReader(layer, values.whole("ANOMALY_BAND"), frame, "ANOMALY")
            return gravity_run.RasterReadings(reader, frame)
        source = required_source(self, parameters, "ANOMALY_POINTS", context)
        for key in ("ANOMALY_FIELD", "ANOMALY_SIGMA"):
            field = values.raw(key)
            if field is not None and source.fields().lookupField(field) < 0:
                raise DownwarpError("{key}: ANOMALY_POINTS has no field {field!r}.", key=key, field=field)
        field, sigma = values.raw("ANOMALY_FIELD"), values.raw("ANOMALY_SIGMA")
        return gravity_run.PointReadings(source, frame, field, sigma, values.scaled("ANOMALY_REACH", 1e3))

    def _wrapped(self, plate, track, progress):
        if self._readings is None:
            return gravity_run.PlateWithGravity(plate, None)
        if track is None:
            raise DownwarpError(
                "{transect}: a station has no place, which observed gravity needs.", transect=plate.name
            )
        return gravity_run.PlateWithGravity(plate, self._readings.along(plate, track, progress))

    def carry_out(self, parameters, context, feedback):
        values = self.values(parameters, context)
        options = gravity_run.gravity_options(values)
        items = plate_items(self._source, self._fields, self._wrapped)
        outputs = Outputs(self, parameters, context, self._source.sourceCrs(), has_places(self._source))
        work = partial(_check, options)
        report = self.parameterAsFileOutput(parameters, "REPORT", context) if parameters.get("REPORT") else ""
        with closing(
            run_each(outputs, gravity_run.SINKS, items, len(items), feedback, work, gravity_run.write_check)
        ) as finished:
            results = {**outputs.results, **gravity_run.gravity_numbers(finished.results())}
            if report:
                inputs = inputs_of(self, parameters, context)
                write_gravity_report(report, finished.results(), finished.failures, inputs, versions())
                results["REPORT"] = report
        return results


def _check(options, plate, progress):
    return plate.check(options, progress)
