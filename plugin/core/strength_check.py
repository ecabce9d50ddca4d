"""A fitted plate of one transect weighed against the strength of its age: verdict in words and curves to draw."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from .cooling import Geotherm
from .elastic import Elastic
from .stated import PlateStations
from .strength import MomentCurve, Rock, StrengthVerdict, moment_curve, weigh
from .wording import say

CARRIED, YIELDING, TOO_MUCH = say("carried"), say("carried with yielding"), say("not carried")
"""Verdicts."""
ELASTIC_SHARE = 0.1
"""Share of the plate's thickness up to which overstress counts as skin: rock at the surface has no strength at all."""
NEAR = 0.2
"""Relative difference up to which two elastic thicknesses count as one."""


@dataclass(frozen=True)
class StrengthCheck:
    """The answer for one transect."""

    name: str
    distance: float
    """Where the plate is bent most, m."""
    at_end: bool
    """Whether that is the plate's first or last station."""
    verdict: StrengthVerdict
    words: str
    """One of the verdicts."""
    curve: MomentCurve
    elastic: Elastic
    rock: Rock
    remarks: tuple[str, ...]


def check_strength(
    plate: PlateStations,
    rock: Rock,
    geotherm: Callable[[int], Geotherm],
    elastic: Elastic,
    in_plane: float = 0.0,
) -> StrengthCheck:
    """Weigh a plate against the strength where it is bent most; ``geotherm`` of the station there (its index)."""
    index, curvature, thickness = plate.largest_curvature()
    found = weigh(rock, geotherm(index), curvature, thickness, elastic, in_plane)
    stations = np.flatnonzero(plate.on_plate)
    other = plate.other_constants(elastic)
    remarks = [other] if other else []
    if found.moment_share >= 1.0:
        words = TOO_MUCH
        remarks.append(
            say(
                "no plate of this strength carries the moment of the fitted one: thickness, curvature, age or rock is "
                "wrong, or the plate is weakened or broken there"
            )
        )
    elif found.overstressed <= ELASTIC_SHARE:
        words = CARRIED
    else:
        words = YIELDING
    if found.expected_thickness < (1.0 - NEAR) * thickness:
        remarks.append(say("the fitted plate is stiffer than its strength allows at this curvature"))
    elif found.expected_thickness > (1.0 + NEAR) * thickness:
        remarks.append(
            say(
                "the fitted plate is weaker than its strength at this curvature: hotter, faulted, inherited from an "
                "earlier age, or fitted too thin"
            )
        )
    if found.geotherm_of_fit is None:
        remarks.append(say("no geotherm of this kind gives the fitted thickness at this curvature"))
    low, high = 0.02 * abs(curvature), 20.0 * abs(curvature)
    curve = moment_curve(found.strength, elastic, float(np.sign(curvature)), low, high, in_plane)
    at_end = index in (int(stations[0]), int(stations[-1]))
    return StrengthCheck(
        plate.name, float(plate.distance[index]), at_end, found, words, curve, elastic, rock, tuple(remarks)
    )
