"""Bending against strength: what is read from keys and layers, and what is written."""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial

import numpy as np
from qgis.core import QgsFeatureSource

from ..core.constants import MYR
from ..core.cooling import STEADY, Geotherm
from ..core.elastic import Elastic
from ..core.errors import DownwarpError
from ..core.stated import PlateStations
from ..core.strength import Rock, elastic_stress
from ..core.strength_check import StrengthCheck, check_strength
from ..core.wording import say
from ..translation import joined
from .frames import Frame
from .gravity_run import point_at
from .keys import Values
from .options import KM, elastic
from .outputs import Outputs, Track
from .rasters import RasterReader
from .referee_keys import check_age, geotherm
from .rows import Row, as_rows
from .stations import has_places

SINKS = ("VERDICTS", "ENVELOPES", "MOMENTS")
NUMBERS = {
    "MOMENT_SHARE": say("Moment of the plate over the largest that its strength carries"),
    "MECHANICAL_KM": say("Mechanical thickness of the strength, km"),
    "EXPECTED_TE_KM": say("Elastic thickness that the strength has at the plate's curvature, km"),
}
"""Numbers that a run returns, beside TRANSECTS_DONE."""
ROWS = 101
"""Rows of an envelope."""


@dataclass(frozen=True)
class StrengthOptions:
    """What the keys ask for."""

    rock: Rock
    elastic: Elastic
    in_plane: float
    """N/m, compression positive."""


def strength_options(values: Values) -> StrengthOptions:
    """What the keys ask for; raises DownwarpError where they contradict each other."""
    check_age(values)
    constants = elastic(values)
    rock = Rock(
        kind=values.enum("ROCK"),
        crust=values.required_number("CRUST_KM") * KM,
        rho_crust=values.required_number("RHO_CRUST"),
        rho_mantle=values.required_number("RHO_MANTLE"),
        pore_pressure=values.required_number("PORE_PRESSURE"),
        strain_rate=values.required_number("STRAIN_RATE"),
        gravity=constants.gravity,
    )
    if not values.given("AGE"):
        stated_geotherm(values)
    return StrengthOptions(rock, constants, values.required_number("IN_PLANE"))


def stated_geotherm(values: Values) -> Geotherm:
    """The geotherm of AGE_MYR or HEAT_FLOW."""
    return geotherm(values, values.scaled("AGE_MYR", MYR))


class AgeReader:
    """Age of the plate from a raster, s."""

    def __init__(self, reader: RasterReader, frame: Frame, unit: float) -> None:
        """``unit``: of the raster, s."""
        self._reader, self._frame, self._unit = reader, frame, unit

    def at(self, name: str, x, y) -> np.ndarray:
        """Age, s, at places in the layer's CRS; raises DownwarpError where it is nowhere above 0."""
        age = self._reader.sample(*self._frame.to_degrees(np.asarray(x), np.asarray(y))) * self._unit
        if not (age > 0).any():
            raise DownwarpError("{name}: AGE has no age above 0 there.", name=name)
        return age


def age_reader(
    algorithm, values: Values, parameters, context, source: QgsFeatureSource, instead: str
) -> AgeReader | None:
    """The raster of AGE, to be asked at places of ``source``, the layer of INPUT; None where it is blank.

    ``instead``: the keys that say the age where INPUT has no geometry. Raises DownwarpError where it cannot be read.
    """
    if not values.given("AGE"):
        return None
    layer = algorithm.parameterAsRasterLayer(parameters, "AGE", context)
    if layer is None:
        raise DownwarpError("AGE is not a raster that can be read: {value}.", value=parameters.get("AGE"))
    if not has_places(source):
        raise DownwarpError("INPUT has no geometry, which AGE needs; give {instead}.", instead=instead)
    frame = Frame.of(source.sourceCrs(), "INPUT")
    reader = RasterReader(layer, values.whole("AGE_BAND"), frame, "AGE")
    return AgeReader(reader, frame, values.required_number("AGE_UNIT_MYR") * MYR)


@dataclass(frozen=True)
class PlateWithAge:
    """What one transect brings."""

    plate: PlateStations
    age: float | None
    """Age where it is bent most, s; None where AGE_MYR or HEAT_FLOW says."""

    def check(self, options: StrengthOptions, values: Values) -> StrengthCheck:
        """The answer."""
        found = stated_geotherm(values) if self.age is None else geotherm(values, self.age)
        return check_strength(self.plate, options.rock, partial(_same, found), options.elastic, options.in_plane)


def _same(found: Geotherm, station: int) -> Geotherm:
    return found


def aged(reader: AgeReader | None, plate: PlateStations, track: Track | None) -> PlateWithAge:
    """A plate with the age of the raster where it is bent most."""
    if reader is None:
        return PlateWithAge(plate, None)
    if track is None:
        raise DownwarpError(
            "{transect}: the stations have no places, which AGE needs; give AGE_MYR.", transect=plate.name
        )
    index = plate.largest_curvature()[0]
    return PlateWithAge(plate, float(reader.at(plate.name, track.x[[index]], track.y[[index]])[0]))


def _age_and_flow(found: Geotherm | None) -> tuple[float | None, float | None]:
    if found is None:
        return None, None
    age = None if found.kind == STEADY else found.age / MYR
    return age, found.surface_heat_flow() * 1e3


def verdict_row(check: StrengthCheck) -> Row:
    """VERDICTS values."""
    found = check.verdict
    age, flow = _age_and_flow(found.geotherm)
    age_fit, flow_fit = _age_and_flow(found.geotherm_of_fit)
    top = float(elastic_stress(0.0, found.curvature, found.elastic_thickness, check.elastic))
    return {
        "transect": check.name,
        "distance_km": check.distance / KM,
        "te_km": found.elastic_thickness / KM,
        "curvature_per_m": found.curvature,
        "fibre_stress_mpa": top / 1e6,
        "moment_n": found.elastic_moment,
        "moment_limit_n": found.moment_limit,
        "moment_share": found.moment_share,
        "expected_te_km": found.expected_thickness / KM,
        "mechanical_km": found.mechanical / KM,
        "mechanical_fit_km": None if found.mechanical_of_fit is None else found.mechanical_of_fit / KM,
        "age_myr": age,
        "heat_flow_mw_m2": flow,
        "age_fit_myr": age_fit,
        "heat_flow_fit_mw_m2": flow_fit,
        "overstressed_share": found.overstressed,
        "verdict": check.words,
        "young_gpa": check.elastic.young / 1e9,
        "poisson": check.elastic.poisson,
        "remarks": joined(check.remarks),
    }


def write_check(outputs: Outputs, check: StrengthCheck, track: Track | None) -> None:
    """Write VERDICTS, ENVELOPES and MOMENTS of one transect."""
    found = check.verdict
    outputs.add("VERDICTS", verdict_row(check), point_at(track, check.distance))
    some = np.linspace(0, found.strength.depth.size - 1, ROWS).round().astype(int)
    depth = found.strength.depth[some]
    inside = depth <= found.elastic_thickness
    stress = elastic_stress(depth, found.curvature, found.elastic_thickness, check.elastic)
    columns = {
        "depth_km": depth / KM,
        "temperature_c": found.strength.temperature[some],
        "tension_mpa": found.strength.tension[some] / 1e6,
        "compression_mpa": found.strength.compression[some] / 1e6,
        "stress_mpa": found.bent.stress[some] / 1e6,
        "elastic_stress_mpa": np.where(inside, stress, np.nan) / 1e6,
    }
    for row in as_rows(check.name, columns):
        outputs.add("ENVELOPES", row)
    curve = check.curve
    for row in as_rows(
        check.name,
        {"curvature_per_m": curve.curvature, "moment_n": curve.moment, "effective_te_km": curve.thickness / KM},
    ):
        outputs.add("MOMENTS", row)


def strength_numbers(checks) -> dict[str, float | None]:
    """The single transect's values, or the median over several."""
    found = [
        (check.verdict.moment_share, check.verdict.mechanical / KM, check.verdict.expected_thickness / KM)
        for check in checks
    ]
    medians = np.median(np.array(found), axis=0) if found else np.full(len(NUMBERS), np.nan)
    # A strength of nothing carries no share of a moment.
    numbers = [value if np.isfinite(value) else None for value in medians.tolist()]
    return {**dict(zip(NUMBERS, numbers)), "TRANSECTS_DONE": len(found)}
