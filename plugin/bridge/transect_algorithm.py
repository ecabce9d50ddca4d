"""What the algorithms that run along drawn transects have in common: layers, stations, and lines that fail."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from functools import partial
from typing import Any

from qgis.core import QgsFeature

from ..core.errors import DownwarpError
from ..core.profile import Profile
from ..core.settings import FitOptions
from . import lines
from .algorithm import DownwarpAlgorithm
from .areas import Areas
from .frames import Frame
from .keys import Values, required_source
from .outputs import Outputs, Track
from .picks import PickReader
from .rasters import KILOMETRES, RasterReader
from .runs import Item, Progress, run_each
from .sampling import Sampler

KM = 1e3


class TransectAlgorithm(DownwarpAlgorithm):
    """Base of the algorithms that take TRANSECTS and DEM."""

    def resolve(self, values: Values, parameters, context) -> None:
        self._source = required_source(self, parameters, "TRANSECTS", context)
        self._name_field = values.raw("NAME_FIELD") if "NAME_FIELD" in values.keys else None
        if self._name_field is not None and self._source.fields().lookupField(self._name_field) < 0:
            raise DownwarpError("NAME_FIELD: TRANSECTS has no field {field!r}.", field=self._name_field)
        frame = Frame.of(self._source.sourceCrs(), "TRANSECTS")
        self._frame = frame
        with_thickness = "TE_RASTER" in values.keys and values.given("TE_RASTER")
        self._sampler = Sampler(
            dem=self._raster(values, parameters, "DEM", frame, context),
            observed=self._raster(values, parameters, "OBSERVED", frame, context) if values.given("OBSERVED") else None,
            picks=self._picks(values, parameters, frame, context),
            load_area=self._areas(values, parameters, "LOAD_AREA", frame, context),
            excluded=self._areas(values, parameters, "FIT_EXCLUDE", frame, context),
            step=values.scaled("STEP_KM", KM),
            width=values.required_number("SWATH_KM") * KM,
            strips=values.whole("SWATH_LINES"),
            align=bool(values.enum("SWATH_ALIGN")),
            thickness=self._raster(values, parameters, "TE_RASTER", frame, context) if with_thickness else None,
        )

    def check(self, values: Values) -> None:
        step = values.number("STEP_KM")
        if step is not None and step <= 0:
            raise DownwarpError("STEP_KM is {step:g}; it takes a number above 0.", step=step)
        if values.required_number("SWATH_KM") < 0:
            raise DownwarpError("SWATH_KM is {width:g}; it takes a number from 0.", width=values.number("SWATH_KM"))
        if not 1 <= values.whole("SWATH_LINES") <= 1000:
            raise DownwarpError(
                "SWATH_LINES is {count}; it takes a whole number from 1 to 1000.", count=values.whole("SWATH_LINES")
            )

    def _raster(self, values: Values, parameters, name: str, frame: Frame, context) -> RasterReader:
        layer = self.parameterAsRasterLayer(parameters, name, context)
        if layer is None:
            raise DownwarpError(
                "{name} is not a raster that can be read: {value}.", name=name, value=parameters.get(name)
            )
        # DEM_CRS is meant for the DEM; it serves OBSERVED where that carries none, too.
        override = values.given("DEM_CRS") and (name == "DEM" or not layer.crs().isValid())
        return RasterReader(
            layer,
            values.whole("DEM_BAND") if name == "DEM" else 1,
            frame,
            name,
            self.parameterAsCrs(parameters, "DEM_CRS", context) if override else None,
            KILOMETRES if name == "TE_RASTER" else values.enum("RELIEF_UNIT"),
        )

    def _areas(self, values: Values, parameters, name: str, frame: Frame, context) -> Areas | None:
        if name not in values.keys or not values.given(name):
            return None
        return Areas(required_source(self, parameters, name, context), frame, name)

    def _picks(self, values: Values, parameters, frame: Frame, context) -> PickReader | None:
        if "PICKS" not in values.keys or not values.given("PICKS"):
            return None
        source = required_source(self, parameters, "PICKS", context)
        fields = {}
        for key in ("PICK_ELEVATION", "PICK_SIGMA"):
            fields[key] = values.raw(key)
            if fields[key] is not None and source.fields().lookupField(fields[key]) < 0:
                raise DownwarpError("{key}: PICKS has no field {field!r}.", key=key, field=fields[key])
        if fields["PICK_ELEVATION"] is None:
            raise DownwarpError("PICK_ELEVATION is blank; it takes the field with the elevation of PICKS.")
        reach = values.required_number("PICK_REACH")
        if reach <= 0:
            raise DownwarpError("PICK_REACH is {reach:g}; it takes a number above 0.", reach=reach)
        return PickReader(source, frame, fields["PICK_ELEVATION"], fields["PICK_SIGMA"], reach * KM)

    def _name(self, feature: QgsFeature) -> str:
        return str(feature.id() if self._name_field is None else feature[self._name_field])

    def items(self) -> Iterator[Item]:
        """The transects of TRANSECTS, to be sampled one after another."""
        return (self.item(feature) for feature in self._source.getFeatures())

    def item(self, feature: QgsFeature) -> Item:
        """One feature of TRANSECTS, to be sampled."""
        return Item(self._name(feature), partial(self._sample, feature))

    def options_for(self, feature: QgsFeature) -> FitOptions | None:
        """What a feature's profile is for; None where only the line itself is wanted."""
        return None

    def _sample(self, feature: QgsFeature, progress: Progress) -> tuple[Track, Profile]:
        transect = lines.transect(feature, self._frame, self._name(feature))
        stations, profile = self._sampler.sample(transect, progress, self.options_for(feature))
        x, y = self._frame.from_degrees(stations.longitude, stations.latitude)
        return Track(stations.distance, x, y), profile

    def each(
        self,
        parameters: dict[str, Any],
        context,
        feedback,
        names: tuple[str, ...],
        work: Callable[[Profile, Progress], Any],
        write: Callable[[Outputs, Any, Any], None],
    ) -> dict[str, Any]:
        """Sample, ``work`` on and ``write`` each transect; return what the sinks became."""
        outputs = Outputs(self, parameters, context, self._source.sourceCrs())
        run_each(outputs, names, self.items(), self._source.featureCount(), feedback, work, write).close()
        return outputs.results
