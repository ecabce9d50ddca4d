"""Lay transects: across a front line at a spacing, or round a centre."""

from __future__ import annotations

from ..plugin.bridge import keys
from ..plugin.bridge.algorithm import DownwarpAlgorithm
from ..plugin.bridge.keys import Key
from ..plugin.bridge.laying import laid_across, laid_round
from ..plugin.bridge.outputs import Outputs, add_sinks
from ..plugin.core.errors import DownwarpError
from ..plugin.translation import tr


class LayTransects(DownwarpAlgorithm):
    """Makes transects for the other algorithms."""

    keys = (
        Key("GUIDE", "lines", "Front line"),
        Key("SPACING_KM", "number", "Spacing along the front line, km", 25.0),
        Key("BEFORE_KM", "number", "Begin before the front line, km", 0.0),
        Key("AFTER_KM", "number", "End beyond the front line, km", 400.0),
        Key("SIDE", "enum", "Direction across the front line", 0, ("Left to right", "Right to left")),
        Key("SMOOTH_KM", "number", "Length over which the strike is smoothed, km", 100.0),
        Key("CENTRES", "points", "Centres"),
        Key("DIRECTIONS", "whole", "Number of directions round a centre", 8),
        Key("RADIUS_KM", "number", "Length of the transects round a centre, km", 400.0),
    )

    def add_outputs(self) -> None:
        add_sinks(self, ("TRANSECTS",), required=("TRANSECTS",))

    def check(self, values) -> None:
        if values.given("GUIDE") == values.given("CENTRES"):
            raise DownwarpError("Give either GUIDE (a front line) or CENTRES (points), one of the two.")

    def resolve(self, values, parameters, context) -> None:
        name = "GUIDE" if values.given("GUIDE") else "CENTRES"
        self._source = keys.required_source(self, parameters, name, context)

    def carry_out(self, parameters, context, feedback):
        values = self.values(parameters, context)
        outputs = Outputs(self, parameters, context, self._source.sourceCrs())
        lay = laid_across if values.given("GUIDE") else laid_round
        laid = list(lay(self._source, values))
        if not laid:
            raise DownwarpError("There is nothing to lay transects across: the input holds no feature.")
        try:
            outputs.open(("TRANSECTS",))
            for row, geometry in laid:
                outputs.add("TRANSECTS", row, geometry)
                if row["remarks"]:
                    feedback.pushWarning(tr("Transect {name}: {remarks}", name=row["name"], remarks=row["remarks"]))
            outputs.flush()
        finally:
            outputs.discard()
        return outputs.results
