"""Reports of gravity, strength and age: answers in words, every figure drawn, cautions beside the verdicts."""

import re

import numpy as np
import pytest
from downwarp_checkout.plugin.core.age_check import check_age, isotherm_curves
from downwarp_checkout.plugin.core.constants import MYR
from downwarp_checkout.plugin.core.cooling import PLATE, usual
from downwarp_checkout.plugin.core.crust import Crust
from downwarp_checkout.plugin.core.elastic import Elastic
from downwarp_checkout.plugin.core.gravity_check import GravityOptions, check_gravity
from downwarp_checkout.plugin.core.joint import JointOptions, Readings
from downwarp_checkout.plugin.core.result import Estimate
from downwarp_checkout.plugin.core.stated import PlateStations
from downwarp_checkout.plugin.core.strength import Rock
from downwarp_checkout.plugin.core.strength_check import check_strength
from downwarp_checkout.plugin.report import referee, referee_figures

NAME = "line <1> & $2$"


@pytest.fixture(scope="module")
def plate():
    """A broken plate of 30 km bent by an end shear, in closed form: w = w0 e^-s cos s, s = x / alpha."""
    x = np.arange(0.0, 500e3, 5e3)
    rigidity, k = float(Elastic().rigidity(30e3)), 2270 * 9.81
    alpha = (4 * rigidity / k) ** 0.25
    s, shear = x / alpha, 1.5e12
    size = shear * alpha**3 / (2 * rigidity)
    wave = np.exp(-s) * np.cos(s)
    slope = -size / alpha * np.exp(-s) * (np.cos(s) + np.sin(s))
    curvature = 2 * size / alpha**2 * np.exp(-s) * np.sin(s)
    third = 2 * size / alpha**3 * np.exp(-s) * (np.cos(s) - np.sin(s))
    surface = -5000.0 - size * wave
    noise = 30.0 * np.random.default_rng(1).standard_normal(x.size)
    return PlateStations(
        NAME, x, size * wave, np.full(x.size, 30e3), curvature, surface, surface, surface + noise,
        np.full(x.size, np.nan), np.ones(x.size), np.zeros(x.size), np.full(x.size, 1030.0), slope,
        -rigidity * curvature, -rigidity * third,
    )  # fmt: skip


def whole(path):
    """The page, without anything fetched from elsewhere."""
    text = path.read_text(encoding="utf-8")
    assert text.startswith("<!DOCTYPE html>") and text.rstrip().endswith("</html>")
    assert not re.search(r"(src|href)=\"(?!#)", text)
    assert "<1>" not in text and "line &lt;1&gt; &amp; $2$" in text
    for caution in ("elastic and steady", "no history of loading", "No faulting", "no basis for drilling"):
        assert caution in text, caution
    assert "from memory" in text
    return text


def test_gravity_report(plate, tmp_path):
    """With readings: rms, joint answer and two figures; without: the range of the anomaly and one figure."""
    options = GravityOptions(Crust(load=2800.0, mantle=3300.0), search=JointOptions(te_from=10e3, te_to=90e3))
    alone = check_gravity(plate, None, options)
    seen = alone.predicted + 2e-5 * np.random.default_rng(2).standard_normal(alone.distance.size)
    checked = check_gravity(plate, Readings(alone.distance, seen), options)
    path = tmp_path / "gravity.html"
    referee.write_gravity_report(path, [checked, alone], [("other", "why <not>")], {"INPUT": "x"}, {"Downwarp": "0"})
    text = whole(path)
    assert text.count("<figure>") == 3
    assert "Surface and gravity together: elastic thickness" in text and "nothing observed was given" in text
    assert "why &lt;not&gt;" in text and "gravitational constant" in text
    assert checked.joint.joint.thickness.low < 30e3 < checked.joint.joint.thickness.high


def test_strength_report(plate, tmp_path):
    """Verdicts of a plate that is carried with yielding, and of one that is not."""
    old, young = (
        check_strength(plate, Rock(), lambda _, age=age: usual(PLATE, age=age * MYR), Elastic()) for age in (120, 5)
    )
    assert old.words == "carried with yielding" and young.words == "not carried"
    path = tmp_path / "strength.html"
    referee.write_strength_report(path, [old, young], [], {}, {})
    text = whole(path)
    assert text.count("<figure>") == 2
    assert "it could not carry its stress" in text and "would yield" in text
    assert "Byerlee 1978" in text and "friction of rock, low pressure" in text


def test_age_report(tmp_path):
    """Open sides, several transects of one age, and one figure for all."""
    earth = usual(PLATE, age=MYR)
    checks = [
        check_age(name, Estimate(te, low, high), 80 * MYR, 20 * MYR, earth, (300.0, 600.0))
        for name, te, low, high in ((NAME, 25e3, 20e3, 31e3), ("b", 30e3, None, 40e3), ("c", 12e3, 9e3, None))
    ]
    path = tmp_path / "age.html"
    referee.write_age_report(path, checks, isotherm_curves(earth, (300.0, 600.0), 200 * MYR), [], {}, {})
    text = whole(path)
    assert text.count("<figure>") == 1
    assert "open above" in text and "60.0 Myr old when it was loaded" in text


def test_sections_end_where_figures_are_too_many(plate, tmp_path):
    """Sections stop at the limit; the answers say how many more there are."""
    check = check_strength(plate, Rock(), lambda _: usual(PLATE, age=120 * MYR), Elastic())
    report = referee.RefereeReport({}, {}, "title")
    for place in range(referee.MOST_FIGURES + 3):
        report.say(f"line {place}", referee.strength_words(check))
        report.section(f"line {place}", "said", (), ())
    assert report.page().count('<section class="transect">') == referee.MOST_FIGURES
    assert "3 more transects are in the output layers" in report.page()


def test_bars_of_one_age_stand_side_by_side():
    """Three of one age are moved apart evenly about it; a single one is not moved."""
    earth = usual(PLATE, age=MYR)
    checks = [check_age(str(n), Estimate(20e3), age * MYR, 0.0, earth, ()) for n, age in enumerate((50, 50, 50, 90))]
    places = referee_figures._side_by_side(checks, 200.0)
    assert places[3] == 90.0 and np.mean(places[:3]) == pytest.approx(50.0)
    assert places[0] < places[1] < places[2]
