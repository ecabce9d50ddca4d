"""A real outer rise through qgis_process: 5-minute global relief, a strip across the Kuril Trench aligned on its axis.

Relief: ETOPO5 as Debian's package ferret-datasets carries it (longitudes 0..360 in cell centres, no CRS stored). What
the fit says about the rise is compared with the strip itself, smoothed, without any plate; published elastic
thicknesses of western Pacific outer rises run from 20 to 65 km (Zhang, Lin & Zhou), and about 4 km times the square
root of the sea floor's age in Myr (McAdoo & Martin 1984), both abstracts only.
"""

import json
from pathlib import Path

import numpy as np
import pytest
from pyproj import Geod
from scipy.ndimage import gaussian_filter1d
from scipy.optimize import minimize_scalar

pytest.importorskip("qgis")

from running import column, rows

RELIEF = Path("/usr/share/ferret-vis/data/etopo5.cdf")
WGS84 = Geod(ellps="WGS84")
NEAR, FAR = 60.0, 500.0
"""The fit's window, km from the axis. Nearer to it the plate has yielded: on western Pacific profiles the thickness
falls within 20 to 95 km of the axis (Zhang, Lin & Zhou, abstract), and a uniform plate cannot follow it there."""

pytestmark = pytest.mark.skipif(
    not RELIEF.is_file(), reason=f"{RELIEF} is not there; Debian's ferret-datasets holds it (make test installs it)"
)


def across(path, longitude, latitude, bearing, before, after):
    """A file with the line along a bearing, from ``before`` km behind a place to ``after`` km beyond it."""
    start = WGS84.fwd(longitude, latitude, bearing + 180, before * 1e3)[:2]
    end = WGS84.fwd(longitude, latitude, bearing, after * 1e3)[:2]
    geometry = {"type": "LineString", "coordinates": [start, end]}
    feature = {"type": "Feature", "properties": {"name": "trench"}, "geometry": geometry}
    path.write_text(json.dumps({"type": "FeatureCollection", "features": [feature]}), encoding="utf-8")
    return str(path)


@pytest.fixture(scope="module")
def strip(headless, tmp_path_factory):
    """Keys that sample the strip, and its stations: the line begins 105 km landward of the axis, on the arc's slope."""
    folder = tmp_path_factory.mktemp("kuril")
    keys = {
        "TRANSECTS": across(folder / "line.geojson", 153.5, 45.2, 135, 150, 470),
        "NAME_FIELD": "name",
        "DEM": str(RELIEF),
        "DEM_CRS": "EPSG:4326",
        "SWATH_KM": 200,
        "SWATH_LINES": 21,
        "SWATH_ALIGN": 1,
    }
    stations = str(folder / "stations.gpkg")
    headless.run("sampletransects", {**keys, "STATIONS": stations})
    return keys, rows(stations)


@pytest.fixture(scope="module")
def axis(strip):
    """Distance of the axis, km: the strip's lowest station."""
    _, stations = strip
    return column(stations, "distance_km")[np.nanargmin(column(stations, "dem_m"))]


@pytest.fixture(scope="module")
def fitted(headless, strip, axis, tmp_path_factory):
    """Numbers, profile and stations of the fit, level and tilt as the setting has them."""
    keys, _ = strip
    folder = tmp_path_factory.mktemp("fitted")
    sinks = {name: str(folder / f"{name.lower()}.gpkg") for name in ("PROFILES", "STATIONS", "PARAMETERS")}
    numbers = headless.run(
        "fittransects", {**keys, "SETTING": 1, "FIT_FROM": axis + NEAR, "FIT_TO": axis + FAR, **sinks}
    )
    (profile,) = rows(sinks["PROFILES"])
    return numbers, profile, rows(sinks["STATIONS"])


def test_every_line_of_the_strip_has_its_axis_inside(strip, fitted):
    """No remark on lines left out, and an axis of trench depth well within the line."""
    _, stations = strip
    lowest = int(np.nanargmin(column(stations, "dem_m")))
    assert 3 < lowest < len(stations) - 3
    assert -9000 < stations[lowest]["dem_m"] < -7000
    assert "left out" not in fitted[1]["remarks"]


def test_the_strip_is_what_the_grid_holds(strip):
    """The middle line alone, read with GDAL and scipy: the strip, smoother, follows it seaward of the axis."""
    gdal = pytest.importorskip("osgeo.gdal")
    from scipy.interpolate import RegularGridInterpolator

    source = gdal.Open(str(RELIEF))
    left, width, _, top, _, height = source.GetGeoTransform()
    values = source.ReadAsArray()
    latitude = top + (np.arange(values.shape[0]) + 0.5) * height
    longitude = left + (np.arange(values.shape[1]) + 0.5) * width
    read = RegularGridInterpolator((latitude[::-1], longitude), values[::-1])
    _, stations = strip
    places = [row["geometry"].constGet() for row in stations]
    alone = read([(place.y(), place.x()) for place in places])
    relief = column(stations, "dem_m")
    known = np.isfinite(relief) & (column(stations, "distance_km") > 200)
    assert known.sum() > 30
    assert np.abs(np.median(relief[known] - alone[known])) < 150
    assert np.corrcoef(relief[known], alone[known])[0, 1] > 0.7


def test_elastic_thickness_lies_between_20_and_45_km(fitted):
    """At E 100 GPa, which stands beside it."""
    numbers, profile, _ = fitted
    assert (profile["young_gpa"], profile["poisson"], profile["gravity_m_s2"]) == (100, 0.25, 9.81)
    assert 20 < numbers["TE_KM"] < 45
    assert profile["te_km"] == pytest.approx(numbers["TE_KM"])


def test_the_fit_is_near_the_best_in_least_squares(strip, axis, fitted):
    """A broken plate in closed form, with level and tilt, fitted by plain least squares with scipy: the fit's residuals
    may be larger, for they are thought correlated, but not twice as large, and the interval holds the other's answer."""
    _, stations = strip
    distance, relief = column(stations, "distance_km") - axis, column(stations, "dem_m")
    used = (distance >= NEAR) & (distance <= FAR) & np.isfinite(relief)

    def misfit(log_te):
        rigidity = 100e9 * np.exp(3 * log_te) * 1e9 / (12 * (1 - 0.25**2))
        s = distance[used] * 1e3 / (4 * rigidity / (2270 * 9.81)) ** 0.25
        columns = np.column_stack([np.exp(-s) * np.cos(s), np.exp(-s) * np.sin(s), np.ones_like(s), distance[used]])
        residual = relief[used] - columns @ np.linalg.lstsq(columns, relief[used], rcond=None)[0]
        return np.sqrt(np.mean(residual**2))

    best = minimize_scalar(misfit, bounds=(np.log(3), np.log(90)), method="bounded")
    numbers, profile, _ = fitted
    assert numbers["RMS_M"] < 2 * best.fun
    assert profile["te_low_km"] < np.exp(best.x)
    assert profile["te_high_km"] is None or np.exp(best.x) < profile["te_high_km"]


def test_a_window_from_the_axis_on_is_remarked_on(headless, strip, axis, tmp_path):
    """From 10 km on the fit follows the yielded part next to the axis and leaves the outer rise to long residuals: the
    remarks say so, and what to do."""
    keys, _ = strip
    sinks = {name: str(tmp_path / f"{name.lower()}.gpkg") for name in ("PROFILES", "STATIONS")}
    headless.run("fittransects", {**keys, "SETTING": 1, "FIT_FROM": axis + 10, "FIT_TO": axis + FAR, **sinks})
    (profile,) = rows(sinks["PROFILES"])
    assert "begin the fit farther out (FIT_FROM)" in profile["remarks"]


def test_the_bulge_is_where_and_as_high_as_the_strip_shows(strip, axis, fitted, record_property):
    """The strip smoothed over 25 km, above the line through its farthest 200 km: its highest point and its height.

    The rise is broad and flat, and the far sea floor is no plane: within 40 km, and a third of the height.
    """
    _, stations = strip
    _, profile, _ = fitted
    distance, relief = column(stations, "distance_km") - axis, column(stations, "dem_m")
    beyond = np.isfinite(relief) & (distance > 0) & (distance < FAR)
    distance, relief = distance[beyond], relief[beyond]
    smooth = gaussian_filter1d(relief, 25 / np.diff(distance).mean())
    far = distance > FAR - 200
    above = smooth - np.polyval(np.polyfit(distance[far], relief[far], 1), distance)
    top = int(np.argmax(np.where(distance < 250, above, -np.inf)))
    record_property("strip", f"bulge {above[top]:.0f} m at {distance[top]:.0f} km from the axis")
    record_property("fit", f"bulge {profile['bulge_m']:.0f} m at {profile['bulge_km'] - axis:.0f} km from the axis")
    record_property("thickness", f"{profile['te_km']:.1f} km, rms {profile['rms_m']:.0f} m")
    assert profile["bulge_km"] - axis == pytest.approx(distance[top], abs=40)
    assert profile["bulge_m"] == pytest.approx(above[top], rel=0.34)
