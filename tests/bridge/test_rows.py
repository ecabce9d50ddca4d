"""Results to rows: units as the fields' names say, nothing that is not a field, NULL for what is not known."""

import math
from dataclasses import replace

import numpy as np
import pytest
from downwarp_checkout.plugin.bridge import rows
from downwarp_checkout.plugin.bridge.fields import FIELDS, attributes, layer_fields, plain
from downwarp_checkout.plugin.core.bend import bend_profile
from downwarp_checkout.plugin.core.fit import fit_profile
from downwarp_checkout.plugin.core.profile import Profile
from downwarp_checkout.plugin.core.result import Estimate
from downwarp_checkout.plugin.core.settings import BOTH, BREAK_GIVEN, TRENCH, FitOptions
from qgis.core import NULL

X = np.arange(0.0, 500e3 + 1, 5e3)
OPTIONS = FitOptions(setting=TRENCH, break_at=BREAK_GIVEN, break_position=50e3, plate=BOTH)


@pytest.fixture(scope="module")
def result():
    """A fit of both kinds to a line made by the plugin, with noise."""
    flat = Profile("A", X, np.full(X.size, -5000.0))
    made = bend_profile(flat, replace(OPTIONS, plate=1, reference_level=-5000.0), 25e3, end_shear=1e12, end_moment=8e16)
    noise = 10 * np.random.default_rng(1).standard_normal(X.size)
    relief = np.where(X < 50e3, -4000.0, made.stations.predicted) + noise
    return fit_profile(Profile("A", X, relief), OPTIONS)


def test_rows_have_only_fields_of_their_output(result):
    """A value under a name that is no field would be lost in silence."""
    bent = result.best.bent
    tables = {
        "PROFILES": [rows.profile_row(result), rows.bent_row(bent)],
        "STATIONS": list(rows.station_rows(bent)),
        "MARKERS": list(rows.marker_rows(bent)),
        "PARAMETERS": list(rows.parameter_rows(result)),
        "MISFIT": list(rows.misfit_rows("A", result.fits)),
        "CHOICES": list(rows.choice_rows(result)),
    }
    for output, table in tables.items():
        assert table, output
        for row in table:
            assert set(row) <= set(FIELDS[output]), output
    assert set(tables["PROFILES"][0]) == set(FIELDS["PROFILES"])
    assert set(tables["STATIONS"][0]) | {"sigma_m"} == set(FIELDS["STATIONS"])


def test_units_are_those_of_the_names(result):
    """SI inside, km and MPa outside."""
    best, row = result.best, rows.profile_row(result)
    assert row["te_km"] == best.thickness.value / 1e3
    assert row["te_low_km"] == best.thickness.low / 1e3
    assert row["break_km"] == 50.0
    assert row["rigidity_nm"] == pytest.approx(100e9 * best.thickness.value**3 / (12 * (1 - 0.25**2)))
    assert row["flexural_parameter_km"] == pytest.approx((4 * row["rigidity_nm"] / (2270 * 9.81)) ** 0.25 / 1e3)
    assert row["regional_tilt_m_per_km"] == best.coefficients["tilt"].value * 1e3
    assert row["bulge_m"] > 0 > best.bent.markers.bulge.deflection
    assert row["bulge_km"] == best.bent.markers.bulge.distance / 1e3
    stations, values = list(rows.station_rows(best.bent)), best.bent.stations
    assert [each["distance_km"] for each in stations] == pytest.approx(X / 1e3)
    assert stations[60]["fibre_stress_mpa"] == pytest.approx(values.fibre_stress[60] / 1e6)
    assert stations[60]["residual_m"] == pytest.approx(values.observed[60] - values.predicted[60])
    assert stations[60]["te_km"] == row["te_km"]


def test_markers_lie_on_the_predicted_surface(result):
    """break, deepest, node and bulge, with the surface's elevation there."""
    bent = result.best.bent
    table = {row["kind"]: row for row in rows.marker_rows(bent)}
    assert list(table) == ["break", "deepest", "node", "bulge"]
    for row in table.values():
        on = np.isfinite(bent.stations.predicted)
        surface = np.interp(row["distance_km"] * 1e3, X[on], bent.stations.predicted[on])
        assert row["elevation_m"] == pytest.approx(surface, abs=15.0)
    assert table["node"]["deflection_m"] == 0


def test_an_unresolved_plate_has_no_thickness(result):
    """NULL for thickness, rigidity and flexural parameter, in the profile and at the stations."""
    unresolved = replace(result, best=replace(result.best, thickness=Estimate(None)))
    row = rows.profile_row(unresolved)
    for name in ("te_km", "te_low_km", "te_high_km", "rigidity_nm", "flexural_parameter_km"):
        assert row[name] is None
    assert all(math.isnan(each["te_km"]) for each in rows.station_rows(result.best.bent, thickness_known=False))


def test_both_kinds_are_in_the_misfit_table(result):
    """Rows of the two plates tried; parameters are those of the better one, with the odds."""
    kinds = {row["plate"] for row in rows.misfit_rows("A", result.fits)}
    assert kinds == {"continuous", "broken"}
    parameters = {row["parameter"]: row for row in rows.parameter_rows(result)}
    assert {row["plate"] for row in parameters.values()} == {"broken"}
    assert parameters["log_odds_of_continuous_plate"]["value"] < 0


@pytest.mark.parametrize(
    ("value", "stored"),
    [
        (None, NULL), (float("nan"), NULL), (float("inf"), NULL), (np.float64("nan"), NULL), (np.bool_(True), 1),
        (True, 1), (np.int64(4), 4), (np.float32(0.5), 0.5), ("text", "text"), (1.5, 1.5),
    ],
)  # fmt: skip
def test_values_are_stored_as_qgis_takes_them(value, stored):
    """numpy scalars would vanish, NaN would be a number."""
    got = plain(value)
    assert got == stored
    assert not hasattr(got, "dtype")


def test_missing_values_are_null():
    """A row in the order of the fields, what it lacks as NULL."""
    fields = layer_fields("MARKERS")
    assert attributes({"kind": "node", "transect": "A"}, fields) == ["A", "node", NULL, NULL, NULL]
