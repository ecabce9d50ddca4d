"""Check strip assumption: the deflection of the load as mapped beside that of a strip."""

from __future__ import annotations

from functools import partial
from typing import Any

from ..plugin.bridge import keys, lines
from ..plugin.bridge.options import check_thickness_field, stated_thickness
from ..plugin.bridge.outputs import Outputs, Track, add_sinks
from ..plugin.bridge.runs import Item
from ..plugin.bridge.strip import stated_plate, strip_check_options
from ..plugin.bridge.transect_algorithm import TransectAlgorithm


class CheckStrip(TransectAlgorithm):
    """Samples the relief along and about lines and bends a plate under it, as a strip and as mapped."""

    keys = (
        keys.LINES + keys.RELIEF + keys.SETTING + keys.STRIP_PLATE + keys.LOAD + keys.LOAD_AREA + keys.UNIFORM
        + keys.STATIONS
    )  # fmt: skip

    def add_outputs(self) -> None:
        add_sinks(self, ("CHECKS", "CHECK_STATIONS"), required=("CHECKS", "CHECK_STATIONS"))

    def check(self, values) -> None:
        super().check(values)
        strip_check_options(values)
        stated_thickness(values)

    def resolve(self, values, parameters, context) -> None:
        super().resolve(values, parameters, context)
        self._values, self._options = values, strip_check_options(values)
        check_thickness_field(values, self._source)

    def item(self, feature) -> Item:
        return Item(self._name(feature), partial(self._sample, feature))

    def _sample(self, feature, progress):
        name = self._name(feature)
        transect = lines.transect(feature, self._frame, name)
        thickness = stated_thickness(self._values, feature, name)
        stations, plate = stated_plate(self._sampler, transect, thickness, self._options, progress)
        return Track(stations.distance, *self._frame.from_degrees(stations.longitude, stations.latitude)), plate

    def carry_out(self, parameters, context, feedback):
        def work(plate: Any, progress):
            return plate.check(self._options)

        return self.each(
            parameters,
            context,
            feedback,
            ("CHECKS", "CHECK_STATIONS"),
            work,
            Outputs.checked,
        )
