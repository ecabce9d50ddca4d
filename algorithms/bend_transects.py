"""Bend plate along transects: the deflection of a plate that the user states."""

from __future__ import annotations

from ..plugin.bridge import keys
from ..plugin.bridge.options import bend_options
from ..plugin.bridge.outputs import add_sinks
from ..plugin.bridge.rows import bent_row
from ..plugin.bridge.transect_algorithm import TransectAlgorithm
from ..plugin.core.bend import bend_profile


class BendTransects(TransectAlgorithm):
    """Samples the load along lines and bends a plate of stated thickness under it."""

    keys = (
        keys.LINES + keys.RELIEF + keys.SETTING + keys.BEND + keys.BEND_BREAK + keys.LOAD + keys.LOAD_AREA
        + keys.DENSITIES + keys.CONSTANTS + keys.STATIONS
    )  # fmt: skip

    def add_outputs(self) -> None:
        add_sinks(self, ("PROFILES", "STATIONS", "MARKERS"), required=("PROFILES", "STATIONS"))

    def check(self, values) -> None:
        super().check(values)
        bend_options(values)

    def carry_out(self, parameters, context, feedback):
        values = self.values(parameters, context)
        options = bend_options(values)
        thickness = values.required_number("TE_KM") * 1e3

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
