"""Figures: what they draw is taken back from the matplotlib objects and compared with the numbers that went in."""

import re
import xml.etree.ElementTree
from dataclasses import replace

import numpy as np
import pytest
from downwarp_checkout.plugin.core.profile import Picks
from downwarp_checkout.plugin.core.result import Estimate
from downwarp_checkout.plugin.report import figures

pytest.importorskip("matplotlib")


def bent_with(result, **changes):
    """The result's bent plate on a profile with some changes."""
    bent = result.best.bent
    return replace(bent, problem=replace(bent.problem, profile=replace(bent.problem.profile, **changes)))


def texts(figure):
    """All text of a figure."""
    import matplotlib.text

    return [item.get_text() for item in figure.findobj(matplotlib.text.Text) if item.get_text()]


def room_left(figure):
    """Least distance of anything drawn from the figure's edges, inches: negative where something is clipped."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg

    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    drawn = figure.get_tightbbox(canvas.get_renderer())
    width, height = figure.get_size_inches()
    return min(drawn.x0, drawn.y0, width - drawn.x1, height - drawn.y1)


def lines_by_label(axes):
    return {line.get_label(): line for line in axes.get_lines()}


def test_profile_shows_predicted_surface_and_marks_the_plate_itself(make_result):
    """The marked bulge lies on the predicted surface: level less deflection (here -5500 m less that of the marker)."""
    result = make_result()
    bent = result.best.bent
    figure = figures.new_figure(4.9)
    drawn = figures.profile_axes(figure, bent, result.best.rms)
    lines = lines_by_label(drawn.surface)
    predicted = lines["predicted surface"]
    assert predicted.get_xdata() == pytest.approx(bent.problem.profile.distance / 1e3)
    np.testing.assert_array_equal(predicted.get_ydata(), bent.stations.predicted)
    bulge = next(line for label, line in lines.items() if label.startswith("bulge"))
    assert bulge.get_xdata() == pytest.approx([bent.markers.bulge.distance / 1e3])
    assert bulge.get_ydata() == pytest.approx([-5500.0 - bent.markers.bulge.deflection])
    place = next(line for label, line in lines.items() if label.startswith("break"))
    assert place.get_xdata() == pytest.approx([60.0, 60.0])


def test_residuals_are_observed_less_predicted_at_every_fitted_station(make_result):
    result = make_result(stations=151)
    bent = result.best.bent
    figure = figures.new_figure(4.9)
    drawn = figures.profile_axes(figure, bent, 25.0)
    dots = [line for line in drawn.residual.get_lines() if line.get_marker() == "o"]
    fitted = [line for line in dots if line.get_color() == figures.INK]
    values = np.concatenate([line.get_ydata() for line in fitted])
    expected = (bent.stations.observed - bent.stations.predicted)[bent.stations.in_fit]
    np.testing.assert_allclose(np.sort(values), np.sort(expected))
    assert drawn.residual.get_ylim()[1] >= np.abs(expected).max()


def test_of_many_stations_the_legend_says_how_many_are_drawn(make_result):
    bent = make_result(stations=1001).best.bent
    figure = figures.new_figure(4.9)
    figures.profile_axes(figure, bent)
    said = " ".join(texts(figure))
    every = int(re.search(r"observed, fitted \(every (\d+)", said)[1])
    fitted = int(bent.stations.in_fit.sum())
    assert fitted / every <= figures.MOST_DOTS < fitted / (every - 1)


def test_thinned_relief_keeps_its_peaks():
    values = np.random.default_rng(4).normal(size=20_001)
    values[7] = np.nan
    shown = figures._outline(values)
    assert shown.size <= 2 * figures.MOST_CORNERS + 2
    assert np.nanmax(values) == np.nanmax(values[shown])
    assert np.nanmin(values) == np.nanmin(values[shown])
    assert (np.diff(shown) > 0).all()


def test_picks_are_drawn_where_they_are(make_result):
    picks = Picks(np.array([100e3, 200e3]), np.array([-6000.0, -5400.0]), np.array([50.0, np.nan]))
    figure = figures.new_figure(4.9)
    drawn = figures.profile_axes(figure, bent_with(make_result(), picks=picks))
    crosses = [line for line in drawn.surface.get_lines() if line.get_marker() == "x"]
    np.testing.assert_allclose(crosses[0].get_xdata(), [100.0, 200.0])
    np.testing.assert_allclose(crosses[0].get_ydata(), picks.elevation)


def test_density_is_the_posterior_integrated_over_the_break(made_misfit):
    """Normal in ln Te (spread 0.2) and in the break, independent: the marginal density is the same normal, whether the
    break was searched or not, at every trial of the fine grid."""
    for searched in (False, True):
        density = figures.thickness_density(made_misfit(searched))
        near = np.abs(np.log(density.thickness / 30e3)) < 0.65
        expected = np.exp(-0.5 * (np.log(density.thickness[near] / 30e3) / 0.2) ** 2)
        np.testing.assert_allclose(density.density[near], expected, rtol=1e-3)
        assert (np.diff(density.thickness) > 0).all()


def test_density_of_nothing_is_none(made_misfit):
    assert figures.thickness_density(()) is None
    assert figures.thickness_density(made_misfit(False)[:2]) is None


def test_misfit_surface_only_where_the_break_was_searched(make_result):
    assert figures.misfit_figure(make_result().best) is None
    figure = figures.misfit_figure(make_result(searched=True).best)
    axes = figure.axes[0]
    low, high = axes.get_ylim()
    assert 20.0 <= low < 60.0 - 3.0 * np.sqrt(2 * np.log(1e4)) / 2 and 60.0 < high <= 100.0
    point = next(line for line in axes.get_lines() if line.get_marker() == "P")
    assert (point.get_xdata()[0], point.get_ydata()[0]) == pytest.approx((30.0, 60.0))


def test_likelihood_contour_lies_where_the_likelihood_has_that_value(make_result):
    """Normal in ln Te (spread 0.2): the contour of 0.1 of the peak lies sqrt(2 ln 10) spreads from the mode."""
    figure = figures.misfit_figure(make_result(searched=True).best)
    axes = figure.axes[0]
    wanted = 0.2 * np.sqrt(2 * np.log(10.0))
    paths = [path for item in axes.collections for path in item.get_paths() if len(path.vertices)]
    reaches = [np.log(path.vertices[:, 0].max() / 30.0) for path in paths]
    assert min(abs(reach - wanted) for reach in reaches) < 0.02


def test_choices_show_an_arrow_at_an_open_side_and_say_what_is_not_resolved(make_result):
    figure = figures.choices_figure(make_result())
    axes = figure.axes[0]
    assert texts(figure).count("not resolved") == 1
    arrows = [line for line in axes.get_lines() if line.get_marker() in "<>"]
    assert sorted(line.get_marker() for line in arrows) == ["<", ">"]
    low, high = axes.get_xlim()
    ends = {line.get_marker(): line.get_xdata()[0] for line in arrows}
    assert (ends["<"], ends[">"]) == pytest.approx((low, high))
    assert figures.choices_figure(make_result(choices=False)) is None


def test_strike_figure_marks_the_unresolved_and_keeps_the_order_along_the_guide(make_result):
    none = Estimate(None)
    rows = [
        figures.StrikeRow(1, 50e3, Estimate(30e3, 20e3, 40e3), 60e3, 210e3, Estimate(1e12, 0.5e12, 2e12)),
        figures.StrikeRow(2, 0.0, none, 60e3, None, none),
        figures.StrikeRow(3, 25e3, Estimate(20e3, 15e3, None), 55e3, 200e3, Estimate(1.5e12)),
    ]
    figure = figures.strike_figure(rows, (1e3, 100e3))
    thickness, places, shear = figure.axes
    crosses = [line for line in thickness.get_lines() if line.get_marker() == "x"]
    assert [line.get_xdata()[0] for line in crosses] == [0.0]
    np.testing.assert_allclose(lines_by_label(places)["break"].get_xdata(), [0.0, 25.0, 50.0])
    np.testing.assert_allclose(lines_by_label(places)["break"].get_ydata(), [60.0, 55.0, 60.0])
    assert shear.get_xlabel() == "distance along strike, km"
    by_number = figures.strike_figure([replace(row, along=None) for row in rows], (1e3, 100e3))
    assert by_number.axes[-1].get_xlabel() == "number of the transect"
    assert figures.strike_figure(rows[:1], (1e3, 100e3)) is None


def test_map_is_to_scale_with_north_up_across_the_antimeridian():
    """A line of 2 degrees along the meridian 180 at the equator: 221.149 km (WGS 84, pyproj.Geod) straight up; one of
    equal length along the equator: level. Both have the same length on paper."""
    north = np.array([[180.0, -1.0], [180.0, 1.0]])
    east = np.array([[179.0, 0.0], [179.0 + 221.149 / 111.3195, 0.0]])
    figure = figures.map_figure([(1, north), (2, east)])
    axes = figure.axes[0]
    box = axes.get_window_extent()
    horizontal = box.width / np.ptp(axes.get_xlim())
    vertical = box.height / np.ptp(axes.get_ylim())
    assert horizontal == pytest.approx(vertical, rel=1e-6)
    drawn = [line for line in axes.get_lines() if line.get_color() == figures.PLATE]
    (x1, y1), (x2, y2) = (line.get_data() for line in drawn)
    assert np.hypot(np.ptp(x1), np.ptp(y1)) == pytest.approx(221.149, rel=1e-4)
    assert np.ptp(x1) < 0.1 and y1[1] > y1[0]
    assert np.ptp(x2) == pytest.approx(221.149, rel=1e-3) and np.ptp(y2) < 1.0


@pytest.mark.parametrize("searched", [False, True])
def test_nothing_of_any_figure_is_clipped(make_result, searched):
    result = make_result(searched=searched, thickness=Estimate(30e3, 21.6e3, None))
    profile, narrow = figures.new_figure(4.9), figures.new_figure(4.0, 4.5)
    for figure in (profile, narrow):
        figures.profile_axes(figure, result.best.bent, 25.0)
    both = replace(result, fits=(result.best, replace(result.best, kind=0)))
    row = figures.StrikeRow(1, None, result.best.thickness, 60e3, 210e3, Estimate(1e12))
    drawn = [
        profile,
        narrow,
        figures.posterior_figure(both),
        figures.misfit_figure(result.best),
        figures.choices_figure(result),
        figures.strike_figure([row, replace(row, number=2)], (1e3, 100e3)),
        figures.map_figure([(1, np.array([[10.0, 60.0], [12.0, 61.0]]))]),
    ]
    for figure in drawn:
        if figure is not None:
            assert room_left(figure) > -0.01


def test_svg_is_well_formed_reproducible_and_refers_to_nothing_outside(make_result):
    def draw():
        return figures.svg(figures.posterior_figure(make_result()))

    image = draw()
    assert image == draw()
    xml.etree.ElementTree.fromstring(image)
    assert not re.search(r"(?:href|src)=\"(?!#)", image)
    assert "url(" not in image.replace("url(#", "")


def test_letters_taken_out_of_an_svg_are_those_that_it_uses(make_result):
    glyphs = {}
    image = figures.without_glyphs(figures.svg(figures.posterior_figure(make_result())), glyphs)
    assert glyphs
    defined = set(re.findall(r'id="([^"]+)"', image)) | set(glyphs)
    assert set(re.findall(r'href="#([^"]+)"', image)) <= defined


def test_dollars_are_shown_and_not_set_as_a_formula():
    """`$\\frac{$` is no valid formula: unescaped, matplotlib raises an error when it draws it."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg

    figure = figures.new_figure(1.0)
    figure.text(0.1, 0.5, figures.plain(r"$\frac{$ costs 5 $"))
    FigureCanvasAgg(figure).draw()


def test_choices_with_dollars_are_drawn(make_result):
    result = make_result()
    rows = (result.choices[0], replace(result.choices[1], option=r"$\frac{$ and $"))
    figures.svg(figures.choices_figure(replace(result, choices=rows)))
