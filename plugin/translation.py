"""Texts in the user's language: where they are looked up, and the file that they come from."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import Any

from qgis.core import QgsApplication
from qgis.PyQt.QtCore import QCoreApplication, QLocale, QTranslator

from .core.wording import Said

CONTEXT = "Downwarp"
"""The one context that all texts stand in."""
FOLDER = Path(__file__).resolve().parent / "i18n"
"""Holds ``downwarp_<locale>.qm``, such as downwarp_pt_BR.qm or downwarp_pt.qm, as far as there are translations."""


def tr(template: str, /, **values: Any) -> str:
    """``template`` in the user's language, with ``values`` in the places named there.

    Without values it stands as it is. A translation whose places do not fit is not used.
    """
    words = QCoreApplication.translate(CONTEXT, template)
    if not values:
        return words
    values = {name: translated(value) if isinstance(value, str) else value for name, value in values.items()}
    try:
        return words.format(**values)
    except (LookupError, ValueError, AttributeError):
        return template.format(**values)


def translated(text: str) -> str:
    """What was said by `say` in the user's language; any other text as it is."""
    return tr(text.template, **text.values) if isinstance(text, Said) else text


def joined(remarks: Iterable[str]) -> str:
    """Remarks in the user's language, as one text."""
    return "; ".join(translated(remark) for remark in remarks)


def install() -> QTranslator | None:
    """Make Qt use the translation into the language that QGIS runs in; None where there is none."""
    translator = QTranslator()
    if not translator.load(QLocale(QgsApplication.locale()), "downwarp", "_", str(FOLDER), ".qm"):
        return None
    QCoreApplication.installTranslator(translator)
    return translator
