"""From the panel's choices to a session and from its answer to layers, by the algorithm's own reading and writing."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from qgis.core import (
    QgsCoordinateReferenceSystem,
    QgsFeature,
    QgsMapLayer,
    QgsProcessingContext,
    QgsProcessingException,
    QgsProcessingFeedback,
    QgsProcessingUtils,
    QgsProject,
)

from ...algorithms.fit_transects import FitTransects
from ..bridge import keys, rows
from ..bridge.keys import Key
from ..bridge.options import fit_options
from ..bridge.outputs import LABELS, Outputs, Track
from ..bridge.styles import apply_style
from ..core.errors import DownwarpError
from ..core.settings import FitOptions
from ..translation import tr
from .session import Session, View

SINK = "memory:"
ALGORITHM = "downwarp:fittransects"

SAMPLING_KEYS = frozenset(
    key.name
    for group in (
        keys.LINES, keys.RELIEF, keys.OBSERVED, keys.PICKS, keys.STATIONS, keys.LOAD_AREA, keys.EXCLUDE,
        keys.LOAD_SHAPE, keys.STRIP_WARNING,
    )
    for key in group
)  # fmt: skip
"""Keys that decide what is sampled; all others only what is made of it."""


def fit_keys() -> dict[str, Key]:
    """The keys of the fit by name."""
    return {key.name: key for key in FitTransects.keys}


def help_of(name: str) -> str:
    """Help of a key of the fit."""
    return FitTransects.help_of("parameters", name)


def options_of(parameters: dict[str, Any]) -> FitOptions:
    """The options that keys of the fit stand for; raises DownwarpError."""
    algorithm = FitTransects()
    values = algorithm.values(parameters, QgsProcessingContext())
    return fit_options(values)


class Source:
    """One feature of the transects with the rasters that it is sampled from. Make it on the main thread."""

    def __init__(self, parameters: dict[str, Any], feature: QgsFeature, project: QgsProject) -> None:
        """``parameters``: keys of the fit; raises DownwarpError where they or their layers cannot be used."""
        self.parameters = {**parameters, "PROFILES": SINK, "STATIONS": SINK}
        # Both are kept: what the algorithm reads holds on to its context.
        self._algorithm = FitTransects()
        self._algorithm.initAlgorithm()
        self._context = QgsProcessingContext()
        self._context.setProject(project)
        usable, why = self._algorithm.checkParameterValues(self.parameters, self._context)
        if not usable:
            raise DownwarpError(why)
        try:
            self._algorithm.prepareAlgorithm(self.parameters, self._context, QgsProcessingFeedback(False))
        except QgsProcessingException as error:
            raise DownwarpError(str(error)) from None
        self._options = options_of(parameters)
        self._item = self._algorithm.item(feature)
        layer = QgsProcessingUtils.mapLayerFromString(str(parameters["TRANSECTS"]), self._context)
        self.crs: QgsCoordinateReferenceSystem = layer.crs() if layer is not None else QgsCoordinateReferenceSystem()

    def sample(self, progress: Callable[[float], None]) -> tuple[Track, Session]:
        """Where the stations lie, in the transects' CRS, and a session on what was sampled; for any thread."""
        track, profile = self._item.sample(progress)
        if track is None:
            raise DownwarpError("Transect {transect} has no place.", transect=profile.name)
        return track, Session(profile, self._options)


def keep(view: View, track: Track, crs: QgsCoordinateReferenceSystem, project: QgsProject) -> list[QgsMapLayer]:
    """Write a view into layers in memory, add them to the project on top of a group of their own and return them.

    A fit gives all outputs of `fittransects`, a trial the profile, its stations and its markers.
    """
    algorithm = FitTransects()
    algorithm.initAlgorithm()
    context = QgsProcessingContext()
    context.setProject(project)
    names = list(LABELS) if view.result is not None else ["PROFILES", "STATIONS", "MARKERS"]
    if view.result is not None and not view.result.choices:
        names.remove("CHOICES")
    outputs = Outputs(algorithm, dict.fromkeys(names, SINK), context, crs)
    try:
        outputs.open(tuple(names))
        if view.result is not None:
            outputs.fitted(view.result, track)
        else:
            outputs.bent(view.bent, _trial_row(view), track)
        outputs.flush()
    finally:
        outputs.discard()
    name = view.bent.problem.profile.name
    layers = []
    for output in names:
        layer = context.takeResultLayer(str(outputs.results[output]))
        if layer is None:
            raise DownwarpError("The layer for {output} could not be made.", output=output)
        layer.setName(tr("{output}, {transect}").format(output=tr(LABELS[output]), transect=name))
        apply_style(layer, output)
        layers.append(layer)
    project.addMapLayers(layers, False)
    group = project.layerTreeRoot().insertGroup(0, tr("Downwarp, {transect}").format(transect=name))
    # What is drawn on top stands first: markers over stations over the line; then the tables.
    order = ("MARKERS", "STATIONS", "PROFILES", "PARAMETERS", "MISFIT", "CHOICES")
    for _, layer in sorted(zip(names, layers), key=lambda pair: order.index(pair[0])):
        group.addLayer(layer)
    return layers


def _trial_row(view: View) -> rows.Row:
    row = rows.bent_row(view.bent)
    remark = tr("stated by hand, not fitted")
    remarks = f"{remark}; {row['remarks']}" if row["remarks"] else remark
    return {**row, "rms_m": view.rms, "stations_fit": view.count, "remarks": remarks}
