"""Gravity of bent plates: balance of masses, the crust's bodies, and the joint fit on the demo's known plates."""

import dataclasses

import numpy as np
import pytest
from downwarp_checkout.plugin.core import crust as crusts
from downwarp_checkout.plugin.core import demo, joint
from downwarp_checkout.plugin.core.constants import GRAVITATIONAL, MILLIGAL
from downwarp_checkout.plugin.core.crust import HELD, MIRRORED, ROUND, STRIP, UNDEFLECTED, Crust, Section, anomaly
from downwarp_checkout.plugin.core.elastic import Elastic
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.forward import TransectModel
from downwarp_checkout.plugin.core.gravity_check import BOUGUER, GravityOptions, check_gravity
from downwarp_checkout.plugin.core.load import relief_load
from downwarp_checkout.plugin.core.settings import BROKEN, CONTINUOUS, Densities
from downwarp_checkout.plugin.core.stated import PlateStations, reference_levels
from scipy.ndimage import gaussian_filter1d

STEP = 2.5e3
CRUST = Crust(load=2800.0, mantle=3300.0)


def ridge(x, thickness=24e3, rho_load=2800.0):
    """The demo's ridge: relief of the load, ground of the load, infill, and the deflection of its known plate."""
    rho = Densities(rho_load, 1030.0, 2800.0, 3300.0, 1030.0)
    across = np.clip(np.abs(x - 320e3) / demo.RIDGE_HALF_WIDTH, 0, 1)
    relief = demo.SEAFLOOR + demo.RIDGE_HEIGHT * np.cos(0.5 * np.pi * across) ** 2
    under = across < 1
    infill = np.where(under[1:] & under[:-1], 2800.0, 1030.0)
    load = np.where(under, relief_load(relief, demo.SEAFLOOR, rho, 9.81), 0.0)
    model = TransectModel(x, load, (3300.0 - infill) * 9.81, Elastic(), kind=CONTINUOUS, regional=0)
    bending = model.bend(thickness, 0.0, np.zeros(0))
    deflection = bending.at(x)[:, 0]
    return Section(
        x, np.where(under, relief, demo.SEAFLOOR - deflection), np.full(x.shape, demo.SEAFLOOR), deflection,
        np.append(infill, infill[-1]), under, demo.SEAFLOOR,
    ), bending  # fmt: skip


def trench(x, thickness=34e3):
    """The demo's trench from its axis on."""
    model = TransectModel(
        x, np.zeros(x.size), np.full(x.size - 1, 2270 * 9.81), Elastic(), kind=BROKEN, shear=True, moment=True,
        regional=0,
    )  # fmt: skip
    bending = model.bend(thickness, 0.0, np.array([demo.TRENCH_SHEAR, demo.TRENCH_MOMENT]))
    level = -5600.0 + demo.TRENCH_TILT * x
    deflection = bending.at(x)[:, 0]
    nowhere = np.zeros(x.size, dtype=bool)
    return Section(x, level - deflection, level, deflection, np.full(x.size, 1030.0), nowhere), bending


def rough(count, size, rng):
    """Correlated noise of two wavelengths, as the demo's relief has."""
    noise = np.zeros(count)
    for length in (3e3, 12e3):
        part = gaussian_filter1d(rng.standard_normal(count), length / STEP)
        noise += np.sqrt(0.5) * part / part.std()
    return size * noise


def by_ribbons(x, section, crust):
    """Gravity of the ridge by upright ribbons, G rho ln[(dx^2 + b^2) / (dx^2 + a^2)] dx between depths a and b: a formula
    and a sum apart from the polygons."""
    fine = np.arange(-1000e3, 1640e3, 250.0) + 125.0
    deflection = np.interp(fine, section.distance, section.deflection)
    top = np.interp(fine, section.distance, section.load_top)
    inside = section.infill[np.clip(np.searchsorted(section.distance, fine) - 1, 0, section.distance.size - 1)]
    total = np.zeros(x.shape)
    for above, below, contrast in (
        (-top, np.full(fine.shape, -section.level), crust.load - crust.water),
        (-section.level + 0 * fine, -section.level + deflection, np.where(inside > 1915, 0.0, 1030.0 - crust.crust)),
        (crust.thickness - section.level + 0 * fine, crust.thickness - section.level + deflection, -500.0),
    ):
        squared = (x[:, None] - fine) ** 2
        total += (contrast * np.log((squared + below**2) / (squared + above**2)) * 250.0).sum(axis=1)
    return GRAVITATIONAL.value * total


def test_against_ribbons():
    """The whole anomaly of the demo's ridge by an independent sum: within 0.6 mGal of some 190."""
    x = np.arange(0, 640e3 + 1, STEP)
    section, _ = ridge(x)
    found = anomaly(section, CRUST, x).free_air
    assert np.abs(found - by_ribbons(x, section, CRUST)).max() < 0.6 * MILLIGAL.value


def test_masses_balance():
    """The integral of g along the line is 2 pi G times the mass per metre of strike. Load, infill and mantle of a plate that
    floats balance, for its foundation carries the load: int k w = int q. So the integral of the free-air anomaly vanishes
    beside that of the load, whose mass is 1770 kg/m3 times its section."""
    x = np.arange(-1500e3, 2140e3 + 1, STEP)
    section, _ = ridge(x)
    wide = np.arange(-4000e3, 4640e3, STEP)
    held, free = (anomaly(section, CRUST, wide, before) for before in (HELD, UNDEFLECTED))
    assert np.abs(held.free_air - free.free_air).max() < 1e-3 * MILLIGAL.value
    height = section.load_top - section.level
    mass = 1770.0 * (0.5 * (height[1:] + height[:-1]) * STEP).sum()
    # Of a body at 3.4 km depth the line sees all but 2 z / (pi L), L its half-length.
    assert (held.load * STEP).sum() / (2 * np.pi * GRAVITATIONAL.value) == pytest.approx(mass, rel=2e-3)
    assert abs((held.free_air * STEP).sum()) < 3e-3 * (held.load * STEP).sum()


def test_local_compensation_leaves_the_edges():
    """A plate without stiffness under a wide plateau: load, infill and root balance, w = q / k, and gravity in the middle
    is small beside that of the load alone."""
    x = np.arange(-800e3, 800e3 + 1, 5e3)
    under = np.abs(x) < 500e3
    relief = np.where(under, -4000.0, -5000.0)
    load = np.where(under, 1770.0 * 9.81 * 1000.0, 0.0)
    section = Section(x, relief, np.full(x.shape, -5e3), load / (500.0 * 9.81), np.full(x.shape, 2800.0), under, -5e3)
    found = anomaly(section, CRUST, np.array([0.0]))
    assert abs(found.free_air[0]) < 0.03 * found.load[0]


def test_moved_sideways_and_mirrored():
    """Distances shifted by any amount change nothing; a section that begins at the middle of a symmetric one, mirrored,
    gives the whole one's gravity."""
    x = np.arange(0, 640e3 + 1, STEP)
    section, _ = ridge(x)
    whole = anomaly(section, CRUST, x)
    moved = dataclasses.replace(section, distance=x + 123e3)
    assert anomaly(moved, CRUST, x + 123e3).free_air == pytest.approx(whole.free_air, abs=1e-12)
    half = x >= 320e3
    part = Section(*(getattr(section, name)[half] for name in (
        "distance", "relief", "undeflected", "deflection", "infill", "under_load")), section.level)  # fmt: skip
    found = anomaly(part, CRUST, x[half], MIRRORED)
    for name in ("free_air", "bouguer"):
        difference = getattr(found, name) - getattr(whole, name)[half]
        assert np.abs(difference).max() < 0.2 * MILLIGAL.value, name


def test_bouguer_of_a_level_sea_is_a_slab():
    """Over a level sea floor 4 km deep nothing is bent: free-air 0, Bouguer 2 pi G (2670 - 1030) 4 km = 275.1 mGal."""
    x = np.linspace(0, 300e3, 61)
    section = Section(x, np.full(61, -4e3), np.full(61, -4e3), np.zeros(61), np.full(61, 1030.0), np.zeros(61, bool))
    for shape in (STRIP, ROUND):
        found = anomaly(section, CRUST, x, shape=shape)
        assert found.free_air == pytest.approx(0.0, abs=1e-12)
        assert found.bouguer / MILLIGAL.value == pytest.approx(275.1, abs=0.1)


def test_on_land_gravity_is_that_at_the_ground():
    """A plateau 2 km high on a stiff plate: free-air + 2 pi G rho t at the ground (not minus, as seen from below), and
    Bouguer 0 for a load of the Bouguer density."""
    x = np.linspace(-600e3, 600e3, 241)
    section = Section(x, np.full(241, 2e3), np.zeros(241), np.zeros(241), np.full(241, 2670.0), np.ones(241, bool), 0.0)
    found = anomaly(section, dataclasses.replace(CRUST, load=2670.0), np.array([0.0]))
    assert found.free_air[0] / MILLIGAL.value == pytest.approx(223.9, abs=0.2)
    assert found.bouguer[0] / MILLIGAL.value == pytest.approx(0.0, abs=1e-6)


def test_round_and_strip_agree_where_the_load_is_a_strip():
    """Far from the centre a wide ring is a strip: within 1 % of the largest value at a ring of 1000 km."""
    x = np.arange(0, 1400e3 + 1, 4e3)
    height = 1500.0 * np.exp(-(((x - 1000e3) / 40e3) ** 2))
    under = height > 1.0
    section = Section(x, -4e3 + height, np.full(x.shape, -4e3), 0.3 * height, np.full(x.shape, 2500.0), under, -4e3)
    near = x[(x > 850e3) & (x < 1150e3)]
    strip, ring = (anomaly(section, CRUST, near, HELD, shape).free_air for shape in (STRIP, ROUND))
    assert np.abs(strip - ring).max() < 0.01 * np.abs(strip).max()


def test_round_load_above_the_sea_is_refused():
    """The series needs all below sea level, and says so."""
    x = np.linspace(0, 100e3, 51)
    section = Section(x, 500.0 - x / 50, np.full(51, -2e3), np.zeros(51), np.full(51, 1030.0), np.ones(51, bool), -2e3)
    with pytest.raises(DownwarpError, match="choose the strip model"):
        anomaly(section, CRUST, x, shape=ROUND)


def test_reference_level_is_read_back_from_the_load():
    """relief_load, turned round: relief in the sea, across sea level and on land."""
    for level, relief in ((-5e3, [-4e3, -1.0, 300.0]), (200.0, [250.0, 3000.0])):
        rho = Densities(2670.0, 1030.0, 1030.0, 3300.0, 1030.0)
        load = relief_load(relief, level, rho, 9.81)
        found = reference_levels(relief, load, dataclasses.replace(CRUST, load=2670.0), 9.81)
        assert found == pytest.approx(level, abs=1e-8)


def test_cells_see_a_model_as_they_see_readings():
    """1000 uneven readings of x^2 (in 100 km) averaged into cells by their sigmas: the mean of x^2 over the two places
    of a cell is the cell's mean reading, though x^2 at the cell's middle is not."""
    rng = np.random.default_rng(2)
    x = np.sort(rng.uniform(0.0, 500e3, 1000))
    data = joint._data(joint.Readings(x, (x / 1e5) ** 2, rng.uniform(1.0, 3.0, 1000)), 1, "surface")
    assert data.at.size < 120
    assert data.average((data.pairs / 1e5) ** 2) == pytest.approx(data.value, rel=1e-9)
    assert np.abs((data.at / 1e5) ** 2 - data.value).max() > 1e-5


def test_what_the_surface_leaves_is_averaged_over_its_noise():
    """Two settings of weights 1/4 and 3/4 with means 0 and 4 and variances 1 and 2: mean 3, variance 7/4 within and 3
    between."""
    weight = np.array([[0.25], [0.75]])
    mean, spread = np.array([[[0.0]], [[4.0]]]), np.array([[[[1.0]]], [[[2.0]]]])
    left = joint._left(weight, mean, spread)
    assert left.mean.item() == pytest.approx(3.0)
    assert left.precision.item() == pytest.approx(1 / (1.75 + 3.0))


RIDGE_SEEDS = (0, 1, 2)


def ridge_readings(seed):
    """Section, surface and gravity of the demo's ridge with correlated noise of 40 m and 3 mGal."""
    rng = np.random.default_rng(seed)
    x = np.arange(0, 680e3 + 1, STEP)
    section, _ = ridge(x)
    noise, gravity_noise = rough(x.size, 40.0, rng), rough(x.size, 3 * MILLIGAL.value, rng)
    free = ~section.under_load
    surface = joint.Readings(x[free], (section.undeflected - section.deflection + noise)[free], None, STEP)
    seen = anomaly(section, CRUST, x).free_air + gravity_noise + 10 * MILLIGAL.value
    return section, surface, joint.Readings(x, seen, None, STEP)


def width(estimate):
    return estimate.high - estimate.low


@pytest.fixture(scope="module")
def ridge_fits():
    return [joint.joint_fit(section, CRUST, *readings, joint.JointOptions())
            for section, *readings in map(ridge_readings, RIDGE_SEEDS)]  # fmt: skip


def test_joint_interval_holds_the_truth_and_is_narrower_than_either(ridge_fits):
    """The demo's plate, 24 km under a load of 2800 kg/m3: known plate -> surface and gravity with noise -> joint fit.

    Seeds are the first three; by many seeds the 90 % intervals hold the truth as often as they should, so that at least
    two of three do here.
    """
    held = []
    for fit in ridge_fits:
        te, rho = fit.joint.thickness, fit.joint.density
        held.append(te.low < 24e3 < te.high and rho.low < 2800.0 < rho.high)
        for alone in (fit.surface, fit.gravity):
            assert width(te) < width(alone.thickness)
            assert width(rho) < width(alone.density)
        assert te.value == pytest.approx(24e3, rel=0.05)
        assert rho.value == pytest.approx(2800.0, rel=0.02)
        assert fit.joint.gravity_rms / MILLIGAL.value == pytest.approx(3.0, rel=0.3)
        assert fit.joint.surface_rms == pytest.approx(40.0, rel=0.3)
    assert sum(held) >= 2


def test_joint_fit_without_noise_finds_the_plate():
    """Almost no noise (1 m, 0.05 mGal): thickness to 1 %, density to 0.5 %."""
    section, surface, seen = ridge_readings(4)
    rng = np.random.default_rng(4)
    free = ~section.under_load
    exact = (section.undeflected - section.deflection)[free] + rough(int(free.sum()), 1.0, rng)
    clean = anomaly(section, CRUST, section.distance).free_air + rough(section.distance.size, 5e-7, rng)
    fit = joint.joint_fit(
        section, CRUST, dataclasses.replace(surface, value=exact), dataclasses.replace(seen, value=clean),
        joint.JointOptions(),
    )  # fmt: skip
    for answer in (fit.surface, fit.gravity, fit.joint):
        assert answer.thickness.value == pytest.approx(24e3, rel=0.01), answer.source
        assert answer.density.value == pytest.approx(2800.0, rel=0.005), answer.source


def test_joint_fit_of_a_trench_carries_end_forces():
    """The demo's trench, 34 km, no load: end shear and moment are shared by surface and gravity; thickness alone."""
    rng = np.random.default_rng(0)
    x = np.arange(0, 580e3 + 1, STEP)
    section, _ = trench(x)
    surface = joint.Readings(x, section.relief + rough(x.size, 40.0, rng), None, STEP)
    seen = anomaly(section, CRUST, x, MIRRORED).free_air + rough(x.size, 3 * MILLIGAL.value, rng)
    options = joint.JointOptions(kind=BROKEN, shear=True, moment=True, regional=2, before=MIRRORED)
    fit = joint.joint_fit(section, CRUST, surface, joint.Readings(x, seen, None, STEP), options)
    te = fit.joint.thickness
    assert te.low < 34e3 < te.high
    assert fit.joint.density.value is None
    assert width(te) < width(fit.surface.thickness) and width(te) < width(fit.gravity.thickness)


def test_answer_does_not_depend_on_units_of_levels():
    """A level added to gravity, and a tilt that the surface's regional takes, change nothing."""
    section, surface, seen = ridge_readings(0)
    options = joint.JointOptions(te_from=15e3, te_to=40e3, rho_from=2600.0, rho_to=3000.0)
    one = joint.joint_fit(section, CRUST, surface, seen, options)
    other = joint.joint_fit(section, CRUST, surface, dataclasses.replace(seen, value=seen.value + 5e-3), options)
    assert other.joint.thickness.value == pytest.approx(one.joint.thickness.value, rel=1e-4)
    assert other.joint.density.value == pytest.approx(one.joint.density.value, rel=1e-4)


def stations(section, bending, te, observed=None):
    """The section as STATIONS of a run would state it."""
    x = section.distance
    moment, shear = bending.moment_and_shear_at(x)
    load = np.zeros(x.size)
    if section.under_load.any():
        rho = Densities(2800.0, 1030.0, 2800.0, 3300.0, 1030.0)
        load = np.where(section.under_load, relief_load(section.relief, section.level, rho, 9.81), 0.0)
    surface = section.undeflected - section.deflection
    return PlateStations(
        "line", x, section.deflection, np.full(x.size, te), bending.at(x, 2)[:, 0], section.relief, surface,
        surface if observed is None else observed, np.full(x.size, np.nan), (~section.under_load).astype(float), load,
        section.infill, bending.at(x, 1)[:, 0], moment[:, 0], shear[:, 0],
    )  # fmt: skip


def test_stations_tell_support_regional_and_level():
    """What a run wrote is read back: kind of plate, end forces, regional and reference level."""
    x = np.arange(0, 640e3 + 1, STEP)
    section, bending = ridge(x)
    plate = stations(section, bending, 24e3)
    assert plate.support(Elastic(), 3300.0) == (CONTINUOUS, False, False)
    assert plate.regional_coefficients() == 1
    found, remarks = plate.section(CRUST, 9.81)
    assert found.level == pytest.approx(demo.SEAFLOOR, abs=1e-6) and not remarks
    assert plate.other_constants(Elastic()) == ""
    assert "give the constants" in plate.other_constants(Elastic(young=70e9))
    _, remarks = plate.section(dataclasses.replace(CRUST, load=2600.0), 9.81)
    assert "load_mpa does not follow from dem_m with RHO_LOAD 2600" in remarks[0]
    section, bending = trench(np.arange(0, 580e3 + 1, STEP))
    plate = stations(section, bending, 34e3)
    assert plate.support(Elastic(), 3300.0) == (BROKEN, True, True)
    assert plate.regional_coefficients() == 2


def test_check_compares_in_the_kind_observed():
    """The same gravity given as free-air and as Bouguer anomaly gives one rms; a level is taken out."""
    section, bending = ridge(np.arange(0, 640e3 + 1, STEP))
    plate = stations(section, bending, 24e3)
    x = section.distance
    model = anomaly(section, CRUST, x)
    noise = rough(x.size, 2e-5, np.random.default_rng(5))
    options = GravityOptions(CRUST, joint=False)
    found = [
        check_gravity(plate, joint.Readings(x, values + noise + 3e-4), dataclasses.replace(options, kind=kind))
        for kind, values in enumerate((model.free_air, model.bouguer))
    ]
    assert found[0].rms == pytest.approx((noise - noise.mean()).std(), rel=1e-6)
    assert found[1].kind == BOUGUER and found[1].rms == pytest.approx(found[0].rms, rel=1e-6)
    assert found[0].before == crusts.HELD


def test_check_rejects():
    """Too few readings, and none within the window."""
    section, bending = ridge(np.arange(0, 640e3 + 1, STEP))
    plate = stations(section, bending, 24e3)
    options = GravityOptions(CRUST)
    with pytest.raises(DownwarpError, match="line: 2 readings of gravity lie along the plate; it takes at least 5"):
        check_gravity(plate, joint.Readings(np.array([1e4, 2e4, 9e6]), np.zeros(3)), options)
    x = section.distance
    with pytest.raises(DownwarpError, match="FIT_FROM and FIT_TO leave 0 readings"):
        check_gravity(plate, joint.Readings(x, 0 * x), dataclasses.replace(options, fit_from=9e6))
    with pytest.raises(DownwarpError, match=r"RHO_LOAD_FROM \(900 kg/m3\) must exceed RHO_WATER"):
        joint.joint_fit(section, CRUST, *ridge_readings(0)[1:], joint.JointOptions(rho_from=900.0))
