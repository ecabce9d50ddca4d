"""What holds of any input, by Hypothesis: identities and bounds over examples; plates and paths have theirs beside them.

Examples are the same in each run.
"""

import numpy as np
import pytest
from downwarp_checkout.plugin.core import bilinear, lay, load, markers, plate, swath
from downwarp_checkout.plugin.core.elastic import Elastic, flexural_parameter
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.fit import fit_profile
from downwarp_checkout.plugin.core.profile import Profile
from downwarp_checkout.plugin.core.settings import Densities, FitOptions
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays
from pyproj import Geod

usual = settings(deadline=None, derandomize=True, max_examples=60, suppress_health_check=[HealthCheck.too_slow])
few = settings(usual, max_examples=25)

finite = st.floats(-1e4, 1e4, allow_subnormal=False)
thicknesses = st.floats(100.0, 1e6)


@given(thicknesses, st.floats(1e9, 1e12), st.floats(-0.9, 0.49), st.floats(1.01, 3.0))
@usual
def test_rigidity_is_undone_and_grows_with_the_cube(thickness, young, poisson, factor):
    """D = E Te^3 / 12 (1 - nu^2): `thickness` undoes it, a factor in Te is its cube in D and its 3/4th power in alpha."""
    elastic = Elastic(young, poisson)
    rigidity = elastic.rigidity(thickness)
    assert elastic.thickness(rigidity) == pytest.approx(thickness, rel=1e-12)
    assert elastic.rigidity(factor * thickness) == pytest.approx(factor**3 * rigidity, rel=1e-12)
    wider = flexural_parameter(elastic.rigidity(factor * thickness), 2e4) / flexural_parameter(rigidity, 2e4)
    assert wider == pytest.approx(factor**0.75, rel=1e-12)


densities = st.builds(
    lambda water, lighter, load_, mantle: Densities(load_, lighter, lighter, mantle, water),
    st.floats(0.0, 1100.0), st.floats(0.0, 1500.0), st.floats(1500.0, 3200.0), st.floats(2500.0, 3500.0),
)  # fmt: skip


@given(arrays.arrays(float, 12, elements=finite), finite, densities)
@usual
def test_relief_loads_where_it_stands_above_the_level_and_more_where_it_stands_higher(relief, level, rho):
    """q is 0 up to the level, never below 0, and never falls as the relief rises."""
    pressure = load.relief_load(relief, level, rho, 9.81)
    assert (pressure >= 0).all()
    assert (pressure[relief <= level] == 0).all()
    order = np.argsort(relief)
    assert (np.diff(pressure[order]) >= -1e-6 * max(pressure.max(), 1.0)).all()


@given(arrays.arrays(float, st.integers(1, 40), elements=finite), finite)
@usual
def test_a_load_is_made_of_stations_above_the_level(relief, level):
    """Marked stations stand above the level; the highest of all is marked where it does."""
    marked = load.load_mask(relief, level)
    assert (relief[marked] > level).all()
    if (relief > level).any():
        assert marked[np.argmax(relief)]


@given(st.integers(2, 9), st.integers(2, 9), st.tuples(finite, finite, finite, finite), st.data())
@usual
def test_bilinear_reproduces_what_is_bilinear(rows, columns, coefficients, data):
    """a + b r + c s + d r s is met at every place between cell centres, and no value leaves its cells' range."""
    row, column = np.mgrid[0:rows, 0:columns].astype(float)
    a, b, c, d = coefficients
    grid = a + b * row + c * column + d * row * column
    r = np.array(data.draw(st.lists(st.floats(0, rows - 1), min_size=1, max_size=5)))
    s = np.array(data.draw(st.lists(st.floats(0, columns - 1), min_size=r.size, max_size=r.size)))
    values = bilinear.bilinear(grid, r, s)
    scale = np.abs(grid).max() + 1.0
    assert values == pytest.approx(a + b * r + c * s + d * r * s, abs=1e-10 * scale)
    assert (values <= grid.max() + 1e-10 * scale).all() and (values >= grid.min() - 1e-10 * scale).all()


gapped = st.one_of(finite, st.just(np.nan))


@given(arrays.arrays(float, st.tuples(st.integers(1, 7), st.integers(1, 25)), elements=gapped))
@usual
def test_a_swath_lies_between_its_strips(values):
    """The mean is within the strips and unknown where all are; sigma is not below 0; the strips' order does not matter
    to mean and count."""
    combined = swath.combine(values)
    known = np.isfinite(values)
    assert (combined.count == known.sum(axis=0)).all()
    assert (np.isfinite(combined.mean) == known.any(axis=0)).all()
    some = known.any(axis=0)
    low = np.where(known, values, np.inf).min(axis=0)[some]
    high = np.where(known, values, -np.inf).max(axis=0)[some]
    assert (combined.mean[some] >= low - 1e-8).all() and (combined.mean[some] <= high + 1e-8).all()
    assert (combined.sigma[np.isfinite(combined.sigma)] >= 0).all()
    assert np.isfinite(combined.sigma[known.sum(axis=0) > 1]).all()
    assert combined.mean == pytest.approx(swath.combine(values[::-1]).mean, nan_ok=True, abs=1e-8)


@given(st.floats(-720, 720), st.floats(-89.9, 89.9), st.integers(1, 40), st.floats(1e3, 5e6))
@usual
def test_transects_round_a_centre_begin_there_and_have_the_radius(longitude, latitude, directions, radius):
    """As many as asked for, each a geodesic of the radius from the centre in its direction."""
    geod = Geod(ellps="WGS84")
    laid = lay.lay_round(longitude, latitude, geod, directions, radius)
    assert len(laid) == directions
    for each in laid:
        assert each.vertices[0] == pytest.approx([longitude, latitude], abs=1e-9)
        azimuth, _, length = geod.inv(*each.vertices[0], *each.vertices[-1])
        assert length == pytest.approx(radius, rel=1e-9)
        assert (azimuth - each.azimuth + 180.0) % 360.0 - 180.0 == pytest.approx(0.0, abs=1e-5)
        assert (np.abs(np.diff(each.vertices[:, 0])) <= 180.0).all()


@given(st.floats(2e3, 80e3), st.floats(1e11, 5e12), st.floats(0.2, 5.0))
@usual
def test_markers_stay_where_they_are_as_the_force_grows(thickness, shear, factor):
    """Linear: a multiple of the end shear leaves deepest point, node and bulge in place and multiplies their sizes."""
    alpha = flexural_parameter(Elastic().rigidity(thickness), 2.2e4)
    nodes = np.linspace(0.0, 12.0 * alpha, 241)
    rigid = np.full(nodes.size - 1, Elastic().rigidity(thickness))
    bent = plate.Plate(nodes, rigid, np.full(nodes.size - 1, 2.2e4), 0.0, plate.BROKEN, plate.CONTINUES)
    one = markers.find_markers(bent.solve(bent.end_vector(shear)))
    other = markers.find_markers(bent.solve(bent.end_vector(factor * shear)))
    for name in ("deepest", "node", "bulge"):
        first, second = getattr(one, name), getattr(other, name)
        assert first is not None and second is not None
        assert second.distance == pytest.approx(first.distance, abs=1e-6 * alpha)
        assert second.deflection == pytest.approx(factor * first.deflection, abs=1e-9 * factor * one.deepest.deflection)


profiles = st.builds(
    lambda seed, count, spacing, size, rough, gaps: _profile(seed, count, spacing, size, rough, gaps),
    st.integers(0, 10_000), st.integers(2, 90), st.sampled_from([1e3, 5e3, 20e3]), st.sampled_from([0.0, 1.0, 1e3, 1e5]),
    st.sampled_from([0.0, 1e-6, 10.0, 1e3]), st.sampled_from([0.0, 0.3, 1.0]),
)  # fmt: skip


def _profile(seed, count, spacing, size, rough, gaps):
    rng = np.random.default_rng(seed)
    distance = spacing * np.cumsum(rng.uniform(0.5, 1.5, count))
    shape = np.exp(-distance / 2e5) * np.cos(distance / rng.uniform(3e4, 3e5))
    relief = -4000.0 - size * shape + rough * rng.normal(size=count)
    relief[rng.random(count) < gaps] = np.nan
    observed = None if rng.random() < 0.5 else relief - 1000.0 + rough * rng.normal(size=count)
    sigma = None if rng.random() < 0.5 else rng.uniform(0.0, 100.0, count)
    return Profile("any", distance, relief, observed, sigma)


options = st.fixed_dictionaries({
    "setting": st.integers(0, 4), "plate": st.integers(0, 3), "end_forces": st.integers(0, 4),
    "regional": st.integers(0, 4), "robust": st.booleans(), "fill_sinking_only": st.booleans(),
    "te_from": st.sampled_from([0.5e3, 1e3, 30e3]), "te_to": st.sampled_from([40e3, 100e3, 900e3]),
    "confidence": st.sampled_from([0.5, 0.9, 0.99]), "in_plane": st.sampled_from([0.0, 1e11, -1e13]),
})  # fmt: skip


@given(profiles, options)
@few
def test_any_profile_is_fitted_or_refused(profile, given_options):
    """A fit of anything is an answer in order (low <= Te <= high, all within the search) or a sentence."""
    given_before = [None if each is None else each.copy() for each in (profile.relief, profile.observed, profile.sigma)]
    try:
        asked = FitOptions(**given_options)
        result = fit_profile(profile, asked, with_choices=False)
    except DownwarpError as error:
        assert len(str(error)) > 20
        assert str(error)[-1] in ".?"
        return
    known = [
        each for each in (result.best.thickness.low, result.best.thickness.value, result.best.thickness.high) if each
    ]
    assert known == sorted(known)
    assert all(asked.te_from * (1 - 1e-9) <= each <= asked.te_to * (1 + 1e-9) for each in known)
    assert np.isfinite(result.best.rms) and result.best.rms >= 0
    stations = result.best.bent.stations
    on_plate = np.isfinite(stations.deflection)
    assert (np.isfinite(stations.predicted) == on_plate).all()
    assert (stations.predicted_low[on_plate] <= stations.predicted_high[on_plate]).all()
    for before, after in zip(given_before, (profile.relief, profile.observed, profile.sigma)):
        assert before is None or np.array_equal(before, after, equal_nan=True)


@given(
    st.builds(_profile, st.integers(0, 10_000), st.integers(40, 90), st.just(5e3), st.sampled_from([1e3, 5e3]),
              st.sampled_from([10.0, 100.0]), st.sampled_from([0.0, 0.2]))
)  # fmt: skip
@settings(few, max_examples=4)
def test_a_fit_does_not_mind_where_the_line_begins(profile):
    """Distances from elsewhere move places along, and leave the thickness as it is."""
    asked = FitOptions(setting=1, te_to=80e3)
    moved = Profile("any", profile.distance + 3e5, profile.relief, profile.observed, profile.sigma)
    try:
        here = fit_profile(profile, asked, with_choices=False).best
    except DownwarpError as error:
        with pytest.raises(DownwarpError) as also:
            fit_profile(moved, asked, with_choices=False)
        assert str(also.value)[:30] == str(error)[:30]
        return
    there = fit_profile(moved, asked, with_choices=False).best
    assert (here.thickness.value is None) == (there.thickness.value is None)
    if here.thickness.value is not None:
        assert there.thickness.value == pytest.approx(here.thickness.value, rel=1e-3)
    assert there.rms == pytest.approx(here.rms, rel=1e-3, abs=0.01)
