"""Thickness expected from age: isotherms against age at loading, with the fitted transects on them."""

from __future__ import annotations

from contextlib import closing
from functools import partial

from qgis.core import QgsProcessingOutputNumber, QgsProcessingParameterFileDestination

from ..plugin.bridge import age_run, referee_keys
from ..plugin.bridge.algorithm import DownwarpAlgorithm
from ..plugin.bridge.keys import Key, required_source
from ..plugin.bridge.outputs import Outputs, add_sinks
from ..plugin.bridge.run_report import inputs_of, versions
from ..plugin.bridge.runs import run_each
from ..plugin.bridge.stations import has_places
from ..plugin.bridge.strength_run import age_reader
from ..plugin.core.wording import say
from ..plugin.report.referee import write_age_report
from ..plugin.translation import tr


class AgeThickness(DownwarpAlgorithm):
    """Takes fitted transects and draws them on the isotherms of their age."""

    keys = (
        Key("INPUT", "table", "Profiles of a fit", required=True),
        Key("NAME_FIELD", "field", "Field with the transects' names (blank: transect)", parent="INPUT"),
        *referee_keys.AGE,
        Key("AGE_FIELD", "field", "Field with the age of the plate, Myr", parent="INPUT"),
        *referee_keys.LOAD_AGE,
        Key("LOAD_AGE_FIELD", "field", "Field with the age of the load, Myr", parent="INPUT"),
        *referee_keys.ISOTHERMS,
        *referee_keys.COOLING,
        *referee_keys.HEAT,
    )

    def add_outputs(self) -> None:
        add_sinks(self, age_run.SINKS, required=("AGES",))
        self.addParameter(
            QgsProcessingParameterFileDestination("REPORT", tr("Report"), tr("HTML files (*.html)"), None, True, False)
        )
        self.addOutput(QgsProcessingOutputNumber("TRANSECTS_DONE", tr("Transects worked on")))

    def check(self, values) -> None:
        age_run.check_keys(values)

    def resolve(self, values, parameters, context) -> None:
        self._source = required_source(self, parameters, "INPUT", context)
        self._age = age_reader(self, values, parameters, context, self._source, say("AGE_MYR or AGE_FIELD"))

    def carry_out(self, parameters, context, feedback):
        values = self.values(parameters, context)
        geotherm, isotherms = age_run.check_keys(values)
        items = list(age_run.line_items(self._source, values, self._age))
        outputs = Outputs(self, parameters, context, self._source.sourceCrs(), has_places(self._source))
        work = partial(age_run.work, geotherm, isotherms)
        report = self.parameterAsFileOutput(parameters, "REPORT", context) if parameters.get("REPORT") else ""
        with closing(
            run_each(outputs, age_run.SINKS, items, len(items), feedback, work, age_run.write_check)
        ) as finished:
            results = {**outputs.results, "TRANSECTS_DONE": finished.count}
            if report:
                checks = [aged.check for aged in finished.results()]
                curves = age_run.curves(geotherm, isotherms, checks)
                inputs = inputs_of(self, parameters, context)
                write_age_report(report, checks, curves, finished.failures, inputs, versions())
                results["REPORT"] = report
        return results
