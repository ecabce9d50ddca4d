"""Every text that users see goes through translation, and can be given to translators."""

import json
import shutil
import subprocess
import xml.etree.ElementTree as ElementTree
from pathlib import Path

import pytest
import strings

ROOT = Path(__file__).resolve().parents[1]


@pytest.mark.parametrize("folder", ["plugin", "algorithms"])
def test_no_text_bypasses_translation(folder):
    """The rules of tests/tools/strings.py hold for all that ships."""
    found = [
        f"{path.relative_to(ROOT)}:{line}: {what}"
        for path in sorted((ROOT / folder).rglob("*.py"))
        for line, what in strings.findings(path)
    ]
    assert not found, "\n".join(found)


@pytest.mark.parametrize(
    "line",
    [
        'raise DownwarpError(f"{name} is wrong.")',
        'raise DownwarpError("{} is wrong.".format(name))',
        'raise DownwarpError("It is " + name)',
        'raise DownwarpError("{name} is wrong.", nam=name)',
        'raise DownwarpError("{name} is wrong.")',
        'tr(f"{size} km")',
        'raise QgsProcessingException("It failed.")',
        "raise QgsProcessingException(str(error))",
        'remarks.append("thin")',
        'remarks.append(f"thin by {size}")',
        'remarks += (f"thin by {size}",)',
        'remarks = ["thin"] if thin else []',
        "axes.set_label('load')",
        '_name(axes, "load", y="km")',
        'axes.plot(x, y, label="load" if loaded else "none")',
        'text = "two words"',
        'text = f"two words of {name}"',
        'part = f"<h2>Answer</h2>{rest}"',
    ],
)
def test_the_rules_find_what_they_are_for(line, tmp_path):
    """Each of these would show English in every language."""
    path = tmp_path / "wrong.py"
    path.write_text(line + "\n", encoding="utf-8")
    assert [number for number, _ in strings.findings(path)][:1] == [1]


@pytest.mark.parametrize(
    "line",
    [
        '"""Words of a docstring."""',
        'raise DownwarpError("{name} is wrong.", name=name)',
        'raise DownwarpError("It is wrong.")',
        "raise DownwarpError(message)",
        'remarks.append(say("thin by {size}", size=size))',
        'remarks += (say("thin"),) if thin else ()',
        'text = tr("two words") if short else tr("some more words")',
        'key = Key("TE_KM", "number", "Elastic thickness, km")',
        'part = f"<h2>{heading}</h2>{rest}"',
        "expression = f'\"te_km\" is null and {rest}'",
        'raise RuntimeError("A worker has no pipes.")',
    ],
)
def test_the_rules_let_pass_what_is_right(line, tmp_path):
    """Translated texts, docstrings, expressions of QGIS and errors of the program's own."""
    path = tmp_path / "right.py"
    path.write_text(line + "\n", encoding="utf-8")
    assert list(strings.findings(path)) == []


def test_the_translation_source_holds_texts_from_everywhere(tmp_path):
    """Core, bridge, report, panel, keys with their options, and help; what is translated stays so when renewed."""
    target = tmp_path / "downwarp_de.ts"
    assert strings.write(target, "de") > 1000
    tree = ElementTree.parse(target)
    messages = {message.findtext("source"): message for message in tree.iter("message")}
    for text in (
        "Elastic thickness has no upper bound in the search range (up to {te_to:g} km).",
        "Transect {name} has no geometry.",
        "To repeat this run",
        "Load removed (ice, lake, erosion)",
        "Transects, drawn from the load outwards",
        "As the setting",
        "Fit plate along transects",
    ):
        assert text in messages, text
    help_file = json.loads((ROOT / "algorithms" / "shared.json").read_text(encoding="utf-8"))
    assert {*help_file["fields"].values(), *help_file["parameters"].values()} - {""} <= set(messages)
    assert tree.getroot().get("language") == "de"
    message = messages["To repeat this run"]
    message.find("translation").text = "Zur Wiederholung"
    del message.find("translation").attrib["type"]
    tree.write(target, encoding="utf-8")
    strings.write(target, "de")
    again = {each.findtext("source"): each.find("translation") for each in ElementTree.parse(target).iter("message")}
    assert again["To repeat this run"].text == "Zur Wiederholung" and again["As the setting"].text is None


@pytest.mark.skipif(shutil.which("lrelease") is None, reason="needs Qt's lrelease")
def test_a_translation_is_loaded_in_the_language_of_qgis(tmp_path, monkeypatch, qgis_application):
    """From .ts by lrelease to the file that the plugin takes as it starts; without one for the language nothing is."""
    pytest.importorskip("qgis")
    from downwarp_checkout.plugin import plugin, translation
    from qgis.core import QgsApplication

    target = tmp_path / "downwarp_pt.ts"
    strings.write(target, "pt")
    text = target.read_text(encoding="utf-8")
    source = "<source>Transect {name} has no geometry.</source>"
    assert source in text
    done = "<translation>O perfil {name} não tem geometria.</translation>"
    head, tail = text.split(source)
    tail = tail.replace('<translation type="unfinished" />', done, 1)
    target.write_text(head + source + tail, encoding="utf-8")
    subprocess.run(["lrelease", "-silent", str(target)], check=True, timeout=60)
    monkeypatch.setattr(translation, "FOLDER", tmp_path)
    monkeypatch.setattr(QgsApplication, "locale", staticmethod(lambda: "pt_BR"))
    started = plugin.DownwarpPlugin(None)
    try:
        assert translation.tr("Transect {name} has no geometry.", name="A") == "O perfil A não tem geometria."
        assert translation.tr("To repeat this run") == "To repeat this run"
    finally:
        started.unload()
    assert translation.tr("Transect {name} has no geometry.", name="A") == "Transect A has no geometry."
    monkeypatch.setattr(QgsApplication, "locale", staticmethod(lambda: "fi"))
    assert translation.install() is None
