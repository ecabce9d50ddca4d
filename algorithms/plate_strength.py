"""Bending against strength: whether rock of that age could carry the stress of the fitted plate."""

from __future__ import annotations

from contextlib import closing
from functools import partial

from qgis.core import QgsProcessingOutputNumber, QgsProcessingParameterFileDestination

from ..plugin.bridge import referee_keys, strength_run
from ..plugin.bridge.algorithm import DownwarpAlgorithm
from ..plugin.bridge.keys import required_source
from ..plugin.bridge.outputs import Outputs, add_sinks
from ..plugin.bridge.plate_stations import plate_fields, plate_items
from ..plugin.bridge.run_report import inputs_of, versions
from ..plugin.bridge.runs import run_each
from ..plugin.bridge.stations import has_places
from ..plugin.core.wording import say
from ..plugin.report.referee import write_strength_report
from ..plugin.translation import tr

NEEDED = ("deflection_m", "te_km", "curvature_per_m")


class PlateStrength(DownwarpAlgorithm):
    """Takes stations of a bent plate and weighs them against a strength envelope."""

    keys = (
        referee_keys.INPUT + referee_keys.AGE + referee_keys.HEAT_FLOW + referee_keys.THERMAL + referee_keys.ROCK
        + referee_keys.HEAT + referee_keys.PRODUCTION + referee_keys.ELASTIC + referee_keys.IN_PLANE
    )  # fmt: skip

    def add_outputs(self) -> None:
        add_sinks(self, strength_run.SINKS, required=("VERDICTS",))
        self.addParameter(
            QgsProcessingParameterFileDestination("REPORT", tr("Report"), tr("HTML files (*.html)"), None, True, False)
        )
        for name, label in {**strength_run.NUMBERS, "TRANSECTS_DONE": say("Transects worked on")}.items():
            self.addOutput(QgsProcessingOutputNumber(name, tr(label)))

    def check(self, values) -> None:
        strength_run.strength_options(values)

    def resolve(self, values, parameters, context) -> None:
        self._source = required_source(self, parameters, "INPUT", context)
        self._fields = plate_fields(values, self._source, NEEDED)
        self._age = strength_run.age_reader(self, values, parameters, context, self._source, "AGE_MYR")

    def carry_out(self, parameters, context, feedback):
        values = self.values(parameters, context)
        options = strength_run.strength_options(values)
        items = plate_items(self._source, self._fields, partial(_aged, self._age))
        outputs = Outputs(self, parameters, context, self._source.sourceCrs(), has_places(self._source))
        report = self.parameterAsFileOutput(parameters, "REPORT", context) if parameters.get("REPORT") else ""
        work = partial(_check, options, values)
        with closing(
            run_each(outputs, strength_run.SINKS, items, len(items), feedback, work, strength_run.write_check)
        ) as finished:
            results = {**outputs.results, **strength_run.strength_numbers(finished.results())}
            if report:
                inputs = inputs_of(self, parameters, context)
                write_strength_report(report, finished.results(), finished.failures, inputs, versions())
                results["REPORT"] = report
        return results


def _aged(reader, plate, track, progress):
    return strength_run.aged(reader, plate, track)


def _check(options, values, plate, progress):
    return plate.check(options, values)
