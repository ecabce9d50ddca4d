"""Downwarp in a real QGIS window on a virtual screen: `drive.py` plays the user, here is judged what came of it.

The screenshots lie in build/window, or where DOWNWARP_SCREENSHOTS says.
"""

import os
import re
import shutil
from pathlib import Path

import play
import pytest
from pyproj import Geod, Transformer

MISSING = play.missing()
pytestmark = pytest.mark.skipif(bool(MISSING), reason=f"{' and '.join(MISSING)} not on PATH, which a window needs")


@pytest.fixture(scope="module")
def played(tmp_path_factory) -> dict:
    """What the user in the window found, by step."""
    folder = tmp_path_factory.mktemp("window")
    found = play.play(folder)
    target = Path(os.environ.get("DOWNWARP_SCREENSHOTS", play.CHECKOUT / "build" / "window"))
    target.mkdir(parents=True, exist_ok=True)
    for picture in folder.glob("*.png"):
        shutil.copy(picture, target)
    found["by_name"] = {entry["name"]: entry for entry in found["steps"]}
    return found


def step(played: dict, name: str) -> dict:
    """What a step found; its own error fails the test."""
    if name not in played["by_name"]:
        pytest.fail(f"the window never came to {name}; the log: {played['log']}\n{played['said'][-2000:]}")
    entry = played["by_name"][name]
    assert not entry["error"], entry["error"]
    return entry["found"]


def test_plugin_adds_menu_and_toolbar(played):
    """Every action is in the menu, and the three that are used most are on the toolbar."""
    assert played["loaded"]
    found = step(played, "starts")
    words = ("Draw transect", "Profile panel", "Fit plate along transects…", "Make demo layers…")
    assert set(words) <= {text.replace("&", "") for text in found["menu"]}
    assert found["toolbar"] == 3


def test_drawing_can_be_corrected_and_given_up(played):
    """Of three vertices Backspace leaves two, Escape none; one place alone makes no layer beside those of the demo.

    Backspace deletes no selected feature, and the button shows that the tool is in use, however often it is clicked.
    """
    found = step(played, "gives_up")
    assert found["counts"] == [3, 2, 0]
    assert found["tip"].split(" km")[0].replace(",", "").replace(".", "").isdigit()
    assert found["layers"] == 3
    assert found["survivors"] == 1
    assert found["checked"]


def test_live_length_is_that_on_the_ellipsoid(played):
    """The length beside the cursor is `pyproj.Geod`'s for the same places, to the digit that is shown, whatever the
    map's CRS: in Mercator and in degrees the length in the map's plane is another by far."""
    found = step(played, "length_is_geodesic")
    for code, length in found.items():
        assert length["places"] == 3
        assert length["shown"] == pytest.approx(length["expected"], abs=0.051), code
    for code in ("EPSG:4326", "EPSG:3857"):
        assert abs(found[code]["plane"] / found[code]["expected"] - 1) > 0.1


def test_vertices_snap_where_the_project_says_so(played):
    """A click six pixels off a vertex of a layer lands on it to the last bit, and where snapping is off it does not.

    The length shown is that of the snapped line: of the same two places by `pyproj.Geod`, in UTM zone 27 south.
    """
    found = step(played, "snaps")
    assert found["on"]["drawn"] == found["corners"]
    for drawn, corner in zip(found["off"]["drawn"], found["corners"]):
        apart = max(abs(drawn[0] - corner[0]), abs(drawn[1] - corner[1])) / found["pixel"]
        assert 3 < apart < 7
    for name in ("on", "off"):
        degrees = Transformer.from_crs("EPSG:32727", "EPSG:4326", always_xy=True)
        longitude, latitude = degrees.transform(*zip(*found[name]["drawn"]))
        length = Geod(ellps="WGS84").line_length(longitude, latitude) / 1e3
        assert found[name]["length"] == pytest.approx(length, abs=0.051)


def test_line_drawn_by_clicks_opens_the_panel(played):
    """Three clicks and a right click: three vertices in a temporary layer, the panel open with relief and plate."""
    found = step(played, "draws")
    assert found["visible"] and found["relief_drawn"]
    assert found["vertices"] == 3
    assert found["layer"] == "Drawn transects"
    assert found["dem"] == "relief"
    assert "km tried" in found["answer"] and "rms" in found["answer"]


def test_double_click_ends_a_line(played):
    """The double click's two presses set one vertex."""
    found = step(played, "ends_with_a_double_click")
    assert found == {"vertices": 2, "shown": "Transect 2", "left": 0}


def test_slider_moves_the_curve(played):
    """The curve moves by metres at least, and the number follows."""
    found = step(played, "slides")
    assert min(found["moved"]) > 1.0
    assert found["number"] == pytest.approx(found["thickness"] / 1e3, abs=0.005)


def test_break_infill_and_forces_move_the_curve(played):
    """Each moves the curve; forces stated by hand are the plate's own, and the infill goes back."""
    found = step(played, "moves_break_and_infill")
    for name, moved in found["moved"].items():
        assert moved > (0.0 if name == "by hand" else 0.1), name
    assert found["forces"] == pytest.approx(found["stated"], rel=1e-9)
    assert found["infill"] == 1030


def test_fit_can_be_cancelled(played):
    """A fit under way stops within seconds, and leaves no result."""
    found = step(played, "cancels")
    assert found["running"]
    assert found["stopped"] < 5.0
    assert not found["fitted"]


def test_fit_runs_and_shows_its_posterior(played):
    """The trench's plate is 34 km thick: it lies in a 90 % interval widened by half its size; the handle stands under
    the fitted thickness to a pixel."""
    found = step(played, "fits")
    spread = 0.5 * (found["high_km"] - found["low_km"])
    assert found["low_km"] - spread < 34.0 < found["high_km"] + spread
    assert f"{found['te_km']:.1f} km fitted" in found["answer"]
    assert found["posterior"]
    assert found["apart"] < 1.5


def test_panel_and_algorithm_agree_to_the_last_digit(played):
    """Every attribute and coordinate of all five layers that the panel keeps equals that of `fittransects`."""
    found = step(played, "agrees")
    assert found["equal"] == dict.fromkeys(("PROFILES", "STATIONS", "MARKERS", "PARAMETERS", "MISFIT"), True)
    assert found["te_km"] == step(played, "fits")["te_km"]
    assert found["rows"]["PROFILES"] == 1 and found["rows"]["STATIONS"] > 200


def test_kept_layers_have_their_look(played):
    """Line, stations by deflection and marked places by kind, all with labels."""
    found = step(played, "agrees")
    expected = {"PROFILES": "singleSymbol", "STATIONS": "graduatedSymbol", "MARKERS": "categorizedSymbol"}
    assert found["renderers"] == expected
    assert all(found["labels"].values())


def test_hovering_marks_the_place_on_the_map(played):
    """200 km along a line that begins 60 km from the map's edge: 260 km, but for the scale of the projection and the
    pixel that was clicked."""
    found = step(played, "hovers")
    assert found["shown"]
    assert found["east"] == pytest.approx(260e3, abs=6e3)
    assert found["north"] == pytest.approx(1.5 * 260e3, abs=3e3)
    km, _, values = found["words"].partition(" km: ")
    assert float(km) == pytest.approx(200.0, abs=1.5)
    assert values.startswith("observed")


def test_wheel_zooms_about_the_pointer(played):
    """Six notches bring distances 1.25**6 times nearer about the pointer, heights stay; with Ctrl only those of the axes
    under the pointer change, about it."""
    found = step(played, "zooms")
    seen = found["seen"]
    spans = [after[1] - after[0] for after in (seen["whole"][0], seen["wheel"][0])]
    assert spans[0] / spans[1] == pytest.approx(1.25**6, rel=1e-9)
    assert found["moved_pixels"] < 0.01
    assert seen["wheel"][1:] == seen["whole"][1:]
    assert seen["heights"][:2] == seen["wheel"][:2]
    assert seen["heights"][2] != seen["wheel"][2]
    assert found["share_after"] == pytest.approx(0.4, abs=1e-9)
    assert seen["both"][0] == seen["heights"][0] and seen["both"][2] == seen["heights"][2]
    assert seen["both"][1] != seen["heights"][1]


def test_view_stays_as_the_curve_moves(played):
    """Neither the slider nor a fit nor stations left out change what is in view; the curve follows by metres."""
    found = step(played, "zooms")
    assert found["curve_moved"] > 1.0
    for name in ("slid", "fitted", "masked"):
        assert found["seen"][name] == found["seen"]["both"], name


def test_places_are_right_while_zoomed(played):
    """The mouse at 160 km marks 160 km from the line's start, 60 km from the map's edge; a drag past the edge of the
    axes leaves out what was seen of the stretch and no more."""
    found = step(played, "zooms")
    east, north, words = found["hovered"]
    assert east == pytest.approx(220e3, abs=2e3)
    assert north == pytest.approx(1.5 * 260e3, abs=3e3)
    assert float(words.partition(" km: ")[0]) == pytest.approx(160.0, abs=1.5)
    low, high, count = found["left_out"]
    edges = found["expected_out"]
    assert edges[0] - 0.6 < low and high <= edges[1]
    assert abs(count - edges[2]) <= 1


def test_view_is_dragged(played):
    """The middle button, and the left one with the hand, move what is seen with the mouse, and leave no station out."""
    found = step(played, "zooms")
    before = found["seen"]["masked"]
    for name in ("middle", "hand"):
        after = found["seen"][name]
        by = before[0][0] - after[0][0]
        # The mouse stands on whole pixels.
        assert by == pytest.approx(found[f"{name}_by"][0], rel=0.01)
        assert after[0][1] - after[0][0] == pytest.approx(before[0][1] - before[0][0], rel=1e-9)
        assert after[2] == before[2]
        before = after
    assert found["after_hand"] == 0


def test_view_goes_back_to_the_whole(played):
    """By double click, by the button, and by the wheel, which goes no farther; zooming in ends at four stations."""
    found = step(played, "zooms")
    for name in ("double", "button", "out"):
        assert found["seen"][name][0] == found["seen"]["whole"][0], name
    assert found["seen"]["enabled"] == [False, True, False]
    low, high = found["seen"]["nearest"][0]
    assert high - low == pytest.approx(4 * found["step"], rel=1e-3)


def test_dragging_leaves_stations_out(played):
    """The stations of 100 km at 2.5 km spacing are not fitted, half of them come back, then all."""
    found = step(played, "leaves_stations_out")
    before, without, half, after = found["counts"]
    assert found["left"] == before - without
    assert found["left"] == pytest.approx(40, abs=2)
    assert half - without == pytest.approx(20, abs=2)
    assert after == before
    assert not found["current"]
    assert found["wrong"] == 0


def test_dialog_of_all_keys_leaves_out_the_same_stations(played):
    """The dialog's own keys hold a new layer, one for both times that it was opened; run with them, the algorithm fits
    the stations that the panel fits and comes to the same thickness to the last bit."""
    found = step(played, "leaves_stations_out")
    assert found["excluded"] and found["new_layers"] == 1
    assert found["same_in_fit"]
    assert found["te_km"][0] == found["te_km"][1]


def test_other_settings_find_their_plates(played):
    """Ridge and front of the demo: the fitted thickness is within a tenth of the one they were made with."""
    found = step(played, "other_settings")
    for name in ("ridge", "front"):
        assert found[name]["te_km"] == pytest.approx(found[name]["true"], rel=0.1), name


def test_bad_value_is_refused_in_words(played):
    """The sentence names the key and what it got; a good value clears it and is used."""
    found = step(played, "complains")
    assert found["words"] == "YOUNG_GPA is 'abc'; it takes a number."
    assert found["after"] == ""
    assert found["young"] == 70e9


def test_drawing_into_a_layer_is_an_edit(played):
    """The line is in the layer's own CRS (degrees), within an edit, and one undo takes it away."""
    found = step(played, "draws_into_a_layer")
    assert found["editing"] and found["count"] == 1 and found["undone"] == 0
    longitude, latitude = found["first"]
    assert -180 <= longitude <= 180 and -90 <= latitude < 0


def test_dialog_opens_with_the_drawn_line(played):
    """TRANSECTS holds the drawn feature alone."""
    found = step(played, "opens_the_dialog")
    assert "Fit Plate Along Transects".lower() in found["title"].lower()
    assert found["selected"] == 1


def test_panel_says_when_matplotlib_is_missing(played):
    """In place of the picture stands the sentence, and the fit works."""
    found = step(played, "does_without_matplotlib")
    assert found["said"] == found["expected"]
    assert "km fitted" in found["answer"]


def test_nothing_is_cut_off(played):
    """In every screenshot texts fit their widgets, pages their place, and the figure's texts do not touch."""
    step(played, "other_settings")
    assert {name: bad for name, bad in played["layout"].items() if bad} == {}
    assert len(played["layout"]) >= 8


def test_unloading_leaves_nothing(played):
    """No dock, toolbar or tool of Downwarp is left."""
    found = step(played, "stops")
    assert found["done"]
    assert found["left"] == []
    assert found["tool"] != "TransectTool"


def test_no_error_in_the_log(played):
    """Neither an uncaught exception nor a Python error, nor a warning of Downwarp's, was logged."""
    step(played, "stops")
    ours = [
        entry for entry in played["log"]
        if entry[1] >= 2 or entry[0] in ("uncaught", "Downwarp", "Python error", "Python warning")
    ]  # fmt: skip
    assert [entry for entry in ours if "downwarp" in entry[2].lower() or entry[0] in ("uncaught", "Downwarp")] == []
    assert "Traceback" not in played["said"]


def test_the_curve_follows_on_many_stations(played):
    """More than a thousand stations; `play.py` prints how long the curve takes."""
    assert step(played, "slides_on_many_stations")["stations"] > 1000


def test_example_models_open_in_the_modeller(played):
    """Both stand in the menu and hold the algorithms that they chain."""
    assert step(played, "opens_the_models")["models"] == {
        "Front line to fitted margin": ["fittransects", "laytransects"],
        "Raster and picks to report": ["fittransects"],
    }


def test_the_guide_and_its_pictures_are_there(played):
    """The menu's entry opens a page whose pictures lie beside it."""
    assert "Guide" in step(played, "starts")["menu"]
    guide = play.CHECKOUT / "plugin" / "guide" / "index.html"
    pictures = re.findall(r'src="([^"]+)"', guide.read_text(encoding="utf-8"))
    assert len(pictures) >= 4
    assert all((guide.parent / picture).is_file() for picture in pictures)
