"""The plate in plan view: exact round loads, the strip as the limit of a long ridge, projections and their limits."""

from dataclasses import replace

import numpy as np
import pytest
from downwarp_checkout.plugin.core import plan, strip_check
from downwarp_checkout.plugin.core.elastic import Elastic, flexural_parameter
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.plate import Plate
from downwarp_checkout.plugin.core.problem import prepare
from downwarp_checkout.plugin.core.profile import Profile
from downwarp_checkout.plugin.core.settings import FitOptions
from downwarp_checkout.plugin.core.sheet import FEW_ROWS, Sheet, SheetLine, tapered
from downwarp_checkout.plugin.core.strip_check import check_strip, markers_between
from downwarp_checkout.plugin.core.transect import Transect
from pyproj import Geod
from scipy.special import bei, beip, ber, berp, kei, keip, ker, kerp

WGS84 = Geod(ellps="WGS84")
RIGIDITY = float(Elastic().rigidity(25e3))
STIFFNESS = 2270.0 * 9.81
LENGTH = (RIGIDITY / STIFFNESS) ** 0.25
"""l = (D / k)^(1/4), m: the length scale of round loads."""
ALPHA = float(flexural_parameter(RIGIDITY, STIFFNESS))


def disk(radius: float, spacing: float, half: int, parts: int = 8) -> np.ndarray:
    """Share of each cell that lies in a disk about the middle cell's centre, (2 half + 1,) squared."""
    at = ((np.arange((2 * half + 1) * parts) + 0.5) / parts - half - 0.5) * spacing
    inside = np.hypot(at[:, None], at) <= radius
    return inside.reshape(2 * half + 1, parts, 2 * half + 1, parts).mean(axis=(1, 3))


@pytest.mark.parametrize(
    ("radius", "published"),
    [
        (1, {0.0: 0.305396, 0.5: 0.284054, 1.0: 0.228305, 2.0: 0.103275}),
        (2, {0.0: 0.786798, 0.5: 0.680415, 1.0: 0.412294, 2.0: 0.031645}),
    ],
)
def test_disk_against_published_values(radius, published):
    """D del^4 w + k w = q on a disk of radius A = ``radius`` l; k w / q at r / A.

    Brotchie & Silvester 1969, form recomputed.
    """
    spacing = LENGTH / 20
    half = 240
    load = disk(radius * LENGTH, spacing, half)
    sheet = Sheet(load * 1e7, spacing, 12 * ALPHA)
    at = half + np.array(list(published)) * radius * LENGTH / spacing
    deflection = SheetLine(sheet, np.full(at.size, float(half)), at).deflection(RIGIDITY, STIFFNESS)
    np.testing.assert_allclose(deflection * STIFFNESS / 1e7, list(published.values()), rtol=5e-3)


def kelvin_disk(radius, r, length):
    """k w / q of a disk in closed form by Kelvin functions, a = A / l, s = r / l (Brotchie & Silvester 1969, checked
    below against the equation's own integral): inside 1 + a (ker' a ber s - kei' a bei s), outside
    a (ber' a ker s - bei' a kei s)."""
    a, s = radius / length, r / length
    inside = 1.0 + a * (kerp(a) * ber(s) - keip(a) * bei(s))
    outside = a * (berp(a) * ker(s) - beip(a) * kei(s))
    return np.where(s <= a, inside, outside)


def test_closed_form_of_the_disk_gives_the_published_values():
    """The formula that the next test uses, at A / l = 1 and 2."""
    for radius, values in (
        (1.0, (0.305396, 0.284054, 0.228305, 0.103275)),
        (2.0, (0.786798, 0.680415, 0.412294, 0.031645)),
    ):
        found = kelvin_disk(radius, radius * np.array([0.0, 0.5, 1.0, 2.0]), 1.0)
        np.testing.assert_allclose(found, values, atol=1.1e-6)


def test_disk_converges_to_the_closed_form():
    """Halving the cells quarters the largest error on a line off the disk's centre: second order, by cell means."""
    errors, spacings = [], LENGTH / np.array([4.0, 8.0, 16.0])
    for spacing in spacings:
        half = round(12 * LENGTH / spacing)
        sheet = Sheet(disk(1.5 * LENGTH, spacing, half, 24), spacing, 14 * ALPHA)
        u = np.linspace(-5, 5, 41) * LENGTH
        v = np.full(u.size, 0.37 * LENGTH)
        found = SheetLine(sheet, half + v / spacing, half + u / spacing).deflection(RIGIDITY, STIFFNESS) * STIFFNESS
        errors.append(np.abs(found - kelvin_disk(1.5 * LENGTH, np.hypot(u, v), LENGTH)).max())
    rate = np.polyfit(np.log(spacings), np.log(errors), 1)[0]
    assert rate == pytest.approx(2.0, abs=0.5)
    assert errors[-1] < 1e-3


def test_point_load_against_published_values():
    """w0 = P / (8 sqrt(D k)), first zero 3.914668 l, bulge 4.931812 l of height 0.014281 w0.

    Kelvin functions: w = -P / (2 pi sqrt(D k)) kei(r / l), Brotchie & Silvester 1969, form recomputed. The point is one
    cell; from a cell away on it is the point load's curve.
    """
    spacing = LENGTH / 16
    half = 220
    load = np.zeros((2 * half + 1, 2 * half + 1))
    load[half, half] = 1e18 / spacing**2
    sheet = Sheet(load, spacing, 14 * ALPHA)
    largest = 1e18 / (8 * np.sqrt(RIGIDITY * STIFFNESS))
    column = np.linspace(half, half + 9 * 16, 600)
    deflection = SheetLine(sheet, np.full(column.size, float(half)), column).deflection(RIGIDITY, STIFFNESS)
    assert deflection[0] == pytest.approx(largest, rel=5e-3)
    places = markers_between((column - half) * spacing, deflection)
    assert places.node.distance == pytest.approx(3.914668 * LENGTH, rel=5e-3)
    assert places.bulge.distance == pytest.approx(4.931812 * LENGTH, rel=5e-3)
    assert -places.bulge.deflection == pytest.approx(0.014281 * largest, rel=5e-3)
    away = column > half + 1
    expected = -1e18 / (2 * np.pi * np.sqrt(RIGIDITY * STIFFNESS)) * kei((column[away] - half) / 16)
    np.testing.assert_allclose(deflection[away], expected, atol=5e-3 * largest)


def test_long_ridge_equals_the_strip():
    """A ridge that runs from edge to edge of the window, tapered there, on the line in its middle against
    (D w'')'' + k w = q by finite elements: 0.5 % of the largest deflection everywhere within three alpha."""
    cells = plan.CELLS_PER_ALPHA
    spacing = ALPHA / cells
    half = round(plan.REACH * cells)
    x = np.arange(-2 * half, 2 * half + 1) * spacing
    section = 6e7 * np.exp(-((x / 40e3) ** 2))
    load = tapered(np.tile(section, (2 * half + 1, 1)), round(plan.TAPER * cells))
    sheet = Sheet(load, spacing, 4.0 * ALPHA)
    deflection = SheetLine(sheet, np.full(x.size - 4, float(half)), np.arange(2.0, x.size - 2)).deflection(
        RIGIDITY, STIFFNESS
    )
    strip = Plate(x, RIGIDITY, STIFFNESS).bend(section).at(x[2:-2])[:, 0]
    near = np.abs(x[2:-2]) <= 3 * ALPHA
    assert np.abs(deflection - strip)[near].max() < 5e-3 * strip.max()


def test_few_rows_many_rows_and_the_whole_sheet_agree():
    """Rows made one by one, rows cut from one transform, and the inverse transform in two dimensions, at cell centres;
    and the Laplacian is what its second differences are."""
    random = np.random.default_rng(7)
    load = np.zeros((150, 170))
    load[60:90, 70:100] = random.uniform(0, 5e7, (30, 30))
    sheet = Sheet(load, ALPHA / 10, 5 * ALPHA)
    whole = sheet.deflection(RIGIDITY, STIFFNESS)
    assert whole.shape == load.shape
    for rows in (np.full(100, 75.0), np.linspace(20, 119, 100).round()):
        columns = np.arange(30.0, 130.0)
        line = SheetLine(sheet, rows, columns)
        assert (line._stencil[0].size <= FEW_ROWS) == (np.ptp(rows) == 0)
        found = line.deflection(RIGIDITY, STIFFNESS)
        np.testing.assert_allclose(found, whole[rows.astype(int), columns.astype(int)], rtol=0, atol=1e-9 * whole.max())
    smooth = Sheet(
        5e7 * np.exp(-((np.arange(150)[:, None] - 75) ** 2 + (np.arange(170) - 85) ** 2) / 300), ALPHA / 10, 5 * ALPHA
    )
    bent = smooth.deflection(RIGIDITY, STIFFNESS)
    differences = (
        bent[2:, 1:-1] + bent[:-2, 1:-1] + bent[1:-1, 2:] + bent[1:-1, :-2] - 4 * bent[1:-1, 1:-1]
    ) / smooth.spacing**2
    columns = np.arange(50.0, 120.0)
    laplacian = SheetLine(smooth, np.full(columns.size, 70.0), columns).laplacian(RIGIDITY, STIFFNESS)
    expected = differences[69, columns.astype(int) - 1]
    np.testing.assert_allclose(laplacian, expected, atol=0.01 * np.abs(expected).max())


def test_identities_of_the_sheet():
    """Twice the load, twice the deflection; what restores the plate balances the load; turned a quarter, it turns;
    the load is left untouched."""
    random = np.random.default_rng(3)
    load = np.zeros((320, 320))
    load[150:170, 140:160] = random.uniform(0, 1e7, (20, 20))
    kept = load.copy()
    sheet = Sheet(load, 6e3, 6 * ALPHA)
    once = sheet.deflection(RIGIDITY, STIFFNESS)
    np.testing.assert_allclose(Sheet(2 * load, 6e3, 6 * ALPHA).deflection(RIGIDITY, STIFFNESS), 2 * once, rtol=1e-12)
    assert STIFFNESS * once.sum() == pytest.approx(load.sum(), rel=1e-4)
    turned = Sheet(np.rot90(load), 6e3, 6 * ALPHA).deflection(RIGIDITY, STIFFNESS)
    np.testing.assert_allclose(turned, np.rot90(once), atol=1e-4 * once.max())
    np.testing.assert_array_equal(load, kept)


def test_what_a_sheet_refuses():
    """A pad too narrow for the plate, places outside, and values that are no plate, each told by name."""
    sheet = Sheet(np.ones((20, 20)), 5e3, 3.9 * ALPHA)
    with pytest.raises(DownwarpError, match="too little for a flexural parameter of 71 km: it takes 4 of them"):
        sheet.deflection(RIGIDITY, STIFFNESS)
    with pytest.raises(DownwarpError, match="lies outside the plan view"):
        SheetLine(sheet, np.array([0.5]), np.array([5.0]))
    with pytest.raises(DownwarpError, match="stiffness is 0"):
        Sheet(np.ones((20, 20)), 5e3, 1e6).deflection(RIGIDITY, 0.0)
    with pytest.raises(DownwarpError, match="load holds a value that is not a finite number"):
        Sheet(np.full((3, 3), np.nan), 5e3, 1e6)


DIRECTIONS = [
    (0.0, 90.0),
    (0.0, 0.0),
    (-17.0, 90.0),
    (-17.0, 270.0),
    (45.0, 30.0),
    (45.0, -100.0),
    (84.0, 90.0),
    (90.0, 10.0),
]


def straight(latitude, azimuth, length, longitude=179.0):
    """Stations on a geodesic whose middle lies at a place, 10 km apart."""
    ends = [WGS84.fwd(longitude, latitude, azimuth + turn, 0.5 * length)[:2] for turn in (180.0, 0.0)]
    return Transect("A", ends, WGS84).stations(10e3)


@pytest.mark.parametrize(("latitude", "azimuth"), DIRECTIONS)
def test_distances_in_the_plane_are_right_to_its_distortion(latitude, azimuth):
    """Between random places of the window, a few km to 100 km apart, distance in the plane over that on the ellipsoid
    (pyproj.Geod) lies within the distortion stated; there and back gives the same place; stations lie on the plane at
    their distance."""
    stations = straight(latitude, azimuth, 800e3)
    window = plan.lay_window(stations.distance, stations.longitude, stations.latitude, WGS84, 120e3)
    assert window.distortion < plan.DISTORTION_LIMIT
    random = np.random.default_rng(11)
    rows, columns = window.shape
    u = random.uniform(-0.5, 0.5, 400) * (columns * window.spacing - 140e3)
    v = random.uniform(-0.5, 0.5, 400) * (rows * window.spacing - 140e3)
    angle, step = random.uniform(0, 2 * np.pi, 400), random.uniform(2e3, 50e3, 400)
    ends = window.plane.to_degrees(u + step * np.cos(angle), v + step * np.sin(angle))
    places = window.plane.to_degrees(u, v)
    _, _, true = WGS84.inv(*places, *ends)
    assert np.abs(step / true - 1.0).max() <= window.distortion * 1.01 + 1e-5
    back = window.plane.from_degrees(*places)
    np.testing.assert_allclose(back, (u, v), atol=0.01)
    step_in_plane = np.hypot(np.diff(window.row), np.diff(window.column)) * window.spacing
    np.testing.assert_allclose(step_in_plane, stations.step, rtol=window.distortion + 1e-5, atol=5.0)


def test_the_grid_lies_about_the_line():
    """Reach beside the line on all sides; the places of a finer reading fill the same cells; the nearest station."""
    stations = straight(30.0, 60.0, 600e3)
    window = plan.lay_window(stations.distance, stations.longitude, stations.latitude, WGS84, 60e3)
    rows, columns = window.shape
    assert window.row.min() * window.spacing == pytest.approx(300e3, rel=0.02)
    assert (columns - 1 - window.column.max()) * window.spacing == pytest.approx(300e3, rel=0.02)
    coarse, fine = window.places(), window.places(2)
    assert fine[0].shape == (2 * rows, 2 * columns)
    np.testing.assert_allclose(fine[1].reshape(rows, 2, columns, 2).mean(axis=(1, 3))[5, 5], coarse[1][5, 5], atol=1e-4)
    along = window.along(1)
    assert along[0, 0] == 0.0
    assert along[-1, -1] == stations.distance[-1]
    middle = stations.distance.size // 2
    at = round(window.row[middle]), round(window.column[middle])
    assert along[at] == pytest.approx(stations.distance[middle], abs=10e3)


def test_windows_that_no_plane_takes_are_refused():
    """Too wide for a plane without distortion, and too long for so thin a plate."""
    stations = straight(10.0, 45.0, 3000e3)
    with pytest.raises(
        DownwarpError, match=r"window of \d+ by \d+ km, in which a plane distorts distances to 0\.\d+ %"
    ):
        plan.lay_window(stations.distance, stations.longitude, stations.latitude, WGS84, 220e3)
    with pytest.raises(DownwarpError, match="more than 2000000: the line is too long for so thin a plate"):
        plan.lay_window(stations.distance, stations.longitude, stations.latitude, WGS84, 100e3, spacing=800.0)


def test_low_hills_do_not_join_rises():
    """A seamount of 4000 m and hills of 400 m that touch it and one another: the seamount alone is load, to its foot
    and with a lower summit on its flank; all that a hill rises to itself is not."""
    y, x = np.mgrid[0:120, 0:160] * 3.0
    height = np.maximum(4000.0 * (1 - np.hypot(x - 150, y - 180) / 90), -100.0)
    height += 1500 * np.exp(-((x - 195) ** 2 + (y - 180) ** 2) / 60)
    hills = 400.0 * np.cos(x / 30) ** 2 * np.cos(y / 30) ** 2 - 50.0
    both = np.maximum(height, hills)
    load = plan.rises(both, 1000.0, 6)
    far = np.hypot(x - 150, y - 180) > 150
    assert far.any() and (both > 0)[far].any()
    assert not load[far].any()
    near = np.hypot(x - 150, y - 180) < 75
    assert load[near].all()
    assert not plan.rises(-np.ones((5, 5)), 1.0, 1).any()


FLOOR, CREST = -5000.0, 3000.0


def cone(u, v, length):
    """Relief, m up, of a round seamount of 60 km radius, drawn out along v by ``length`` m."""
    r = np.hypot(u, np.maximum(np.abs(v) - 0.5 * length, 0.0))
    return FLOOR + CREST * np.maximum(1 - r / 60e3, 0.0)


def checked(length, thickness=25e3, options=None, azimuth=40.0, area=None):
    """A strip check on a line through the middle of `cone`, on an ellipsoid: relief is laid in the window's plane."""
    stations = straight(-12.0, azimuth, 700e3)
    options = FitOptions(reference_level=FLOOR + 1.0) if options is None else options
    window = plan.lay_window(
        stations.distance, stations.longitude, stations.latitude, WGS84, strip_check.flexural_reach(options, thickness)
    )
    u, v = window.plane.from_degrees(*window.places(2))
    at, beside = window.plane.from_degrees(stations.longitude, stations.latitude)
    profile = Profile("A", stations.distance, cone(at, beside, length), resolution=5e3)
    relief = plan.PlanRelief(window, 2, cone(u, v, length), None if area is None else area(u, v))
    return check_strip(profile, relief, options, thickness)


def test_a_long_ridge_is_a_strip():
    """As mapped it equals the strip: 0.5 % in deepest deflection and bulge, the same places, and the thickness."""
    found = checked(4000e3)
    assert abs(found.deepest_error) < 5e-3
    assert abs(found.bulge_error) < 0.03
    assert abs(found.node_shift) < 1.5e3
    assert abs(found.bulge_shift) < 3e3
    assert found.strip_thickness == pytest.approx(25e3, rel=0.02)
    assert found.verdict.startswith("a strip is enough here: it makes the deepest deflection")


def test_a_round_seamount_is_no_strip():
    """The strip is too deep by half and more, its bulge too high and too near; the load on the line is the same."""
    found = checked(0.0)
    assert found.deepest_error > 0.5
    assert found.bulge_error > 1.0
    assert found.node_shift != 0
    assert found.verdict.startswith("a strip is wrong here: it makes the deepest deflection")
    np.testing.assert_allclose(found.load.sum(), found.strip.stations.load.sum(), rtol=0.03)


def test_the_line_of_a_round_load_does_not_depend_on_its_direction():
    """East, north and between: the same deflection to a thousandth."""
    one, other, third = (checked(0.0, azimuth=azimuth).deflection for azimuth in (0.0, 90.0, 137.0))
    np.testing.assert_allclose(one, other, atol=1e-3 * one.max())
    np.testing.assert_allclose(one, third, atol=1e-3 * one.max())


def test_load_area_and_range_hold_on_the_map():
    """A load area that leaves nothing beyond 100 km of the middle leaves a shorter ridge: less deflection than all of
    it; LOAD_FROM and LOAD_TO about the load leave all of it; relief with no value counts as none, and is told."""
    whole = checked(4000e3)
    part = checked(4000e3, area=lambda u, v: np.abs(v) < 60e3)
    assert part.deflection.max() < 0.8 * whole.deflection.max()
    ranged = checked(4000e3, options=FitOptions(reference_level=FLOOR + 1.0, load_from=250e3, load_to=450e3))
    np.testing.assert_allclose(ranged.deflection, whole.deflection, atol=1e-6 * whole.deflection.max())
    stations = straight(-12.0, 40.0, 700e3)
    window = plan.lay_window(stations.distance, stations.longitude, stations.latitude, WGS84, 71e3)
    at, beside = window.plane.from_degrees(stations.longitude, stations.latitude)
    profile = Profile("A", stations.distance, cone(at, beside, 0.0), resolution=5e3)
    u, v = window.plane.from_degrees(*window.places())
    relief = np.where(v > 200e3, np.nan, cone(u, v, 0.0))
    line, remarks = plan.mapped_load(
        prepare(profile, FitOptions(reference_level=FLOOR + 1.0)), plan.PlanRelief(window, 1, relief)
    )
    assert len(remarks) == 1 and "lies outside the DEM and counts as without load" in remarks[0]
    assert np.isfinite(line.sheet.load).all()


def test_removed_load_and_thickness():
    """Setting 3 with a thickness of ice in the DEM: the plate rises by as much as the same load would sink it."""
    stations = straight(60.0, 10.0, 600e3)
    window = plan.lay_window(stations.distance, stations.longitude, stations.latitude, WGS84, 80e3)
    at, beside = window.plane.from_degrees(stations.longitude, stations.latitude)
    u, v = window.plane.from_degrees(*window.places())

    def ice(u, v):
        return 2000.0 * np.maximum(1 - np.hypot(u, v) / 120e3, 0.0)

    profile = Profile("A", stations.distance, ice(at, beside), resolution=5e3)
    found = check_strip(profile, plan.PlanRelief(window, 1, ice(u, v)), FitOptions(setting=3), 20e3)
    assert found.markers.deepest.deflection < 0
    assert found.strip.markers.deepest.deflection < 0
    assert found.deepest_error > 0


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (FitOptions(load=2), "no station of the line carries a relief load"),
        (FitOptions(in_plane=1e12), "IN_PLANE is 1e\\+12; a plan view takes no in-plane force"),
        (FitOptions(fill_sinking_only=True), "A plan view takes one infill density"),
    ],
)
def test_what_a_strip_check_refuses(options, message):
    """Nothing to map, and what a uniform sheet does not have."""
    with pytest.raises(DownwarpError, match=message):
        checked(0.0, options=options)


def test_a_fit_is_told_where_the_strip_errs_by_more_than_its_interval():
    """Nothing where the strip's thickness lies in the interval or the side is open; a sentence with both beyond it."""
    found = replace(checked(0.0), strip_thickness=31e3)
    assert strip_check.strip_remarks(found, 20e3, 32e3) == ()
    assert strip_check.strip_remarks(found, None, None) == ()
    for low, high in ((32e3, None), (None, 30e3), (20e3, 30e3)):
        (remark,) = strip_check.strip_remarks(found, low, high)
        assert remark.startswith("the load is no strip: fitted with one, a plate of 25 km comes out as 31 km, outside")
    assert "none follows" in strip_check.strip_remarks(replace(found, strip_thickness=None), None, None)[0]


def test_verdicts_in_words():
    """Enough up to 5 %, rough up to 15 %, else wrong; the larger of both errors decides; no strip at all is wrong."""
    assert strip_check.verdict(0.04, -0.02) == (
        "a strip is enough here: it makes the deepest deflection 4 % too deep, and a thickness fitted with it comes "
        "out 2 % too small"
    )
    assert strip_check.verdict(0.001, 0.12).startswith(
        "a strip is rough here: it makes the deepest deflection right to"
    )
    assert strip_check.verdict(-0.3, 0.0).startswith(
        "a strip is wrong here: it makes the deepest deflection 30 % too sha"
    )
    assert "no strip follows" in strip_check.verdict(0.0, None)
    assert strip_check.verdict(None, None).startswith("nothing to tell")


def test_markers_between_stations():
    """Of a line load's curve e^-s (cos s + sin s) on both sides: deepest at 0, node at 3 pi / 4, bulge at pi of height
    0.043214 (Turcotte & Schubert, section 3.16); on the other side where asked."""
    s = np.linspace(-6, 6, 301)
    w = np.exp(-np.abs(s)) * (np.cos(s) + np.sin(np.abs(s)))
    for side in (1.0, -1.0):
        found = markers_between(s, w, (side,))
        assert found.deepest.distance == pytest.approx(0.0, abs=1e-6)
        assert side * found.node.distance == pytest.approx(0.75 * np.pi, rel=1e-4)
        assert side * found.bulge.distance == pytest.approx(np.pi, rel=1e-3)
        assert -found.bulge.deflection == pytest.approx(0.043214, rel=1e-4)
    assert markers_between(s, np.zeros(s.size)).deepest is None
