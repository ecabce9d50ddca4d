"""Runs with a translator installed: all words of reports, figures, remarks, tables and errors arrive translated.

The translator sets every text between ⟦ and ⟧. Without these brackets each result must be what it is in English, so
that names and numbers are kept; and outside of them no word may be left but names, keys, units and data.
"""

import html
import re
import string

import numpy as np
import pytest

pytest.importorskip("qgis")

import invented
from downwarp_checkout.plugin import translation
from downwarp_checkout.plugin.core.wording import listed, say
from downwarp_checkout.plugin.provider import ALGORITHMS
from downwarp_checkout.plugin.report import figures, page, referee_figures
from qgis.PyQt.QtCore import QCoreApplication, QTranslator
from running import Quiet, refusal, run

SINKS = ("PROFILES", "STATIONS", "MARKERS", "CHOICES")
UNITS = {
    "km", "m", "MPa", "GPa", "kg", "N", "Nm", "mGal", "Myr", "mW", "m2", "m3", "kg/m³", "N/m", "1/m", "J/mol", "Pa",
    "rms", "J", "mol", "degrees", "en",
}  # fmt: skip
WORD = re.compile(r"[A-Za-z]{2,}")


class Brackets(QTranslator):
    """Translates into English between brackets."""

    def isEmpty(self):
        return False

    def translate(self, context, text, disambiguation=None, n=-1):
        return f"⟦{text}⟧" if context == "Downwarp" and text else None


@pytest.fixture
def brackets():
    """A function that installs the translator, which is taken back in the end."""
    translator = Brackets()
    yield lambda: QCoreApplication.installTranslator(translator)
    QCoreApplication.removeTranslator(translator)


def without_brackets(text):
    return text.replace("⟦", "").replace("⟧", "")


def outside(text):
    """Words that stand outside all brackets."""
    depth, kept = 0, []
    for letter in text:
        depth += (letter == "⟦") - (letter == "⟧")
        kept.append(letter if depth == 0 and letter != "⟧" else " ")
    return {word for word in WORD.findall("".join(kept)) if word not in UNITS and not re.fullmatch("[A-Z_]+", word)}


def shown(path):
    """What a report shows as text, without what differs from run to run: the lists of inputs and versions at its end."""
    text = path.read_text(encoding="utf-8")
    text = re.sub(r"<style>.*?</style>|<defs>.*?</defs>|<p class=\"equation\">.*?</p>", " ", text, flags=re.DOTALL)
    text, inputs, versions = re.split(r"(?=<table><caption>⟦?(?:Inputs|Versions))", text)
    text += "".join(re.sub(r"<tbody>.*?</tbody>", "", table, flags=re.DOTALL) for table in (inputs, versions))
    aria = " ".join(re.findall(r'aria-label="([^"]*)"', text))
    return " ".join(html.unescape(re.sub(r"<[^>]*>", " ", text) + " " + aria).split())


def test_templates_and_values(brackets):
    """Template and said values are looked up, names and numbers kept; what is not said stays as it is."""
    text = say("{name} is {size:.1f} km, {kind}", name="load", size=1.26, kind=say("broken"))
    assert translation.translated(text) == "load is 1.3 km, broken"
    brackets()
    assert translation.translated(text) == "⟦load is 1.3 km, ⟦broken⟧⟧"
    assert translation.translated("load") == "load" and translation.tr("load") == "⟦load⟧" and translation.tr("") == ""
    assert translation.joined([say("a"), "b"]) == "⟦a⟧; b"
    assert translation.translated(listed([say("a"), say("b")], say(" and "))) == "⟦⟦a⟧⟦ and ⟧⟦b⟧⟧"


def test_a_translation_whose_places_do_not_fit_is_not_used():
    """One with a place that does not exist, a format that does not suit or an open brace gives way to English."""

    class Wrong(QTranslator):
        words = ""

        def isEmpty(self):
            return False

        def translate(self, context, text, disambiguation=None, n=-1):
            return self.words

    wrong = Wrong()
    QCoreApplication.installTranslator(wrong)
    try:
        for wrong.words in ("{nome}", "{name:.2f}", "{name", "{}", "{name.size}"):
            assert translation.tr("{name} is wrong", name="A") == "A is wrong"
    finally:
        QCoreApplication.removeTranslator(wrong)


@pytest.fixture(scope="module")
def dem(tmp_path_factory):
    """The trench with noise that has long tails, so that there is something to remark."""
    noise = 40.0 * np.random.default_rng(5).standard_t(3, 500)
    path = tmp_path_factory.mktemp("ground") / "dem.tif"
    return invented.equator_grid(path, 20.0, lambda km: invented.trench(km) + noise)


def fit_keys(dem, report, count, **keys):
    """``count`` lines over the trench and one that lies outside the DEM."""
    lines = [[(20.0, 0.01 * place), (26.3, 0.01 * place)] for place in range(count)] + [[(60.0, 0.0), (64.0, 0.0)]]
    layer = invented.lines_layer(lines, names=[f"Q{place}" for place in range(count + 1)])
    return {
        "TRANSECTS": layer, "NAME_FIELD": "name", "DEM": dem, "SETTING": 1, "STEP_KM": 3 * invented.STEP_KM,
        "REPORT": str(report), **keys,
    }  # fmt: skip


def compare(english, other, free=("remarks",)):
    """Rows are the same but for the brackets, which stand in free text only."""
    assert len(english) == len(other) > 0
    said = 0
    for one, two in zip(english, other):
        for name, value in one.items():
            if name == "geometry":
                continue
            if name in free and value:
                assert without_brackets(two[name]) == value and not outside(two[name]), two[name]
                said += 1
            else:
                assert two[name] == value, name
    return said


@pytest.mark.parametrize(
    ("count", "keys"), [(1, {"PLATE": 2, "BREAK_AT": 3, "BREAK_FROM": 60, "BREAK_TO": 140}), (6, {"WORKERS": 2})]
)
def test_a_fit_arrives_translated(dem, tmp_path, brackets, count, keys):
    """Report, remarks of fitted and failed transects and warnings, in process and out of two worker processes."""
    told = []
    runs = []
    for name in ("english.html", "other.html"):
        feedback = Quiet()
        if runs:
            brackets()
        # Without choices the many are fitted sooner; with a report they are made all the same.
        runs.append(run("fittransects", fit_keys(dem, tmp_path / name, count, **keys), feedback, SINKS))
        told.append(feedback.warnings)
    english, other = runs
    assert compare(english["PROFILES"], other["PROFILES"]) == len(english["PROFILES"]) == count + 1
    assert compare(english["CHOICES"], other["CHOICES"]) == 0
    assert compare(english["MARKERS"], other["MARKERS"]) == 0
    assert other["PROFILES"][-1]["remarks"].startswith("⟦Transect Q")
    assert told[1] and [without_brackets(text) for text in told[1]] == told[0]
    assert all(text.startswith("⟦") for text in told[1])
    texts = [shown(tmp_path / name) for name in ("english.html", "other.html")]
    assert without_brackets(texts[1]).split() == texts[0].split() and len(texts[0]) > 5000
    assert not outside(texts[1])


def test_every_label_of_the_figures_is_translated(dem, tmp_path, brackets, monkeypatch):
    """Titles, axes, legends and notes of all figures: no word outside the brackets."""
    from matplotlib.text import Text

    drawn = {}

    def watched(name, draw):
        def drawing(*arguments, **options):
            figure = draw(*arguments, **options)
            if figure is not None:
                # A profile is drawn into a figure that is there.
                texts = (arguments[0] if name == "profile_axes" else figure).findobj(Text)
                drawn.setdefault(name, set()).update(text.get_text() for text in texts)
            return figure

        return drawing

    for module in (figures, referee_figures):
        for name, draw in list(vars(module).items()):
            if name == "profile_axes" or (name.endswith("_figure") and name not in ("new_figure", "_figure")):
                monkeypatch.setattr(module, name, watched(name, draw))
    brackets()
    keys = fit_keys(dem, tmp_path / "fit.html", 2, PLATE=2, BREAK_AT=3, BREAK_FROM=60, BREAK_TO=140)
    paths = {name: str(tmp_path / f"{name.lower()}.gpkg") for name in ("STATIONS", "PROFILES")}
    run("fittransects", {**keys, **paths}, sinks=())
    noise = np.random.default_rng(4).standard_normal(500)
    anomaly = invented.equator_grid(tmp_path / "gravity.tif", 20.0, lambda km: 1e-5 * km + noise)
    for algorithm, more, sinks in (
        ("gravitytransects", {"INPUT": paths["STATIONS"], "ANOMALY": anomaly}, ("ANOMALIES", "EVIDENCE")),
        ("platestrength", {"INPUT": paths["STATIONS"], "AGE_MYR": 80}, ("VERDICTS",)),
        ("agethickness", {"INPUT": paths["PROFILES"], "AGE_MYR": 80}, ("AGES",)),
    ):
        report = tmp_path / f"{algorithm}.html"
        run(algorithm, {**more, "REPORT": str(report)}, sinks=sinks)
        text = shown(report)
        # Sources of constants are citations, their symbols formulas.
        text = re.split("⟦Published constants⟧", text)[0]
        assert not outside(text) - {"Te"}, outside(text)
    assert set(drawn) >= {
        "profile_axes", "posterior_figure", "misfit_figure", "choices_figure", "strike_figure", "map_figure",
        "gravity_figure", "joint_figure", "strength_figure", "age_figure",
    }  # fmt: skip
    for name, texts in drawn.items():
        assert any("⟦" in text for text in texts), name
        assert not {word for text in texts for word in outside(text)}, name


def test_errors_arrive_translated(dem, brackets):
    """Refusals of keys, of core's options and of a whole run."""
    good = fit_keys(dem, "", 1)
    del good["REPORT"]
    outside_dem = invented.lines_layer([[(60.0, 0.0), (64.0, 0.0)]], names=["far"])
    wrong = (
        {"SETTING": 9}, {"TE_FROM": "x"}, {"TE_FROM": 50, "TE_TO": 20}, {"CONFIDENCE": 100}, {"TE_ZONES": 2, "PLATE": 0},
        {"LOAD_SHAPE": 1}, {"NAME_FIELD": "no"}, {"TRANSECTS": outside_dem}, {"STEP_KM": -1}, {"SIGMA": 3},
    )  # fmt: skip
    english = [refusal("fittransects", {**good, **keys}) for keys in wrong]
    brackets()
    for keys, before in zip(wrong, english):
        now = refusal("fittransects", {**good, **keys})
        assert without_brackets(now) == before
        sentences = [line for line in now.splitlines() if "⟦" in line]
        assert sentences, (keys, now)
        assert not outside(sentences[-1].partition("⟦")[1] + sentences[-1].partition("⟦")[2]), now


def test_names_and_help_arrive_translated(brackets):
    """Names, labels, options and help of every algorithm."""
    brackets()
    for kind in ALGORITHMS:
        algorithm = kind()
        algorithm.initAlgorithm()
        texts = [algorithm.displayName(), algorithm.shortDescription()]
        for definition in algorithm.parameterDefinitions():
            texts.append(definition.description())
            texts += getattr(definition, "options", list)()
        texts += [output.description() for output in algorithm.outputDefinitions()]
        for text in texts:
            assert text.startswith("⟦") and text.endswith("⟧"), text


def test_reports_take_only_known_words(brackets):
    """The report's own method and cautions are translated paragraph by paragraph."""
    brackets()
    assert page._method().count("⟦") >= 4 and page._cautions().count("⟦") >= 8
    assert not set(string.ascii_letters) & set(
        re.sub(r"<p class=\"equation\">.*?</p>|<[^>]*>|⟦[^⟧]*⟧", "", page._method(), flags=re.S)
    )
