"""Stations that come as a layer or a table rather than from rasters."""

from __future__ import annotations

from functools import partial

import numpy as np
from qgis.core import QgsFeatureSource, QgsWkbTypes

from ..core.errors import DownwarpError
from ..core.profile import Profile
from ..core.wording import say
from .keys import Values
from .outputs import Track
from .picks import number_of
from .runs import Item, Progress


def fields_in_use(values: Values, source: QgsFeatureSource, keys: tuple[str, ...]) -> dict[str, str]:
    """Fields by key. A key left blank means its usual field, where INPUT has it; DISTANCE must be there."""
    names = {}
    for key in keys:
        usual = values.keys[key].default
        name = values.raw(key) or usual
        if source.fields().lookupField(name) >= 0:
            names[key] = name
        elif name != usual or key == "DISTANCE":
            raise DownwarpError("{key}: INPUT has no field {name!r}.", key=key, name=name)
    return names


def field_names(values: Values, source: QgsFeatureSource) -> dict[str, str]:
    """Fields in use by the keys of a fit, which takes a load, an observed surface or both."""
    keys = ("DISTANCE", "LOAD_FIELD", "OBSERVED_FIELD", "SIGMA_FIELD", "TRANSECT_FIELD")
    names = fields_in_use(values, source, keys)
    if "LOAD_FIELD" not in names and "OBSERVED_FIELD" not in names:
        raise DownwarpError("INPUT has neither the field of LOAD_FIELD nor that of OBSERVED_FIELD; the fit takes one.")
    return names


def has_places(source: QgsFeatureSource) -> bool:
    """Whether the features of a source have geometry."""
    return source.wkbType() != QgsWkbTypes.Type.NoGeometry


def station_items(
    source: QgsFeatureSource, names: dict[str, str], resolution: float, progress: Progress
) -> list[Item]:
    """The transects of INPUT in order of appearance; ``resolution`` in m; ``progress`` may raise to stop."""
    numeric = [key for key in names if key != "TRANSECT_FIELD"]
    located = has_places(source)
    groups: dict[str, list[list[float]]] = {}
    reasons: dict[str, str] = {}
    for feature in source.getFeatures():
        progress(0.0)
        name = str(feature[names["TRANSECT_FIELD"]]) if "TRANSECT_FIELD" in names else "1"
        group = groups.setdefault(name, [])
        try:
            row = [
                number_of(
                    feature[names[key]],
                    say("Transect {name}: {key} field {field}", name=name, key=key, field=names[key]),
                )
                for key in numeric
            ]
        except DownwarpError as error:
            reasons.setdefault(name, error.message)
            continue
        point = next(feature.geometry().vertices(), None) if located and feature.hasGeometry() else None
        group.append([*row, point.x(), point.y()] if point is not None else [*row, np.nan, np.nan])
    return [
        Item(name, partial(_sampled, name, numeric, group, reasons.get(name), resolution))
        for name, group in groups.items()
    ]


def _sampled(
    name: str, numeric: list[str], group: list[list[float]], reason: str | None, resolution: float, progress: Progress
) -> tuple[Track | None, Profile]:
    """Track and profile of one transect; without a relief field the observed surface takes its place."""
    progress(0.0)
    if reason is not None:
        raise DownwarpError(reason)
    table = np.array(group)
    columns = {key: table[:, place] for place, key in enumerate(numeric)}
    order = np.argsort(columns["DISTANCE"], kind="stable")
    order = order[np.isfinite(columns["DISTANCE"][order])]
    if order.size < 2:
        raise DownwarpError(
            "Transect {name} has {count} stations with a distance; it takes at least 2.", name=name, count=order.size
        )
    table = table[order]
    columns = {key: values[order] for key, values in columns.items() if np.isfinite(values).any()}
    distance = columns["DISTANCE"]
    repeated = distance[1:][np.diff(distance) <= 0]
    if repeated.size:
        raise DownwarpError(
            "Transect {name} has two stations at distance {distance:g} km (DISTANCE); it takes one each, and "
            "TRANSECT_FIELD where INPUT holds several transects.",
            name=name,
            distance=repeated[0],
        )
    if (columns.get("SIGMA_FIELD", np.zeros(1)) < 0).any():
        raise DownwarpError(
            "Transect {name}: SIGMA_FIELD holds a number below 0; a standard deviation is above it.", name=name
        )
    relief, observed = columns.get("LOAD_FIELD"), columns.get("OBSERVED_FIELD")
    if relief is None:
        relief, observed = observed, None
    if relief is None:
        raise DownwarpError("Transect {name}: neither LOAD_FIELD nor OBSERVED_FIELD holds a number.", name=name)
    profile = Profile(name, distance * 1e3, relief, observed, columns.get("SIGMA_FIELD"), resolution=resolution)
    place = table[:, -2:]
    track = Track(distance * 1e3, place[:, 0], place[:, 1]) if np.isfinite(place).all() else None
    return track, profile
