"""Bend plate along transects: the deflection of a plate that the user states."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from ..plugin.bridge import keys
from ..plugin.bridge.options import bend_options, check_thickness_field, stated_thickness
from ..plugin.bridge.outputs import add_sinks
from ..plugin.bridge.rows import bent_row
from ..plugin.bridge.transect_algorithm import TransectAlgorithm
from ..plugin.core.bend import bend_profile


class BendTransects(TransectAlgorithm):
    """Samples the load along lines and bends a plate of stated thickness under it."""

    keys = (
        keys.LINES + keys.RELIEF + keys.SETTING + keys.BEND + keys.THICKNESS_ALONG + keys.BEND_BREAK
        + keys.LOAD + keys.LOAD_AREA + keys.LOAD_SHAPE + keys.DENSITIES + keys.CONSTANTS + keys.STATIONS
    )  # fmt: skip

    def add_outputs(self) -> None:
        add_sinks(self, ("PROFILES", "STATIONS", "MARKERS"), required=("PROFILES", "STATIONS"))

    def check(self, values) -> None:
        super().check(values)
        bend_options(values)

    def resolve(self, values, parameters, context) -> None:
        super().resolve(values, parameters, context)
        check_thickness_field(values, self._source)
        self._values = values

    def options_for(self, feature):
        return bend_options(self._values, stated_thickness(self._values, feature, self._name(feature)))

    def _sample(self, feature, progress):
        track, profile = super()._sample(feature, progress)
        if self._values.given("TE_FIELD"):
            thickness = stated_thickness(self._values, feature, profile.name)
            profile = replace(profile, thickness=np.full(profile.distance.shape, thickness))
        return track, profile

    def carry_out(self, parameters, context, feedback):
        values = self.values(parameters, context)
        options = bend_options(values)
        thickness = stated_thickness(values)

        def bend(profile, progress):
            return bend_profile(
                profile,
                options,
                thickness,
                end_shear=values.required_number("END_SHEAR"),
                end_moment=values.required_number("END_MOMENT"),
                start=values.enum("START_SUPPORT"),
                finish=values.enum("FINISH_SUPPORT"),
            )

        return self.each(
            parameters,
            context,
            feedback,
            ("PROFILES", "STATIONS", "MARKERS"),
            bend,
            lambda outputs, bent, track: outputs.bent(bent, bent_row(bent), track),
        )
